"""Changed copies of a case, checked by the same rules as a case folder.

Public names: `add_load`, `add_loads`, `add_outage`, `add_stores`, `change_settings`.

An edit adds text cells to the declared tables, so that each value meets the same rules as one read
from a file. Faults are reported at the path "edit".
"""

from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import date
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray
from pydantic import BaseModel

from simulator.case.cells import LARGEST, RawTable
from simulator.case.declaration import Declaration
from simulator.case.defaults import resolved
from simulator.case.hourly import HourlyFile, side_by_side
from simulator.case.rules import broken_rules, oddities
from simulator.case.schema import LOADS, OUTAGES, STORAGE, TABLES, Table
from simulator.case.settings import Settings
from simulator.case.settings_file import checked_settings
from simulator.case.sheet import Sheet, typed
from simulator.case.wording import listed, number, quoted
from simulator.errors import CaseError, Problem

if TYPE_CHECKING:
    from simulator.case.model import Case

__all__ = ["add_load", "add_loads", "add_outage", "add_stores", "change_settings"]

Cell: TypeAlias = str | float | None


def add_load(
    case: "Case", name: str, bus: str, mw: ArrayLike, unserved_per_mwh: float | None
) -> "Case":
    """Return the case with one more load, `mw` a number or an array (period,)."""
    values = _power(case, name, mw)
    profile = _free_name(case, name)
    constant = values.ndim == 0
    column = pd.Series(1.0 if constant else values, index=case.profiles.index, name=profile)
    cells: dict[str, Cell] = {"load": name, "bus": bus, "profile": profile}
    cells |= {"scale_mw": float(values) if constant else 1.0, "unserved_per_mwh": unserved_per_mwh}
    return _added(case, LOADS, [cells], side_by_side([case.profiles, column.to_frame()]))


def add_loads(
    case: "Case",
    loads: Mapping[str, tuple[str, float]],
    profile: ArrayLike,
    unserved_per_mwh: float | None,
) -> "Case":
    """Return the case with more loads of one profile: name → (bus, MW where the profile is 1)."""
    if not loads:
        return case
    first = next(iter(loads))
    values = np.broadcast_to(_power(case, first, profile), len(case.time))
    name = _free_name(case, first)
    column = pd.Series(values, index=case.profiles.index, name=name)
    rows: list[Mapping[str, Cell]] = [
        {"load": load, "bus": bus, "profile": name, "scale_mw": mw, "unserved_per_mwh": unserved_per_mwh}
        for load, (bus, mw) in loads.items()
    ]  # fmt: skip
    return _added(case, LOADS, rows, side_by_side([case.profiles, column.to_frame()]))


def _power(case: "Case", name: str, mw: ArrayLike) -> NDArray[np.float64]:
    """Return a load's power as a number or an array over the time axis."""
    rule = f"must be a number, or one finite number for each of the {len(case.time)} periods"
    try:
        values = np.asarray(mw, dtype=np.float64)
    except (TypeError, ValueError):
        raise _refusal("mw", f"load {quoted(name)}", rule, quoted(str(mw)), "give MW") from None
    if values.shape not in {(), (len(case.time),)}:
        raise _refusal(
            "mw", f"load {quoted(name)}", rule, f"shape {values.shape}", "give MW for each period"
        )
    unusable = values[~(np.abs(values) <= LARGEST)]
    if unusable.size:
        found = listed([number(value) for value in unusable.ravel()])
        raise _refusal("mw", f"load {quoted(name)}", rule, found, "give finite MW")
    return values


def _free_name(case: "Case", name: str) -> str:
    """Return a profile name that no profile has yet."""
    taken = set(case.profiles.columns)
    base = name or "load"
    candidates = [base, *(f"{base[:56]} {count}" for count in range(2, len(taken) + 3))]
    return next(candidate for candidate in candidates if candidate not in taken)


def add_stores(case: "Case", stores: Sequence[Mapping[str, Cell]]) -> "Case":
    """Return the case with more stores, their cells by column of storage.csv, None for blank."""
    return _added(case, STORAGE, stores) if stores else case


def add_outage(case: "Case", cells: Mapping[str, Cell | date]) -> "Case":
    """Return the case with one more planned outage, its cells by column of outages.csv."""
    written = {
        column: value.isoformat() if isinstance(value, date) else value
        for column, value in cells.items()
    }
    return _added(case, OUTAGES, [written])


def change_settings(case: "Case", changes: Mapping[str, Any]) -> "Case":
    """Return the case with some settings replaced; a section may be given in part."""
    values = case.settings.model_dump()
    for key, change in changes.items():
        given = change.model_dump() if isinstance(change, BaseModel) else change
        both = isinstance(given, Mapping) and isinstance(values.get(key), Mapping)
        values[key] = {**values[key], **given} if both else given
    settings, problems = checked_settings(values, {})
    if settings is None:
        raise CaseError([_as_edit(problem) for problem in problems])
    if settings.time_zone != case.settings.time_zone:
        rule, remedy = (
            "must stay, since the hourly data were read in it",
            "change case.toml and read it again",
        )
        raise _refusal("time_zone", 'setting "time_zone"', rule, quoted(settings.time_zone), remedy)
    return _changed(case, settings=settings)


def _refusal(column: str, subject: str, rule: str, found: str, remedy: str) -> CaseError:
    return CaseError([Problem("edit", 1, column, subject, rule, found, remedy)])


def _as_edit(problem: Problem) -> Problem:
    return replace(problem, path="edit", row=1)


def _added(
    case: "Case",
    table: Table,
    cells: Sequence[Mapping[str, Cell]],
    profiles: pd.DataFrame | None = None,
) -> "Case":
    """Return a checked copy with more rows in a table; all rows have the columns of the first."""
    sheet = case.declared(table.name)
    rows = int(sheet.rows.max(initial=1)) + 1 + np.arange(len(cells))
    texts = {column: [_cell(row[column]) for row in cells] for column in cells[0]}
    added, problems = typed(table, RawTable(texts, rows.tolist()))
    frame = pd.concat([sheet.frame, added.frame], ignore_index=True)
    extended = Sheet(table, frame, np.append(sheet.rows, rows))
    return _changed(case, sheets={table.name: extended}, profiles=profiles, problems=problems)


def _cell(value: Cell) -> str:
    if value is None:
        return ""
    return value if isinstance(value, str) else repr(float(value))


def _changed(
    case: "Case", *, settings: Settings | None = None, sheets: Mapping[str, Sheet] | None = None,
    profiles: pd.DataFrame | None = None, problems: Sequence[Problem] = (),
) -> "Case":  # fmt: skip
    """Return a checked copy with some parts replaced, all defaults filled in anew."""
    settings = settings or case.settings
    profiles = case.profiles if profiles is None else profiles
    sheets = {**{table.name: case.declared(table.name) for table in TABLES}, **(sheets or {})}
    rows = np.arange(len(profiles)) + 2
    file = HourlyFile("hourly", case.time.periods, rows, profiles)
    declaration = Declaration(settings, sheets, (file,), case.time, settings.time_zone)
    # The case was sound before, so whatever is broken now, the edit broke.
    problems = [*problems, *broken_rules(declaration)]
    if problems:
        raise CaseError([_as_edit(problem) for problem in problems])
    odd = [
        problem if problem in case.warnings else _as_edit(problem)
        for problem in oddities(declaration)
    ]
    warnings = tuple(dict.fromkeys([*case.warnings, *odd]))
    tables = resolved(settings, case.time, sheets)
    return replace(
        case,
        settings=settings,
        _profiles=profiles,
        _tables=tables,
        warnings=warnings,
        _sheets=sheets,
    )
