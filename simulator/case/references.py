"""Names across tables: each one once, and each reference to a name that exists.

Public names: `PROFILED`, `dangling`, `repeated`, `repeated_pairs`.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from simulator.case.declaration import Declaration
from simulator.case.schema import EVERYWHERE, OUTAGE_KINDS, TABLES
from simulator.case.sheet import Sheet
from simulator.case.wording import did_you_mean, listed, quoted
from simulator.errors import Problem

__all__ = ["PROFILED", "dangling", "repeated", "repeated_pairs"]

REFERENCES = (
    ("lines", "from_bus", "buses"),
    ("lines", "to_bus", "buses"),
    ("dc_ties", "from_bus", "buses"),
    ("dc_ties", "to_bus", "buses"),
    ("corridor_lines", "corridor", "corridors"),
    ("corridor_lines", "line", "lines"),
    ("contingencies", "line", "lines"),
    ("units", "bus", "buses"),
    ("units", "fuel", "fuels"),
    ("offers", "unit", "units"),
    ("heat_rates", "unit", "units"),
    ("renewables", "bus", "buses"),
    ("storage", "bus", "buses"),
    ("loads", "bus", "buses"),
)
"""Table and column of each reference, and the table it points into."""
PROFILED = (
    ("lines", "rating_profile"),
    ("corridors", "limit_profile"),
    ("units", "on_profile"),
    ("fuels", "price_profile"),
    ("renewables", "profile"),
    ("reserves", "requirement_profile"),
    ("loads", "profile"),
)
"""Table and column of each reference to a profile."""
OUT = dict(zip(OUTAGE_KINDS, ("units", "renewables", "storage", "lines", "dc_ties"), strict=True))
"""The table that holds the elements of each kind of outage."""
SUGGESTIONS = 20
"""How many wrong names of a column get a close name looked up: a search among all names is slow."""


def repeated(declaration: Declaration) -> Iterator[Problem]:
    """Yield a problem for each row whose name an earlier row has."""
    for table in TABLES:
        if table.unique:
            yield from _repeated(declaration.sheets[table.name])


def repeated_pairs(declaration: Declaration) -> Iterator[Problem]:
    """Yield a problem for each row that puts a line into a group once more."""
    for name, noun in (("corridor_lines", "corridor"), ("contingencies", "contingency")):
        sheet = declaration.sheets[name]
        pairs = sheet.frame[[sheet.table.key, "line"]]
        again = pairs.duplicated() & (pairs != "").all(axis=1)
        words = f"must be in its {noun} once", "remove the row"
        yield from sheet.problems(again, "line", words)


def _repeated(sheet: Sheet) -> Iterator[Problem]:
    names = sheet[sheet.table.key]
    words = f"must be the only {sheet.table.noun} of that name", "rename or remove one"

    def same(position: int) -> str:
        return listed([f"row {row}" for row in sheet.rows[names == names.iloc[position]]])

    yield from sheet.problems(names.duplicated() & (names != ""), sheet.table.key, words, same)


def dangling(declaration: Declaration) -> Iterator[Problem]:
    """Yield a problem for each reference to a name that does not exist."""
    sheets = declaration.sheets
    for name, column, target in REFERENCES:
        # Without any fuel, offers alone need none, and their units may still say what they burn.
        if sheets[target].whole and not (target == "fuels" and sheets[target].frame.empty):
            yield from _unknown(sheets[name], column, _Known.rows_of(sheets[target]))
    if declaration.whole:
        profiles = _Known.profiles_of(declaration)
        for name, column in PROFILED:
            yield from _unknown(sheets[name], column, profiles)
    if sheets["buses"].whole:
        yield from _unknown(sheets["reserves"], "zone", _Known.zones_of(sheets["buses"]))
    for kind, target in OUT.items():
        if sheets[target].whole:
            outages = sheets["outages"]
            known, other = _Known.rows_of(sheets[target]), outages["kind"] != kind
            yield from _unknown(outages, "name", known, other.to_numpy(dtype=bool))


@dataclass(frozen=True, eq=False)
class _Known:
    """The names that a reference may use, and where they are declared."""

    names: "pd.Index[Any]"
    rule: str
    place: str

    @classmethod
    def rows_of(cls, sheet: Sheet) -> "_Known":
        table = sheet.table
        return cls(sheet.names, f"must name a {table.noun} of {table.path}", table.path)

    @classmethod
    def zones_of(cls, buses: Sheet) -> "_Known":
        names = pd.Index([EVERYWHERE, *buses["zone"].unique()])
        place = buses.table.path
        return cls(names, f"must be {EVERYWHERE}, or name a zone of {place}", place)

    @classmethod
    def profiles_of(cls, declaration: Declaration) -> "_Known":
        names = [name for file in declaration.files for name in file.values.columns]
        return cls(pd.Index(names), "must name a column of a file in hourly/", "such a file")

    def remedies(self, wrong: list[str]) -> dict[str, str]:
        """Return what to do about each wrong name."""
        otherwise = f"correct it, or add it to {self.place}"
        close = {name: did_you_mean(name, self.names, otherwise) for name in wrong[:SUGGESTIONS]}
        return {name: close.get(name, otherwise) for name in wrong}


def _unknown(
    sheet: Sheet, column: str, known: _Known, excused: NDArray[np.bool_] | None = None
) -> Iterator[Problem]:
    values = sheet[column]
    wrong = ~values.isin(known.names) & (values != "")
    if excused is not None:
        wrong &= ~excused
    # A wrong name is often used many times, and a search for close names is the slow part.
    remedies = known.remedies(values[wrong].unique().tolist())
    for position in np.flatnonzero(wrong).tolist():
        name = values.iloc[position]
        yield sheet.problem(position, column, known.rule, quoted(name), remedies[name])
