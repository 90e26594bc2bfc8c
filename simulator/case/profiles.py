"""Rules of value that a profile keeps to because of what uses it.

Public names: `profile_problems`.
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from simulator.case.declaration import Declaration
from simulator.case.hourly import HourlyFile
from simulator.case.sheet import Sheet
from simulator.case.wording import listed, number, quoted
from simulator.errors import Problem

__all__ = ["profile_problems"]

Floats = NDArray[np.float64]
Booleans = NDArray[np.bool_]


@dataclass(frozen=True)
class Role:
    """What the profiles named in one column of a table are for; NaN breaks no rule."""

    table: str
    column: str
    rule: str
    broken: Callable[[Floats], Booleans]


def _outside_one(values: Floats) -> Booleans:
    return np.asarray((values < 0) | (values > 1))


def _between_two(values: Floats) -> Booleans:
    return (values != 0) & (values != 1) & ~np.isnan(values)


def _negative(values: Floats) -> Booleans:
    return values < 0


ROLES = (
    Role("lines", "rating_profile", "must be at least 0", _negative),
    Role("corridors", "limit_profile", "must be at least 0", _negative),
    Role("units", "on_profile", "must be 0 or 1", _between_two),
    Role("fuels", "price_profile", "must be at least 0", _negative),
    Role("renewables", "profile", "must be from 0 to 1", _outside_one),
    Role("reserves", "requirement_profile", "must be at least 0", _negative),
)


def profile_problems(declaration: Declaration) -> Iterator[Problem]:
    """Yield a problem for each profile with values that one of its uses does not allow."""
    for file in declaration.files:
        for role in ROLES:
            yield from _misfits(file, role, declaration.sheets[role.table])


def _misfits(file: HourlyFile, role: Role, sheet: Sheet) -> Iterator[Problem]:
    # Of all users of a profile the message names the first: it is the profile that is at fault.
    users = set(sheet[role.column])
    columns = [place for place, name in enumerate(file.values.columns) if name in users]
    misfit = role.broken(file.values.to_numpy()[:, columns])
    for place in np.flatnonzero(misfit.any(axis=0)).tolist():
        name = str(file.values.columns[columns[place]])
        user = sheet.frame.loc[sheet[role.column] == name, sheet.table.key].iloc[0]
        reason = f"since {sheet.table.noun} {quoted(user)} has it as {role.column}"
        yield _misfit(file, name, np.flatnonzero(misfit[:, place]), f"{role.rule}, {reason}")


def _misfit(file: HourlyFile, name: str, places: NDArray[np.intp], rule: str) -> Problem:
    values, rows = file.values[name].to_numpy()[places], file.rows[places]
    found = [f"{number(value)} in row {row}" for value, row in zip(values, rows, strict=True)]
    remedy = "correct the values, or name another profile there"
    return Problem(
        file.path, int(rows[0]), name, f"profile {quoted(name)}", rule, listed(found), remedy
    )
