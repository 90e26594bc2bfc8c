"""Cost curves: their shape, the units they belong to, and what these burn.

Public names: `curve_problems`.
"""

from collections.abc import Iterator, Mapping

import numpy as np
import pandas as pd

from simulator.case.declaration import Declaration
from simulator.case.sheet import Sheet
from simulator.case.wording import file_problem, number
from simulator.errors import Problem

__all__ = ["curve_problems"]

SAME_MW = 1e-6
"""Breaks this close to each other are the same, MW."""
COSTS = {"offers": "cost_per_mwh", "heat_rates": "heat_rate_gj_per_mwh"}


def curve_problems(declaration: Declaration) -> Iterator[Problem]:
    """Yield the problems of cost curves."""
    sheets = declaration.sheets
    for name, column in COSTS.items():
        if sheets[name].whole:
            yield from _unordered(sheets[name])
            yield from _falling(sheets[name], sheets["units"], column)
            yield from _not_ending(sheets[name], sheets["units"])
    if sheets["units"].whole:
        yield from _in_both(sheets)
        yield from _in_neither(sheets)
        yield from _burning_nothing(sheets)
        yield from _no_fuels(sheets)


def _before(curves: Sheet, column: str) -> "pd.Series[float]":
    """Return the value of the same unit's block before, NaN for its first."""
    return curves.frame.groupby("unit", sort=False)[column].shift()


def _limit(curves: Sheet, units: Sheet, column: str) -> "pd.Series[float]":
    """Return a limit of the unit that each block belongs to."""
    limits = units.frame.drop_duplicates("unit").set_index("unit")[column]
    return limits.reindex(curves["unit"]).set_axis(curves.frame.index)


def _unordered(curves: Sheet) -> Iterator[Problem]:
    breaks, before = curves["up_to_mw"], _before(curves, "up_to_mw")
    words = "must be above the break before it", "sort the blocks, or mend the break"
    yield from curves.problems(
        breaks <= before + SAME_MW,
        "up_to_mw",
        words,
        lambda place: f"{number(breaks.iloc[place])} after {number(before.iloc[place])}",
    )


def _falling(curves: Sheet, units: Sheet, column: str) -> Iterator[Problem]:
    """Yield blocks cheaper than the one before, where the unit has a choice between the two.

    Up to minimum output it has none, so a fall at a break up to there does no harm.
    """
    costs, before = curves[column], _before(curves, column)
    free = _before(curves, "up_to_mw") > _limit(curves, units, "min_output_mw") + SAME_MW
    words = "must not fall above min_output_mw", "pool the two blocks into one of their average"
    yield from curves.problems(
        (costs < before) & free,
        column,
        words,
        lambda place: f"{number(costs.iloc[place])} after {number(before.iloc[place])}",
    )


def _not_ending(curves: Sheet, units: Sheet) -> Iterator[Problem]:
    """Yield last breaks that are not the unit's maximum output."""
    breaks, maximum = curves["up_to_mw"], _limit(curves, units, "max_output_mw")
    # Blocks of a unit may stand apart in the table: the last in its order counts.
    last = ~curves["unit"].duplicated(keep="last")
    words = "must end at max_output_mw", "end the last block there, or change max_output_mw"
    yield from curves.problems(
        last & ((breaks - maximum).abs() > SAME_MW),
        "up_to_mw",
        words,
        lambda place: f"{number(breaks.iloc[place])}, the unit has {number(maximum.iloc[place])}",
    )


_ONE = "must be in one of fleet/offers.csv and fleet/heat_rates.csv"


def _in_both(sheets: Mapping[str, Sheet]) -> Iterator[Problem]:
    offers, heat_rates = sheets["offers"], sheets["heat_rates"]
    burning = heat_rates["unit"]
    both = burning.isin(offers["unit"]) & ~burning.duplicated() & (burning != "")

    def found(place: int) -> str:
        row = offers.rows[np.argmax(offers["unit"] == burning.iloc[place])]
        return f"it in row {row} of fleet/offers.csv too"

    yield from heat_rates.problems(both, "unit", (_ONE, "remove it from one"), found)


def _in_neither(sheets: Mapping[str, Sheet]) -> Iterator[Problem]:
    units, offers, heat_rates = sheets["units"], sheets["offers"], sheets["heat_rates"]
    if offers.whole and heat_rates.whole:
        named = units["unit"]
        bare = ~named.isin(offers["unit"]) & ~named.isin(heat_rates["unit"]) & (named != "")
        running = units["max_output_mw"] > 0
        words = _ONE, "add its blocks to one"
        yield from units.problems(bare & running, "unit", words, lambda _: "it in neither")


def _burning(sheets: Mapping[str, Sheet]) -> "pd.Series[bool]":
    names = sheets["units"]["unit"]
    return names.isin(sheets["heat_rates"]["unit"]) & (names != "")


def _burning_nothing(sheets: Mapping[str, Sheet]) -> Iterator[Problem]:
    units = sheets["units"]
    words = "must be given, since the unit is in fleet/heat_rates.csv", "name its fuel"
    yield from units.problems(_burning(sheets) & (units["fuel"] == ""), "fuel", words)


def _no_fuels(sheets: Mapping[str, Sheet]) -> Iterator[Problem]:
    fuels, burning = sheets["fuels"], int(_burning(sheets).sum())
    if fuels.whole and fuels.frame.empty and burning:
        rule = "must price the fuels of units in fleet/heat_rates.csv"
        found = f"no fuel for {burning} such units"
        yield file_problem(fuels.table.path, rule, found, "add a row for each fuel")
