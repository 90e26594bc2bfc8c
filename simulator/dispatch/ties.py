"""Ties run one way at a time.

Public names: `TieDirections`.

Where a price is negative, sending there and back would burn energy in losses that no real link has, and
a linear program would do it. So a direction is closed where a solution uses both, and the window solved
again.
"""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from simulator.dispatch.inputs import WindowInputs
from simulator.dispatch.solver import LinearSolver

__all__ = ["TieDirections"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

_FLOW_TOLERANCE = 1e-6  # MW
_PAYS = 1e-6  # currency; a reduced cost below minus this


class TieDirections:
    """Which directions are closed in the window being solved, arrays (direction, period, tie)."""

    def __init__(self, inputs: WindowInputs, columns: Mapping[str, Integers]) -> None:
        self._columns = np.stack([columns["tie_forward"], columns["tie_reverse"]])
        self._limit = np.stack([inputs.tie_forward, inputs.tie_reverse])
        self._closed = np.zeros(self._columns.shape, dtype=bool)
        self._turned = np.zeros(self._columns.shape[1:], dtype=bool)

    def close(self, solver: LinearSolver, solution: Floats) -> bool:
        """Close directions that a solution calls for; tell whether any was.

        First the lesser of two that are both in use; then, once a tie and period, the open one in its
        stead if it carries nothing and the closed one would pay.
        """
        flow = solution[self._columns]
        both = flow.min(axis=0) > _FLOW_TOLERANCE
        wrong = self._wrong_way(solver, flow)
        if not (both.any() or wrong.any()):
            return False
        lesser = np.stack([flow[0] < flow[1], flow[0] >= flow[1]])
        self._closed = np.where(both, lesser, np.where(wrong, ~self._closed, self._closed))
        self._turned |= wrong
        upper = np.where(self._closed, 0.0, self._limit)
        solver.set_column_bounds(self._columns.ravel(), np.zeros(upper.size), upper.ravel())
        return True

    def _wrong_way(self, solver: LinearSolver, flow: Floats) -> NDArray[np.bool_]:
        """Tell where the closed direction would pay and the open one carries nothing, (period, tie)."""
        if not self._closed.any():
            return np.zeros_like(self._turned)
        reduced = solver.reduced_costs()[self._columns]
        pays = (self._closed & (reduced < -_PAYS)).any(axis=0)
        idle = flow.max(axis=0) <= _FLOW_TOLERANCE
        wrong: NDArray[np.bool_] = pays & idle & ~self._turned
        return wrong
