"""Bytes of a CSV file → cells with their spreadsheet rows, and cells → numbers and flags.

Public names: `LARGEST`, `RawTable`, `decode`, `flag`, `number_in`, `read_cells`, `read_header`.
"""

import csv
import io
import re
from collections.abc import Iterator
from dataclasses import dataclass

from simulator.case.wording import file_problem, listed, quoted
from simulator.errors import Problem

__all__ = ["LARGEST", "RawTable", "decode", "flag", "number_in", "read_cells", "read_header"]

LARGEST = 1e12
"""No quantity of a case is larger than this; its square still is a number."""

_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?", re.ASCII)
_FLAGS = {"true": True, "1": True, "false": False, "0": False}
_FORMAT = "must be a CSV table in UTF-8, cells separated by commas"
_QUOTES = 'close the quotes; write a quote within a quoted cell as ""'
_UTF16 = (b"\xff\xfe", b"\xfe\xff")


@dataclass(frozen=True)
class RawTable:
    """A table as text.

    columns : cells by column name
    rows : spreadsheet row of each record, the header being row 1
    whole : no record had to be left out
    """

    columns: dict[str, list[str]]
    rows: list[int]
    whole: bool = True


def number_in(cell: str) -> float | None:
    """Return the number written in a cell, None if there is none or it is too large.

    >>> number_in(" 1.5e2 "), number_in("1,5"), number_in("nan"), number_in("1e99")
    (150.0, None, None, None)
    """
    text = cell.strip()
    if not _NUMBER.fullmatch(text):
        return None
    value = float(text)
    return value if abs(value) <= LARGEST else None


def flag(cell: str) -> bool | None:
    """Return the truth value written in a cell, None if there is none.

    >>> flag("TRUE"), flag("0"), flag("yes")
    (True, False, None)
    """
    return _FLAGS.get(cell.strip().lower())


def decode(path: str, data: bytes, rule: str = _FORMAT) -> tuple[str | None, list[Problem]]:
    """Return the text of a file, or the problem that it is none."""
    if data.startswith(_UTF16):
        return None, [file_problem(path, rule, "UTF-16 text", "save it as UTF-8")]
    if b"\0" in data:
        row = data[: data.index(b"\0")].count(b"\n") + 1
        return None, [file_problem(path, rule, "a NUL byte", "save it as UTF-8 text", row)]
    try:
        return data.decode("utf-8-sig"), []
    except UnicodeDecodeError as error:
        row = data[: error.start].count(b"\n") + 1
        found = f"byte 0x{error.object[error.start]:02x}, which is no UTF-8"
        return None, [file_problem(path, rule, found, "save it as UTF-8", row)]


def _records(text: str) -> Iterator[list[str]]:
    return csv.reader(io.StringIO(text, newline=""), strict=True)


def read_header(path: str, text: str) -> tuple[list[str], list[Problem]]:
    """Return the column names of a CSV text, none if they are past use, and what is wrong."""
    try:
        header = next(_records(text), [])
    except csv.Error as error:
        return [], [file_problem(path, _FORMAT, str(error), _QUOTES)]
    if not any(cell.strip() for cell in header):
        remedy = "write the column names in row 1"
        return [], [file_problem(path, "must have a header", "none", remedy)]
    for mark, word in ((";", "semicolons"), ("\t", "tabs")):
        if len(header) == 1 and mark in header[0]:
            remedy = "save it with commas between cells and points in decimals"
            return [], [file_problem(path, _FORMAT, f"{word} between cells", remedy)]
    return header, list(_repeated_columns(path, header))


def _repeated_columns(path: str, header: list[str]) -> Iterator[Problem]:
    for name in dict.fromkeys(header):
        places = [f"column {place}" for place, other in enumerate(header, 1) if other == name]
        if name.strip() and len(places) > 1:
            subject, remedy = f"column {quoted(name)}", "remove or rename one"
            yield Problem(path, 1, name, subject, "must be there once", listed(places), remedy)


def read_cells(path: str, text: str) -> tuple[RawTable | None, list[Problem]]:
    """Return the cells of a CSV text and what is wrong with its shape.

    Rows with too few or too many cells are left out, blank rows too. Columns without name and
    content, as spreadsheets like to leave them, are no problem.
    """
    header, problems = read_header(path, text)
    if not header:
        return None, problems
    records, faults = _body(path, text)
    fitted = [(row, _fitted(record, len(header))) for row, record in records]
    fitting = [(row, cells) for row, cells in fitted if len(cells) == len(header)]
    ragged = [
        _ragged(path, row, cells, header) for row, cells in fitted if len(cells) != len(header)
    ]
    columns = [list(column) for column in zip(*(cells for _, cells in fitting), strict=True)]
    columns = columns or [[] for _ in header]
    table = RawTable(
        columns={name: cells for name, cells in zip(header, columns, strict=True) if name.strip()},
        rows=[row for row, _ in fitting],
        whole=not faults and not ragged,
    )
    return table, [*problems, *_nameless(path, header, columns), *ragged, *faults]


def _body(path: str, text: str) -> tuple[list[tuple[int, list[str]]], list[Problem]]:
    """Return the rows below the header that are not blank, up to where quotes go wrong."""
    records: list[tuple[int, list[str]]] = []
    row = 0
    try:
        for row, record in enumerate(_records(text), 1):
            if row > 1 and any(cell.strip() for cell in record):
                records.append((row, record))
    except csv.Error as error:
        return records, [file_problem(path, _FORMAT, str(error), _QUOTES, row + 1)]
    return records, []


def _fitted(record: list[str], width: int) -> list[str]:
    """Drop blank cells right of the last column."""
    return record if any(cell.strip() for cell in record[width:]) else record[:width]


def _ragged(path: str, row: int, cells: list[str], header: list[str]) -> Problem:
    found = f"{len(cells)} cells, the header has {len(header)}"
    rule, remedy = "must have one cell for each column", "put cells that hold a comma in quotes"
    return Problem(path, row, "-", "the row", rule, found, remedy)


def _nameless(path: str, header: list[str], columns: list[list[str]]) -> Iterator[Problem]:
    for place, (name, column) in enumerate(zip(header, columns, strict=True), 1):
        if not name.strip() and any(cell.strip() for cell in column):
            subject, remedy = f"column {place}", "name it in row 1, or empty its cells"
            yield Problem(path, 1, "-", subject, "must have a name", "none", remedy)
