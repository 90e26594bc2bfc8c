"""The numbers of one window's fleet half: bounds, costs, right-hand sides and moving coefficients.

Public names: `FleetData`, `Given`, `fleet_data`, `given_commitment`, `within_reach`.

`formulation.py` states the rows these numbers belong to. A new window changes only what is here, as
whole arrays; a family's array is (period, element) in the order of its elements.
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from simulator.case import series
from simulator.dispatch.inputs import WindowInputs
from simulator.dispatch.reserves import (
    reserve_coefficients,
    reserve_columns,
    reserve_costs,
    reserve_rows,
)
from simulator.dispatch.state import State

__all__ = ["FleetData", "Given", "fleet_data", "given_commitment", "within_reach"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]
Bounds = tuple[Floats, Floats]

INFINITY = float("inf")


@dataclass(frozen=True, eq=False)
class FleetData:
    """One window in numbers, by family.

    columns : family → (lower, upper) arrays (period, element)
    costs : family → array (period, element), currency per unit of the column over one period
    rows : family → (lower, upper) arrays (period, element)
    coefficients : (row family, column family) → array (period, element) or (lag, period, element);
        the entries that may differ between windows
    committed : whether on/off decisions are columns (modes `relaxed` and `optimal`)
    """

    columns: Mapping[str, Bounds]
    costs: Mapping[str, Floats]
    rows: Mapping[str, Bounds]
    coefficients: Mapping[tuple[str, str], Floats | Booleans]
    committed: bool


@dataclass(frozen=True, eq=False)
class Given:
    """On/off decisions that are data: arrays (period, unit), 0 or 1."""

    on: Floats
    start: Floats
    stop: Floats
    cold_start: Floats


def fleet_data(inputs: WindowInputs, state: State) -> FleetData:
    """Put one window in numbers (formulation.md 2.1 to 2.5, 2.7)."""
    data = _without_reserves(inputs, state)
    if not inputs.reserve.there:
        return data
    on = None if data.committed else given_commitment(inputs, state).on
    return replace(
        data,
        columns={**data.columns, **reserve_columns(inputs, on)},
        costs={**data.costs, **reserve_costs(inputs)},
        rows={**data.rows, **reserve_rows(inputs, on)},
        coefficients={
            **data.coefficients,
            **(reserve_coefficients(inputs) if data.committed else {}),
        },
    )


def _without_reserves(inputs: WindowInputs, state: State) -> FleetData:
    columns = _output_columns(inputs) | _store_columns(inputs) | _balance_columns(inputs)
    costs = _costs(inputs)
    rows = _store_rows(inputs, state) | _balance_rows(inputs)
    if inputs.mode == "given":
        given = given_commitment(inputs, state)
        rows |= _given_rows(inputs, state, given)
        columns["output"] = _between(0.0, inputs.unit_ceiling)
        columns["block"] = (
            np.zeros_like(inputs.block_width),
            inputs.block_width * given.on[:, inputs.unit.block_unit],
        )
        return FleetData(columns, costs, rows, {}, committed=False)
    columns |= _commitment_columns(inputs, state)
    costs |= _commitment_costs(inputs)
    rows |= _commitment_rows(inputs, state)
    if inputs.mode == "optimal":
        columns |= _matching_columns(inputs) | _tie_way_columns(inputs)
        rows |= _matching_rows(inputs, state) | _tie_way_rows(inputs)
    else:
        rows |= _cold_start_rows(inputs, state)
    return FleetData(columns, costs, rows, _coefficients(inputs), committed=True)


def _between(lower: float, upper: Floats) -> Bounds:
    return np.full(upper.shape, lower), upper


def _below(upper: Floats) -> Bounds:
    return np.full(upper.shape, -INFINITY), upper


def _above(lower: Floats) -> Bounds:
    return lower, np.full(lower.shape, INFINITY)


def _exactly(value: Floats) -> Bounds:
    return value, value


# Columns and their bounds


def _output_columns(inputs: WindowInputs) -> dict[str, Bounds]:
    return {
        "output": _between(0.0, inputs.unit_available),
        "renewable": _between(0.0, inputs.renewable_available),
    }


def _store_columns(inputs: WindowInputs) -> dict[str, Bounds]:
    energy = np.broadcast_to(inputs.store.energy, inputs.store_share.shape)
    return {
        "charge": _between(0.0, inputs.store_share * inputs.charge),
        "discharge": _between(0.0, inputs.store_share * inputs.discharge),
        "stored": _between(0.0, energy),
        "energy_short": _between(0.0, inputs.store_floor),
    }


def _balance_columns(inputs: WindowInputs) -> dict[str, Bounds]:
    reach = np.where(inputs.joined, INFINITY, 0.0)
    lost = np.full((inputs.periods, inputs.cells.count), INFINITY)
    losses = {} if inputs.losses is None else {"loss": (-lost, lost)}
    return losses | {
        "tie_forward": _between(0.0, inputs.tie_forward),
        "tie_reverse": _between(0.0, inputs.tie_reverse),
        "unserved": _between(0.0, np.maximum(inputs.demand, 0.0)),
        "surplus": _between(0.0, np.full((inputs.periods, inputs.buses), INFINITY)),
        "exchange": (-reach, reach),
    }


def _commitment_columns(inputs: WindowInputs, state: State) -> dict[str, Bounds]:
    """On is 0 when fully out, 1 when it must run; with a free state nothing switches at first."""
    may = np.where(inputs.unit_out, 0.0, 1.0)
    switch = np.ones_like(may)
    switch[0, np.isnan(state.on)] = 0.0
    return {
        "on": (may * inputs.unit.must_run, may),
        "start": _between(0.0, switch),
        "stop": _between(0.0, switch),
        "block": _between(0.0, inputs.block_width),
        "cold_start": _between(0.0, switch[:, inputs.unit.cold_rows]),
    }


# Costs


def _costs(inputs: WindowInputs) -> dict[str, Floats]:
    """Costs of energy over one period; energy left is worth something only before the run's end."""
    length, periods, store = inputs.period_hours, inputs.periods, inputs.store
    left = np.zeros(inputs.store_floor.shape)
    if not inputs.ends_run:
        left[-1] = -store.end_value
    return {
        "block": inputs.block_cost * length,
        "renewable": np.tile(inputs.renewable_offer * length, (periods, 1)),
        "discharge": np.tile(store.throughput_cost * length, (periods, 1)),
        "stored": left,
        "energy_short": np.full(left.shape, inputs.short_cost),
        "unserved": np.tile(inputs.unserved_cost * length, (periods, 1)),
        "surplus": np.full((periods, inputs.buses), inputs.surplus_cost * length),
    }


def _commitment_costs(inputs: WindowInputs) -> dict[str, Floats]:
    unit, dear = inputs.unit, inputs.unit.cold_rows
    extra = unit.cold_start[dear] - unit.hot_start[dear]
    return {
        "on": inputs.minimum_cost * inputs.period_hours,
        "start": np.tile(unit.hot_start, (inputs.periods, 1)),
        "cold_start": np.tile(extra, (inputs.periods, 1)),
    }


# Rows and their right-hand sides


def _store_rows(inputs: WindowInputs, state: State) -> dict[str, Bounds]:
    brought = np.zeros(inputs.store_floor.shape)
    brought[0] = inputs.store.kept * state.stored
    return {"store_balance": _exactly(brought), "energy_floor": _above(inputs.store_floor)}


def _balance_rows(inputs: WindowInputs) -> dict[str, Bounds]:
    cells = inputs.cells
    withdrawn = series.sum_by(inputs.demand_at_bus, cells.cell, cells.count)
    return {"balance": _exactly(withdrawn)}


def _ramp_limits(inputs: WindowInputs, state: State) -> tuple[Floats, Floats]:
    """Return right-hand sides of both ramps from the state alone, arrays (period, unit), MW (2.2).

    Where on or off before is free, nothing switches in the first period: the unit was on or stays off.
    """
    up, down = np.zeros_like(inputs.unit_min), np.zeros_like(inputs.unit_min)
    before, on = np.nan_to_num(state.output), np.where(np.isnan(state.on), 1.0, state.on)
    up[0] = before + np.minimum(inputs.unit.ramp_up, inputs.unit.maximum) * on
    down[0] = -before
    free = np.isnan(state.output)
    up[0, free] = down[0, free] = INFINITY
    down[inputs.unit_falling] = INFINITY
    return up, down


def _commitment_rows(inputs: WindowInputs, state: State) -> dict[str, Bounds]:
    up, down = _ramp_limits(inputs, state)
    none = np.zeros_like(inputs.unit_min)
    switched = none.copy()
    switched[0] = np.nan_to_num(state.on)
    lower, upper = switched.copy(), switched.copy()
    free = np.isnan(state.on)
    lower[0, free], upper[0, free] = -INFINITY, INFINITY
    return {
        "output_split": _exactly(none),
        "block_width": _below(np.zeros_like(inputs.block_width)),
        "switching": (lower, upper),
        "ramp_up": _below(up[:, inputs.unit.ramp_up_rows]),
        "ramp_down": _below(down[:, inputs.unit.ramp_down_rows]),
        "minimum_up": _below(-_recent_starts(inputs, state)),
        "minimum_down": _below(1.0 - _recent_stops(inputs, state)),
    }


def _cold_start_rows(inputs: WindowInputs, state: State) -> dict[str, Bounds]:
    hot_before = _history_sum(state.stops, inputs.unit.hot_periods, inputs.periods)
    return {"cold_start_stops": _below(hot_before[:, inputs.unit.cold_rows])}


def _matching_columns(inputs: WindowInputs) -> dict[str, Bounds]:
    """Return running totals of stops, and of stops matched with a hot start or gone cold."""
    open_ended = np.full((inputs.periods, len(inputs.unit.cold_rows)), INFINITY)
    return {"stopped": _between(0.0, open_ended), "matched": _between(0.0, open_ended)}


def _matching_rows(inputs: WindowInputs, state: State) -> dict[str, Bounds]:
    """Let stops from before the window that still cool in as they are: `cooling` (lag, unit)."""
    dear = inputs.unit.cold_rows
    cooling, hot = state.cooling[:, dear], inputs.unit.hot_periods[dear]
    soonest = inputs.unit.restart_periods[dear]
    none = np.zeros((inputs.periods, len(dear)))
    pool = none + cooling.sum(axis=0)
    gone_cold = pool - _history_sum(cooling, hot - 1, inputs.periods)
    return {
        "stops_summed": _exactly(none),
        "matched_sum": _above(none),
        "matched_after_stop": _below(pool - _history_sum(cooling, soonest - 1, inputs.periods)),
        "matched_in_time": _above(gone_cold),
    }


def _tie_way_columns(inputs: WindowInputs) -> dict[str, Bounds]:
    """1 where a lossy tie runs forward, 0 where it runs in reverse: a decision of mode `optimal`."""
    return {"tie_way": _between(0.0, np.ones((inputs.periods, len(inputs.tie_lossy))))}


def _tie_way_rows(inputs: WindowInputs) -> dict[str, Bounds]:
    reverse = np.tile(inputs.tie_widest[1, inputs.tie_lossy], (inputs.periods, 1))
    return {"forward_way": _below(np.zeros_like(reverse)), "reverse_way": _below(reverse)}


def _given_rows(inputs: WindowInputs, state: State, given: Given) -> dict[str, Bounds]:
    """Rows of mode `given`: all that on/off decisions enter is on the right-hand side."""
    up, down = _ramp_limits(inputs, state)
    unit, before = inputs.unit, given.on[:-1]
    up[1:] += np.where(before > 0, unit.ramp_up, 0.0)
    up += np.where(given.start > 0, unit.start_ramp, 0.0)
    down += np.where(given.on > 0, unit.ramp_down, 0.0)
    down += np.where(given.stop > 0, unit.stop_ramp, 0.0)
    return {
        "output_split": _exactly(inputs.unit_min * given.on),
        "ramp_up": _below(up[:, inputs.unit.ramp_up_rows]),
        "ramp_down": _below(down[:, inputs.unit.ramp_down_rows]),
    }


def given_commitment(inputs: WindowInputs, state: State) -> Given:
    """Return starts and stops of the given schedule; a free state counts as the first period's."""
    on = inputs.unit_given.astype(float)
    before = np.where(np.isnan(state.on), on[:1], np.nan_to_num(state.on)[None])
    change = np.diff(on, axis=0, prepend=before)
    start, stop = np.maximum(change, 0.0), np.maximum(-change, 0.0)
    recent = _history_sum(state.stops, inputs.unit.hot_periods, inputs.periods)
    recent += _lagged_sum(stop, inputs.unit.hot_periods)
    return Given(on, start, stop, np.clip(start - recent, 0.0, None))


def _lagged_sum(values: Floats, lags: Integers) -> Floats:
    """Sum each unit's values over the `lags` periods before each period, array (period, unit)."""
    total = np.concatenate([np.zeros((1, values.shape[1])), np.cumsum(values, axis=0)])
    period = np.arange(len(values))[:, None]
    upto = np.broadcast_to(period, values.shape)
    return np.take_along_axis(total, upto, 0) - np.take_along_axis(
        total, np.maximum(period - lags, 0), 0
    )


def _history_sum(history: Floats, reach: Integers, periods: int) -> Floats:
    """Sum history (lag, unit), most recent first, over lags 1 … reach − t of each period t."""
    total = np.concatenate([np.zeros((1, history.shape[1])), np.cumsum(history, axis=0)])
    deepest = np.clip(reach - np.arange(periods)[:, None], 0, len(history))
    return np.take_along_axis(total, deepest, 0)


def _recent_starts(inputs: WindowInputs, state: State) -> Floats:
    """Return what is left of minimum up times from before the window, array (period, unit) (2.3).

    A full outage ends what was left, so starts before one no longer count.
    """
    outages_since = np.cumsum(inputs.unit_out_before, axis=0)
    counted = np.where(outages_since == 0, state.starts, 0.0)
    asked = _history_sum(counted, inputs.unit.up_periods - 1, inputs.periods)
    interrupted = np.cumsum(inputs.unit_out, axis=0) > 0
    return np.where(interrupted, 0.0, asked)


def _recent_stops(inputs: WindowInputs, state: State) -> Floats:
    """Return what is left of minimum down times from before the window; stops by outage do not count."""
    chosen = np.where(inputs.unit_out_before, 0.0, state.stops)
    return _history_sum(chosen, inputs.unit.down_periods - 1, inputs.periods)


# Coefficients that move


def _coefficients(inputs: WindowInputs) -> dict[tuple[str, str], Floats | Booleans]:
    """Entries that derates and outages change, with the sign they have in their row."""
    always: dict[tuple[str, str], Floats | Booleans] = {
        ("output_split", "on"): -inputs.unit_min,
        ("block_width", "on"): -inputs.block_width,
        ("minimum_up", "start"): _start_counts(inputs),
        ("minimum_down", "stop"): _stop_counts(inputs),
    }
    return always | (_switch_limits(inputs) if inputs.mode == "optimal" else {})


def _switch_limits(inputs: WindowInputs) -> dict[tuple[str, str], Floats | Booleans]:
    """How much of each block is out of reach in the first and the last period of a run.

    Where a run may be one period long, start and stop may fall on one period and only one of them
    may count; the larger does.
    """
    start, stop = inputs.block_not_at_start, inputs.block_not_at_stop
    short = inputs.unit.up_periods[inputs.unit.block_unit] <= 1
    return {
        ("block_width", "start"): np.where(short & (start < stop), 0.0, start),
        ("block_width", "stop"): np.where(short & (start >= stop), 0.0, stop)[:-1],
    }


def within_reach(family: str, inputs: WindowInputs) -> Booleans:
    """Tell which lags of `minimum_up` or `minimum_down` a row may have: array (lag, period, unit)."""
    unit = inputs.unit
    asked = unit.up_periods if family == "minimum_up" else unit.down_periods
    lags = int(min(asked.max(initial=1), inputs.periods))
    lag, period = np.arange(lags)[:, None, None], np.arange(inputs.periods)[None, :, None]
    reach: Booleans = (lag <= period) & (lag < asked)
    return reach


def _start_counts(inputs: WindowInputs) -> Booleans:
    """1 where a start `lag` periods earlier still asks for being on: array (lag, period, unit).

    It does within the minimum up time, unless the unit was fully out in between.
    """
    out = np.cumsum(inputs.unit_out, axis=0)
    lags = int(min(inputs.unit.up_periods.max(initial=1), inputs.periods))
    counts = np.zeros((lags, *out.shape), dtype=bool)
    for lag in range(lags):
        unbroken = out[lag:] == out[: len(out) - lag]
        counts[lag, lag:] = unbroken & (lag < inputs.unit.up_periods)
    return counts


def _stop_counts(inputs: WindowInputs) -> Booleans:
    """1 where a stop `lag` periods earlier still asks for being off: array (lag, period, unit).

    A stop that an outage forces does not: when the outage ends the unit may be started.
    """
    lags = int(min(inputs.unit.down_periods.max(initial=1), inputs.periods))
    counts = np.zeros((lags, *inputs.unit_out.shape), dtype=bool)
    for lag in range(lags):
        chosen = ~inputs.unit_out[: inputs.periods - lag]
        counts[lag, lag:] = chosen & (lag < inputs.unit.down_periods)
    return counts
