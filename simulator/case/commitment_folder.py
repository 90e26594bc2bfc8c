"""A case folder written again with a plan of on and off in it, to be edited and run in mode `given`.

Public names: `refuse_commitment`, `save_commitment`.

Every file of the case is copied byte by byte but three: fleet/units.csv names a profile for each unit
in `on_profile`, a new hourly file holds these profiles, and case.toml says mode `given`. The new file
covers the periods that the run saw, look-ahead included, so the same run of the saved case sees the
same hours, and no hour has a decision that nobody took.
"""

import csv
import io
import re
import tomllib
from collections.abc import Collection, Iterable, Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from simulator.case.folder import FOLDERS, SETTINGS, look_into
from simulator.case.hourly import read_hourly
from simulator.case.model import TABLES, Case
from simulator.case.reader import read_case
from simulator.case.references import PROFILED
from simulator.case.schema import UNITS
from simulator.case.wording import number, quoted
from simulator.errors import OptionError
from simulator.files import made_whole

__all__ = ["refuse_commitment", "save_commitment"]

Floats = NDArray[np.float64]

OPTION = "--save-commitment"
FILE = "hourly/commitment.csv"
LONGEST = 64
WHOLE = 1e-6
"""A unit this close to on or off is that: HiGHS holds whole decisions to 1e-6."""
FEWEST = 2
"""An hourly file of fewer periods does not tell how long they are."""
BOM = "\ufeff"


def refuse_commitment(
    source: Path, folder: Path, mode: str, others: Iterable[Path] = (), *, force: bool = False
) -> None:
    """Refuse, before a run, to save its plan where that cannot be done.

    source : the case folder; others : folders that the call writes besides
    `force` replaces only what was saved this way before.
    """
    if mode == "relaxed":
        raise OptionError(
            f"{OPTION}, needs units that are on or off (formulation 2.3), found mode relaxed, in which a "
            "unit may be partly on, pass --commitment optimal"
        )
    for other in (source, *others):
        if _overlap(folder.resolve(), other.resolve()):
            raise OptionError(
                f"{OPTION}, must be apart from the case and the results, found {folder} and {other}, "
                "choose another folder"
            )
    if folder.exists():
        _refuse_existing(folder, force=force)


def _overlap(one: Path, other: Path) -> bool:
    return one.is_relative_to(other) or other.is_relative_to(one)


def _refuse_existing(folder: Path, *, force: bool) -> None:
    if not force:
        raise OptionError(
            f"{OPTION}, must not exist yet, found {folder}, choose another folder or pass --force"
        )
    saved = (folder / SETTINGS).is_file() and (folder / FILE).is_file()
    if not folder.is_dir() or (any(folder.iterdir()) and not saved):
        raise OptionError(
            f"--force, replaces only a case with a saved commitment, found {folder} without {FILE}, "
            "choose another folder"
        )


def save_commitment(
    case: Case, source: Path, on: Floats, span: slice, folder: Path, *, force: bool = False
) -> None:
    """Write the case at `source`, as it was run, with a plan of on and off, whole or not at all.

    on : array (period, unit), 0 or 1, over `span` of the case's periods
    Raises `OptionError` for a unit that is partly on, a folder that must not be replaced, and a case
    that is not the one in `source`.
    """
    refuse_commitment(source, folder, "given", force=force)
    decided = _whole(case, on, span)
    listing = look_into(source)
    place = _free_file(case, source, listing.files)
    names = _profile_names(case, _profiles_in(case, source, place))
    with made_whole(folder, OPTION) as made:
        for sub in FOLDERS:
            (made / sub).mkdir()
        for path in sorted(listing.files - {place}):
            (made / path).write_bytes(_changed(path, (source / path).read_bytes(), names))
        frame = pd.DataFrame(decided, columns=list(names.values()))
        frame.insert(0, "time", [moment.isoformat() for moment in case.time.local[span]])
        frame.to_csv(made / place, index=False, lineterminator="\n")
        _refuse_other(case, read_case(made), span, source)


def _whole(case: Case, on: Floats, span: slice) -> NDArray[np.int64]:
    """Return decisions as 0 and 1; refuse a unit that is partly on."""
    decided = np.rint(on).astype(np.int64)
    partly = np.argwhere(~(np.abs(on - decided) <= WHOLE))
    if len(partly):
        period, unit = (int(place) for place in partly[0])
        hour = case.time.local[span][period].isoformat(timespec="minutes")
        raise OptionError(
            f"{OPTION}, needs units that are on or off (formulation 2.3), found unit "
            f"{quoted(case.units.index[unit])} on by {number(round(float(on[period, unit]), 3))} at {hour}, "
            "run in mode optimal"
        )
    if len(on) < FEWEST:
        raise OptionError(
            f"{OPTION}, needs two periods or more, since hourly data of one tell no length, found one, "
            "pass more --hours"
        )
    return decided


def _free_file(case: Case, source: Path, files: Collection[str]) -> str:
    """Return the path of the new hourly file: that of an earlier plan, or one that no file has."""
    if FILE not in files or _profiles_in(case, source, FILE).isdisjoint(_used_elsewhere(case)):
        return FILE
    stem = FILE.removesuffix(".csv")
    tried = (f"{stem} {count}.csv" for count in range(2, len(files) + 3))
    return next(path for path in tried if path not in files)


def _profiles_in(case: Case, source: Path, path: str) -> set[str]:
    """Return the names of the profiles of an hourly file, none if there is no such file."""
    if not (source / path).is_file():
        return set()
    file, _ = read_hourly(path, (source / path).read_bytes(), case.time.time_zone)
    return set(file.values.columns) if file else set()


def _used_elsewhere(case: Case) -> set[str]:
    """Return the profiles that something other than a unit's schedule uses."""
    columns = [getattr(case, table)[column] for table, column in PROFILED if table != "units"]
    return {name for column in columns for name in column}


def _profile_names(case: Case, replaced: set[str]) -> dict[str, str]:
    """Return a profile name for each unit that no other profile has.

    It begins with a word of its own, since a name that begins with "note" would be no profile.
    """
    taken = set(case.profiles.columns) - replaced
    names: dict[str, str] = {}
    for unit in case.units.index:
        endings = ("", *(f" {count}" for count in range(2, len(taken) + 3)))
        tried = (f"on {unit}"[: LONGEST - len(end)].strip() + end for end in endings)
        names[unit] = next(name for name in tried if name not in taken)
        taken.add(names[unit])
    return names


def _changed(path: str, data: bytes, names: Mapping[str, str]) -> bytes:
    """Return what a file holds in the saved case: the same bytes, but for settings and units."""
    if path not in (SETTINGS, UNITS.path):
        return data
    text = data.decode("utf-8")
    begin = BOM if text.startswith(BOM) else ""
    text = text.removeprefix(BOM)
    written = _in_mode_given(text) if path == SETTINGS else _with_profiles(text, names)
    return (begin + written).encode("utf-8")


def _with_profiles(text: str, names: Mapping[str, str]) -> str:
    """Name each unit's profile in the text of units.csv; every other cell stays."""
    header, *records = csv.reader(io.StringIO(text, newline=""), strict=True)
    width, unit = len(header), header.index("unit")
    place = header.index("on_profile") if "on_profile" in header else width
    out = io.StringIO(newline="")
    writer = csv.writer(out, lineterminator="\r\n" if "\r\n" in text else "\n")
    writer.writerow([*header[:place], "on_profile", *header[place + 1 :]])
    for record in records:
        cells = record[:width]
        if any(cell.strip() for cell in cells):
            cells[place : place + 1] = [names[cells[unit]]]
        writer.writerow(cells)
    return out.getvalue()


def _in_mode_given(text: str) -> str:
    """Set the commitment mode in the text of case.toml, and change nothing else in it."""
    expected = tomllib.loads(text)
    expected["commitment"] = expected.get("commitment", {}) | {"mode": "given"}
    for changed in _attempts(text):
        if _toml(changed) == expected:
            return changed
    raise OptionError(
        f"{OPTION}, must be able to set the commitment mode, found a {SETTINGS} in an unusual form, "
        'write [commitment] and below it mode = "optimal"'
    )


def _attempts(text: str) -> Iterator[str]:
    """Yield texts in which the mode may be set; the reader of TOML tells which of them is right."""
    yield text
    for found in re.finditer(r"""\bmode["']?\s*=\s*("[^"\n]*"|'[^'\n]*')""", text):
        yield f'{text[: found.start(1)]}"given"{text[found.end(1) :]}'
    for found in re.finditer(r"""^\s*\[\s*["']?commitment["']?\s*\][^\n]*$""", text, re.MULTILINE):
        yield f'{text[: found.end()]}\nmode = "given"{text[found.end() :]}'
    for found in re.finditer(r"""\bcommitment["']?\s*=\s*\{""", text):
        yield f'{text[: found.end()]} mode = "given",{text[found.end() :]}'
    yield f'commitment.mode = "given"\n{text}'
    yield f'{text}\n[commitment]\nmode = "given"\n'


def _toml(text: str) -> dict[str, Any] | None:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        return None


def _refuse_other(case: Case, saved: Case, span: slice, source: Path) -> None:
    """Make sure that what was saved is the case that was run, and so can be run again."""
    units = [each.units.drop(columns="on_profile") for each in (case, saved)]
    other = [name for name in TABLES if name != "units"]
    profiles = [name for name in case.profiles.columns if name in saved.profiles.columns]
    rest = [name for name in case.profiles.columns if name not in profiles]
    settings = case.settings.model_dump()
    settings["commitment"]["mode"] = "given"
    same = (
        saved.settings.model_dump() == settings
        and saved.time.periods.equals(case.time.periods[span])
        and units[0].equals(units[1])
        and all(getattr(case, name).equals(getattr(saved, name)) for name in other)
        and case.profiles[profiles].iloc[span].equals(saved.profiles[profiles])
        and _used_elsewhere(case).isdisjoint(rest)
    )
    if not same:
        raise OptionError(
            f"{OPTION}, needs the case as it was run, found other tables in {source}, run it again"
        )
