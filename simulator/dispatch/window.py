"""One window solved: fleet half, line rows as needed, prices back out.

Public names: `Counts`, `WindowError`, `WindowModel`, `WindowSolution`.
"""

import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from simulator.dispatch.compiled import CompiledFleet, compile_fleet
from simulator.dispatch.fleet import FleetData, fleet_data, given_commitment
from simulator.dispatch.inputs import WindowInputs
from simulator.dispatch.limits import FLOW_TOLERANCE, LineRows
from simulator.dispatch.solver import BASIC, Decision, LinearSolver, SolverError
from simulator.dispatch.state import State
from simulator.dispatch.ties import TieDirections

__all__ = ["Counts", "WindowError", "WindowModel", "WindowSolution"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

SURE = 0.01
"""The relaxation is sure of a decision this close to 0 or 1; only where the search starts hangs on it."""


@dataclass
class Counts:
    """What solving took: solves, line rows added, models built, and seconds by stage."""

    lp_solves: int = 0
    mip_solves: int = 0
    line_rows: int = 0
    builds: int = 0
    iterations: int = 0
    gaps: list[float] = field(default_factory=list)
    seconds: dict[str, float] = field(
        default_factory=lambda: {"build": 0.0, "solve": 0.0, "network": 0.0}
    )

    @contextmanager
    def timed(self, stage: str) -> Iterator[None]:
        """Add the seconds of a block to a stage."""
        began = time.perf_counter()
        yield
        self.seconds[stage] += time.perf_counter() - began


class WindowError(Exception):
    """A window without an optimum.

    status : the solver's verdict in words
    broken : (family, period, element) of rows and columns that contradict each other
    """

    def __init__(self, status: str, broken: list[tuple[str, int, int]]) -> None:
        self.status, self.broken = status, broken
        super().__init__(status)


@dataclass(frozen=True, eq=False)
class WindowSolution:
    """The optimum of one window; arrays have periods first.

    on, start, stop, cold_start : (period, unit), 0..1
    output (unit), block (block), renewable (plant), charge, discharge (store), tie_forward, tie_reverse
    (tie), unserved (load), surplus (bus), flow (line) : MW; stored (store) : MWh at the end of a period
    price : (period, bus), currency/MWh (5.1)
    line_dual : (period, line), signed, currency/MWh; negative where the flow is held down at +F
    objective : currency
    """

    on: Floats
    start: Floats
    stop: Floats
    cold_start: Floats
    output: Floats
    block: Floats
    renewable: Floats
    charge: Floats
    discharge: Floats
    stored: Floats
    tie_forward: Floats
    tie_reverse: Floats
    unserved: Floats
    surplus: Floats
    flow: Floats
    price: Floats
    line_dual: Floats
    objective: float

    def state_after(self, before: State, kept: int, hot_periods: Integers, *, whole: bool) -> State:
        """Return the state at the end of the first `kept` periods (formulation.md 4).

        whole : decisions are whole, so that stops are matched with hot starts (mode `optimal`)
        """
        memory = len(before.starts)

        def recent(now: Floats, past: Floats) -> Floats:
            return np.concatenate([np.clip(now[:kept][::-1], 0.0, 1.0), past])[:memory]

        return State(
            output=self.output[kept - 1],
            on=np.clip(self.on[kept - 1], 0.0, 1.0),
            starts=recent(self.start, before.starts),
            stops=recent(self.stop, before.stops),
            cooling=self._cooling_after(before, kept, hot_periods) if whole else before.cooling,
            stored=self.stored[kept - 1],
        )

    def _cooling_after(self, before: State, kept: int, hot_periods: Integers) -> Floats:
        """Return stops no start has used up and that are not cold yet, array (lag, unit).

        Each hot start uses the oldest stop that is still hot.
        """
        cooling = before.cooling
        memory = len(cooling)
        young = np.arange(1, memory + 1)[:, None] <= hot_periods
        for period in range(kept):
            hot = np.clip(self.start[period] - self.cold_start[period], 0.0, 1.0)
            older = np.cumsum(cooling[::-1], axis=0)[::-1] - cooling
            cooling = cooling - np.clip(hot - older, 0.0, cooling)
            stopped = np.clip(self.stop[period], 0.0, 1.0)[None]
            cooling = np.where(young, np.concatenate([stopped, cooling])[:memory], 0.0)
        return cooling


class WindowModel:
    """The model of every window of one shape: compiled at the first, updated for the others."""

    def __init__(self, inputs: WindowInputs, state: State, counts: Counts) -> None:
        self.counts = counts
        counts.builds += 1
        with self.counts.timed("build"):
            data = fleet_data(inputs, state)
            self.fleet: CompiledFleet = compile_fleet(inputs, data)
            self.shape = _shape(inputs)
            self._solver = LinearSolver(self.fleet.matrix, self.fleet.vectors(data))
            self._entries = self.fleet.moving_entries(inputs, data)
            self.lines = LineRows(inputs, self.fleet)
            self._first, self._shift = inputs.first, 0
            self._plan: Floats | None = None
            self._relaxed_basis: tuple[Integers, Integers] | None = None

    def __repr__(self) -> str:
        rows, columns = self.fleet.matrix.shape
        return f"WindowModel({rows} rows, {columns} columns, {len(self.lines)} line rows)"

    def fits(self, inputs: WindowInputs) -> bool:
        """Tell whether a window has this model's shape."""
        return _shape(inputs) == self.shape

    def solve(self, inputs: WindowInputs, state: State) -> WindowSolution:
        """Solve a window from a state; raise `WindowError` if there is no optimum."""
        data = fleet_data(inputs, state)
        self._load(inputs, data)
        try:
            network = self._begin(inputs)
            self._solve_with_lines(inputs, network)
            if inputs.mode == "optimal":
                self._decide(inputs, state, data, network)
        except SolverError as failure:
            raise WindowError(failure.status, self._contradictions(failure)) from failure
        return self._solution(inputs, state, network)

    def _load(self, inputs: WindowInputs, data: FleetData) -> None:
        """Put a window's numbers in place of the last one's."""
        self._solver.set_vectors(self.fleet.vectors(data))
        rows, columns, values = self.fleet.moving_entries(inputs, data)
        moved = values != self._entries[2]
        self._solver.set_entries(rows[moved], columns[moved], values[moved])
        self._entries = rows, columns, values
        self._start_from_last(inputs)

    def _start_from_last(self, inputs: WindowInputs) -> None:
        """Move the last basis along with the window, so that hours seen before keep their status.

        Hours that are new take the status of the last ones: the same hours of the day before, where
        windows overlap by a day.
        """
        shift, self._first = inputs.first - self._first, inputs.first
        self._shift = shift if 0 < shift < inputs.periods else 0
        if not self._shift:
            return
        columns, rows = self._relaxed_basis or self._solver.basis()
        fleet_rows = self.fleet.matrix.shape[0]
        moved = self.lines.shifted(rows[fleet_rows:], shift, *inputs.rating.shape)
        self._solver.set_basis(
            _shifted(columns, self.fleet.columns, shift),
            np.concatenate([_shifted(rows[:fleet_rows], self.fleet.rows, shift), moved]),
        )

    def _begin(self, inputs: WindowInputs) -> "_Network":
        """Put the line rows that stand, and those that hours seen before will want, in place."""
        with self.counts.timed("network"):
            network = _Network(inputs, self.fleet.columns)
            if inputs.limited:
                self.lines.begin_window(self._solver, inputs, network.fixed)
                self._add(inputs, network, self.lines.carried(self._shift, inputs))
            else:
                self.lines.open(self._solver)
        return network

    def _solve_with_lines(self, inputs: WindowInputs, network: "_Network") -> None:
        """Solve, look for lines beyond their rating, add their rows, until there is none (3)."""
        while True:
            self._run()
            network.solution, network.row_dual = self._solver.solution()
            added = self._lines_added(inputs, network)
            if not (added or network.ties.close(self._solver, network.solution)):
                return

    def _lines_added(self, inputs: WindowInputs, network: "_Network") -> bool:
        """Look at the flows of a solution; add rows for lines beyond their rating, if any."""
        with self.counts.timed("network"):
            injection = self.lines.injection.injections(network.solution, inputs)
            network.flow = inputs.topology.flows(injection)
            if not inputs.limited:
                return False
            missing = network.beyond(inputs) & ~self.lines.active(inputs)
            self._add(inputs, network, missing)
            return bool(missing.any())

    def _add(self, inputs: WindowInputs, network: "_Network", missing: NDArray[np.bool_]) -> None:
        if missing.any():
            self.lines.add(self._solver, inputs, network.fixed, missing)
            self.counts.line_rows += int(missing.sum())

    def _decide(
        self, inputs: WindowInputs, state: State, data: FleetData, network: "_Network"
    ) -> None:
        """Decide on and off, then solve again with the decisions fixed, for prices (2.3, 5.5).

        Line rows found on the relaxation stand already. Where the fixed solve needs more, the bound
        of the search still holds, so its plan is good if it is within the gap even so; if not, the
        search goes on from that plan. The relaxation's basis is kept for the next window.
        """
        basis, deadline = self._solver.basis(), time.perf_counter() + inputs.seconds
        plan, bound = self._first_plan(inputs, data, network.solution), -np.inf
        while True:
            decision = self._search(inputs, plan, deadline - time.perf_counter())
            bound, standing = max(bound, decision.bound), len(self.lines)
            self._solver.set_basis(*self._extended(basis))
            self._fix(state, decision.values)
            self._solve_with_lines(inputs, network)
            gap = _gap(self._solver.objective, bound)
            if gap <= inputs.gap or len(self.lines) == standing or time.perf_counter() > deadline:
                break
            plan = self._decisions_of(decision.values, 0)
            self._solver.set_vectors(self.fleet.vectors(data))
        self.counts.gaps.append(gap)
        self._plan = decision.values
        self._relaxed_basis = self._extended(basis)

    def _search(self, inputs: WindowInputs, start: Floats | None, seconds: float) -> Decision:
        on = self.fleet.columns["on"].ravel()
        with self.counts.timed("solve"):
            decision = self._solver.run_integer(on, inputs.gap, max(seconds, 0.1), start)
        self.counts.mip_solves += 1
        return decision

    def _first_plan(self, inputs: WindowInputs, data: FleetData, relaxed: Floats) -> Floats | None:
        """Return a plan to start the search from: the best with what the relaxation is sure of fixed.

        Few decisions are left open then, so it is found at once; it starts from the last window's plan
        for the hours seen before, and if it has none that plan is the start itself.
        """
        on, last = self.fleet.columns["on"].ravel(), self._last_plan()
        lower, upper = (bound.ravel() for bound in data.columns["on"])
        sure_on, sure_off = relaxed[on] >= 1 - SURE, relaxed[on] <= SURE
        self._solver.set_column_bounds(
            on, np.where(sure_on, upper, lower), np.where(sure_off, lower, upper)
        )
        try:
            return self._decisions_of(self._search(inputs, last, inputs.seconds).values, 0)
        except SolverError:
            return last
        finally:
            self._solver.set_column_bounds(on, lower, upper)

    def _extended(self, basis: tuple[Integers, Integers]) -> tuple[Integers, Integers]:
        columns, rows = basis
        more = np.full(self._solver.rows - len(rows), BASIC)
        return columns, np.concatenate([rows, more])

    def _fix(self, state: State, plan: Floats) -> None:
        """Fix on, start and stop at the plan's decisions."""
        on = np.round(plan[self.fleet.columns["on"]])
        before = np.where(np.isnan(state.on), on[0], np.nan_to_num(state.on))
        change = np.diff(on, axis=0, prepend=before[None])
        decided = {"on": on, "start": np.maximum(change, 0.0), "stop": np.maximum(-change, 0.0)}
        for family, values in decided.items():
            places, fixed = self.fleet.columns[family].ravel(), values.ravel()
            self._solver.set_column_bounds(places, fixed, fixed)

    def _last_plan(self) -> Floats | None:
        """Return the last window's decisions for the hours seen before; NaN for all else."""
        if self._plan is None or not self._shift:
            return None
        return self._decisions_of(self._plan, self._shift)

    def _decisions_of(self, plan: Floats, shift: int) -> Floats:
        """Return a plan's on/off decisions, moved `shift` periods towards the start; NaN elsewhere."""
        start = np.full(len(plan), np.nan)
        places = self.fleet.columns["on"]
        start[places[: len(places) - shift]] = np.round(plan[places[shift:]])
        return start

    def _run(self) -> None:
        with self.counts.timed("solve"):
            self._solver.run()
        self.counts.lp_solves += 1
        self.counts.iterations += self._solver.iterations

    def _contradictions(self, failure: SolverError) -> list[tuple[str, int, int]]:
        if "infeasible" not in failure.status:
            return []
        rows, columns = self._solver.contradictions()
        fleet_rows = rows[rows < self.fleet.matrix.shape[0]]
        line_rows = rows[rows >= self.fleet.matrix.shape[0]] - self.fleet.matrix.shape[0]
        return (
            [self.fleet.row_name(row) for row in fleet_rows.tolist()]
            + [self.fleet.column_name(column) for column in columns.tolist()]
            + [
                ("line", int(self.lines.period[row]), int(self.lines.line[row]))
                for row in line_rows
            ]
        )

    def _solution(self, inputs: WindowInputs, state: State, network: "_Network") -> WindowSolution:
        values = self.fleet.named(network.solution)
        for family in ("exchange", "energy_short", "stopped", "matched"):
            values.pop(family, None)
        if inputs.mode == "given":
            given = given_commitment(inputs, state)
            decided = {"on": given.on, "start": given.start, "stop": given.stop}
            cold = given.cold_start
        else:
            decided = {name: values.pop(name) for name in ("on", "start", "stop")}
            cold = np.zeros_like(decided["start"])
            cold[:, inputs.unit.cold_rows] = values.pop("cold_start")
        line_dual = self.lines.duals(network.row_dual, inputs) / inputs.period_hours
        return WindowSolution(
            **decided, **values, cold_start=cold, flow=network.flow, line_dual=line_dual,
            price=self._prices(inputs, network, line_dual), objective=self._solver.objective,
        )  # fmt: skip

    def _prices(self, inputs: WindowInputs, network: "_Network", line_dual: Floats) -> Floats:
        """Return price_n = (dual of n's balance row)/Δ + Σ_l PTDF_ln·μ_l, array (period, bus) (5.1)."""
        energy = network.row_dual[self.fleet.rows["balance"]][:, inputs.cells.cell]
        return energy / inputs.period_hours + inputs.topology.collected(line_dual)


def _gap(cost: float, bound: float) -> float:
    """Return the relative gap between a plan's cost and a bound that no plan is below."""
    return max(cost - bound, 0.0) / max(abs(cost), 1e-9)


def _shifted(status: Integers, families: Mapping[str, Integers], shift: int) -> Integers:
    """Give each period the status of the one `shift` later; the last ones keep theirs."""
    moved = status.copy()
    for positions in families.values():
        moved[positions[:-shift]] = status[positions[shift:]]
    return moved


class _Network:
    """The network side of the window being solved."""

    solution: Floats
    row_dual: Floats
    flow: Floats

    def __init__(self, inputs: WindowInputs, columns: Mapping[str, Integers]) -> None:
        self.ties = TieDirections(inputs, columns)
        self.fixed = inputs.topology.flows(-inputs.demand_at_bus)

    def beyond(self, inputs: WindowInputs) -> NDArray[np.bool_]:
        """Tell where a flow is beyond its rating, array (period, line)."""
        over: NDArray[np.bool_] = np.abs(self.flow) > inputs.rating + FLOW_TOLERANCE
        return over


def _shape(inputs: WindowInputs) -> tuple[object, ...]:
    """Return what has to agree for one compiled model to serve two windows."""
    return (
        inputs.mode,
        inputs.periods,
        len(inputs.unit.bus),
        len(inputs.unit.block_unit),
        inputs.buses,
    )
