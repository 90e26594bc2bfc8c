"""One window solved: fleet half, rows of limits as needed, prices back out.

Public names: `WindowError`, `WindowModel`, `WindowSolution`, `shape_of`.
"""

import time
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from simulator.dispatch.attempt import Attempt
from simulator.dispatch.compiled import CompiledFleet, compile_fleet
from simulator.dispatch.counts import Counts, WindowRecord
from simulator.dispatch.fleet import fleet_data, given_commitment
from simulator.dispatch.injections import InjectionMap
from simulator.dispatch.inputs import WindowInputs
from simulator.dispatch.limit_rows import LimitRows
from simulator.dispatch.limits import FLOW_TOLERANCE
from simulator.dispatch.loss_rows import LOSS_ACCURACY, LossRows
from simulator.dispatch.point import Point
from simulator.dispatch.priced import Priced
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
    reserve (offer), reserve_short (product) : MW (2.7)
    priced : prices, and what limits cost; relaxed : the same from the relaxation, in which any decision
        may be partly taken; they differ in mode `optimal` only
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
    flow: Floats
    priced: Priced
    relaxed: Priced
    objective: float
    left: Start

    @property
    def price(self) -> Floats:
        """Prices, array (period, bus), currency/MWh."""
        return self.priced.price

    @property
    def line_dual(self) -> Floats:
        """Signed duals of lines as things are, array (period, line), currency/MWh."""
        return self.priced.line

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
            injection = InjectionMap(inputs, dict(self.fleet.columns))
            self.losses = LossRows(inputs, self.fleet, injection)
            first_row = self.fleet.matrix.shape[0] + self.losses.count
            self.limits = LimitRows(inputs, self.fleet, injection, first_row)
            self._solver = LinearSolver()

    def __repr__(self) -> str:
        rows, columns = self.fleet.matrix.shape
        return f"WindowModel({rows} rows, {columns} columns, {len(self.limits)} rows of limits)"

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
        self.counts.loss_gap = max(self.counts.loss_gap, attempt.loss_gap)
        self.counts.loss_step = max(self.counts.loss_step, self.losses.last_step)
        self._record(inputs, time.perf_counter() - began, decided)
        priced = self._prices(inputs, attempt) if decided else relaxed
        left = self._left(inputs, attempt, decided)
        return self._solution(inputs, state, attempt, (priced, relaxed), left)

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
            self.shape, inputs.first, columns, rows[:fleet_rows], rows[fleet_rows + self.losses.count :],
            self.limits.places, self.limits.topology,
            self.limits.idle_after(attempt.row_dual), decided.on if decided else None,
            None if inputs.losses is None else attempt.reached.injection,
        )  # fmt: skip

    def _begin(self, inputs: WindowInputs, state: State, start: Start | None) -> Attempt:
        """Load a window's numbers, the rows of limits it starts with, and the basis it starts from."""
        data = fleet_data(inputs, state)
        with self.counts.timed("solve"):
            self._solver.load(self.fleet.filled(inputs, data), self.fleet.vectors(data))
        with self.counts.timed("network"):
            attempt = Attempt(inputs, data, self.fleet.columns, _first_point(inputs, start))
            self.losses.begin_window(inputs, attempt.point)
            if inputs.losses is not None:
                self._solver.add_rows(*self.losses.matrix(inputs))
            limit_rows = self.limits.begin_window(self._solver, inputs, attempt.point, start)
            self.counts.limit_rows += self.limits.carried
        if start is not None:
            with self.counts.timed("solve"):
                self._start_from(inputs, start, limit_rows)
        return attempt

    def _start_from(self, inputs: WindowInputs, start: Start, limit_rows: Statuses) -> None:
        """Set the basis that was left, moved along with the window."""
        shift, periods = start.moved_to(inputs.first, inputs.periods), inputs.periods
        columns = shifted(start.columns, self.fleet.columns, shift, periods)
        rows = shifted(start.rows, self.fleet.rows, shift, periods)
        self._solver.set_basis(
            columns, np.concatenate([rows, self.losses.first_statuses, limit_rows])
        )

    def _solve_with_lines(
        self, inputs: WindowInputs, attempt: Attempt, *, turning: bool = True
    ) -> None:
        """Solve, look for limits that flows break, add their rows, until there is none (3).

        turning : close a direction of ties that run both ways; in mode `optimal` the relaxation may
            not, since which way a tie runs is a decision there
        """
        self.losses.begin_solve()
        while True:
            with self.counts.timed("solve"):
                self._solver.run()
            self.counts.lp_solves += 1
            self.counts.iterations += self._solver.iterations
            attempt.solution, attempt.row_dual = self._solver.solution()
            row_value = self._solver.row_values() if inputs.losses else np.zeros(0)
            changed = self._limits_added(inputs, attempt)
            if changed:
                self.losses.resume()
            changed |= self._losses_moved(inputs, attempt, row_value)
            if not (changed or (turning and attempt.ties.close(self._solver, attempt.solution))):
                return

    def _limits_added(self, inputs: WindowInputs, attempt: Attempt) -> bool:
        """Look at the flows of a solution; add rows for limits they break, if any."""
        with self.counts.timed("network"):
            injection = self.limits.injection.injections(attempt.solution, inputs)
            attempt.reached = Point.at(inputs, injection)
            if not inputs.limited:
                return False
            broken = inputs.limits.broken(attempt.flow, inputs.topology, self.limits.places)
            self.limits.add(self._solver, inputs, attempt.point, broken)
            self.counts.limit_rows += len(broken)
            return len(broken) > 0

    def _losses_moved(self, inputs: WindowInputs, attempt: Attempt, row_value: Floats) -> bool:
        """Linearise losses anew at the flows of a solution, unless they are its losses already."""
        if inputs.losses is None:
            return False
        with self.counts.timed("network"):
            gap = self.losses.gaps(inputs, attempt.solution, attempt.reached)
            attempt.loss_gap = float(np.abs(gap).max(initial=0.0))
            off = self.limits.excess(inputs, attempt.flow) > FLOW_TOLERANCE
            if (attempt.loss_gap <= LOSS_ACCURACY and not off) or self.losses.moves >= _MOST_MOVES:
                self.losses.end(attempt.loss_gap)
                return False
            if self.losses.settles(gap):
                self.losses.shift(self._solver, gap)
                self.limits.settle(self._solver, inputs, row_value, attempt.flow)
            else:
                self._linearise(inputs, attempt)
        self.counts.linearisations += 1
        return True

    def _linearise(self, inputs: WindowInputs, attempt: Attempt) -> None:
        """Put rows linearised at the point reached in place of those that stand, and keep the basis."""
        columns, rows = self._solver.basis()
        fleet_rows = self.fleet.matrix.shape[0]
        of_losses, of_limits = np.split(rows[fleet_rows:], [self.losses.count])
        gap = self.losses.gaps(inputs, attempt.solution, attempt.reached)
        attempt.point = attempt.reached
        of_losses = self.losses.move(inputs, gap, attempt.point, of_losses)
        parts = self.losses.matrix(inputs), self.limits.moved(inputs, attempt.point)
        matrix = sparse.csr_array(sparse.vstack([part[0] for part in parts], format="csr"))
        lower, upper = (np.concatenate([part[side] for part in parts]) for side in (1, 2))
        self._solver.replace_rows(fleet_rows, matrix, lower, upper)
        self.losses.bound_columns(self._solver, inputs, attempt.point)
        self._solver.set_basis(columns, np.concatenate([rows[:fleet_rows], of_losses, of_limits]))

    def _contradictions(self, failure: SolverError) -> list[tuple[str, int, int]]:
        if "infeasible" not in failure.status:
            return []
        rows, columns = self._solver.contradictions()
        len_fleet = self.fleet.matrix.shape[0]
        fleet_rows = rows[rows < len_fleet]
        held = rows - len_fleet - self.losses.count
        held = self.limits.places[held[held >= 0]]
        return (
            [self.fleet.row_name(row) for row in fleet_rows.tolist()]
            + [self.fleet.column_name(column) for column in columns.tolist()]
            + [
                ("limit", period, element)
                for period, element in zip(held.period.tolist(), held.element.tolist(), strict=True)
            ]
        )

    def _solution(
        self,
        inputs: WindowInputs,
        state: State,
        attempt: Attempt,
        priced: tuple[Priced, Priced],
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
        return WindowSolution(
            **decided, **values, cold_start=cold, flow=attempt.flow, priced=priced[0],
            relaxed=priced[1], objective=self._solver.objective, left=left,
        )  # fmt: skip

    def _prices(self, inputs: WindowInputs, attempt: Attempt) -> Priced:
        """Return prices of the last solve, and what limits cost in it (5.1).

        price_n = (dual of n's balance row)/Δ + Σ_l PTDF_ln·μ_l − Σ_tangents dual·(what n adds to losses)
        """
        energy = attempt.row_dual[self.fleet.rows["balance"]][:, inputs.cells.cell]
        duals = self.limits.duals(attempt.row_dual, inputs)
        every = np.arange(inputs.periods)
        congestion = attempt.point.factors(inputs, every, duals.flow)
        loss = self.losses.price_part(attempt.row_dual, inputs) / inputs.period_hours
        return Priced(
            price=energy / inputs.period_hours + congestion + loss, congestion=congestion, loss=loss,
            reserve=self._reserve_prices(inputs, attempt), line=duals.line, corridor=duals.corridor,
            pairs=duals.pairs,
        )  # fmt: skip

    def _reserve_prices(self, inputs: WindowInputs, attempt: Attempt) -> Floats:
        """Return (dual of a product's requirement)/Δ, array (period, product), at least 0 (2.7)."""
        if not inputs.reserve.there:
            return np.zeros((inputs.periods, 0))
        return attempt.row_dual[self.fleet.rows["reserve_requirement"]] / inputs.period_hours


def _first_point(inputs: WindowInputs, start: Start | None) -> Point:
    """Return where a window's flows and losses are linearised first."""
    if inputs.losses is None:
        return Point.at(inputs, -inputs.demand_at_bus)
    seen = None if start is None else start.injection_from(inputs.first, inputs.periods)
    return Point.at(inputs, np.zeros((inputs.periods, inputs.buses)) if seen is None else seen)


_MOST_MOVES = 60
"""Linearisations after which a window is kept with the losses it has; the audit then says how far off."""
_WITHIN = ("loss", "exchange", "energy_short", "stopped", "matched", "tie_way")
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
        inputs.cells.cell.tobytes(),
        inputs.cells.pair_from.tobytes(),
        inputs.cells.pair_to.tobytes(),
        inputs.losses is not None,
    )
