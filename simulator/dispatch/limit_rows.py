"""Network limits on demand (formulation.md 2.6 and 3): the rows, when they are added, and when they go.

Public names: `Duals`, `LimitRows`.

A row reads  lower − fixed ≤ Σ_columns (w·PTDF)·factor·x ≤ upper − fixed, where w are the weights with which
line flows count in it (`NetworkLimits.weights`) and `fixed` is what demand and phase shifters make it carry
on their own. With losses, which flows cause and which change flows, both are taken around a `Point`.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from simulator.dispatch.compiled import CompiledFleet
from simulator.dispatch.injections import InjectionMap
from simulator.dispatch.inputs import WindowInputs
from simulator.dispatch.limits import NONE, Places
from simulator.dispatch.point import Point
from simulator.dispatch.priced import Pairs
from simulator.dispatch.solver import BASIC, LinearSolver
from simulator.dispatch.start import Start
from simulator.grid import Topology

__all__ = ["Duals", "LimitRows"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Statuses = NDArray[np.int8]

_IDLE_WINDOWS = 3
_SMALLEST_FACTOR = 1e-9  # HiGHS drops smaller coefficients by itself


@dataclass(frozen=True, eq=False)
class Duals:
    """What limits cost, signed, currency/MWh.

    line (period, line), corridor (period, corridor), pairs : as in `Priced`
    flow : array (period, line), all of them as if they were duals of line flows: with it
        price_n = energy + Σ_l PTDF_ln·flow_l (5.1)
    """

    line: Floats
    corridor: Floats
    pairs: Pairs
    flow: Floats


class LimitRows:
    """The rows of limits that stand in a solver's model, in the order in which they stand there.

    places, topology : what they hold, and the key of the topology of their period, arrays (row,)
    idle : array (row,), windows in which a row has not been at its limit
    carried : how many rows the window began with for limits met in hours seen before
    """

    carried = 0

    def __init__(
        self, inputs: WindowInputs, fleet: CompiledFleet, injection: InjectionMap, first_row: int
    ) -> None:
        self.injection, self._first_row = injection, first_row
        self._columns = fleet.matrix.shape[1]
        self._factors = _Factors(self.injection)
        self._clear(inputs)

    def _clear(self, inputs: WindowInputs) -> None:
        self.places, self.carried = Places.none(), 0
        self.topology, self.idle = (np.zeros(0, dtype=np.int64) for _ in range(2))
        self._weights = sparse.csr_array((0, inputs.limits.lines))

    def __len__(self) -> int:
        return len(self.places)

    def begin_window(
        self, solver: LinearSolver, inputs: WindowInputs, point: Point, start: Start | None
    ) -> Statuses:
        """Add the rows a window starts with to a model that has none; return their statuses.

        They are the rows that stood, with new bounds, less those that no longer serve: idle for several
        windows, or of a period that now has another topology; and rows for what was at its limit in
        hours seen before.
        """
        self._clear(inputs)
        if start is None or not inputs.limited:
            return np.zeros(0, dtype=np.int8)
        shift = start.moved_to(inputs.first, inputs.periods)
        serve = start.idle < _IDLE_WINDOWS
        serve &= start.topology == inputs.topology.key[start.places.period]
        serve &= _possible(inputs, start.places)
        bound = (start.idle == 0) & (start.places.period >= shift)
        carried, kept = start.places[bound].later(-shift), start.places[serve]
        carried = carried[carried.found_in(kept) < 0]
        carried = carried[_possible(inputs, carried)]
        self.carried = len(carried)
        idle = np.concatenate([start.idle[serve], np.zeros(len(carried), dtype=np.int64)])
        self._add(solver, inputs, point, kept + carried, idle)
        moved = _moved_statuses(start, shift, inputs.periods)[serve]
        return np.concatenate([moved, np.full(len(carried), BASIC, dtype=np.int8)])

    def add(self, solver: LinearSolver, inputs: WindowInputs, point: Point, places: Places) -> None:
        """Add rows for places that have none."""
        self._add(solver, inputs, point, places, np.zeros(len(places), dtype=np.int64))

    def _add(
        self, solver: LinearSolver, inputs: WindowInputs, point: Point, places: Places, idle: Integers
    ) -> None:  # fmt: skip
        if not len(places):
            return
        topology = inputs.topology.index[places.period]
        weights, factors = self._factors.of(inputs, places, topology)
        solver.add_rows(*self._rows(inputs, point, places, weights, factors))
        self.places = self.places + places
        self.topology = np.concatenate([self.topology, inputs.topology.key[places.period]])
        self.idle = np.concatenate([self.idle, idle])
        self._weights = sparse.csr_array(sparse.vstack([self._weights, weights], format="csr"))

    def _rows(
        self, inputs: WindowInputs, point: Point, places: Places, weights: sparse.csr_array,
        factors: sparse.csr_array,
    ) -> tuple[sparse.csr_array, Floats, Floats]:  # fmt: skip
        """Return rows and their bounds; factors (row, injection) are those without losses."""
        period = places.period
        fixed = _products(weights, point.flow[period])
        if point.slope is not None:
            at_bus = point.factors(inputs, period, weights.toarray())
            fixed -= (at_bus * (point.injection + inputs.demand_at_bus)[period]).sum(axis=1)
            factors = sparse.csr_array(_without_dust(at_bus @ self.injection.at_bus))
        lower, upper = inputs.limits.bounds(places)
        return self._matrix(factors, period), lower - fixed, upper - fixed

    def moved(self, inputs: WindowInputs, point: Point) -> tuple[sparse.csr_array, Floats, Floats]:
        """Return all rows that stand, and their bounds, linearised at another point."""
        nothing = sparse.csr_array((len(self), self.injection.at_bus.shape[1]))
        return self._rows(inputs, point, self.places, self._weights, nothing)

    def settle(
        self, solver: LinearSolver, inputs: WindowInputs, row_value: Floats, flow: Floats
    ) -> None:
        """Move the bounds of rows that stand by how far flows are from what the rows take them for."""
        carried = _products(self._weights, flow[self.places.period])
        fixed = carried - row_value[self._first_row :][: len(self)]
        lower, upper = inputs.limits.bounds(self.places)
        rows = self._first_row + np.arange(len(self))
        solver.set_row_bounds(rows, lower - fixed, upper - fixed)

    def excess(self, inputs: WindowInputs, flow: Floats) -> float:
        """Return by how much flows break limits that stand, MW; negative if by nothing."""
        carried = _products(self._weights, flow[self.places.period])
        lower, upper = inputs.limits.bounds(self.places)
        return float(np.maximum(lower - carried, carried - upper).max(initial=-np.inf))

    def _matrix(self, factors: sparse.csr_array, period: Integers) -> sparse.csr_array:
        """Put factors (row, injection) at the columns of each row's period."""
        owner = np.repeat(period, np.diff(factors.indptr))
        columns = self.injection.columns[owner, factors.indices]
        shape = (len(period), self._columns)
        return sparse.csr_array((factors.data, columns, factors.indptr), shape=shape)

    def duals(self, row_dual: Floats, inputs: WindowInputs) -> Duals:
        """Return what limits cost, from the duals of all rows."""
        dual = row_dual[self._first_row :] / inputs.period_hours
        lines, places = inputs.limits.lines, self.places
        shape = inputs.periods, lines + inputs.limits.forward.shape[1]
        as_is = places.contingency == NONE
        plain = np.zeros(shape)
        np.add.at(plain, (places.period[as_is], places.element[as_is]), dual[as_is])
        after = ~as_is & (dual != 0)
        flow = np.zeros((inputs.periods, lines))
        entry = self._weights.tocoo()
        np.add.at(flow, (places.period[entry.row], entry.col), dual[entry.row] * entry.data)
        return Duals(
            line=plain[:, :lines], corridor=plain[:, lines:], flow=flow,
            pairs=Pairs(
                places.contingency[after], places.element[after], places.period[after], dual[after]
            ),
        )  # fmt: skip

    def idle_after(self, row_dual: Floats) -> Integers:
        """Return in how many windows each row has not been at its limit, this one included."""
        at_limit = np.abs(row_dual[self._first_row :]) > 0
        return np.where(at_limit, 0, self.idle + 1)


class _Factors:
    """Weights and factors of rows, worked out when a place first needs them under a topology.

    They stay for the windows and runs to come on the same network, and go with it.
    """

    def __init__(self, injection: InjectionMap) -> None:
        self._injection = injection
        self._at: dict[tuple[Topology, int, int], int] = {}
        self._network: tuple[Topology, ...] = ()
        self._weights = self._values = sparse.csr_array((0, 0))

    def of(
        self, inputs: WindowInputs, places: Places, topology: Integers
    ) -> tuple[sparse.csr_array, sparse.csr_array]:
        """Return weights (row, line) and factors (row, injection)."""
        topologies = inputs.topology.topologies
        if self._network is not topologies:
            self._at, self._network = {}, topologies
            self._weights = sparse.csr_array((0, inputs.limits.lines))
            self._values = sparse.csr_array((0, self._injection.at_bus.shape[1]))
        for number in np.unique(topology).tolist():
            self._learn(inputs, topologies[number], places[topology == number])
        keys = zip(
            topology.tolist(), places.contingency.tolist(), places.element.tolist(), strict=True
        )
        rows = [self._at[topologies[number], lost, element] for number, lost, element in keys]
        return self._weights[rows], self._values[rows]

    def _learn(self, inputs: WindowInputs, topology: Topology, places: Places) -> None:
        at_once = Places(places.contingency, places.element, np.zeros_like(places.period))
        places = at_once[np.unique(at_once.keys, return_index=True)[1]]
        names = list(zip(places.contingency.tolist(), places.element.tolist(), strict=True))
        fresh = [place for place, name in enumerate(names) if (topology, *name) not in self._at]
        if not fresh:
            return
        weights = inputs.limits.weights(topology, places[fresh])
        factors = _without_dust(topology.collected(weights.toarray()) @ self._injection.at_bus)
        known = len(self._at)
        self._at |= {(topology, *names[place]): known + at for at, place in enumerate(fresh)}
        self._weights = sparse.csr_array(sparse.vstack([self._weights, weights]))
        self._values = sparse.csr_array(sparse.vstack([self._values, sparse.csr_array(factors)]))


def _without_dust(factors: Floats) -> Floats:
    return np.where(np.abs(factors) > _SMALLEST_FACTOR, factors, 0.0)


def _products(weights: sparse.csr_array, flow: Floats) -> Floats:
    """Return Σ_l weight_rl·flow_rl, array (row,), for flows (row, line)."""
    entry = weights.tocoo()
    total = np.zeros(weights.shape[0])
    np.add.at(total, entry.row, entry.data * flow[entry.row, entry.col])
    return total


def _possible(inputs: WindowInputs, places: Places) -> NDArray[np.bool_]:
    """Tell which places have a meaning under the topology of their period, array (row,)."""
    found = places.contingency == NONE
    for number in np.unique(inputs.topology.index[places.period]).tolist():
        here = inputs.topology.index[places.period] == number
        held = np.unique(
            inputs.limits.contingencies.after(inputs.topology.topologies[number]).owner
        )
        found |= here & np.isin(places.contingency, held)
    return found


def _moved_statuses(start: Start, shift: int, periods: int) -> Statuses:
    """Return statuses of the rows that stood, moved along with the hours; basic where none is known."""
    source = start.places.later(shift).found_in(start.places)
    moved = np.where(source >= 0, start.limit_rows[source], BASIC)
    later = start.places.period + shift < periods
    return np.where(later, moved, start.limit_rows).astype(np.int8)
