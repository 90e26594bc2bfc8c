"""The fleet half of a window, stated in Pyomo: readable here, compiled once, never solved from here.

Public names: `MOVING`, `state_fleet`.

Index t is the period, the other index the position of the element; Δ is the period in hours. What is
written here stays for the whole run and hangs on no window's numbers: these come from `FleetData`, and
coefficients among them stand here as `MOVING`.
"""

from typing import Any

import numpy as np
import pyomo.environ as pyo
from numpy.typing import NDArray

from simulator.dispatch.fleet import FleetData
from simulator.dispatch.inputs import WindowInputs

__all__ = ["MOVING", "state_fleet"]

Model = Any
Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


MOVING = 1.0
"""Stands for a coefficient that derates and outages may change; each window puts its own in place."""


def state_fleet(inputs: WindowInputs, data: FleetData) -> Model:
    """State the columns and rows of one window (formulation.md 2.1 to 2.5, 2.7)."""
    model = pyo.ConcreteModel()
    model.inputs, model.data = inputs, data
    model.right = {family: _right_hand_sides(*bounds) for family, bounds in data.rows.items()}
    model.blocks_of = _members(inputs.unit.block_unit, len(inputs.unit.bus))
    for family, (lower, _) in data.columns.items():
        setattr(model, family, pyo.Var(*_ranges(lower)))
    reserve_rules = RESERVE_ROWS[inputs.mode] if inputs.reserve.there else {}
    for family, rule in (ROWS[inputs.mode] | reserve_rules).items():
        setattr(model, family, pyo.Constraint(*_ranges(data.rows[family][0]), rule=rule))
    return model


def _ranges(values: Floats) -> list[Any]:
    return [pyo.RangeSet(0, length - 1) for length in values.shape]


def _right_hand_sides(lower: Floats, upper: Floats) -> list[list[float]]:
    """Return the bound a row is stated with; a row open in this window still has to be stated."""
    return np.where(np.isfinite(upper), upper, np.where(np.isfinite(lower), lower, _OPEN)).tolist()


def _members(group: Integers, groups: int) -> list[list[int]]:
    return [np.flatnonzero(group == number).tolist() for number in range(groups)]


def output_split(model: Model, t: int, unit: int) -> Any:
    """2.1: output = minimum·on + Σ blocks above the minimum."""
    above = sum(model.block[t, block] for block in model.blocks_of[unit])
    if not model.data.committed:
        return model.output[t, unit] - above == model.right["output_split"][t][unit]
    return model.output[t, unit] + MOVING * model.on[t, unit] - above == 0.0


def block_width(model: Model, t: int, block: int) -> Any:
    """2.1: a block is available only while its unit is on: q ≤ width·on.

    In mode `optimal` less what lies above the start ramp in the first period of a run, and above the
    stop ramp in the last: 2.2 implies it for whole decisions, here it tightens the relaxation.
    """
    unit = int(model.inputs.unit.block_unit[block])
    used = model.block[t, block] + MOVING * model.on[t, unit]
    if model.inputs.mode == "optimal":
        used += MOVING * model.start[t, unit]
        if t + 1 < model.inputs.periods:
            used += MOVING * model.stop[t + 1, unit]
    return used <= 0.0


def ramp_up(model: Model, t: int, position: int) -> Any:
    """2.2: output_t − output_{t−1} ≤ ramp·on_{t−1} + start_ramp·start_t."""
    unit = int(model.inputs.unit.ramp_up_rows[position])
    rise = model.output[t, unit] - (model.output[t - 1, unit] if t else 0.0)
    if model.data.committed:
        data = model.inputs.unit
        widest = data.maximum[unit]  # a wider ramp means the same, and inf is no coefficient
        rise -= float(min(data.start_ramp[unit], widest)) * model.start[t, unit]
        ramp = float(min(data.ramp_up[unit], widest))
        if t:
            rise -= ramp * model.on[t - 1, unit]
        if (
            t and model.inputs.mode == "optimal"
        ):  # a unit that stops was on: its output falls by its minimum
            rise += (ramp + float(data.least[unit])) * model.stop[t, unit]
    return rise <= model.right["ramp_up"][t][position]


def ramp_down(model: Model, t: int, position: int) -> Any:
    """2.2: output_{t−1} − output_t ≤ ramp·on_t + stop_ramp·stop_t."""
    unit = int(model.inputs.unit.ramp_down_rows[position])
    fall = (model.output[t - 1, unit] if t else 0.0) - model.output[t, unit]
    if model.data.committed:
        data = model.inputs.unit
        widest = data.maximum[unit]
        fall -= float(min(data.stop_ramp[unit], widest)) * model.stop[t, unit]
        ramp = float(min(data.ramp_down[unit], widest))
        fall -= ramp * model.on[t, unit]
        if (
            model.inputs.mode == "optimal"
        ):  # a unit that starts was off: its output rises to its minimum
            fall += (ramp + float(data.least[unit])) * model.start[t, unit]
    return fall <= model.right["ramp_down"][t][position]


def switching(model: Model, t: int, unit: int) -> Any:
    """2.3: on_t − on_{t−1} = start_t − stop_t."""
    change = model.on[t, unit] - (model.on[t - 1, unit] if t else 0.0)
    switched = model.start[t, unit] - model.stop[t, unit]
    return change - switched == model.right["switching"][t][unit]


def minimum_up(model: Model, t: int, unit: int) -> Any:
    """2.3: Σ starts within the minimum up time ≤ on_t (Rajan & Takriti, IBM RC23628, 2005)."""
    lags = min(int(model.inputs.unit.up_periods[unit]), t + 1)
    started = sum(model.start[t - lag, unit] for lag in range(lags))
    return started - model.on[t, unit] <= model.right["minimum_up"][t][unit]


def minimum_down(model: Model, t: int, unit: int) -> Any:
    """2.3: Σ stops within the minimum down time ≤ 1 − on_t (same source)."""
    lags = min(int(model.inputs.unit.down_periods[unit]), t + 1)
    stopped = sum(model.stop[t - lag, unit] for lag in range(lags))
    return stopped + model.on[t, unit] <= model.right["minimum_down"][t][unit]


def cold_start_stops(model: Model, t: int, position: int) -> Any:
    """2.3: a start is cold as far as the unit did not stop recently: cold_t ≥ start_t − Σ recent stops."""
    unit = int(model.inputs.unit.cold_rows[position])
    reach = min(int(model.inputs.unit.hot_periods[unit]), t)
    recent = sum(model.stop[t - lag, unit] for lag in range(1, reach + 1))
    left = model.start[t, unit] - recent - model.cold_start[t, position]
    return left <= model.right["cold_start_stops"][t][position]


def stops_summed(model: Model, t: int, position: int) -> Any:
    """2.3: running total of stops, S_t = S_{t−1} + stop_t."""
    unit = int(model.inputs.unit.cold_rows[position])
    before = model.stopped[t - 1, position] if t else 0.0
    return model.stopped[t, position] - before - model.stop[t, unit] == 0.0


def matched_sum(model: Model, t: int, position: int) -> Any:
    """2.3: running total of stops matched or gone cold, M_t ≥ M_{t−1} + start_t − cold_t."""
    unit = int(model.inputs.unit.cold_rows[position])
    before = model.matched[t - 1, position] if t else 0.0
    hot = model.start[t, unit] - model.cold_start[t, position]
    return model.matched[t, position] - before - hot >= 0.0


def matched_after_stop(model: Model, t: int, position: int) -> Any:
    """2.3: a hot start uses up one stop from before it, M_t ≤ S_{t−restart periods}.

    Together with `matched_in_time` this is the matching of stops with hot starts in running totals:
    where every stop is open for matching from one age to another, totals suffice.
    """
    unit = int(model.inputs.unit.cold_rows[position])
    old = t - int(model.inputs.unit.restart_periods[unit])
    stopped = model.stopped[old, position] if old >= 0 else 0.0
    return model.matched[t, position] - stopped <= model.right["matched_after_stop"][t][position]


def matched_in_time(model: Model, t: int, position: int) -> Any:
    """2.3: a stop not matched within the hot periods is gone cold, M_t ≥ S_{t−hot periods}."""
    unit = int(model.inputs.unit.cold_rows[position])
    old = t - int(model.inputs.unit.hot_periods[unit])
    stopped = model.stopped[old, position] if old >= 0 else 0.0
    return model.matched[t, position] - stopped >= model.right["matched_in_time"][t][position]


def forward_way(model: Model, t: int, position: int) -> Any:
    """1.4: a lossy tie runs one way at a time, forward_t ≤ widest·way_t."""
    tie = int(model.inputs.tie_lossy[position])
    widest = float(model.inputs.tie_widest[0, tie])
    sent = model.tie_forward[t, tie] - widest * model.tie_way[t, position]
    return sent <= model.right["forward_way"][t][position]


def reverse_way(model: Model, t: int, position: int) -> Any:
    """1.4: a lossy tie runs one way at a time, reverse_t ≤ widest·(1 − way_t)."""
    tie = int(model.inputs.tie_lossy[position])
    widest = float(model.inputs.tie_widest[1, tie])
    sent = model.tie_reverse[t, tie] + widest * model.tie_way[t, position]
    return sent <= model.right["reverse_way"][t][position]


def store_balance(model: Model, t: int, store: int) -> Any:
    """2.4: E_t = kept·E_{t−1} + η_c·Δ·charge − Δ/η_d·discharge."""
    kept, charged, drawn = (
        float(values[store])
        for values in (
            model.inputs.store.kept,
            model.inputs.store.charged,
            model.inputs.store.drawn,
        )
    )
    change = model.stored[t, store] - (kept * model.stored[t - 1, store] if t else 0.0)
    change += drawn * model.discharge[t, store] - charged * model.charge[t, store]
    return change == model.right["store_balance"][t][store]


def energy_floor(model: Model, t: int, store: int) -> Any:
    """2.4: what is stored stays enough to reach the final amount, E_t + short_t ≥ floor_t."""
    held = model.stored[t, store] + model.energy_short[t, store]
    return held >= model.right["energy_floor"][t][store]


def balance(model: Model, t: int, cell: int) -> Any:
    """2.5: injections − withdrawals + what other cells of the island send − losses = demand."""
    inputs, at = model.inputs, model.inputs.cells.cell

    def summed(family: str, buses: Integers, factor: Any = 1.0) -> Any:
        column, factors = getattr(model, family), np.broadcast_to(factor, buses.shape)
        here = np.flatnonzero(at[buses] == cell).tolist()
        return sum(float(factors[element]) * column[t, element] for element in here)

    arrives = inputs.tie_delivered
    pairs = zip(inputs.cells.pair_from.tolist(), inputs.cells.pair_to.tolist(), strict=True)
    received = sum(
        ((cell == end) - (cell == start)) * model.exchange[t, pair]
        for pair, (start, end) in enumerate(pairs)
        if cell in (start, end)
    )
    total = (
        summed("output", inputs.unit.bus)
        + summed("renewable", inputs.renewable_bus)
        + summed("discharge", inputs.store.bus)
        - summed("charge", inputs.store.bus)
        + summed("tie_forward", inputs.tie_to, arrives)
        - summed("tie_forward", inputs.tie_from)
        + summed("tie_reverse", inputs.tie_from, arrives)
        - summed("tie_reverse", inputs.tie_to)
        + summed("unserved", inputs.load_bus)
        - summed("surplus", np.arange(inputs.buses))
        + received
    )
    if inputs.losses is not None:
        total -= model.loss[t, cell]
    return total == model.right["balance"][t][cell]


def reserve_requirement(model: Model, t: int, product: int) -> Any:
    """2.7: Σ provided + short ≥ requirement; its dual is the price of the product."""
    offers = np.flatnonzero(model.inputs.reserve.product == product).tolist()
    provided = sum(model.reserve[t, offer] for offer in offers)
    right = model.right["reserve_requirement"][t][product]
    return provided + model.reserve_short[t, product] >= right


def headroom(model: Model, t: int, position: int) -> Any:
    """2.7: output + Σ upward reserve ≤ available·on.

    It has no term for the start or the stop ramp: 2.7 holds a unit's reserve against its maximum only,
    so a tighter row would cut off plans. Blocks keep theirs (`block_width`), and with output split at
    the minimum this row is Σ blocks + Σ reserve ≤ (available − minimum)·on.
    """
    offers = model.inputs.reserve
    unit = int(offers.up_units[position])
    used = model.output[t, unit] + _provided(model, t, unit, upward=True)
    if model.data.committed:
        used += MOVING * model.on[t, unit]
    return used <= model.right["headroom"][t][position]


def footroom(model: Model, t: int, position: int) -> Any:
    """2.7: output − Σ downward reserve ≥ minimum·on."""
    offers = model.inputs.reserve
    unit = int(offers.down_units[position])
    left = model.output[t, unit] - _provided(model, t, unit, upward=False)
    if model.data.committed:
        left += MOVING * model.on[t, unit]
    return left >= model.right["footroom"][t][position]


def reserve_response(model: Model, t: int, position: int) -> Any:
    """2.7: reserve ≤ ramp × response time × on, where that is less than a unit's whole range."""
    offers = model.inputs.reserve
    offer = int(offers.limited[position])
    most = float(offers.limit[offer]) * model.on[t, int(offers.unit[offer])]
    return model.reserve[t, offer] - most <= 0.0


def _provided(model: Model, t: int, unit: int, *, upward: bool) -> Any:
    offers = model.inputs.reserve
    own = (offers.unit == unit) & (offers.upward[offers.product] == upward)
    return sum(model.reserve[t, offer] for offer in np.flatnonzero(own).tolist())


_OPEN = 1e30

GIVEN_ROWS = {
    "output_split": output_split,
    "ramp_up": ramp_up,
    "ramp_down": ramp_down,
    "store_balance": store_balance,
    "energy_floor": energy_floor,
    "balance": balance,
}
RELAXED_ROWS = GIVEN_ROWS | {
    "block_width": block_width,
    "switching": switching,
    "minimum_up": minimum_up,
    "minimum_down": minimum_down,
    "cold_start_stops": cold_start_stops,
}
OPTIMAL_ROWS = {
    family: rule for family, rule in RELAXED_ROWS.items() if rule is not cold_start_stops
} | {
    "stops_summed": stops_summed,
    "matched_sum": matched_sum,
    "matched_after_stop": matched_after_stop,
    "matched_in_time": matched_in_time,
    "forward_way": forward_way,
    "reverse_way": reverse_way,
}
ROWS = {"given": GIVEN_ROWS, "relaxed": RELAXED_ROWS, "optimal": OPTIMAL_ROWS}

GIVEN_RESERVE_ROWS = {
    "reserve_requirement": reserve_requirement,
    "headroom": headroom,
    "footroom": footroom,
}
DECIDED_RESERVE_ROWS = GIVEN_RESERVE_ROWS | {"reserve_response": reserve_response}
RESERVE_ROWS = {
    "given": GIVEN_RESERVE_ROWS,
    "relaxed": DECIDED_RESERVE_ROWS,
    "optimal": DECIDED_RESERVE_ROWS,
}
"""The rows that a case with reserve products has besides."""
