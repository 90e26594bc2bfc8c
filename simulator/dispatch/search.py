"""Deciding on and off: the integer search, and prices from the decisions it leaves (2.3, 5.5).

Public names: `Decided`, `Search`.
"""

import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from simulator.dispatch.attempt import Attempt
from simulator.dispatch.compiled import CompiledFleet
from simulator.dispatch.counts import Counts
from simulator.dispatch.inputs import WindowInputs
from simulator.dispatch.solver import BASIC, Decision, LinearSolver, SolverError
from simulator.dispatch.start import Start
from simulator.dispatch.state import State
from simulator.dispatch.ties import TieDirections

__all__ = ["Decided", "Search"]

Floats = NDArray[np.float64]
Statuses = NDArray[np.int8]
Settle = Callable[[WindowInputs, Attempt], None]

SURE = 0.01
"""The relaxation is sure of a decision this close to 0 or 1; only where the search starts hangs on it."""

_ROUNDING = 1e-7  # relative; a cost this close to its bound is at it, whatever gap is asked for
_CARRIES = 1e-6  # MW
_TIGHTER = 0.25
_TRIES = 3


@dataclass(frozen=True, eq=False)
class Decided:
    """How a search ended.

    on : array (period, unit), 0 or 1
    basis : the relaxation's, column and row statuses, rows added since included
    gap : (cost − bound) / |cost|, where no plan of the window costs less than the bound
    out_of_time : the time limit ended the search
    """

    on: Statuses
    basis: tuple[Statuses, Statuses]
    gap: float
    out_of_time: bool


class Search:
    """The search of one window, on the model that its relaxation was solved with."""

    def __init__(self, fleet: CompiledFleet, solver: LinearSolver, counts: Counts) -> None:
        self._fleet, self._solver, self._counts = fleet, solver, counts
        self._binary = np.concatenate([fleet.columns[name].ravel() for name in ("on", "tie_way")])

    def decide(
        self, inputs: WindowInputs, state: State, attempt: Attempt, settle: Settle, start: Start | None
    ) -> Decided:  # fmt: skip
        """Decide, then solve with the decisions fixed, for prices; `attempt` holds that solve.

        settle : solves what stands in the solver, adds the line rows it asks for, turns ties
        Line rows found on the relaxation stand already. Where the fixed solve needs more, the bound of
        the search still holds, so its plan is good if it is within the gap even so; if not, the search
        goes on from that plan. What is still missing to the gap then lies in the solver's tolerances,
        and the search goes on with a tighter one.
        """
        self._deadline = time.perf_counter() + inputs.seconds
        basis, bound = self._solver.basis(), self._solver.objective
        plan = self._first_plan(inputs, attempt, start)
        asked, tries = inputs.gap, 0
        while True:
            standing = self._solver.rows
            decision = self._searched(asked, plan)
            bound = max(bound, decision.bound)
            self._solver.set_basis(*self._extended(basis))
            on = self._fix(state, decision.values)
            self._fix_ways(inputs, decision.values)
            settle(inputs, attempt)
            gap, late = _gap(self._solver.objective, bound), time.perf_counter() > self._deadline
            if self._solver.rows == standing:
                asked, tries = asked * _TIGHTER, tries + 1
            if gap <= max(inputs.gap, _ROUNDING) or late or tries == _TRIES:
                break
            plan = self._decisions_of(decision.values)
            self._free(inputs, attempt)
        return Decided(on, self._extended(basis), gap, late and gap > inputs.gap)

    def _searched(self, gap: float, start: Floats | None) -> Decision:
        """Search until the gap or the deadline; a whole plan to start from is itself a result."""
        seconds = max(self._deadline - time.perf_counter(), 0.1)
        try:
            return self._run(gap, start, seconds)
        except SolverError:
            if start is None or np.isnan(start[self._binary]).any():
                raise
            return Decision(start, -np.inf)

    def _run(self, gap: float, start: Floats | None, seconds: float) -> Decision:
        with self._counts.timed("solve"):
            decision = self._solver.run_integer(self._binary, gap, seconds, start)
        self._counts.mip_solves += 1
        return decision

    def _first_plan(
        self, inputs: WindowInputs, attempt: Attempt, start: Start | None
    ) -> Floats | None:
        """Return a plan to start the search from: the best with what the relaxation is sure of fixed.

        Few decisions are left open then, so it is found at once; it starts from the last window's plan
        for the hours seen before, and if it has none that plan is the start itself.
        """
        on, last = self._fleet.columns["on"].ravel(), self._last_plan(inputs, start)
        lower, upper = (bound.ravel() for bound in attempt.data.columns["on"])
        relaxed = attempt.solution[on]
        sure_on, sure_off = relaxed >= 1 - SURE, relaxed <= SURE
        self._solver.set_column_bounds(
            on, np.where(sure_on, upper, lower), np.where(sure_off, lower, upper)
        )
        try:
            return self._decisions_of(self._run(inputs.gap, last, inputs.seconds / 2).values)
        except SolverError:
            return last
        finally:
            self._solver.set_column_bounds(on, lower, upper)

    def _last_plan(self, inputs: WindowInputs, start: Start | None) -> Floats | None:
        """Return the decisions an earlier window left for the hours of this one; NaN for all else."""
        if start is None or start.on is None:
            return None
        shift = inputs.first - start.first
        if not 0 <= shift < inputs.periods:
            return None
        plan = np.full(self._fleet.matrix.shape[1], np.nan)
        places = self._fleet.columns["on"]
        plan[places[: inputs.periods - shift]] = start.on[shift:]
        return plan

    def _decisions_of(self, plan: Floats) -> Floats:
        """Return a plan's decisions, whole; NaN for all else."""
        decisions = np.full(len(plan), np.nan)
        decisions[self._binary] = np.round(plan[self._binary])
        return decisions

    def _extended(self, basis: tuple[Statuses, Statuses]) -> tuple[Statuses, Statuses]:
        columns, rows = basis
        more = np.full(self._solver.rows - len(rows), BASIC, dtype=np.int8)
        return columns, np.concatenate([rows, more])

    def _fix(self, state: State, plan: Floats) -> Statuses:
        """Fix every decision, and the starts and stops that follow; return on, (period, unit)."""
        on = np.round(plan[self._fleet.columns["on"]])
        before = np.where(np.isnan(state.on), on[0], np.nan_to_num(state.on))
        change = np.diff(on, axis=0, prepend=before[None])
        decided = {"on": on, "start": np.maximum(change, 0.0), "stop": np.maximum(-change, 0.0)}
        for family, values in decided.items():
            places, fixed = self._fleet.columns[family].ravel(), values.ravel()
            self._solver.set_column_bounds(places, fixed, fixed)
        return on.astype(np.int8)

    def _fix_ways(self, inputs: WindowInputs, plan: Floats) -> None:
        """Fix the way of ties that carry something; idle ones stay open either way, for prices."""
        columns, lossy = self._fleet.columns, inputs.tie_lossy
        flow = [plan[columns[family][:, lossy]] for family in ("tie_forward", "tie_reverse")]
        used, way = np.maximum(*flow) > _CARRIES, np.round(plan[columns["tie_way"]])
        lower, upper = np.where(used, way, 0.0), np.where(used, way, 1.0)
        self._solver.set_column_bounds(columns["tie_way"].ravel(), lower.ravel(), upper.ravel())

    def _free(self, inputs: WindowInputs, attempt: Attempt) -> None:
        """Open again what the fixed solve closed."""
        attempt.ties = TieDirections(inputs, self._fleet.columns)
        for family in ("on", "start", "stop", "tie_way", "tie_forward", "tie_reverse"):
            lower, upper = attempt.data.columns[family]
            places = self._fleet.columns[family].ravel()
            self._solver.set_column_bounds(places, lower.ravel(), upper.ravel())


def _gap(cost: float, bound: float) -> float:
    """Return the relative gap between a plan's cost and a bound that no plan is below."""
    return max(cost - bound, 0.0) / max(abs(cost), 1e-9)
