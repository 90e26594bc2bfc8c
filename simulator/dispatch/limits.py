"""Line limits on demand (formulation.md 2.6 and 3): the rows, when they are added, and when they go.

Public names: `InjectionMap`, `LineRows`.

A row (line, period) reads  −F − fixed ≤ Σ_columns PTDF·factor·x ≤ F − fixed,  where `fixed` is the flow
that demand and phase shifters cause on their own.
"""

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from simulator.dispatch.compiled import CompiledFleet
from simulator.dispatch.inputs import WindowInputs
from simulator.dispatch.solver import BASIC, LinearSolver

__all__ = ["FLOW_TOLERANCE", "InjectionMap", "LineRows"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

FLOW_TOLERANCE = 1e-6
"""A flow further than this beyond its rating, MW, asks for a row."""

_IDLE_WINDOWS = 3
_SMALLEST_FACTOR = 1e-9  # HiGHS drops smaller coefficients by itself


class InjectionMap:
    """Which columns inject where.

    columns : array (period, injection), positions in the matrix
    at_bus : sparse array (bus, injection), factor with which a column's value enters its bus; a tie
        has two
    """

    def __init__(self, inputs: WindowInputs, columns: dict[str, Integers]) -> None:
        arrives = inputs.tie_delivered
        sent = np.full(len(arrives), -1.0)
        parts: list[tuple[str, list[tuple[Integers, Floats]]]] = [
            ("output", [_plus(inputs.unit.bus)]),
            ("renewable", [_plus(inputs.renewable_bus)]),
            ("discharge", [_plus(inputs.store.bus)]),
            ("charge", [_minus(inputs.store.bus)]),
            ("tie_forward", [(inputs.tie_from, sent), (inputs.tie_to, arrives)]),
            ("tie_reverse", [(inputs.tie_to, sent), (inputs.tie_from, arrives)]),
            ("unserved", [_plus(inputs.load_bus)]),
            ("surplus", [_minus(np.arange(inputs.buses))]),
        ]
        self.columns = np.concatenate([columns[family] for family, _ in parts], axis=1)
        blocks = [_placed(ends, inputs.buses) for _, ends in parts]
        self.at_bus = sparse.csr_array(sparse.hstack(blocks))

    def injections(self, solution: Floats, inputs: WindowInputs) -> Floats:
        """Return net injections, array (period, bus), MW, of a solution."""
        return (self.at_bus @ solution[self.columns].T).T - inputs.demand_at_bus


def _plus(bus: Integers) -> tuple[Integers, Floats]:
    return bus, np.ones(len(bus))


def _minus(bus: Integers) -> tuple[Integers, Floats]:
    return bus, np.full(len(bus), -1.0)


def _placed(ends: list[tuple[Integers, Floats]], buses: int) -> sparse.coo_array:
    count = len(ends[0][0])
    bus = np.concatenate([bus for bus, _ in ends])
    factor = np.concatenate([factor for _, factor in ends])
    element = np.tile(np.arange(count), len(ends))
    return sparse.coo_array((factor, (bus, element)), shape=(buses, count))


class LineRows:
    """The line rows that stand in a solver's model, in the order in which they stand there.

    line, period, topology : arrays (row,); idle : windows in which a row has not been at its limit
    """

    def __init__(self, inputs: WindowInputs, fleet: CompiledFleet) -> None:
        self.injection = InjectionMap(inputs, dict(fleet.columns))
        self._first_row = fleet.matrix.shape[0]
        self._columns = fleet.matrix.shape[1]
        empty = np.zeros(0, dtype=int)
        self.line, self.period, self.topology, self.idle = (empty.copy() for _ in range(4))

    def __len__(self) -> int:
        return len(self.line)

    @property
    def rows(self) -> Integers:
        """Positions of the rows in the model."""
        return self._first_row + np.arange(len(self))

    def begin_window(self, solver: LinearSolver, inputs: WindowInputs, fixed: Floats) -> None:
        """Give every row its bounds in a new window, and let go of those that no longer serve.

        A row whose period now has another topology is opened at once; it and rows idle for several
        windows are deleted as soon as they are basic, since only then the basis survives.
        """
        leave = self._strange(inputs) | (self.idle >= _IDLE_WINDOWS)
        if leave.any():
            row_status = solver.basis()[1]
            gone = leave & (row_status[self.rows] == BASIC)
            solver.delete_rows(self.rows[gone])
            self._take(~gone)
        lower, upper = self._bounds(inputs, fixed, self.line, self.period)
        strange = self._strange(inputs)
        lower[strange], upper[strange] = -np.inf, np.inf
        solver.set_row_bounds(self.rows, lower, upper)

    def open(self, solver: LinearSolver) -> None:
        """Let every row hold nothing: for a run without line limits on a model that has some."""
        free = np.full(len(self), np.inf)
        solver.set_row_bounds(self.rows, -free, free)

    def _strange(self, inputs: WindowInputs) -> Booleans:
        strange: Booleans = self.topology != inputs.topology.index[self.period]
        return strange

    def shifted(self, status: Integers, shift: int, periods: int, lines: int) -> Integers:
        """Return row statuses moved `shift` periods towards the start; basic where none is known."""
        by_place = np.full((periods + shift, lines), BASIC)
        by_place[self.period, self.line] = status
        moved = by_place[self.period + shift, self.line]
        return np.where(self.period < periods - shift, moved, status)

    def carried(self, shift: int, inputs: WindowInputs) -> Booleans:
        """Tell which (period, line) were at their limit in the last window and have no row here yet."""
        wanted = np.zeros(inputs.rating.shape, dtype=bool)
        bound = (self.idle == 0) & (self.period >= shift)
        wanted[self.period[bound] - shift, self.line[bound]] = True
        return wanted & ~self.active(inputs)

    def _take(self, keep: Booleans) -> None:
        self.line, self.period, self.topology, self.idle = (
            values[keep] for values in (self.line, self.period, self.topology, self.idle)
        )

    def _bounds(
        self, inputs: WindowInputs, fixed: Floats, line: Integers, period: Integers
    ) -> tuple[Floats, Floats]:
        rating, base = inputs.rating[period, line], fixed[period, line]
        return -rating - base, rating - base

    def active(self, inputs: WindowInputs) -> Booleans:
        """Tell which (period, line) have a row that holds in this window."""
        here = self.topology == inputs.topology.index[self.period]
        found = np.zeros(inputs.rating.shape, dtype=bool)
        found[self.period[here], self.line[here]] = True
        return found

    def add(
        self, solver: LinearSolver, inputs: WindowInputs, fixed: Floats, missing: Booleans
    ) -> None:
        """Add rows for `missing`, array (period, line)."""
        period, line = np.nonzero(missing)
        topology = inputs.topology.index[period]
        lower, upper = self._bounds(inputs, fixed, line, period)
        solver.add_rows(self._matrix(inputs, line, period, topology), lower, upper)
        self.line = np.concatenate([self.line, line])
        self.period = np.concatenate([self.period, period])
        self.topology = np.concatenate([self.topology, topology])
        self.idle = np.concatenate([self.idle, np.zeros(len(line), dtype=int)])

    def _matrix(
        self, inputs: WindowInputs, line: Integers, period: Integers, topology: Integers
    ) -> sparse.csr_array:
        """Coefficients of new rows, sparse array (row, column): PTDF of each line over injections."""
        factors = np.zeros((len(line), self.injection.at_bus.shape[1]))
        for number in np.unique(topology):
            here = topology == number
            lines, place = np.unique(line[here], return_inverse=True)
            ptdf = inputs.topology.topologies[number].ptdf_rows(lines)
            factors[here] = (self.injection.at_bus.T @ ptdf.T).T[place]
        row, injection = np.nonzero(np.abs(factors) > _SMALLEST_FACTOR)
        columns = self.injection.columns[period[row], injection]
        shape = (len(line), self._columns)
        return sparse.csr_array((factors[row, injection], (row, columns)), shape=shape)

    def duals(self, row_dual: Floats, inputs: WindowInputs) -> Floats:
        """Return signed duals of line limits, array (period, line), and note which rows are idle."""
        own = row_dual[self._first_row :]
        self.idle = np.where(np.abs(own) > 0, 0, self.idle + 1)
        found = np.zeros(inputs.rating.shape)
        np.add.at(found, (self.period, self.line), own)
        return found
