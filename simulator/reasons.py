"""Why each unit is on in each hour: one reason of a fixed few, by rules that are written down here.

Public names: `REASONS`, `Circumstances`, `circumstances`, `unit_reasons`.

The reasons follow from the results of a run, not from the solver. Of those that hold in an hour the
first in this order is given:

off : not on, not even in part
at no cost : without output and without running cost, as a unit without minimum may be
in the money : being on pays at the bus: the hour's revenue from energy is at least its running cost,
    or output is above the minimum and the price is at least the cost of the last MWh
line : that holds at the bus, but not without the congestion part of its price, which is above zero
reserve : out of the money, and holds reserve that has a price
given : out of the money in mode `given`, where on and off are data and nothing else holds it on
must run : out of the money, and units.csv says so
minimum up time : out of the money, and within a minimum up time of more than one period since the last
    start, its own hour included; hours on before the run count
needed whole : out of the money with the decisions fixed, but in the money at the price of the relaxation,
    in which it may be on in part (mode `optimal`): needed, where no price with its decision fixed can
    show it, as when its minimum output keeps a line from its limit
ramp : out of the money, and comes down from the hour before, or up to the hour after, as fast as it can
kept on : out of the money, was on before, and what stopping would cost lies ahead: a later hour of the
    same stretch has one of the first reasons or lies beyond the end of the run, and another start would
    cost something, or the minimum down time is longer than a period
other : none of these: a decision within the gap that the search was left with, or a need that neither
    price shows

Codes are positions in `REASONS`, not quite in this order. The order is a choice: what pays for itself
comes first, then what somebody asked for, then what ties one hour to another.
"""

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from simulator import prices
from simulator.horizon import Run

__all__ = ["REASONS", "Circumstances", "circumstances", "unit_reasons"]

Floats = NDArray[np.float64]
Booleans = NDArray[np.bool_]
Codes = NDArray[np.int8]

REASONS = (
    "off", "at_no_cost", "in_the_money", "line", "reserve", "given", "must_run", "minimum_up_time", "ramp",
    "kept_on", "other", "needed_whole",
)  # fmt: skip
"""The reasons by their code, spelt as CF flag meanings."""

ON = 1e-6
"""A unit on by more than this share is on."""
POWER = 1e-4
"""MW: output this close to a limit is at it."""
PRICE = 1e-6
"""Currency/MWh: a price this close to a cost covers it."""
MONEY = 1e-6
"""Share of an hour's cost by which its revenue may miss it through rounding."""


@dataclass(frozen=True, eq=False)
class Circumstances:
    """What the reasons follow from; arrays (period, unit) unless said otherwise.

    given : mode `given`; length : Δ, h
    on, start : 0..1; output, minimum : MW, minimum output while on
    price, congestion : currency/MWh at the unit's bus, congestion part of it (5.1)
    relaxed_price : currency/MWh, that of the relaxation; the price itself where nothing is decided
    cost : running cost, currency; last_cost : currency/MWh of the last MWh above the minimum
    reserve : currency that the reserve held is worth
    must_run, restart_costs : bool (unit,), whether a start costs something or has to wait
    up_periods : (unit,), minimum up time; on_before : (unit,), periods on before the run, 0 if none
    ramp_up, ramp_down, start_ramp, stop_ramp : (unit,), MW a period
    falling : bool, where an outage overrides ramp_down
    """

    given: bool
    length: float
    on: Floats
    start: Floats
    output: Floats
    minimum: Floats
    price: Floats
    congestion: Floats
    relaxed_price: Floats
    cost: Floats
    last_cost: Floats
    reserve: Floats
    must_run: Booleans
    restart_costs: Booleans
    up_periods: NDArray[np.int64]
    on_before: Floats
    ramp_up: Floats
    ramp_down: Floats
    start_ramp: Floats
    stop_ramp: Floats
    falling: Booleans


def circumstances(run: Run, dataset: xr.Dataset, last_cost: Floats) -> Circumstances:
    """Collect what the reasons of a run follow from, out of its inputs and its results.

    last_cost : array (period, unit), currency/MWh of the last MWh above the minimum
    """
    inputs, units = run.kept_inputs, run.case.units
    unit, bus = inputs.unit, inputs.unit.bus
    hours = np.nan_to_num(units["initial_hours"].to_numpy(float))
    return Circumstances(
        given=run.plan.mode == "given", length=inputs.period_hours,
        on=run.kept.on, start=run.kept.start, output=run.kept.output, minimum=inputs.unit_min,
        price=dataset["price"].to_numpy()[:, bus],
        congestion=dataset["price_congestion"].to_numpy()[:, bus],
        relaxed_price=dataset.get("price_relaxed", dataset["price"]).to_numpy()[:, bus],
        cost=dataset["unit_cost"].to_numpy(), last_cost=last_cost,
        reserve=prices.reserve_revenue(dataset), must_run=unit.must_run,
        restart_costs=(unit.hot_start > 0) | (unit.down_periods > 1), up_periods=unit.up_periods,
        on_before=np.maximum(hours, 0.0) / inputs.period_hours,
        ramp_up=unit.ramp_up, ramp_down=unit.ramp_down, start_ramp=unit.start_ramp,
        stop_ramp=unit.stop_ramp,
        falling=inputs.unit_falling,
    )  # fmt: skip


def unit_reasons(at: Circumstances) -> Codes:
    """Return the reason each unit is on, array (period, unit), as positions in `REASONS`."""
    on = at.on > ON
    paid = _pays(at, at.price)
    without = _pays(at, at.price - np.maximum(at.congestion, 0.0))
    before = _before(at, on)
    idle = (at.output <= POWER) & (np.abs(at.cost) <= MONEY)
    rules = {
        "at_no_cost": idle,
        "in_the_money": paid & without,
        "line": paid,
        "reserve": at.reserve > PRICE,
        "given": np.full(on.shape, at.given),
        "must_run": np.broadcast_to(at.must_run, on.shape),
        "minimum_up_time": _recently_started(at),
        "needed_whole": _pays(at, at.relaxed_price),
        "ramp": _ramping(at, on),
    }
    needed = paid | rules["needed_whole"]
    own = on & (needed & ~idle | rules["reserve"] | rules["must_run"])
    rules["kept_on"] = before & at.restart_costs & _ahead(own, on)
    codes = np.select(list(rules.values()), [REASONS.index(name) for name in rules], _OTHER)
    return np.where(on, codes, 0).astype(np.int8)


_OTHER = REASONS.index("other")


def _pays(at: Circumstances, price: Floats) -> Booleans:
    """Tell where being on pays at a price."""
    revenue = price * at.output * at.length
    whole: Booleans = revenue >= at.cost - MONEY * np.maximum(1.0, np.abs(at.cost))
    above = at.output > at.minimum * at.on + POWER
    return whole | (above & (price >= at.last_cost - PRICE))


def _recently_started(at: Circumstances) -> Booleans:
    """Tell where a start within the minimum up time, or one from before the run, holds a unit on."""
    period = np.arange(len(at.on))[:, None]
    total = np.concatenate([np.zeros((1, at.on.shape[1])), np.cumsum(at.start, axis=0)])
    first = np.maximum(period + 1 - at.up_periods, 0)
    started = total[1:] - np.take_along_axis(total, first, 0)
    never_off = np.minimum.accumulate(at.on > ON, axis=0)
    owing = (at.on_before > 0) & (at.on_before + period < at.up_periods) & never_off
    return (at.up_periods > 1) & ((started > ON) | owing)


def _ramping(at: Circumstances, on: Booleans) -> Booleans:
    """Tell where a unit that stays on comes down, or will go up, by all that 2.2 lets it.

    Down by ramp·on_t + stop_ramp·stop_t, up by ramp·on_{t−1} + start_ramp·start_t: the second terms
    count where a unit is partly on.
    """
    move, stays, start = np.diff(at.output, axis=0), on[1:] & on[:-1], at.start[1:]
    stop = start - np.diff(at.on, axis=0)
    down = _times(at.ramp_down, at.on[1:]) + _times(at.stop_ramp, stop)
    up = _times(at.ramp_up, at.on[:-1]) + _times(at.start_ramp, start)
    found = np.zeros(on.shape, dtype=bool)
    found[1:] |= stays & ~at.falling[1:] & (-move >= down - POWER)
    found[:-1] |= stays & (start <= ON) & (move >= up - POWER)
    return found


def _times(limit: Floats, share: Floats) -> Floats:
    """Return limit (unit,) × share (period, unit), nothing where there is no share."""
    with np.errstate(invalid="ignore"):
        return np.where(share <= 0, 0.0, limit * share)


def _before(at: Circumstances, on: Booleans) -> Booleans:
    """Tell where a unit was on in the period before; before the run, if it did not start in the first."""
    first = on[:1] & (at.start[:1] <= ON)
    return np.concatenate([first, on[:-1] & (at.start[1:] <= ON)])


def _ahead(own: Booleans, on: Booleans) -> Booleans:
    """Tell where a later period of the same stretch has a reason of its own, or the run ends."""
    found = np.ones(on.shape, dtype=bool)
    for period in range(len(on) - 2, -1, -1):
        found[period] = on[period + 1] & (own[period + 1] | found[period + 1])
    return found
