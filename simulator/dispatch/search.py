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


@dataclass(frozen=True, eq=False)
class Relaxed:
    """Cost of the relaxation, and reduced costs (column,) of its optimum."""

    cost: float
    reduced: Floats


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
        A first plan that is within the gap of the relaxation needs no search. Line rows found on the
        relaxation stand already. Where the fixed solve needs more, the bound of
        the search still holds, so its plan is good if it is within the gap even so; if not, the search
        goes on from that plan. Where no row was missing and the gap is missed even so, what is missing
        lies in the solver's tolerances, and the search goes on with a tighter gap.
        """
        self._deadline = time.perf_counter() + inputs.seconds
        basis, bound = self._solver.basis(), self._solver.objective
        relaxed = Relaxed(bound, self._solver.reduced_costs())
        best, plan = self._first_plan(inputs, attempt, start)
        asked, tries = inputs.gap, 0
        while True:
            standing = self._solver.rows
            if _gap(best, bound) > asked or plan is None:
                self._narrow(relaxed, best, attempt)
                decision = self._searched(asked, plan)
                bound = max(bound, min(decision.bound, best))
                plan = decision.values
            self._solver.set_basis(*self._extended(basis))
            on = self._fix(state, plan)
            self._fix_ways(inputs, plan)
            settle(inputs, attempt)
            best, late = self._solver.objective, time.perf_counter() > self._deadline
            gap = _gap(best, bound)
            if self._solver.rows == standing:
                asked, tries = asked * _TIGHTER, tries + 1
            if gap <= max(inputs.gap, _ROUNDING) or late or tries == _TRIES:
                break
            plan = self._whole(plan)
            self._free(inputs, attempt)
        return Decided(on, self._extended(basis), gap, late and gap > inputs.gap)

    def _searched(self, gap: float, start: Floats | None) -> Decision:
        """Search until the gap or the deadline; a whole plan to start from is itself a result."""
        seconds = max(self._deadline - time.perf_counter(), 0.1)
        decisions = None if start is None else self._whole(start)
        try:
            return self._run(gap, decisions, seconds)
        except SolverError:
            if start is None or np.isnan(start[self._binary]).any():
                raise
            return Decision(start, -np.inf, np.inf)

    def _run(self, gap: float, start: Floats | None, seconds: float) -> Decision:
        with self._counts.timed("solve"):
            decision = self._solver.run_integer(self._binary, gap, seconds, start)
        self._counts.mip_solves += 1
        return decision

    def _first_plan(
        self, inputs: WindowInputs, attempt: Attempt, start: Start | None
    ) -> tuple[float, Floats | None]:
        """Return a first plan and its cost: the best with the units fixed that the relaxation is sure of.

        It is sure of a unit that it has wholly on or off in every hour. What is left is small and soon
        solved, from the last window's plan for the hours seen before; if no plan is found, these
        decisions are where the search starts, at no known cost.
        """
        on, last = self._fleet.columns["on"], self._last_plan(inputs, start)
        lower, upper = attempt.data.columns["on"]
        relaxed = attempt.solution[on]
        sure = (np.abs(relaxed - np.round(relaxed)) <= SURE).all(axis=0)
        fixed = np.clip(np.round(relaxed), lower, upper)
        self._bound("on", np.where(sure, fixed, lower), np.where(sure, fixed, upper))
        try:
            decision = self._run(inputs.gap / 2, last, inputs.seconds / 2)
        except SolverError:
            return np.inf, last
        else:
            return decision.cost, decision.values
        finally:
            self._bound("on", lower, upper)

    def _narrow(self, relaxed: "Relaxed", best: float, attempt: Attempt) -> None:
        """Fix what no plan cheaper than the best known one can change, by reduced costs.

        A decision away from its bound in the relaxation costs its reduced cost more than the
        relaxation at least; where that is more than the best plan, it stays. Starts and stops are
        whole in any plan, so that they are decisions too.
        """
        if not np.isfinite(best):
            return
        room = best - relaxed.cost + _ROUNDING * abs(best)
        for family in ("on", "start", "stop"):
            lower, upper = attempt.data.columns[family]
            reduced = relaxed.reduced[self._fleet.columns[family]]
            self._bound(
                family,
                np.where(reduced < -room, upper, lower),
                np.where(reduced > room, lower, upper),
            )

    def _bound(self, family: str, lower: Floats, upper: Floats) -> None:
        places = self._fleet.columns[family].ravel()
        self._solver.set_column_bounds(places, lower.ravel(), upper.ravel())

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

    def _whole(self, plan: Floats) -> Floats:
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
            self._bound(family, values, values)
        return on.astype(np.int8)

    def _fix_ways(self, inputs: WindowInputs, plan: Floats) -> None:
        """Fix the way of ties that carry something; idle ones stay open either way, for prices."""
        columns, lossy = self._fleet.columns, inputs.tie_lossy
        flow = [plan[columns[family][:, lossy]] for family in ("tie_forward", "tie_reverse")]
        used, way = np.maximum(*flow) > _CARRIES, np.round(plan[columns["tie_way"]])
        lower, upper = np.where(used, way, 0.0), np.where(used, way, 1.0)
        self._bound("tie_way", lower, upper)

    def _free(self, inputs: WindowInputs, attempt: Attempt) -> None:
        """Open again what the fixed solve closed."""
        attempt.ties = TieDirections(inputs, self._fleet.columns)
        for family in ("on", "start", "stop", "tie_way", "tie_forward", "tie_reverse"):
            self._bound(family, *attempt.data.columns[family])


def _gap(cost: float, bound: float) -> float:
    """Return the relative gap between a plan's cost and a bound that no plan is below."""
    return max(cost - bound, 0.0) / max(abs(cost), 1e-9)
