"""By hand (a): all bus angles in a Pyomo model, built anew each window, solved through Pyomo's HiGHS.

Public names: `solve_by_pyomo`, `window_model`.

The model is stated here once more, as a user of Pyomo would state it. Bounds, costs and right-hand sides
of a window are the engine's arrays (`fleet_data`); every row and coefficient is written out below.
Section numbers are those of formulation.md.
"""

from collections import defaultdict
from typing import Any

import numpy as np
import pyomo.environ as pyo
from numpy.typing import NDArray
from pyomo.contrib.appsi.base import TerminationCondition
from pyomo.contrib.appsi.solvers import Highs

from simulator.dispatch import State, WindowInputs
from simulator.dispatch.fleet import FleetData, fleet_data
from simulator.grid import Network
from tests.benchmarks.budget import Budget, OverBudgetError
from tests.benchmarks.cases import Subject

__all__ = ["solve_by_pyomo", "window_model"]

Model = Any
Floats = NDArray[np.float64]


def window_model(network: Network, inputs: WindowInputs, state: State) -> Model:
    """State one window in mode `relaxed` with all bus angles."""
    data, model = fleet_data(inputs, state), pyo.ConcreteModel()
    model.hours = range(inputs.periods)
    for family, (lower, upper) in data.columns.items():
        if family != "exchange":
            _columns(model, family, lower, upper)
    _outputs(model, inputs, data)
    _switches(model, inputs, data)
    _stores(model, inputs, data)
    _grid(model, network, inputs)
    model.cost = pyo.Objective(
        expr=pyo.quicksum(
            price * getattr(model, family)[key]
            for family, prices in data.costs.items()
            for key, price in np.ndenumerate(prices)
            if price
        )
    )
    return model


def _columns(model: Model, family: str, lower: Floats, upper: Floats) -> None:
    low, high, (hours, elements) = lower.tolist(), upper.tolist(), lower.shape
    column = pyo.Var(range(hours), range(elements), bounds=lambda _, t, i: (low[t][i], high[t][i]))
    setattr(model, family, column)


def _rows(model: Model, name: str, bounds: tuple[Floats, Floats], body: Any) -> None:
    """Add rows lower ≤ body(t, i) ≤ upper, leaving out those without bounds."""
    low, high, (hours, elements) = bounds[0].tolist(), bounds[1].tolist(), bounds[0].shape

    def rule(_: Model, t: int, i: int) -> Any:
        if low[t][i] == high[t][i]:
            return body(t, i) == low[t][i]
        if high[t][i] < np.inf:
            return body(t, i) <= high[t][i]
        return body(t, i) >= low[t][i] if low[t][i] > -np.inf else pyo.Constraint.Skip

    setattr(model, name, pyo.Constraint(range(hours), range(elements), rule=rule))


def _outputs(model: Model, inputs: WindowInputs, data: FleetData) -> None:
    """2.1 and 2.2."""
    unit, least, width = inputs.unit, inputs.unit_min.tolist(), inputs.block_width.tolist()
    blocks = defaultdict(list)
    for block, owner in enumerate(unit.block_unit.tolist()):
        blocks[owner].append(block)

    def split(t: int, g: int) -> Any:
        above = sum(model.block[t, k] for k in blocks[g])
        return model.output[t, g] - least[t][g] * model.on[t, g] - above

    def wide(t: int, k: int) -> Any:
        return model.block[t, k] - width[t][k] * model.on[t, int(unit.block_unit[k])]

    def rise(t: int, i: int) -> Any:
        g = int(unit.ramp_up_rows[i])
        first = -min(unit.start_ramp[g], unit.maximum[g]) * model.start[t, g] + model.output[t, g]
        if not t:
            return first
        ramp = min(unit.ramp_up[g], unit.maximum[g])
        return first - model.output[t - 1, g] - ramp * model.on[t - 1, g]

    def fall(t: int, i: int) -> Any:
        g = int(unit.ramp_down_rows[i])
        last = min(unit.stop_ramp[g], unit.maximum[g]) * model.stop[t, g]
        before = model.output[t - 1, g] if t else 0.0
        ramp = min(unit.ramp_down[g], unit.maximum[g])
        return before - model.output[t, g] - ramp * model.on[t, g] - last

    _rows(model, "split", data.rows["output_split"], split)
    _rows(model, "wide", data.rows["block_width"], wide)
    _rows(model, "rise", data.rows["ramp_up"], rise)
    _rows(model, "fall", data.rows["ramp_down"], fall)


def _switches(model: Model, inputs: WindowInputs, data: FleetData) -> None:
    """2.3."""
    unit, out = inputs.unit, inputs.unit_out

    def switched(t: int, g: int) -> Any:
        before = model.on[t - 1, g] if t else 0.0
        return model.on[t, g] - before - model.start[t, g] + model.stop[t, g]

    def up(t: int, g: int) -> Any:
        since = range(max(0, t - int(unit.up_periods[g]) + 1), t + 1)
        return (
            sum(model.start[s, g] for s in since if not out[s + 1 : t + 1, g].any())
            - model.on[t, g]
        )

    def down(t: int, g: int) -> Any:
        since = range(max(0, t - int(unit.down_periods[g]) + 1), t + 1)
        return sum(model.stop[s, g] for s in since if not out[s, g]) + model.on[t, g]

    def cold(t: int, i: int) -> Any:
        g = int(unit.cold_rows[i])
        recent = sum(model.stop[s, g] for s in range(max(0, t - int(unit.hot_periods[g])), t))
        return model.start[t, g] - recent - model.cold_start[t, i]

    _rows(model, "switched", data.rows["switching"], switched)
    _rows(model, "up", data.rows["minimum_up"], up)
    _rows(model, "down", data.rows["minimum_down"], down)
    _rows(model, "cold", data.rows["cold_start_stops"], cold)


def _stores(model: Model, inputs: WindowInputs, data: FleetData) -> None:
    """2.4."""
    store = inputs.store

    def energy(t: int, s: int) -> Any:
        before = store.kept[s] * model.stored[t - 1, s] if t else 0.0
        moved = store.drawn[s] * model.discharge[t, s] - store.charged[s] * model.charge[t, s]
        return model.stored[t, s] - before + moved

    _rows(model, "energy", data.rows["store_balance"], energy)
    _rows(model, "floor", data.rows["energy_floor"],
          lambda t, s: model.stored[t, s] + model.energy_short[t, s])  # fmt: skip


def _grid(model: Model, network: Network, inputs: WindowInputs) -> None:
    """2.5 at every bus, and 2.6 with an angle at every bus."""
    topologies, which = inputs.topology.topologies, inputs.topology.index
    running = np.stack([topology.in_service for topology in topologies])[which]
    rating, weight = inputs.limits.rating.tolist(), network.susceptance.tolist()
    start, end, shift = network.from_bus.tolist(), network.to_bus.tolist(), network.phase_shift
    lines, buses = range(len(weight)), range(inputs.buses)

    def limits(_: Model, t: int, line: int) -> tuple[float, float]:
        most = rating[t][line] if running[t, line] else 0.0
        return -most, most

    model.flow = pyo.Var(model.hours, lines, bounds=limits)
    model.angle = pyo.Var(model.hours, buses)
    for t in model.hours:
        for bus in topologies[which[t]].reference.tolist():
            model.angle[t, bus].fix(0.0)

    def flows(_: Model, t: int, line: int) -> Any:
        if not running[t, line]:
            return pyo.Constraint.Skip
        across = model.angle[t, start[line]] - model.angle[t, end[line]] - float(shift[line])
        return model.flow[t, line] == weight[line] * across

    enters = _injections(model, inputs)
    demand = inputs.demand_at_bus.tolist()
    leaving, arriving = defaultdict(list), defaultdict(list)
    for line in lines:
        leaving[start[line]].append(line)
        arriving[end[line]].append(line)

    def balanced(_: Model, t: int, bus: int) -> Any:
        sent = sum(model.flow[t, line] for line in leaving[bus])
        received = sum(model.flow[t, line] for line in arriving[bus])
        own = sum(factor * column[t, i] for factor, column, i in enters[bus])
        return own + received - sent == demand[t][bus]

    model.flows = pyo.Constraint(model.hours, lines, rule=flows)
    model.balanced = pyo.Constraint(model.hours, buses, rule=balanced)


def _injections(model: Model, inputs: WindowInputs) -> dict[int, list[tuple[float, Any, int]]]:
    """Return, for each bus, what enters there: (factor, column, element)."""
    arrives = inputs.tie_delivered.tolist()
    one, less = [1.0] * inputs.limits.rating.size, [-1.0] * inputs.limits.rating.size
    enters = defaultdict(list)
    for column, at, factors in (
        (model.output, inputs.unit.bus, one), (model.renewable, inputs.renewable_bus, one),
        (model.discharge, inputs.store.bus, one), (model.charge, inputs.store.bus, less),
        (model.tie_forward, inputs.tie_from, less), (model.tie_forward, inputs.tie_to, arrives),
        (model.tie_reverse, inputs.tie_to, less), (model.tie_reverse, inputs.tie_from, arrives),
        (model.unserved, inputs.load_bus, one), (model.surplus, np.arange(inputs.buses), less),
    ):  # fmt: skip
        for element, bus in enumerate(at.tolist()):
            enters[bus].append((factors[element], column, element))
    return enters


def solve_by_pyomo(subject: Subject) -> list[float]:
    """Build and solve every window from the state the engine hands on; return the optimum of each."""
    network, budget, states = Network.of(subject.case), Budget(subject.budget), subject.rolled[0]
    return [
        _optimum(window_model(network, window, state), budget)
        for window, state in zip(subject.windows, states, strict=True)
    ]


def _optimum(model: Model, budget: Budget) -> float:
    solver = Highs()
    solver.config.time_limit = budget.left()
    solver.config.load_solution = False
    solver.highs_options = {"threads": 1}
    result = solver.solve(model)
    if result.termination_condition == TerminationCondition.maxTimeLimit:
        raise OverBudgetError(budget.seconds)
    if result.termination_condition != TerminationCondition.optimal:
        raise RuntimeError(f"the model by hand ended with {result.termination_condition}")
    return float(result.best_feasible_objective)
