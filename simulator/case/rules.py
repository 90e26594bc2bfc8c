"""All rules that look at more than one table, and what is odd but allowed.

Public names: `broken_rules`, `oddities`.
"""

from collections.abc import Iterator

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from simulator.case.clock import Stamps, read_stamps
from simulator.case.curves import curve_problems
from simulator.case.declaration import Declaration
from simulator.case.folder import SETTINGS
from simulator.case.profiles import profile_problems
from simulator.case.references import dangling, repeated, repeated_pairs
from simulator.case.schema import EVERYWHERE
from simulator.case.sheet import Sheet
from simulator.case.wording import file_problem, number, quoted
from simulator.errors import Problem

__all__ = ["broken_rules", "oddities"]

WHOLE = 1e-9
"""A count of periods this close to a whole number is whole."""


def broken_rules(declaration: Declaration) -> list[Problem]:
    """Return every fault of a declaration that no table shows on its own."""
    return [
        *_no_bus(declaration),
        *repeated(declaration),
        *repeated_pairs(declaration),
        *dangling(declaration),
        *curve_problems(declaration),
        *profile_problems(declaration),
        *_outage_times(declaration),
        *_horizon(declaration),
        *_initial_hours(declaration),
        *_empty_corridors(declaration),
        *_lossy_gains(declaration),
        *_unclear_zone(declaration),
    ]


def oddities(declaration: Declaration) -> list[Problem]:
    """Return what is allowed but probably not meant."""
    return [
        *_negative_reactance(declaration),
        *_no_resistance(declaration),
        *_lonely_buses(declaration),
        *_idle_operation_cost(declaration),
        *_idle_reserves(declaration),
        *_outages_beyond(declaration),
    ]


def _no_bus(declaration: Declaration) -> Iterator[Problem]:
    buses = declaration.sheets["buses"]
    if buses.whole and buses.frame.empty:
        yield file_problem(buses.table.path, "must have a bus", "none", "add a row for each bus")


def _outage_times(declaration: Declaration) -> Iterator[Problem]:
    """Yield outages whose times cannot be read, or do not follow one another."""
    outages, zone = declaration.sheets["outages"], declaration.time_zone
    if zone is None:
        return
    read = {column: read_stamps(outages[column], zone) for column in ("from", "until")}
    for column, stamps in read.items():
        for faulty, rule, remedy in _stamp_rules(stamps, zone):
            written = faulty & (outages[column] != "")
            yield from outages.problems(written, column, (rule, remedy))
    start, until = read["from"], read["until"]
    backward = np.asarray(start.early >= until.early) & ~start.ambiguous & ~until.ambiguous
    words = "must be after from", "exchange or correct them"
    yield from outages.problems(backward, "until", words, lambda place: _span(outages, place))


def _span(outages: Sheet, place: int) -> str:
    return f"{quoted(outages['from'].iloc[place])} until {quoted(outages['until'].iloc[place])}"


def _stamp_rules(stamps: Stamps, zone: str) -> tuple[tuple[NDArray[np.bool_], str, str], ...]:
    return (
        (stamps.malformed, "must be an ISO 8601 time", "write it like 2027-01-11T06:00"),
        (stamps.skipped, f"must exist in {zone}", "the clock change skips it: write a later time"),
        (
            stamps.ambiguous,
            f"must come once in {zone}",
            "the clock change repeats it: add an offset",
        ),
    )


def _horizon(declaration: Declaration) -> Iterator[Problem]:
    if declaration.settings is None or declaration.time is None:
        return
    length = declaration.time.period_hours
    for key, hours in declaration.settings.horizon.model_dump().items():
        if abs(hours / length - round(hours / length)) > WHOLE:
            place = f"horizon.{key}"
            row = declaration.setting_rows.get(place, 1)
            rule = f"must be a whole number of periods of {number(length)} h"
            words = f"setting {quoted(place)}", rule, number(hours), "choose a multiple of a period"
            yield Problem(SETTINGS, row, place, *words)


def _initial_hours(declaration: Declaration) -> Iterator[Problem]:
    """Yield initial hours that are no whole number of periods, as minimum times count periods."""
    if declaration.time is None:
        return
    units, length = declaration.sheets["units"], declaration.time.period_hours
    periods = units["initial_hours"] / length
    words = f"must be a whole number of periods of {number(length)} h", "round it to periods"
    yield from units.problems((periods - periods.round()).abs() > WHOLE, "initial_hours", words)


def _empty_corridors(declaration: Declaration) -> Iterator[Problem]:
    corridors, members = (declaration.sheets[name] for name in ("corridors", "corridor_lines"))
    if members.whole:
        empty = ~corridors["corridor"].isin(members["corridor"]) & (corridors["corridor"] != "")
        words = f"must have a line in {members.table.path}", "add its lines or remove it"
        yield from corridors.problems(empty, "corridor", words, lambda _: "none")


def _lossy_gains(declaration: Declaration) -> Iterator[Problem]:
    """Yield lines that would give power where losses are modelled."""
    if declaration.settings is not None and declaration.settings.network.losses:
        lines = declaration.sheets["lines"]
        words = "must be at least 0 where network.losses is true", "write 0, or do without losses"
        yield from lines.problems(lines["resistance_pu"] < 0, "resistance_pu", words)


def _unclear_zone(declaration: Declaration) -> Iterator[Problem]:
    """Yield reserves for all buses where some buses are in a zone of that name."""
    reserves = declaration.sheets["reserves"]
    if (declaration.sheets["buses"]["zone"] == EVERYWHERE).any():
        words = "must not be the name of a zone, as it means every bus", "rename that zone"
        yield from reserves.problems(reserves["zone"] == EVERYWHERE, "zone", words)


def _negative_reactance(declaration: Declaration) -> Iterator[Problem]:
    lines = declaration.sheets["lines"]
    words = "is usually positive", "keep it only for series compensation"
    yield from lines.problems(lines["reactance_pu"] < 0, "reactance_pu", words)


def _no_resistance(declaration: Declaration) -> Iterator[Problem]:
    """Yield a warning where losses are asked for but no line can lose anything."""
    lines = declaration.sheets["lines"]
    asked = declaration.settings is not None and declaration.settings.network.losses
    if asked and len(lines.frame) and (lines["resistance_pu"] == 0).all():
        words = (
            "usually holds a resistance above 0 where network.losses is true",
            "0 for every line",
        )
        remedy = "fill in resistance_pu: without it no line loses anything"
        yield file_problem(lines.table.path, *words, remedy)


def _lonely_buses(declaration: Declaration) -> Iterator[Problem]:
    """Yield buses that have something connected but no line and no tie."""
    sheets = declaration.sheets
    links = sheets["lines"], sheets["dc_ties"]
    tied = pd.concat([link[end] for link in links for end in ("from_bus", "to_bus")])
    users = [sheets[name] for name in ("units", "renewables", "storage", "loads")]
    at_bus = pd.concat([sheet["bus"] for sheet in users]).value_counts()
    buses = sheets["buses"]
    if len(buses.frame) > 1:
        lonely = ~buses["bus"].isin(tied) & buses["bus"].isin(at_bus.index)
        words = "is an island of its own, without line and tie", "connect it if that is not meant"
        yield from buses.problems(
            lonely, "bus", words, lambda place: f"{at_bus[buses['bus'].iloc[place]]} elements there"
        )


def _idle_operation_cost(declaration: Declaration) -> Iterator[Problem]:
    units = declaration.sheets["units"]
    offered = units["unit"].isin(declaration.sheets["offers"]["unit"])
    words = "is not added, since offers are complete costs", "leave it out, or add it to the offers"
    idle = offered & (units["variable_om_per_mwh"] != 0)
    yield from units.problems(idle, "variable_om_per_mwh", words)


def _idle_reserves(declaration: Declaration) -> Iterator[Problem]:
    """Yield reserve products that ask for nothing, or that no unit can provide."""
    reserves, units = declaration.sheets["reserves"], declaration.sheets["units"]
    asked = reserves["requirement_mw"] + reserves["percent_of_load"]
    words = "asks for nothing", "give requirement_mw or percent_of_load, or leave the product out"
    yield from reserves.problems(asked == 0, "requirement_mw", words)
    zone_of = declaration.sheets["buses"].frame.drop_duplicates("bus").set_index("bus")["zone"]
    manned = {EVERYWHERE, *units["bus"].map(zone_of).dropna()}
    words = "has no unit, so that all of it is short", "put the product in another zone"
    yield from reserves.problems(~reserves["zone"].isin(manned), "zone", words)


def _outages_beyond(declaration: Declaration) -> Iterator[Problem]:
    outages, time = declaration.sheets["outages"], declaration.time
    if time is not None:
        end = time.periods[-1] + pd.Timedelta(hours=time.period_hours)
        start = read_stamps(outages["from"], time.time_zone).early
        until = read_stamps(outages["until"], time.time_zone).early
        beyond = np.asarray((until <= time.periods[0]) | (start >= end))
        # One warning for all: a calendar of a year beside the hours of a week is common.
        places = np.flatnonzero(beyond).tolist()
        for first in places[:1]:
            more = f", {len(places) - 1} more like it" if len(places) > 1 else ""
            words = "is wholly outside the hourly data", f"{_span(outages, first)}{more}"
            yield outages.problem(first, "from", *words, "nothing to do if that is meant")
