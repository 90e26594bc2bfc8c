"""The files of a case folder: which there are, which are missing, which do not belong.

Public names: `FOLDERS`, `SETTINGS`, `Folder`, `look_into`, `rank`, `read_bytes`.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path, PurePosixPath

from simulator.case.schema import TABLES
from simulator.case.wording import closest, file_problem, quoted
from simulator.errors import Problem

__all__ = ["FOLDERS", "SETTINGS", "Folder", "look_into", "rank", "read_bytes"]

SETTINGS = "case.toml"
FOLDERS = ("network", "fleet", "demand", "calendar", "hourly")
_PATHS = (SETTINGS, *(table.path for table in TABLES))
_PLAIN_SUFFIXES = {".md", ".txt", ".py"}
_PLAIN_STEMS = {"license", "licence", "notice", "copying", "readme", "authors"}
# A script in the folder leaves __pycache__, a run started in it leaves outputs.
_PLAIN_FOLDERS = {"outputs", "__pycache__"}


@dataclass(frozen=True)
class Folder:
    """What a case folder holds: files to read, by their path in it, and what is wrong."""

    files: frozenset[str] = frozenset()
    hourly: tuple[str, ...] = ()
    problems: tuple[Problem, ...] = ()


def rank(problem: Problem) -> tuple[int, int, str, int]:
    """Order problems by folder, file and row."""
    place = problem.path
    top = place.partition("/")[0]
    folder = FOLDERS.index(top) + 1 if top in FOLDERS else 0
    file = _PATHS.index(place) if place in _PATHS else len(_PATHS)
    return folder, file, place, problem.row


def read_bytes(folder: Path, path: str) -> tuple[bytes, list[Problem]]:
    """Return what a file holds."""
    try:
        return (folder / path).read_bytes(), []
    except OSError as error:
        found = error.strerror or "an error"
        return b"", [file_problem(path, "must be readable", found, "check its permissions")]


def look_into(folder: Path) -> Folder:
    """List a case folder."""
    subject = f"case {quoted(folder.name)}"
    try:
        if folder.is_dir():
            return _sorted_out(
                {path.relative_to(folder).as_posix(): path for path in _entries(folder)}
            )
        found = "a file" if folder.exists() else "nothing there"
        words = "must be a folder", found, "check the path"
    except (OSError, ValueError) as error:
        words = "must be readable", quoted(str(error)), "check the path and its permissions"
    return Folder(problems=(Problem(".", 1, "-", subject, *words),))


def _entries(folder: Path) -> Iterator[Path]:
    """Yield what is in the folder and its known subfolders, but no hidden or plain text file."""
    for path in folder.iterdir():
        if path.is_dir() and path.name in FOLDERS:
            yield from (inner for inner in path.iterdir() if not _is_hidden(inner))
        elif not _is_hidden(path) and not _is_plain(path):
            yield path


def _is_hidden(path: Path) -> bool:
    return path.name.startswith((".", "~$"))


def _is_plain(path: Path) -> bool:
    if path.is_dir():
        return path.name in _PLAIN_FOLDERS
    return path.suffix.lower() in _PLAIN_SUFFIXES or path.stem.lower() in _PLAIN_STEMS


def _sorted_out(present: dict[str, Path]) -> Folder:
    files = frozenset(path for path in present if present[path].is_file())
    hourly = tuple(sorted(path for path in present if _is_hourly(path)))
    known = {path for path in present if path in _PATHS or path in hourly}
    problems = [
        *(_unknown(path) for path in sorted(present) if path not in known),
        *(_no_file(path) for path in sorted(known - files)),
        *_missing(known, hourly),
    ]
    return Folder(
        files=files & known,
        hourly=tuple(path for path in hourly if path in files),
        problems=tuple(problems),
    )


def _is_hourly(path: str) -> bool:
    return path.startswith("hourly/") and path.endswith((".csv", ".parquet"))


def _unknown(path: str) -> Problem:
    name = PurePosixPath(path).name
    if path.startswith("hourly/"):
        return file_problem(path, "must be .csv or .parquet", quoted(name), "convert or remove it")
    if path in FOLDERS:
        return file_problem(path, "must be a folder", "a file", "remove it")
    places = {PurePosixPath(place).name: place for place in (*_PATHS, *FOLDERS)}
    close = closest(name, places)
    otherwise = "remove it, or put a dot before its name"
    remedy = f"did you mean {quoted(places[close])}?" if close else otherwise
    return file_problem(path, "must be part of the case format", quoted(name), remedy)


def _no_file(path: str) -> Problem:
    return file_problem(path, "must be a file", "something else", "put the file in its place")


def _missing(known: set[str], hourly: tuple[str, ...]) -> Iterator[Problem]:
    for path in (SETTINGS, *(table.path for table in TABLES if table.required)):
        if path not in known:
            yield file_problem(path, "must be there", "no such file", "add it")
    if not hourly:
        rule, remedy = "must hold a .csv or .parquet file", "add one with a column for each profile"
        yield Problem("hourly", 1, "-", "the folder", rule, "none", remedy)
