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
from simulator.dispatch.start import Start

__all__ = ["FLOW_TOLERANCE", "InjectionMap", "LineRows"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]
Statuses = NDArray[np.int8]

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
    carried : how many rows the window began with for limits met in hours seen before
    """

    carried = 0

    def __init__(self, inputs: WindowInputs, fleet: CompiledFleet) -> None:
        self.injection = InjectionMap(inputs, dict(fleet.columns))
        self._first_row = fleet.matrix.shape[0]
        self._columns = fleet.matrix.shape[1]
        self._known: dict[tuple[int, int], int] = {}
        self._factors = sparse.csr_array((0, self.injection.at_bus.shape[1]))
        self._clear()

    def _clear(self) -> None:
        empty = np.zeros(0, dtype=np.int64)
        self.line, self.period, self.topology, self.idle = (empty.copy() for _ in range(4))

    def __len__(self) -> int:
        return len(self.line)

    def begin_window(
        self, solver: LinearSolver, inputs: WindowInputs, fixed: Floats, start: Start | None
    ) -> Statuses:
        """Add the rows a window starts with to a model that has none; return their statuses.

        They are the rows that stood, with new bounds, less those that no longer serve: idle for several
        windows, or of a period that now has another topology; and rows for what was at its limit in
        hours seen before.
        """
        self._clear()
        self.carried = 0
        if start is None or not inputs.limited:
            return np.zeros(0, dtype=np.int8)
        shift = start.moved_to(inputs.first, inputs.periods)
        serve = (start.idle < _IDLE_WINDOWS) & (
            start.topology == inputs.topology.index[start.period]
        )
        carried = _carried(start, shift, inputs.rating.shape)
        carried[start.period[serve], start.line[serve]] = False
        period, line = np.nonzero(carried)
        self.carried = len(line)
        self._add(
            solver, inputs, fixed, np.concatenate([start.line[serve], line]),
            np.concatenate([start.period[serve], period]),
            np.concatenate([start.idle[serve], np.zeros(len(line), dtype=np.int64)]),
        )  # fmt: skip
        moved = _moved_statuses(start, shift, inputs.rating.shape)[serve]
        return np.concatenate([moved, np.full(len(line), BASIC, dtype=np.int8)])

    def _bounds(
        self, inputs: WindowInputs, fixed: Floats, line: Integers, period: Integers
    ) -> tuple[Floats, Floats]:
        rating, base = inputs.rating[period, line], fixed[period, line]
        return -rating - base, rating - base

    def active(self, inputs: WindowInputs) -> Booleans:
        """Tell which (period, line) have a row."""
        found = np.zeros(inputs.rating.shape, dtype=bool)
        found[self.period, self.line] = True
        return found

    def add(
        self, solver: LinearSolver, inputs: WindowInputs, fixed: Floats, missing: Booleans
    ) -> None:
        """Add rows for `missing`, array (period, line)."""
        period, line = np.nonzero(missing)
        self._add(solver, inputs, fixed, line, period, np.zeros(len(line), dtype=np.int64))

    def _add(
        self, solver: LinearSolver, inputs: WindowInputs, fixed: Floats,
        line: Integers, period: Integers, idle: Integers,
    ) -> None:  # fmt: skip
        if not len(line):
            return
        topology = inputs.topology.index[period]
        lower, upper = self._bounds(inputs, fixed, line, period)
        solver.add_rows(self._matrix(inputs, line, period, topology), lower, upper)
        self.line = np.concatenate([self.line, line])
        self.period = np.concatenate([self.period, period])
        self.topology = np.concatenate([self.topology, topology])
        self.idle = np.concatenate([self.idle, idle])

    def _matrix(
        self, inputs: WindowInputs, line: Integers, period: Integers, topology: Integers
    ) -> sparse.csr_array:
        """Coefficients of new rows, sparse array (row, column): PTDF of each line over injections."""
        self._learn(inputs, line, topology)
        keys = zip(topology.tolist(), line.tolist(), strict=True)
        rows = self._factors[[self._known[key] for key in keys]]
        owner = np.repeat(period, np.diff(rows.indptr))
        columns = self.injection.columns[owner, rows.indices]
        shape = (len(line), self._columns)
        return sparse.csr_array((rows.data, columns, rows.indptr), shape=shape)

    def _learn(self, inputs: WindowInputs, line: Integers, topology: Integers) -> None:
        """Work out the factors of lines that never had a row under their topology."""
        for number in np.unique(topology).tolist():
            lines = np.unique(line[topology == number])
            fresh = np.array(
                [one for one in lines.tolist() if (number, one) not in self._known], int
            )
            if not len(fresh):
                continue
            ptdf = inputs.topology.topologies[number].ptdf_rows(fresh)
            factors = (self.injection.at_bus.T @ ptdf.T).T
            factors[np.abs(factors) <= _SMALLEST_FACTOR] = 0.0
            known = len(self._known)
            self._known |= {(number, one): known + at for at, one in enumerate(fresh.tolist())}
            self._factors = sparse.vstack([self._factors, sparse.csr_array(factors)], format="csr")

    def duals(self, row_dual: Floats, inputs: WindowInputs) -> Floats:
        """Return signed duals of line limits, array (period, line)."""
        found = np.zeros(inputs.rating.shape)
        np.add.at(found, (self.period, self.line), row_dual[self._first_row :])
        return found

    def idle_after(self, row_dual: Floats) -> Integers:
        """Return in how many windows each row has not been at its limit, this one included."""
        at_limit = np.abs(row_dual[self._first_row :]) > 0
        return np.where(at_limit, 0, self.idle + 1)


def _moved_statuses(start: Start, shift: int, shape: tuple[int, ...]) -> Statuses:
    """Return statuses of the rows that stood, moved along with the hours; basic where none is known."""
    periods, lines = shape
    by_place = np.full((periods + shift, lines), BASIC, dtype=np.int8)
    by_place[start.period, start.line] = start.line_rows
    moved = by_place[start.period + shift, start.line]
    return np.where(start.period < periods - shift, moved, start.line_rows)


def _carried(start: Start, shift: int, shape: tuple[int, ...]) -> Booleans:
    """Tell which (period, line) were at their limit in the last window."""
    wanted = np.zeros(shape, dtype=bool)
    bound = (start.idle == 0) & (start.period >= shift)
    wanted[start.period[bound] - shift, start.line[bound]] = True
    return wanted
