"""A run's results for other programs: a workbook, CSV or Parquet tables, or GeoJSON of the network.

Public names: `FORMATS`, `Export`, `Sheet`, `export_run`, `export_tables`, `refuse_folder`, `sheets`.

A folder is made whole: under another name first, then moved into place.
"""

import json
import math
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from itertools import product
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from openpyxl import Workbook
from openpyxl.cell import WriteOnlyCell
from openpyxl.cell.cell import ILLEGAL_CHARACTERS_RE
from openpyxl.styles import Alignment, Font
from openpyxl.utils import get_column_letter
from pandas.api.types import is_object_dtype

from simulator.case.wording import listed, quoted
from simulator.errors import OptionError
from simulator.files import made_whole
from simulator.report.geojson import LAYERS, feature_collections
from simulator.report.moments import read_clock
from simulator.report.page import CAUTION
from simulator.report.view import View
from simulator.results import VARIABLES

__all__ = [
    "FORMATS",
    "Export",
    "Sheet",
    "export_run",
    "export_tables",
    "refuse_folder",
    "sheets",
]

BOOK = "results.xlsx"
DIMENSIONS = ("bus", "line", "unit", "plant", "store", "tie", "load", "product")
"""The dimensions whose elements have a table of their own, with what the dataset says of them."""

STUDY_TABLES = ("answers", "durations", "lines")
"""The tables of a study, besides `about`."""

RISKY = ("=", "+", "-", "@", "\t", "\r", "\n", "\uff1d", "\uff0b", "\uff0d", "\uff20")
"""Beginnings that make a spreadsheet read a text as a formula (OWASP, "CSV Injection", typed from
memory); the last four are the full-width forms of the first four."""

MOST_ROWS, MOST_COLUMNS, LONGEST_NAME = 1_048_576, 16_384, 31
"""What spreadsheets hold in a sheet, and the longest name of one; typed from memory."""
NOT_IN_A_NAME = re.compile(r"[\[\]:*?/\\]")
NARROWEST, WIDEST = 13, 60


@dataclass(frozen=True, eq=False)
class Sheet:
    """A table of an export; a column's heading carries its unit.

    frame : begins with the column `time`, local, where its rows are periods
    """

    name: str
    frame: pd.DataFrame


@dataclass(frozen=True)
class Export:
    """What an export wrote, by file name, and the variables that have no element and were left out."""

    files: tuple[str, ...]
    left_out: tuple[str, ...]


def export_run(
    dataset: xr.Dataset, record: Mapping[str, Any], kind: str, folder: Path, *, force: bool = False
) -> Export:
    """Write a run to a folder in one of the `FORMATS`, given its dataset and its run.json.

    A folder that holds anything is refused; `force` replaces that of an earlier export.
    """
    view = View(dataset, record)
    if kind == GEOJSON:
        return _whole(folder, force, lambda made: _write_geojson(view, made))
    return export_tables(
        lambda: sheets(view), kind, folder, force=force, left_out=_left_out(dataset)
    )


def export_tables(
    make: Callable[[], Sequence[Sheet]], kind: str, folder: Path, *, force: bool = False,
    left_out: tuple[str, ...] = (), kinds: Sequence[str] = (),
) -> Export:  # fmt: skip
    """Make tables and write them to a folder, as `export_run` does; `kinds` may be asked for."""
    kinds = kinds or tuple(FORMATS)
    if kind not in kinds:
        raise OptionError(
            f"--to, must be one of {', '.join(kinds)}, found {quoted(kind)}, choose one of these"
        )
    write = WRITERS[kind]
    return _whole(folder, force, lambda made: Export(write(make(), made), left_out))


def _whole(folder: Path, force: bool, write: Callable[[Path], Export]) -> Export:  # noqa: FBT001
    folder = folder.resolve()
    refuse_folder(folder, force=force)
    with made_whole(folder, "DIR") as made:
        return write(made)


def refuse_folder(folder: Path, *, force: bool) -> None:
    """Refuse a folder that holds something, unless forced and all of it came from an export."""
    held = sorted(folder.iterdir()) if folder.is_dir() else []
    if not held and not (folder.exists() and not folder.is_dir()):
        return
    if not force or not held:
        raise OptionError(
            f"DIR, must be a new or an empty folder, found {folder}, choose another folder"
            + (" or pass --force" if held else "")
        )
    foreign = [quoted(path.name) for path in held if not _is_ours(path)]
    if foreign:
        raise OptionError(
            f"--force, replaces only what an export wrote, found {listed(foreign)} in {folder}, "
            "choose another folder"
        )


def _is_ours(path: Path) -> bool:
    tables = {"about", *DIMENSIONS, *VARIABLES, *STUDY_TABLES}
    ours = {BOOK} | {f"{name}.{kind}" for name in tables for kind in ("csv", "parquet")}
    ours |= {f"{name}.geojson" for name in LAYERS}
    return path.is_file() and path.name in ours


def sheets(view: View) -> list[Sheet]:
    """Return a run's tables: what it is about, its elements, then a table a variable."""
    elements = [_elements(view.dataset, name) for name in DIMENSIONS if view.size(name)]
    names = [str(name) for name, variable in view.dataset.data_vars.items() if variable.size]
    return [_about(view), *elements, *(_values(view, name) for name in names)]


def _left_out(dataset: xr.Dataset) -> tuple[str, ...]:
    return tuple(str(name) for name in dataset.data_vars if not dataset[name].size)


def _about(view: View) -> Sheet:
    """Return terms and values: the case, its hours and settings, totals, units, notes."""
    dataset, run, edges = view.dataset, view.run, view.clock.edges
    rows: list[tuple[str, Any]] = [
        ("case", view.case_name),
        ("caution", CAUTION),
        ("from", edges[0].isoformat(timespec="minutes")),
        ("until", edges[-1].isoformat(timespec="minutes")),
        ("time zone", str(dataset.attrs.get("time_zone", "UTC"))),
        ("times", "mark the start of a period"),
        ("length of a period, h", view.period_hours),
        ("audit", _audited(run.get("audit"))),
        *_prefixed("setting", run.get("settings")),
        *_prefixed("total", run.get("totals")),
        *_windows(run),
        *((str(name), _described(view, str(name))) for name in dataset.data_vars),
        ("blank number", "unlimited, or not known"),
        *_prefixed("made with", run.get("versions")),
    ]
    return Sheet("about", pd.DataFrame(rows, columns=["term", "value"], dtype=object))


def _audited(audit: Mapping[str, Any] | None) -> str:
    if not audit:
        return "not audited"
    return "passed" if audit.get("passed") else "failed"


def _prefixed(prefix: str, values: Mapping[str, Any] | None) -> list[tuple[str, Any]]:
    """Return nested values as rows, their names joined by dots."""
    if not values:
        return []
    flat = pd.json_normalize(dict(values)).to_dict("records")[0]
    return [(f"{prefix} {name}", value) for name, value in flat.items()]


def _windows(run: Mapping[str, Any]) -> list[tuple[str, Any]]:
    """Return how each window was solved, as far as the run's record has it."""
    return [
        (f"window {each.get('window')} {name.replace('_', ' ')}", each[name])
        for each in run.get("windows") or ()
        for name in ("seconds", "gap", "time_limit") if each.get(name) is not None
    ]  # fmt: skip


def _described(view: View, name: str) -> str:
    variable, unit = view.dataset[name], _unit(view, name)
    label = str(variable.attrs.get("long_name", name))
    text = (
        f"{label}{'' if unit == '1' else f', {unit}'}, by {' and '.join(map(str, variable.dims))}"
    )
    return text if variable.size else f"{text}; left out, it has no element in this case"


def _unit(view: View, name: str) -> str:
    return str(view.dataset[name].attrs.get("units", "1")).replace("currency", view.currency)


def _elements(dataset: xr.Dataset, dimension: str) -> Sheet:
    """Return a table of a dimension's elements with all that the dataset says of them."""
    columns = {dimension: dataset[dimension].to_numpy()}
    for name, coordinate in dataset.coords.items():
        if coordinate.dims == (dimension,) and name != dimension:
            unit = str(coordinate.attrs.get("units", ""))
            heading = str(name).removeprefix(f"{dimension}_")
            columns[f"{heading} [{unit}]" if unit else heading] = coordinate.to_numpy()
    return Sheet(dimension, pd.DataFrame(columns))


def _values(view: View, name: str) -> Sheet:
    """Return a variable as a table: a row a period, or a row an element if it has no time.

    Where it has two kinds of element, as reserve by unit and product, a column is a pair of them.
    """
    variable, unit = view.dataset[name], _unit(view, name)
    values = _in_words(variable) if "flag_meanings" in variable.attrs else variable.to_numpy() + 0
    if variable.dims[0] == "day":
        return Sheet(name, _by_day(view, name, values))
    if "time" not in variable.dims:
        dimension = str(variable.dims[0])
        return Sheet(
            name, pd.DataFrame({dimension: view.names(dimension), f"{name} [{unit}]": values})
        )
    unit = "in words" if "flag_meanings" in variable.attrs else unit
    parts = product(*(view.names(str(dimension)) for dimension in variable.dims[1:]))
    headings = [f"{', '.join(each) or name} [{unit}]" for each in parts]
    frame = pd.DataFrame(values.reshape(len(values), -1), columns=headings)
    frame.insert(0, "time", read_clock(view.dataset).edges[:-1])
    return Sheet(name, frame)


def _in_words(variable: xr.DataArray) -> Any:
    """Return codes as the words they stand for."""
    words = [word.replace("_", " ") for word in variable.attrs["flag_meanings"].split()]
    return np.array(words)[variable.to_numpy()]


def _by_day(view: View, name: str, values: Any) -> pd.DataFrame:
    """Return values (day, element), days as ISO 8601 text, a row a day."""
    elements = view.names(str(view.dataset[name].dims[1]))
    frame = pd.DataFrame(values, columns=[f"{each} [{_unit(view, name)}]" for each in elements])
    frame.insert(0, "day", view.names("day"))
    return frame


def _write_csv(tables: Sequence[Sheet], folder: Path) -> tuple[str, ...]:
    """Write a file a table; a text that a spreadsheet would calculate gets an apostrophe before it."""
    for sheet in tables:
        frame = sheet.frame.map(_csv_cell)
        frame.columns = [_inert(str(heading)) for heading in frame.columns]
        frame.to_csv(folder / f"{sheet.name}.csv", index=False, lineterminator="\n")
    return tuple(f"{sheet.name}.csv" for sheet in tables)


def _csv_cell(value: Any) -> Any:
    if isinstance(value, str):
        return _inert(value)
    if isinstance(value, pd.Timestamp):
        return value.isoformat(timespec="minutes")
    return _finite(value)


def _inert(text: str) -> str:
    """Return a text that no spreadsheet calculates.

    >>> _inert("=1+1"), _inert("Aubrey")
    ("'=1+1", 'Aubrey')
    """
    return f"'{text}" if text.startswith(RISKY) else text


def _finite(value: Any) -> Any:
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _write_parquet(tables: Sequence[Sheet], folder: Path) -> tuple[str, ...]:
    """Write a file a table; times keep their zone, an unlimited rating stays infinite."""
    for sheet in tables:
        mixed = [name for name, kind in sheet.frame.dtypes.items() if is_object_dtype(kind)]
        frame = sheet.frame.astype(dict.fromkeys(mixed, str))
        frame.to_parquet(folder / f"{sheet.name}.parquet", index=False)
    return tuple(f"{sheet.name}.parquet" for sheet in tables)


def _write_geojson(view: View, folder: Path) -> Export:
    """Write a file a layer that has features."""
    layers = feature_collections(view, CAUTION)
    written = [name for name, layer in layers.items() if layer["features"]]
    for name in written:
        text = json.dumps(layers[name], ensure_ascii=False, allow_nan=False, indent=1) + "\n"
        (folder / f"{name}.geojson").write_text(text, encoding="utf-8", newline="\n")
    left_out = tuple(name for name in layers if name not in written)
    return Export(tuple(f"{name}.geojson" for name in written), left_out)


def _write_xlsx(tables: Sequence[Sheet], folder: Path) -> tuple[str, ...]:
    """Write one workbook, a sheet a table."""
    book = Workbook(write_only=True)
    frames = [_with_two_clocks(sheet.frame) for sheet in tables]
    for sheet, frame in zip(tables, frames, strict=True):
        _refuse_large(sheet.name, frame)
    names = _sheet_names([sheet.name for sheet in tables])
    for name, frame in zip(names, frames, strict=True):
        _fill(book.create_sheet(name), frame)
    book.save(folder / BOOK)
    return (BOOK,)


WRITERS: Mapping[str, Callable[[Sequence[Sheet], Path], tuple[str, ...]]] = {
    "csv": _write_csv, "parquet": _write_parquet, "xlsx": _write_xlsx,
}  # fmt: skip
GEOJSON = "geojson"
FORMATS = ("csv", GEOJSON, "parquet", "xlsx")


def _refuse_large(name: str, frame: pd.DataFrame) -> None:
    rows, columns = len(frame) + 1, len(frame.columns)
    if rows > MOST_ROWS or columns > MOST_COLUMNS:
        raise OptionError(
            f"--to xlsx, holds at most {MOST_ROWS:,} rows and {MOST_COLUMNS:,} columns a sheet, "
            f"found {rows:,} rows and {columns:,} columns of {name}, choose csv or parquet"
        )


def _with_two_clocks(frame: pd.DataFrame) -> pd.DataFrame:
    """Give times as a workbook can calculate with them: local and UTC, both without offset."""
    if "time" not in frame:
        return frame
    local = frame["time"].dt
    clocks = {f"time [{local.tz}]": local.tz_localize(None)}
    clocks["time [UTC]"] = local.tz_convert("UTC").dt.tz_localize(None)
    return pd.concat([pd.DataFrame(clocks), frame.drop(columns="time")], axis=1)


def _sheet_names(names: Sequence[str]) -> list[str]:
    """Return names that a workbook takes: short, without its special characters, no two alike.

    >>> _sheet_names(["price", "Price", "a/b"])
    ['price', 'Price 2', 'a b']
    """
    taken: dict[str, str] = {}
    for name in names:
        plain = NOT_IN_A_NAME.sub(" ", name).strip("' ") or "sheet"
        found, number = plain[:LONGEST_NAME], 1
        while found.casefold() in taken:
            number += 1
            found = f"{plain[: LONGEST_NAME - len(f' {number}')]} {number}"
        taken[found.casefold()] = found
    return list(taken.values())


def _fill(page: Any, frame: pd.DataFrame) -> None:
    """Write headings and rows; headings and the columns of times or names stay in sight."""
    page.freeze_panes = "C2" if any(kind.kind == "M" for kind in frame.dtypes) else "B2"
    for place, heading in enumerate(frame.columns):
        letter = get_column_letter(place + 1)
        page.column_dimensions[letter].width = _width(frame.iloc[:, place], str(heading))
    page.append([_heading(page, str(heading)) for heading in frame.columns])
    for row in frame.itertuples(index=False, name=None):
        page.append([_book_cell(page, value) for value in row])


def _width(column: pd.Series, heading: str) -> int:
    """Return how wide a column should be, in characters."""
    texts = [len(value) for value in column if isinstance(value, str)]
    narrowest = NARROWEST + 4 * (column.dtype.kind == "M")
    return min(max([narrowest, len(heading) + 2, *texts]), WIDEST)


def _heading(page: Any, text: str) -> Any:
    cell = _text(page, text)
    cell.font, cell.alignment = Font(bold=True), Alignment(wrap_text=True, vertical="top")
    return cell


def _book_cell(page: Any, value: Any) -> Any:
    if isinstance(value, str):
        return _text(page, value) if value else None
    return value.to_pydatetime() if isinstance(value, pd.Timestamp) else _finite(value)


def _text(page: Any, text: str) -> Any:
    """Return a cell that holds a text as text, whatever it begins with."""
    cell = WriteOnlyCell(page, ILLEGAL_CHARACTERS_RE.sub("\N{REPLACEMENT CHARACTER}", text))
    cell.data_type = "s"
    if text.startswith(RISKY):
        cell.quotePrefix = True
    return cell
