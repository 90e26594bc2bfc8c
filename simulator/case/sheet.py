"""One table as declared: cells turned to types and checked against the rules of its schema.

Public names: `Sheet`, `empty_sheet`, `read_sheet`, `typed`.
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import pandera.pandas as pa
from numpy.typing import NDArray
from pandera.config import ValidationDepth, config_context

from simulator.case.cells import RawTable, decode, flag, number_in, read_cells
from simulator.case.schema import BLANKS, Field, Kind, Table
from simulator.case.wording import did_you_mean, quoted, shown
from simulator.errors import Problem

__all__ = ["Sheet", "empty_sheet", "read_sheet", "typed"]

_PARSERS: dict[Kind, Callable[[str], Any]] = {
    Kind.TEXT: str,
    Kind.NUMBER: number_in,
    Kind.FLAG: flag,
}
_WORDS = {
    Kind.NUMBER: ("must be a number, at most 1e12 in size", "write digits with a decimal point"),
    Kind.FLAG: ("must be true or false", "write true or false"),
}
_DTYPES = {Kind.TEXT: "str", Kind.NUMBER: "float64", Kind.FLAG: "bool"}


@dataclass(frozen=True, eq=False)
class Sheet:
    """The rows of one table as declared.

    frame : columns of the schema; "" or NaN where a cell is blank or faulty
    rows : array (row,), spreadsheet rows
    whole : every row of the file is here, so that what is not here does not exist
    """

    table: Table
    frame: pd.DataFrame
    rows: NDArray[np.int64]
    whole: bool = True

    def __getitem__(self, column: str) -> "pd.Series[Any]":
        return self.frame[column]

    @property
    def names(self) -> "pd.Index[Any]":
        """What the rows are called."""
        return self.frame.set_index(self.table.key).index

    def problem(self, position: int, column: str, rule: str, found: str, remedy: str) -> Problem:
        """Return a problem of the row at a position."""
        name = str(self.frame[self.table.key].iloc[position])
        row = int(self.rows[position])
        noun = self.table.noun
        subject = f"{noun} {quoted(name)}" if name else f"the {noun} in this row"
        return Problem(self.table.path, row, column, subject, rule, found, remedy)

    def problems(
        self,
        where: "pd.Series[bool] | NDArray[np.bool_]",
        column: str,
        words: tuple[str, str],
        found: Callable[[int], str] | None = None,
    ) -> Iterator[Problem]:
        """Yield a problem for each marked row, `words` being rule and remedy.

        What was found is told by `found` from the position, by default the cell itself.
        """
        rule, remedy = words
        for position in np.flatnonzero(where).tolist():
            find = found(position) if found else shown(self.frame[column].iloc[position])
            yield self.problem(position, column, rule, find, remedy)


def empty_sheet(table: Table, *, whole: bool = True) -> Sheet:
    """Return a table without rows: an optional file that is missing, or one that cannot be read."""
    return typed(table, RawTable({field.name: [] for field in table.fields}, [], whole))[0]


def read_sheet(table: Table, data: bytes) -> tuple[Sheet, list[Problem]]:
    """Read the bytes of one table."""
    text, problems = decode(table.path, data)
    if text is None:
        return empty_sheet(table, whole=False), problems
    raw, faults = read_cells(table.path, text)
    if raw is None:
        return empty_sheet(table, whole=False), faults
    sheet, more = typed(table, raw)
    return sheet, [*faults, *more]


def typed(table: Table, raw: RawTable) -> tuple[Sheet, list[Problem]]:
    """Turn cells to types and check them against the table's rules."""
    # Where rows or names are missing, a reference into this table cannot be called dangling.
    whole = raw.whole and table.key in raw.columns
    blank_column = [""] * len(raw.rows)
    cells = {field: raw.columns.get(field.name, blank_column) for field in table.fields}
    read = {field: [_value(field, cell) for cell in column] for field, column in cells.items()}
    columns = {field.name: _column(field, values) for field, values in read.items()}
    sheet = Sheet(table, pd.DataFrame(columns), np.array(raw.rows, dtype=np.int64), whole)
    given = [field for field in table.fields if field.name in raw.columns]
    faults = [
        fault for field in given for fault in _faults(sheet, field, cells[field], read[field])
    ]
    return sheet, [*_column_problems(table, raw), *faults, *_broken_rules(sheet)]


def _is_blank(field: Field, cell: str) -> bool:
    return not (cell if field.kind is Kind.TEXT else cell.strip())


def _value(field: Field, cell: str) -> Any:
    """Return what a cell holds, None if that cannot be read."""
    return field.blank if _is_blank(field, cell) else _PARSERS[field.kind](cell)


def _column(field: Field, values: list[Any]) -> "pd.Series[Any]":
    filler = BLANKS[field.kind]
    filled = [filler if value is None else value for value in values]
    return pd.Series(filled, dtype=_DTYPES[field.kind])


def _faults(sheet: Sheet, field: Field, cells: list[str], values: list[Any]) -> Iterator[Problem]:
    """Yield blank cells where none may be, and cells that cannot be read."""
    for position, (cell, value) in enumerate(zip(cells, values, strict=True)):
        if value is None:
            rule, remedy = _WORDS[field.kind]
            yield sheet.problem(position, field.name, rule, quoted(cell), remedy)
        elif field.required and _is_blank(field, cell):
            yield sheet.problem(position, field.name, "must be filled in", "blank", "fill it in")


def _column_problems(table: Table, raw: RawTable) -> Iterator[Problem]:
    known = [field.name for field in table.fields]
    for name in raw.columns:
        if name not in known and not name.startswith("note"):
            otherwise = f"remove it or name it note…; known are {', '.join(known)}"
            words = (
                "must be a column of this table",
                quoted(name),
                did_you_mean(name, known, otherwise),
            )
            yield Problem(table.path, 1, name, f"column {quoted(name)}", *words)
    for field in table.fields:
        if field.required and field.name not in raw.columns:
            words = "must be there", "no such column", "add it"
            yield Problem(table.path, 1, field.name, f"column {quoted(field.name)}", *words)


def _broken_rules(sheet: Sheet) -> Iterator[Problem]:
    """Yield what pandera finds: for each failure the row, and the rule that its check came from."""
    if sheet.frame.empty:
        return
    try:
        # `_column` gives every column its type, so that only values are left to check.
        with config_context(validation_depth=ValidationDepth.DATA_ONLY):
            sheet.table.schema.validate(sheet.frame, lazy=True)
    except pa.errors.SchemaErrors as errors:
        failures = errors.failure_cases.assign(row_wise=lambda f: f.schema_context != "Column")
        # pandera reports a rule of the whole row once for each column.
        column = failures["column"].where(~failures["row_wise"], "")
        places = failures.assign(column=column)[["row_wise", "column", "check_number", "index"]]
        for row_wise, name, check, position in places.drop_duplicates().itertuples(index=False):
            tell = _broken_row_rule if row_wise else _broken_rule
            yield tell(sheet, str(name), int(check), int(position))


def _broken_rule(sheet: Sheet, column: str, check: int, position: int) -> Problem:
    rule = sheet.table.field(column).rules[check]
    found = shown(sheet[column].iloc[position])
    return sheet.problem(position, column, rule.text, found, rule.remedy)


def _broken_row_rule(sheet: Sheet, _column: str, check: int, position: int) -> Problem:
    rule = sheet.table.row_rules[check]
    found = ", ".join(f"{name} {shown(sheet[name].iloc[position])}" for name in rule.shown)
    return sheet.problem(position, rule.column, rule.text, found, rule.remedy)
