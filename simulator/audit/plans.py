"""Checks of what follows from the plan of on and off: make-whole amounts, and why units are on.

Public names: `plan_checks`.

A reason is held to what it says: that being on pays at the bus, with or without the congestion part
of the price, or that it does not and what is named instead holds. How far it is off is a price,
currency/MWh, or a share of the hour's cost, where it is about paying, and 1 where it is not so.
"""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from simulator.audit.check import MONEY, PRICE, Check, Residual, judge
from simulator.audit.evidence import Evidence, summed
from simulator.audit.units import Units

__all__ = ["plan_checks"]

Floats = NDArray[np.float64]
Booleans = NDArray[np.bool_]

SOME = 1e-6
"""Share of a unit above which it is on, or starts."""
AT_LIMIT = 1e-4
"""MW: output this close to a limit is at it."""
_WHOLE = 1e-9  # a number of hours this close to another is meant to be that


def plan_checks(evidence: Evidence, units: Units) -> list[Check]:
    """Check make-whole amounts (5.5) and the reasons units are on for."""
    names, (days, first) = evidence.names["unit"], _days(evidence)
    amounts = Residual("unit", names, "", _make_whole(evidence, days, len(first)))
    reasons = Residual("unit", names, "", _reasons(evidence, units))
    return [
        judge("make-whole", MONEY, evidence.hours[first], [amounts]),
        judge("reasons", PRICE, evidence.hours, [reasons]),
    ]


def _days(evidence: Evidence) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return the day of each period, counted from 0, and the first period of each day."""
    _, first, day = np.unique(
        evidence.hours.normalize().tz_localize(None), return_index=True, return_inverse=True
    )
    return day, first


def _reserve_worth(evidence: Evidence) -> Floats:
    """Return what the reserve held is worth, array (period, unit), currency; none without reserves."""
    held = evidence.values.get("unit_reserve")
    if held is None:
        return np.zeros(evidence["unit_output"].shape)
    return np.einsum("tup,tp->tu", held, evidence["reserve_price"]) * evidence.length


def _make_whole(evidence: Evidence, day: NDArray[np.int64], days: int) -> Floats:
    """Return how far amounts are off, array (day, unit), as a share of the day's cost and revenue."""
    price = evidence["price"][:, evidence.bus(evidence.case.units)]
    energy = evidence["unit_output"] * evidence.length * price
    cost = evidence["unit_cost"] + evidence["unit_start_cost"]
    reserve = _reserve_worth(evidence)
    short, full = (
        summed(values.T, day, days).T
        for values in (cost - energy - reserve, np.abs(cost) + np.abs(energy) + reserve)
    )
    off: Floats = np.abs(evidence["make_whole"] - short.clip(min=0.0)) / np.maximum(1.0, full)
    return off


def _reasons(evidence: Evidence, units: Units) -> Floats:
    """Return how far each reason is off, array (period, unit)."""
    code, on = evidence["unit_reason"].astype(int), units.on > SOME
    price = evidence["price"][:, evidence.bus(units.table)]
    congestion = evidence["price_congestion"][:, evidence.bus(units.table)]
    here = _margin(units, price)
    elsewhere = _margin(units, price - np.maximum(congestion, 0.0))
    idle = (units.output <= AT_LIMIT) & (np.abs(evidence["unit_cost"]) <= SOME)
    relaxed = evidence.values.get("price_relaxed", evidence["price"])
    needed = _margin(units, relaxed[:, evidence.bus(units.table)])
    pays = (np.maximum(here, needed) >= -PRICE) & ~idle
    holds = {**_holds(evidence, units, on, pays), "needed_whole": needed >= -PRICE}
    known = list(evidence.reasons)
    off = np.where(np.isin(code, range(len(known))), np.maximum(here, 0.0), 1.0)
    for name in known:
        here_too = code == known.index(name)
        if name == "off":
            off[here_too] = on[here_too]
        elif name == "at_no_cost":
            off[here_too] = ~idle[here_too]
        elif name == "in_the_money":
            off[here_too] = -np.minimum(here, elsewhere)[here_too]
        elif name == "line":
            off[here_too] = np.maximum(-here, elsewhere)[here_too]
        elif name in holds:
            off[here_too & ~holds[name]] = 1.0
    off[(code != known.index("off")) & ~on] = 1.0
    off[(code != known.index("at_no_cost")) & on & idle] = 1.0
    return np.maximum(off, 0.0)


def _margin(units: Units, price: Floats) -> Floats:
    """Return by how much being on pays at a price: the better of the whole hour and the last MWh."""
    running = (units.numbers("no_load_cost_per_h") * units.on
               + units.along_curve(units.block_cost)[0])  # fmt: skip
    length = units.evidence.length
    whole = (price * units.output - running) * length / np.maximum(1.0, np.abs(running * length))
    last = np.full(price.shape, np.inf)
    used = units.block_taken > AT_LIMIT
    for block, unit in enumerate(units.block_unit):  # from the lowest up, so the highest stays
        last[:, unit] = np.where(used[:, block], units.block_cost[:, block], last[:, unit])
    above = units.output > units.minimum * units.on + AT_LIMIT
    return np.maximum(whole, np.where(above, price - last, -np.inf))


def _holds(
    evidence: Evidence, units: Units, on: Booleans, pays: Booleans
) -> Mapping[str, Booleans]:
    """Tell where what each reason names is so, arrays (period, unit)."""
    age, least = _hours_since_start(evidence, units, on), units.numbers("min_up_h")
    up, down = units.ramp_room()
    climbing = np.zeros(on.shape, dtype=bool)
    climbing[:-1] = on[1:] & (units.start[1:] <= SOME) & (up[1:] < 2 * AT_LIMIT)
    held = np.broadcast_to(units.table["must_run"].to_numpy(bool), on.shape)
    reserve = _reserve_worth(evidence) > 0
    found = {
        "reserve": reserve,
        "must_run": held,
        "minimum_up_time": on & (age < least - _WHOLE) & (least > evidence.length + _WHOLE),
        "ramp": climbing | ((units.on_before > SOME) & (down < 2 * AT_LIMIT)),
        "kept_on": (age > 0) & _worth_keeping(units) & _needed_later(on, pays | reserve | held),
    }
    priced = _reserve_worth(evidence) > 2 * SOME
    return found | {"other": ~(priced | held | found["minimum_up_time"])}


def _hours_since_start(evidence: Evidence, units: Units, on: Booleans) -> Floats:
    """Return for how long a unit has been on, or whole, before each period; 0 where it starts, h."""
    age = np.zeros(on.shape)
    before = np.where(units.hours > 0, units.hours, np.inf)  # free hours on count as long
    age[0] = np.where(on[0] & (units.start[0] <= SOME), before, 0.0)
    for period in range(1, len(on)):
        staying = on[period] & on[period - 1] & (units.start[period] <= SOME)
        age[period] = np.where(staying, age[period - 1] + evidence.length, 0.0)
    return age


def _worth_keeping(units: Units) -> Booleans:
    waits = units.numbers("min_down_h") > units.evidence.length + _WHOLE
    worth: Booleans = waits | (units.numbers("start_cost") > 0)
    return worth


def _needed_later(on: Booleans, needed: Booleans) -> Booleans:
    """Tell where a later period of the same stretch is needed, or the stretch outlasts the run."""

    def following(marked: Booleans) -> NDArray[np.int64]:
        """Return the next marked period after each, the number of periods if there is none."""
        place = np.where(marked, np.arange(len(on))[:, None], len(on))
        soonest = np.minimum.accumulate(place[::-1], axis=0)[::-1]
        return np.concatenate([soonest[1:], np.full((1, on.shape[1]), len(on))])

    stops = following(~on)
    later: Booleans = (following(needed & on) < stops) | (stops == len(on))
    return later
