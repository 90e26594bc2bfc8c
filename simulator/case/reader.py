"""`read_case`: a case folder → one checked `Case`, or every problem it has.

Public names: `read_case`.
"""

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from simulator.case.declaration import Declaration
from simulator.case.defaults import resolved
from simulator.case.folder import SETTINGS, Folder, look_into, rank, read_bytes
from simulator.case.hourly import (
    HourlyFile,
    common_axis,
    read_hourly,
    repeated_profiles,
    side_by_side,
)
from simulator.case.model import Case
from simulator.case.rules import broken_rules, oddities
from simulator.case.schedules import schedule_oddities
from simulator.case.schema import TABLES, Table
from simulator.case.settings import Settings
from simulator.case.settings_file import SettingsFile, read_settings
from simulator.case.sheet import Sheet, empty_sheet, read_sheet
from simulator.case.time_axis import TimeAxis
from simulator.errors import CaseError, Problem

__all__ = ["read_case"]


def read_case(folder: Path | str) -> Case:
    """Read a case folder; raise one `CaseError` with every problem of every file."""
    folder = Path(folder)
    listing = look_into(folder)
    problems = list(listing.problems)
    if folder.is_dir():
        declaration, faults = _declared(folder, listing)
        problems += faults
        # Both are there when nothing is wrong; that is asked again for the type checker.
        settings, time = declaration.settings, declaration.time
        if not problems and settings is not None and time is not None:
            return _built(declaration, settings, time)
    raise CaseError(sorted(problems, key=rank))


def _built(declaration: Declaration, settings: Settings, time: TimeAxis) -> Case:
    """Return the case of a faultless declaration."""
    whole = [file.values.set_axis(file.instants) for file in declaration.files]
    profiles = side_by_side([values.loc[time.periods] for values in whole])
    tables = resolved(settings, time, declaration.sheets)
    found = tuple(oddities(declaration))
    case = Case(settings, time, profiles, tables, dict(declaration.sheets), found)
    return replace(case, warnings=(*found, *schedule_oddities(case)))


def _declared(folder: Path, listing: Folder) -> tuple[Declaration, list[Problem]]:
    """Read all files and look at all rules, whatever is wrong with some of them."""
    file, problems = _settings(folder, listing)
    sheets: dict[str, Sheet] = {}
    for table in TABLES:
        sheets[table.name], faults = _sheet(folder, listing, table)
        problems += faults
    files, whole, faults = _hourly(folder, listing, file.time_zone)
    problems += faults
    time, faults = _time(files, file.time_zone, sound=whole and not faults)
    declaration = Declaration(file.settings, sheets, files, time, file.time_zone, whole, file.rows)
    return declaration, [*problems, *faults, *broken_rules(declaration)]


def _settings(folder: Path, listing: Folder) -> tuple[SettingsFile, list[Problem]]:
    if SETTINGS not in listing.files:
        return SettingsFile(None), []
    data, problems = read_bytes(folder, SETTINGS)
    return (SettingsFile(None), problems) if problems else read_settings(data)


def _sheet(folder: Path, listing: Folder, table: Table) -> tuple[Sheet, list[Problem]]:
    if table.path not in listing.files:
        return empty_sheet(table, whole=not table.required), []
    data, problems = read_bytes(folder, table.path)
    return (empty_sheet(table, whole=False), problems) if problems else read_sheet(table, data)


def _hourly(
    folder: Path, listing: Folder, zone: str | None
) -> tuple[tuple[HourlyFile, ...], bool, list[Problem]]:
    """Return the hourly files, whether all could be read, and their problems."""
    files: list[HourlyFile] = []
    problems: list[Problem] = []
    for path in listing.hourly:
        data, faults = read_bytes(folder, path)
        if not faults:
            file, faults = read_hourly(path, data, zone)
            files += [file] if file else []
        problems += faults
    whole = len(files) == len(listing.hourly) > 0
    return tuple(files), whole, [*problems, *repeated_profiles(files)]


def _time(
    files: Sequence[HourlyFile], zone: str | None, *, sound: bool
) -> tuple[TimeAxis | None, list[Problem]]:
    return common_axis(files, zone) if sound and zone else (None, [])
