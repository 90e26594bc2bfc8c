"""case.toml → `Settings`, its faults told in plain words.

Public names: `SettingsFile`, `checked_settings`, `read_settings`.
"""

import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from simulator.case.cells import decode
from simulator.case.folder import SETTINGS
from simulator.case.settings import Settings, known_zones
from simulator.case.wording import did_you_mean, quoted
from simulator.errors import Problem

__all__ = ["SettingsFile", "checked_settings", "read_settings"]

_FORMAT = "must be TOML in UTF-8"
_KEY = re.compile(r"""^\s*(?P<key>[A-Za-z0-9_.\-"' ]+?)\s*=""")
_SECTION = re.compile(r"""^\s*\[+\s*(?P<name>[A-Za-z0-9_.\-"' ]+?)\s*\]""")
_WORDS = {
    "missing": ("must be there", "add it"),
    "extra_forbidden": ("must be a setting of the case format", "remove it"),
    "literal_error": ("must be {expected}", "choose one of them"),
    "greater_than": ("must be greater than {gt:g}", "check its sign"),
    "greater_than_equal": ("must be at least {ge:g}", "check its sign"),
    "finite_number": ("must be a finite number", "write digits with a decimal point"),
    "float_type": ("must be a number", "write digits without quotes"),
    "string_type": ("must be text", "put it in quotes"),
    "string_too_short": ("must not be empty", "write a name"),
    "bool_type": ("must be true or false", "write true or false without quotes"),
    "model_type": ("must be a section", "write it as [section] with settings below"),
    "value_error": ("{error}", "change it"),
}


@dataclass(frozen=True)
class SettingsFile:
    """What case.toml holds.

    settings : None where they cannot be used
    time_zone : the time zone if that at least can be used, None otherwise
    rows : row in the file of each dotted key
    """

    settings: Settings | None
    time_zone: str | None = None
    rows: Mapping[str, int] = field(default_factory=dict)


def read_settings(data: bytes) -> tuple[SettingsFile, list[Problem]]:
    """Read the bytes of case.toml."""
    text, problems = decode(SETTINGS, data, _FORMAT)
    if text is None:
        return SettingsFile(None), problems
    try:
        values = tomllib.loads(text)
    except (ValueError, RecursionError) as error:
        return SettingsFile(None), [_syntax_problem(error)]
    rows = _rows(text)
    settings, problems = checked_settings(values, rows)
    return SettingsFile(settings, _time_zone(values), rows), problems


def _syntax_problem(error: Exception) -> Problem:
    words = str(error) if isinstance(error, ValueError) else "brackets nested too deep"
    place = re.search(r" \(at line (\d+), column \d+\)", words)
    row = int(place[1]) if place else 1
    found = words.replace(place[0], "") if place else words
    return Problem(SETTINGS, row, "-", "the file", _FORMAT, quoted(found), "mend this line")


def _time_zone(values: Mapping[str, Any]) -> str | None:
    zone = values.get("time_zone", "UTC")
    return zone if isinstance(zone, str) and zone in known_zones() else None


def _rows(text: str) -> dict[str, int]:
    """Return the row of each key, as far as a look at the lines tells."""
    # The TOML reader of the standard library keeps no lines.
    rows: dict[str, int] = {}
    section = ""
    for row, line in enumerate(text.split("\n"), 1):
        if heading := _SECTION.match(line):
            section = _bare(heading["name"])
            rows.setdefault(section, row)
            section += "."
        elif key := _KEY.match(line):
            rows.setdefault(section + _bare(key["key"]), row)
    return rows


def _bare(key: str) -> str:
    return re.sub(r"[\s\"']", "", key)


def checked_settings(
    values: Mapping[str, Any], rows: Mapping[str, int]
) -> tuple[Settings | None, list[Problem]]:
    """Return the settings that some values make, or what is wrong with them."""
    try:
        return Settings.model_validate(values), []
    except ValidationError as errors:
        return None, [_told(error, rows) for error in errors.errors(include_url=False)]


def _told(error: ErrorDetails, rows: Mapping[str, int]) -> Problem:
    rule, remedy = _rule_and_remedy(error)
    place = [str(part) for part in error["loc"]]
    section = _section(place)
    # A rule between two settings of a section names the one it is about first.
    about = rule.partition(" ")[0]
    if about in section.model_fields:
        place, rule = [*place, about], rule.partition(" ")[2]
    key = ".".join(place)
    if error["type"] == "extra_forbidden":
        remedy = did_you_mean(place[-1], section.model_fields, remedy)
    elif key == "time_zone":
        remedy = did_you_mean(str(error["input"]), sorted(known_zones()), remedy)
    row = rows.get(key, rows.get(place[0], 1))
    return Problem(SETTINGS, row, key, f"setting {quoted(key)}", rule, _found(error), remedy)


def _rule_and_remedy(error: ErrorDetails) -> tuple[str, str]:
    """Return pydantic's error in our words; what we have no words for keeps its own."""
    if error["type"] not in _WORDS:
        return error["msg"].lower(), "change it"
    rule, remedy = _WORDS[error["type"]]
    return rule.format(**error.get("ctx", {})).replace("'", '"'), remedy


def _section(place: list[str]) -> type[BaseModel]:
    """Return the section that a setting, or a rule between settings, belongs to."""
    chosen: type[BaseModel] = Settings
    for part in place:
        field_info = chosen.model_fields.get(part)
        kind = field_info.annotation if field_info else None
        if not (isinstance(kind, type) and issubclass(kind, BaseModel)):
            break
        chosen = kind
    return chosen


def _found(error: ErrorDetails) -> str:
    value = error["input"]
    if error["type"] == "missing":
        return "no such setting"
    if isinstance(value, Mapping):
        return (
            ", ".join(
                f"{key} {item}" for key, item in value.items() if not isinstance(item, Mapping)
            )
            or "a section"
        )
    return quoted(value) if isinstance(value, str) else quoted(str(value)).strip('"')
