"""The hourly files of a case: cells, times, and the one time axis they share.

Public names: `HourlyFile`, `common_axis`, `read_hourly`, `repeated_profiles`, `side_by_side`.
"""

import io
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from simulator.case.cells import LARGEST, decode, number_in, read_cells, read_header
from simulator.case.clock import Stamps, by_order, read_stamps
from simulator.case.parquet import read_parquet
from simulator.case.schema import LABEL
from simulator.case.time_axis import Coverage, TimeAxis
from simulator.case.wording import at_most_five, file_problem, number, quoted, shown
from simulator.errors import Problem

__all__ = ["HourlyFile", "common_axis", "read_hourly", "repeated_profiles", "side_by_side"]

MINUTE = 60_000_000
"""One minute in µs, the unit in which instants are kept."""


@dataclass(frozen=True, eq=False)
class HourlyFile:
    """One hourly file.

    instants : DatetimeIndex (period,), UTC, start of each period; NaT where the time is faulty
    rows : array (period,), spreadsheet rows
    values : frame (period, profile), dimensionless; NaN where a cell is faulty
    step : length of a period in µs, 0 if the file tells none
    """

    path: str
    instants: pd.DatetimeIndex
    rows: NDArray[np.int64]
    values: pd.DataFrame
    step: int = 0

    @property
    def coverage(self) -> Coverage:
        """From the start of the first period to the end of the last."""
        return Coverage(
            self.path, self.instants[0], self.instants[-1] + pd.Timedelta(self.step, unit="us")
        )


@dataclass(frozen=True, eq=False)
class _Cells:
    """What both kinds of file come down to; `whole`: no row had to be left out."""

    stamps: Stamps
    written: Sequence[str]
    rows: NDArray[np.int64]
    values: pd.DataFrame
    whole: bool = True


def read_hourly(
    path: str, data: bytes, zone: str | None
) -> tuple[HourlyFile | None, list[Problem]]:
    """Read one hourly file, local times in `zone`; with none, times are not put in order."""
    read = _parquet_cells if path.endswith(".parquet") else _csv_cells
    cells, problems = read(path, data, zone or "UTC")
    if cells is None:
        return None, problems
    problems = [*problems, *_name_problems(path, cells)]
    instants, step = by_order(cells.stamps), 0
    if zone is not None:
        step, faults = _spacing(path, instants, cells) if cells.whole else (0, [])
        problems += [*_stamp_problems(path, cells, zone), *faults]
    return HourlyFile(path, instants, cells.rows, cells.values, step), problems


def _csv_cells(path: str, data: bytes, zone: str) -> tuple[_Cells | None, list[Problem]]:
    text, problems = decode(path, data)
    header, problems = read_header(path, text) if text is not None else ([], problems)
    if text is None or problems:
        return None, problems
    if header[0] != "time":
        words = 'must be named "time"', quoted(header[0]), "put the start of each period there"
        return None, [Problem(path, 1, "time", "the first column", *words)]
    fast = _fast_cells(text, header, zone)
    return (fast, []) if fast else _slow_cells(path, text, zone)


def _fast_cells(text: str, header: list[str], zone: str) -> _Cells | None:
    """Read a faultless file in one go; None if a fault, or just a doubt, asks for a closer look."""
    body = text.rstrip("\r\n")
    # pandas reads rows that are too short or too long without a word: count the commas first.
    if body.count(",") != (len(header) - 1) * (body.count("\n") + 1):
        return None
    try:
        frame = pd.read_csv(
            io.StringIO(body),
            dtype={"time": "str"},
            index_col=False,
            keep_default_na=False,
            skip_blank_lines=False,
            low_memory=False,
        )
    except (pd.errors.ParserError, pd.errors.ParserWarning):
        return None
    numbers = frame[[name for name in frame.columns[1:] if not name.startswith("note")]]
    if list(frame.columns) != header:
        return None
    if any(kind.kind not in "if" for kind in numbers.dtypes):
        return None
    values, times = numbers.astype("float64"), frame["time"].tolist()
    if _unusable(values).any():
        return None
    return _Cells(read_stamps(times, zone), times, np.arange(len(frame)) + 2, values)


def _unusable(values: pd.DataFrame) -> NDArray[np.bool_]:
    """Mark what is no number, or too large."""
    return np.asarray(~(np.abs(values.to_numpy()) <= LARGEST))


def _slow_cells(path: str, text: str, zone: str) -> tuple[_Cells | None, list[Problem]]:
    """Read a file cell by cell and name the cells at fault."""
    raw, problems = read_cells(path, text)
    if raw is None:
        return None, problems
    times = raw.columns["time"]
    names = [name for name in raw.columns if name != "time" and not name.startswith("note")]
    numbers = {name: [number_in(cell) for cell in raw.columns[name]] for name in names}
    values = pd.DataFrame(numbers, index=range(len(times)), dtype="float64")
    rows = np.array(raw.rows, dtype=np.int64)
    written = {name: raw.columns[name] for name in names}
    problems += _unread_cells(path, rows, values, written)
    return _Cells(read_stamps(times, zone), times, rows, values, raw.whole), problems


def _parquet_cells(path: str, data: bytes, zone: str) -> tuple[_Cells | None, list[Problem]]:
    table, problems = read_parquet(path, data, zone)
    if table is None:
        return None, problems
    rows = np.arange(len(table.values)) + 2
    problems += _unread_cells(path, rows, table.values)
    return _Cells(table.stamps, table.written, rows, table.values), problems


def _unread_cells(
    path: str,
    rows: NDArray[np.int64],
    values: pd.DataFrame,
    written: dict[str, list[str]] | None = None,
) -> list[Problem]:
    """Name the cells that hold no number, from what was written there if that is known."""
    rule = "must be a number, at most 1e12 in size; nothing is filled in"
    problems = []
    for row, column in np.argwhere(_unusable(values)).tolist():
        name = str(values.columns[column])
        found = shown(written[name][row].strip() if written else values.iat[row, column])
        words = f"profile {quoted(name)}", rule, found, "write digits with a decimal point"
        problems.append(Problem(path, int(rows[row]), name, *words))
    return at_most_five(problems)


def _name_problems(path: str, cells: _Cells) -> Iterator[Problem]:
    names = pd.Series(cells.values.columns, dtype="str")
    if names.empty:
        remedy = "add a column for each profile"
        yield file_problem(path, "must have a profile", "no column but time", remedy)
    else:
        for name in names[~LABEL.holds(names).astype(bool)]:
            words = LABEL.text, quoted(name), LABEL.remedy
            yield Problem(path, 1, name, f"profile {quoted(name)}", *words)


def _stamp_problems(path: str, cells: _Cells, zone: str) -> list[Problem]:
    malformed = "must be an ISO 8601 time", "write it like 2027-01-11T00:00"
    skipped = f"must exist in {zone}", "remove the row: the clock change skips this time"
    return [
        *_at_rows(path, cells, cells.stamps.malformed, malformed),
        *_at_rows(path, cells, cells.stamps.skipped, skipped),
    ]


def _at_rows(
    path: str, cells: _Cells, faulty: NDArray[np.bool_], words: tuple[str, str]
) -> list[Problem]:
    rule, remedy = words
    problems = []
    for place in np.flatnonzero(faulty).tolist():
        row, found = int(cells.rows[place]), shown(cells.written[place])
        problems.append(Problem(path, row, "time", "the time", rule, found, remedy))
    return at_most_five(problems)


def _spacing(path: str, instants: pd.DatetimeIndex, cells: _Cells) -> tuple[int, list[Problem]]:
    """Return the length of a period in µs and the rows that do not follow at that distance."""
    if len(cells.rows) <= 1:
        rule = "must have two periods or more, so that their length is known"
        return 0, [file_problem(path, rule, f"{len(cells.rows)} periods", "add rows")]
    known = np.asarray(instants.notna())
    known = known[:-1] & known[1:]
    steps = np.diff(instants.asi8)
    # A few faulty rows must not hide how long the other periods are, hence the most frequent step.
    lengths, counts = np.unique(steps[known & (steps > 0)], return_counts=True)
    usual = int(lengths[np.argmax(counts)]) if len(lengths) else 60 * MINUTE
    if usual % MINUTE or 60 % (usual // MINUTE):
        rule = "must be 60 minutes, or a whole number of minutes that divides 60"
        words = rule, _minutes(usual), "bring the data to such a length"
        return 0, [Problem(path, 3, "time", "the length of a period", *words)]
    uneven = np.flatnonzero(known & (steps != usual)).tolist()
    return usual, at_most_five(
        [_uneven(path, cells, row + 1, int(steps[row]), usual) for row in uneven]
    )


def _uneven(path: str, cells: _Cells, place: int, step: int, usual: int) -> Problem:
    if step > 0:
        remedy = "add the missing rows" if step % usual == 0 else "mend the time"
    else:
        remedy = "remove the repeat" if step == 0 else "sort the rows by time"
    subject = f"the time {quoted(cells.written[place])}"
    rule = f"must be {_minutes(usual)} after the row above"
    return Problem(path, int(cells.rows[place]), "time", subject, rule, _minutes(step), remedy)


def _minutes(step: int) -> str:
    return f"{number(step / MINUTE)} minutes"


def repeated_profiles(files: Sequence[HourlyFile]) -> Iterator[Problem]:
    """Yield a problem for each profile that an earlier file has too."""
    owner: dict[str, str] = {}
    for file in files:
        for name in file.values.columns:
            first = owner.setdefault(name, file.path)
            if first != file.path:
                words = "must be in one hourly file only", f"it in {first} too", "rename one"
                yield Problem(file.path, 1, name, f"profile {quoted(name)}", *words)


def side_by_side(frames: Sequence[pd.DataFrame]) -> pd.DataFrame:
    """Join frames (period, profile) of the same periods, in one block, so that arrays are views."""
    joined = pd.concat(frames, axis=1)
    index, columns = joined.index.rename("time"), joined.columns.rename("profile")
    return pd.DataFrame(joined.to_numpy(), index=index, columns=columns)


def common_axis(files: Sequence[HourlyFile], zone: str) -> tuple[TimeAxis | None, list[Problem]]:
    """Return the periods that all files share."""
    problems = list(_misaligned(files))
    if problems:
        return None, problems
    coverage = tuple(file.coverage for file in files)
    begins_last = max(coverage, key=lambda each: each.start)
    ends_first = min(coverage, key=lambda each: each.end)
    if begins_last.start >= ends_first.end:
        found = f"nothing after {ends_first.end}, {begins_last.path} begins {begins_last.start}"
        words = "must share periods with the other files", found, _SAME_PERIODS
        return None, [Problem(ends_first.path, 2, "time", "the file", *words)]
    instants = files[0].instants
    shared = instants[(instants >= begins_last.start) & (instants < ends_first.end)]
    return TimeAxis(shared, files[0].step / MINUTE / 60, zone, coverage), []


_SAME_PERIODS = "bring all hourly files to the same periods"


def _misaligned(files: Sequence[HourlyFile]) -> Iterator[Problem]:
    """Yield files whose periods differ in length or phase from those of the first."""
    first = files[0]
    for file in files[1:]:
        if file.step != first.step:
            rule = "must have periods as long as the other files"
            found = f"{_minutes(file.step)}, {first.path} has {_minutes(first.step)}"
        elif (file.instants.asi8[0] - first.instants.asi8[0]) % first.step:
            rule = "must have periods that begin when those of the other files do"
            found = f"{file.instants[0]}, {first.path} has {first.instants[0]}"
        else:
            continue
        yield Problem(file.path, 2, "time", "the file", rule, found, _SAME_PERIODS)
