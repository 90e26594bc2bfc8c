"""Losses of lines in a window, linearised again and again until they are those of the flows.

Public names: `LOSS_ACCURACY`, `LossRows`.

A column holds what is lost at the buses of each cell, and rows tie it to injections by tangents of the true
losses (`LineLosses`), taken anew at the flows of each solution: successive linearisation with losses drawn in
the network, as in Litvinov, Zheng, Rosenwald & Shamsollahi, Marginal Loss Modeling in LMP Calculation, IEEE
Transactions on Power Systems 19(2), 2004 (from memory).

At first each tangent is an equation, so that losses are neither shirked nor invented, whatever prices are.
Where that goes to and fro, since the best plan lies between vertices, the tangents met so far hold
together as inequalities (Kelley, The Cutting-Plane Method for Solving Convex Programs, J. SIAM 8(4), 1960;
from memory): losses are convex in flows, so where power has a price the losses are the largest of them.
Should losses then lie above the true ones, because they cost nothing or pay, the equation returns for good.

Tangents close in on such a plan by a constant factor a step. Once losses are within `LOSS_CLOSE` of the true
ones and steps are slow, the rows only move by what is missing: prices stay as they are, and the plan comes to
balance with its true losses. Its cost is then within about `LOSS_CLOSE` × price of the least, an hour.
"""

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from simulator.dispatch.compiled import CompiledFleet
from simulator.dispatch.injections import InjectionMap
from simulator.dispatch.inputs import WindowInputs
from simulator.dispatch.point import Point
from simulator.dispatch.solver import BASIC, LOWER, LinearSolver

__all__ = ["LOSS_ACCURACY", "LossRows"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]
Statuses = NDArray[np.int8]

LOSS_ACCURACY = 1e-7
"""Losses of a cell and period this close to those of its flows, MW, are the same."""
LOSS_CLOSE = 1e-3
"""MW; losses of a cell and period this close to the true ones are worth no more tangents."""
_SLOTS = 8  # tangents kept of each cell and period
_PATIENCE = 2  # linearisations before tangents are kept
_STALLED = 5  # steps without a smaller gap after which none is expected
_RESUMED = 3  # times that tangents are taken again after shifts
_SLOW = 0.05  # of the gap before; less is the pace of a plan at a vertex, which ends by itself
_ROOM = 10.0  # MW above the true losses that no optimum comes near
_SMALLEST_FACTOR = 1e-9


class LossRows:
    """The rows of losses, in slots of one row for each period and cell; they stand before those of limits.

    slots : how many; count : rows in all
    factor : array (slot, period, cell, bus); base : array (slot, period, cell), MW
    exact : array (period, cell), whether the newest tangent, in slot 0, is an equation
    last_step : how far losses were from the true ones, MW, when tangents closed in no further, or after
        if a shift led to another plan
    """

    def __init__(self, inputs: WindowInputs, fleet: CompiledFleet, injection: InjectionMap) -> None:
        self._injection, self._columns = injection, fleet.matrix.shape[1]
        self._first_row = fleet.matrix.shape[0]
        self._column = fleet.columns["loss"] if inputs.losses else np.zeros((0, 0), dtype=np.int64)
        self.slots = _SLOTS if inputs.losses else 0
        self.count = self.slots * self._column.size

    @property
    def rows(self) -> Integers:
        """Positions of the rows, array (slot, period, cell)."""
        return self._first_row + np.arange(self.count).reshape(self.slots, *self._column.shape)

    def begin_window(self, inputs: WindowInputs, point: Point) -> None:
        """Forget all tangents but that of a point."""
        shape = self.slots, *self._column.shape
        self.factor, self.base = np.zeros((*shape, inputs.buses)), np.zeros(shape)
        self.used = np.zeros(shape, dtype=bool)
        self.exact = np.ones(shape[1:], dtype=bool)
        self._always_exact = np.zeros(shape[1:], dtype=bool)
        self.begin_solve()
        self._put(inputs, point)

    def begin_solve(self) -> None:
        """Count steps from here."""
        self.moves, self.settling, self.last_step = 0, False, 0.0
        self._last, self._best, self._without, self._resumed = np.inf, np.inf, 0, 0

    def _put(self, inputs: WindowInputs, point: Point) -> None:
        """Put the tangent of a point into slot 0."""
        losses, slope = inputs.losses, point.slope
        if losses is None or slope is None:
            return
        share, lost = _shares(inputs), losses.lost(point.flow)
        period = np.repeat(np.arange(inputs.periods), len(share))
        weight = (share[None] * slope[:, None]).reshape(len(period), -1)
        factor = point.factors(inputs, period, weight).reshape(inputs.periods, len(share), -1)
        value = lost @ share.T
        self.factor[0] = factor
        self.base[0] = value - np.einsum("tcn,tn->tc", factor, point.injection)
        self.used[0] = True

    def matrix(self, inputs: WindowInputs) -> tuple[sparse.csr_array, Floats, Floats]:
        """Return the rows: loss − factor·injections ≥ base, an equation where it is exact."""
        flat = self.factor.reshape(-1, inputs.buses) @ self._injection.at_bus
        over_columns = flat.reshape(*self.rows.shape, -1)
        over_columns[np.abs(over_columns) <= _SMALLEST_FACTOR] = 0.0
        slot, period, cell, injected = np.nonzero(over_columns)
        row = (self.rows - self._first_row)[slot, period, cell]
        own = self.used.nonzero()
        entries = np.concatenate(
            [-over_columns[slot, period, cell, injected], np.ones(len(own[0]))]
        )
        rows = np.concatenate([row, (self.rows - self._first_row)[own]])
        columns = np.concatenate([self._injection.columns[period, injected], self._column[own[1:]]])
        lower = self.base - np.einsum("stcn,tn->stc", self.factor, inputs.demand_at_bus)
        upper = np.full(lower.shape, np.inf)
        upper[0] = np.where(self.exact, lower[0], np.inf)
        held = self.used.copy()
        held[1:] &= ~self.exact
        lower = np.where(held, lower, -np.inf)
        shape = (self.count, self._columns)
        made = sparse.csr_array((entries, (rows, columns)), shape=shape)
        self._bounds = lower.ravel(), upper.ravel()
        return made, *self._bounds

    def bound_columns(self, solver: LinearSolver, inputs: WindowInputs, point: Point) -> None:
        """Bound losses where tangents alone would leave them open above."""
        assert inputs.losses is not None
        lost = inputs.losses.lost(point.flow) @ _shares(inputs).T
        free = np.full(lost.shape, np.inf)
        upper = np.where(self.exact, free, 2 * lost + _ROOM)
        solver.set_column_bounds(self._column.ravel(), -free.ravel(), upper.ravel())

    @property
    def first_statuses(self) -> Statuses:
        """The statuses rows begin with: the newest tangent holds, array (row,)."""
        statuses = np.full(self.rows.shape, BASIC, dtype=np.int8)
        statuses[:1] = LOWER
        return statuses.ravel()

    def move(self, inputs: WindowInputs, gap: Floats, point: Point, statuses: Statuses) -> Statuses:
        """Take in the tangent at another point; return the rows' new statuses.

        gap : losses of the last solution less those of its flows, array (period, cell), MW
        """
        status = statuses.reshape(self.rows.shape).copy()
        self.moves += 1
        self._always_exact |= ~self.exact & (gap > LOSS_ACCURACY)
        stuck = (np.abs(gap) > LOSS_ACCURACY) & (self.moves >= _PATIENCE)
        keep = (~self.exact | stuck) & ~self._always_exact
        self.exact = ~keep
        status[1:, self.exact] = BASIC
        self._retire(keep, status)
        self._put(inputs, point)
        return status.ravel()

    def settles(self, gap: Floats) -> bool:
        """Tell, step by step, whether only balance is missing; gap : array (period, cell), MW.

        Where a shift leads to another plan, further from its tangents, these are taken anew (`resume`); if
        that goes on, shifts have the last word.
        """
        worst = float(np.abs(gap).max(initial=0.0))
        self._without = 0 if worst < self._best else self._without + 1
        if worst > self._last:
            self.resume()
        self.last_step = max(self.last_step, worst) if self.settling else worst
        if not self.settling:
            self.settling = _SLOW * self._last < worst < LOSS_CLOSE or self._without >= _STALLED
        self._last, self._best = worst, min(worst, self._best)
        return self.settling

    def resume(self) -> None:
        """Take tangents again after shifts, a few times at most: the plan is another one."""
        if self.settling and self._resumed < _RESUMED:
            self.settling, self._resumed, self._without = False, self._resumed + 1, 0
            self._last = self._best = np.inf

    def end(self, worst: float) -> None:
        """Note that no step is left to take."""
        if not self.settling:
            self.last_step = worst

    def shift(self, solver: LinearSolver, gap: Floats) -> None:
        """Move every row of a cell and period by what its losses lack."""
        lower, upper = (values.reshape(self.rows.shape) for values in self._bounds)
        lower, upper = lower - gap, upper - gap
        self.moves += 1
        self._bounds = lower.ravel(), upper.ravel()
        solver.set_row_bounds(self.rows.ravel(), *self._bounds)

    def _retire(self, where: Booleans, status: Statuses) -> None:
        """Move the newest tangent of some cells and periods to the slot that serves least."""
        serves = self.used[1:] * (1 + (status[1:] != BASIC))
        slot = 1 + np.argmin(serves, axis=0)
        period, cell = np.nonzero(where)
        to = slot[where], period, cell
        for values in (self.factor, self.base, self.used, status):
            values[to] = values[0, period, cell]
        status[0, where] = BASIC

    def gaps(self, inputs: WindowInputs, solution: Floats, point: Point) -> Floats:
        """Return losses of a solution less those of its flows, array (period, cell), MW."""
        if inputs.losses is None:
            return np.zeros((0, 0))
        return solution[self._column] - inputs.losses.lost(point.flow) @ _shares(inputs).T

    def price_part(self, row_dual: Floats, inputs: WindowInputs) -> Floats:
        """Return what injections are worth less for what they lose, array (period, bus), per period."""
        if not self.slots:
            return np.zeros((inputs.periods, inputs.buses))
        dual = row_dual[self.rows]
        return -np.einsum("stc,stcn->tn", dual, self.factor)


def _shares(inputs: WindowInputs) -> Floats:
    """Return which share of a line's losses is drawn in each cell, array (cell, line)."""
    assert inputs.losses is not None
    cell, count = inputs.cells.cell, inputs.cells.count
    return inputs.losses.halves(np.eye(count)[:, cell])
