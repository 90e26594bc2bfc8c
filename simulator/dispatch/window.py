"""One window solved: fleet half, line rows as needed, prices back out.

Public names: `WindowError`, `WindowModel`, `WindowSolution`, `shape_of`.
"""

import time
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from simulator.dispatch.attempt import Attempt
from simulator.dispatch.compiled import CompiledFleet, compile_fleet
from simulator.dispatch.counts import Counts, WindowRecord
from simulator.dispatch.fleet import fleet_data, given_commitment
from simulator.dispatch.inputs import WindowInputs
from simulator.dispatch.limits import LineRows
from simulator.dispatch.search import Decided, Search
from simulator.dispatch.solver import LinearSolver, SolverError
from simulator.dispatch.start import Start, shifted
from simulator.dispatch.state import State

__all__ = ["WindowError", "WindowModel", "WindowSolution", "shape_of"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Statuses = NDArray[np.int8]


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
    reserve (offer), reserve_short (product) : MW; reserve_price (product) : currency/MWh (2.7)
    line_dual : (period, line), signed, currency/MWh; negative where the flow is held down at +F
    relaxed_price, relaxed_line_dual, relaxed_reserve_price : the same from the relaxation, in which any
        decision may be partly taken; they differ in mode `optimal` only
    objective : currency; left : what the next window may start from
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
    reserve: Floats
    reserve_short: Floats
    reserve_price: Floats
    flow: Floats
    price: Floats
    line_dual: Floats
    relaxed_price: Floats
    relaxed_line_dual: Floats
    relaxed_reserve_price: Floats
    objective: float
    left: Start

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
    """The model of every window of one shape: compiled once, filled with each window's numbers."""

    def __init__(self, inputs: WindowInputs, state: State, counts: Counts) -> None:
        self.counts = counts
        counts.builds += 1
        with self.counts.timed("build"):
            self.fleet: CompiledFleet = compile_fleet(inputs, fleet_data(inputs, state))
            self.shape = shape_of(inputs)
            self.lines = LineRows(inputs, self.fleet)
            self._solver = LinearSolver()

    def __repr__(self) -> str:
        rows, columns = self.fleet.matrix.shape
        return f"WindowModel({rows} rows, {columns} columns, {len(self.lines)} line rows)"

    def fits(self, inputs: WindowInputs) -> bool:
        """Tell whether a window has this model's shape."""
        return shape_of(inputs) == self.shape

    def solve(
        self, inputs: WindowInputs, state: State, start: Start | None = None
    ) -> WindowSolution:
        """Solve a window from a state; raise `WindowError` if there is no optimum.

        start : what an earlier window left, of this run or of one like it. The result depends on the
            inputs, the state and the start, and on nothing this model did before.
        """
        if start is not None and start.shape != self.shape:
            start = None
        began, decided = time.perf_counter(), None
        try:
            attempt = self._begin(inputs, state, start)
            self._solve_with_lines(inputs, attempt, turning=inputs.mode != "optimal")
            relaxed = self._prices(inputs, attempt)
            if inputs.mode == "optimal":
                search = Search(self.fleet, self._solver, self.counts)
                decided = search.decide(inputs, state, attempt, self._solve_with_lines, start)
        except SolverError as failure:
            raise WindowError(failure.status, self._contradictions(failure)) from failure
        self._record(inputs, time.perf_counter() - began, decided)
        prices = self._prices(inputs, attempt) if decided else relaxed
        left = self._left(inputs, attempt, decided)
        return self._solution(inputs, state, attempt, (*prices, *relaxed), left)

    def _record(self, inputs: WindowInputs, seconds: float, decided: Decided | None) -> None:
        record = WindowRecord(inputs.number, seconds)
        if decided is not None:
            allowed = decided.gap * abs(self._solver.objective)
            record = WindowRecord(inputs.number, seconds, decided.gap, decided.out_of_time, allowed)
        self.counts.windows.append(record)

    def _left(self, inputs: WindowInputs, attempt: Attempt, decided: Decided | None) -> Start:
        """Return what the next window may start from: in mode `optimal` the relaxation's basis."""
        columns, rows = decided.basis if decided else self._solver.basis()
        fleet_rows = self.fleet.matrix.shape[0]
        return Start(
            self.shape, inputs.first, columns, rows[:fleet_rows], rows[fleet_rows:],
            self.lines.line, self.lines.period, self.lines.topology,
            self.lines.idle_after(attempt.row_dual), decided.on if decided else None,
        )  # fmt: skip

    def _begin(self, inputs: WindowInputs, state: State, start: Start | None) -> Attempt:
        """Load a window's numbers, the line rows it starts with, and the basis it starts from."""
        data = fleet_data(inputs, state)
        with self.counts.timed("solve"):
            self._solver.load(self.fleet.filled(inputs, data), self.fleet.vectors(data))
        with self.counts.timed("network"):
            attempt = Attempt(inputs, data, self.fleet.columns)
            line_rows = self.lines.begin_window(self._solver, inputs, attempt.fixed, start)
            self.counts.line_rows += self.lines.carried
        if start is not None:
            with self.counts.timed("solve"):
                self._start_from(inputs, start, line_rows)
        return attempt

    def _start_from(self, inputs: WindowInputs, start: Start, line_rows: Statuses) -> None:
        """Set the basis that was left, moved along with the window."""
        shift, periods = start.moved_to(inputs.first, inputs.periods), inputs.periods
        columns = shifted(start.columns, self.fleet.columns, shift, periods)
        rows = shifted(start.rows, self.fleet.rows, shift, periods)
        self._solver.set_basis(columns, np.concatenate([rows, line_rows]))

    def _solve_with_lines(
        self, inputs: WindowInputs, attempt: Attempt, *, turning: bool = True
    ) -> None:
        """Solve, look for lines beyond their rating, add their rows, until there is none (3).

        turning : close a direction of ties that run both ways; in mode `optimal` the relaxation may
            not, since which way a tie runs is a decision there
        """
        while True:
            with self.counts.timed("solve"):
                self._solver.run()
            self.counts.lp_solves += 1
            self.counts.iterations += self._solver.iterations
            attempt.solution, attempt.row_dual = self._solver.solution()
            added = self._lines_added(inputs, attempt)
            if not (added or (turning and attempt.ties.close(self._solver, attempt.solution))):
                return

    def _lines_added(self, inputs: WindowInputs, attempt: Attempt) -> bool:
        """Look at the flows of a solution; add rows for lines beyond their rating, if any."""
        with self.counts.timed("network"):
            injection = self.lines.injection.injections(attempt.solution, inputs)
            attempt.flow = inputs.topology.flows(injection)
            if not inputs.limited:
                return False
            missing = attempt.beyond(inputs) & ~self.lines.active(inputs)
            self.lines.add(self._solver, inputs, attempt.fixed, missing)
            self.counts.line_rows += int(missing.sum())
            return bool(missing.any())

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

    def _solution(
        self,
        inputs: WindowInputs,
        state: State,
        attempt: Attempt,
        prices: tuple[Floats, ...],
        left: Start,
    ) -> WindowSolution:
        values = self.fleet.named(attempt.solution)
        for family in _WITHIN:
            values.pop(family, None)
        if inputs.mode == "given":
            given = given_commitment(inputs, state)
            decided = {"on": given.on, "start": given.start, "stop": given.stop}
            cold = given.cold_start
        else:
            decided = {name: values.pop(name) for name in ("on", "start", "stop")}
            if inputs.mode == "optimal":  # fixed to whole numbers, which the solver holds to 1e-16
                decided = {name: np.round(found) + 0.0 for name, found in decided.items()}
            cold = np.zeros_like(decided["start"])
            cold[:, inputs.unit.cold_rows] = values.pop("cold_start")
        if not inputs.reserve.there:
            values["reserve"] = values["reserve_short"] = np.zeros((inputs.periods, 0))
        priced = dict(zip(_PRICED, prices, strict=True))
        return WindowSolution(
            **decided, **values, **priced, cold_start=cold, flow=attempt.flow,
            objective=self._solver.objective, left=left,
        )  # fmt: skip

    def _prices(self, inputs: WindowInputs, attempt: Attempt) -> tuple[Floats, Floats, Floats]:
        """Return prices (period, bus), line duals (period, line), reserve prices of the last solve (5.1).

        price_n = (dual of n's balance row)/Δ + Σ_l PTDF_ln·μ_l
        """
        energy = attempt.row_dual[self.fleet.rows["balance"]][:, inputs.cells.cell]
        line_dual = self.lines.duals(attempt.row_dual, inputs) / inputs.period_hours
        bus = energy / inputs.period_hours + inputs.topology.collected(line_dual)
        return bus, line_dual, self._reserve_prices(inputs, attempt)

    def _reserve_prices(self, inputs: WindowInputs, attempt: Attempt) -> Floats:
        """Return (dual of a product's requirement)/Δ, array (period, product), at least 0 (2.7)."""
        if not inputs.reserve.there:
            return np.zeros((inputs.periods, 0))
        return attempt.row_dual[self.fleet.rows["reserve_requirement"]] / inputs.period_hours


_OF_ONE_SOLVE = ("price", "line_dual", "reserve_price")
_PRICED = (*_OF_ONE_SOLVE, *(f"relaxed_{name}" for name in _OF_ONE_SOLVE))
_WITHIN = ("exchange", "energy_short", "stopped", "matched", "tie_way")
"""Column families that no result shows."""


def shape_of(inputs: WindowInputs) -> tuple[object, ...]:
    """Return what has to agree for one compiled model to serve two windows."""
    return (
        inputs.mode,
        inputs.periods,
        len(inputs.unit.bus),
        len(inputs.unit.block_unit),
        len(inputs.reserve.upward),
        len(inputs.reserve.unit),
        len(inputs.reserve.limited),
        len(inputs.renewable_bus),
        len(inputs.store.bus),
        len(inputs.tie_from),
        len(inputs.load_bus),
        inputs.buses,
    )
