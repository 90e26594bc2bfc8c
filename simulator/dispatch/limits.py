"""What the network may carry, and what a flow breaks of it (formulation.md 2.6 and 3).

Public names: `FLOW_TOLERANCE`, `NONE`, `NetworkLimits`, `Places`.

Three kinds of limit, all on sums of line flows: a line within its rating, a corridor within its limits,
and a line within its emergency rating after a contingency. `limit_rows.py` makes rows of them.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from simulator.grid import Contingencies, Topology, TopologySchedule

__all__ = ["FLOW_TOLERANCE", "NONE", "NetworkLimits", "Places"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

FLOW_TOLERANCE = 1e-6
"""A flow further than this beyond its limit, MW, asks for a row."""
NONE = -1
"""The contingency in which nothing is lost."""
_ONE_KEY = 1 << 21  # elements, contingencies and periods each stay far below


@dataclass(frozen=True, eq=False)
class Places:
    """What rows hold: a line or a corridor, in a period, as things are or after a contingency.

    contingency : array (row,), NONE where nothing is lost
    element : array (row,), a line, or the number of lines + a corridor
    period : array (row,)
    """

    contingency: Integers
    element: Integers
    period: Integers

    @classmethod
    def none(cls) -> "Places":
        """Return no place."""
        return cls(*(np.zeros(0, dtype=np.int64) for _ in range(3)))

    def __len__(self) -> int:
        return len(self.element)

    def __getitem__(self, which: Any) -> "Places":
        return Places(self.contingency[which], self.element[which], self.period[which])

    def __add__(self, more: "Places") -> "Places":
        return Places(
            np.concatenate([self.contingency, more.contingency]),
            np.concatenate([self.element, more.element]),
            np.concatenate([self.period, more.period]),
        )

    def later(self, periods: int) -> "Places":
        """Return the same places some periods later."""
        return Places(self.contingency, self.element, self.period + periods)

    @property
    def keys(self) -> Integers:
        """One number a place, array (row,)."""
        return ((self.contingency + 1) * _ONE_KEY + self.element) * _ONE_KEY + self.period

    def found_in(self, others: "Places") -> Integers:
        """Return where among others each place is, array (row,); −1 where it is not."""
        if not len(others):
            return np.full(len(self), -1)
        keys, wanted = others.keys, self.keys
        order = np.argsort(keys, kind="stable")
        at = order[np.minimum(np.searchsorted(keys, wanted, sorter=order), len(keys) - 1)]
        return np.where(keys[at] == wanted, at, -1)


@dataclass(frozen=True, eq=False)
class NetworkLimits:
    """What lines and corridors may carry over some periods.

    rating, emergency : arrays (period, line), MW, as things are and after a contingency
    weight : sparse array (corridor, line), what each line's flow counts in a corridor
    forward, reverse : arrays (period, corridor), MW
    contingencies : those after which emergency ratings hold, none unless the run is to be secure
    """

    rating: Floats
    emergency: Floats
    weight: sparse.csr_array
    forward: Floats
    reverse: Floats
    contingencies: Contingencies

    def __getitem__(self, periods: slice) -> "NetworkLimits":
        return NetworkLimits(
            self.rating[periods], self.emergency[periods], self.weight,
            self.forward[periods], self.reverse[periods], self.contingencies,
        )  # fmt: skip

    @property
    def lines(self) -> int:
        """Number of lines."""
        return self.rating.shape[1]

    def corridor_flow(self, flow: Floats) -> Floats:
        """Return flows of corridors, array (period, corridor), MW, from those of lines."""
        return np.asarray((self.weight @ flow.T).T)

    def bounds(self, places: Places) -> tuple[Floats, Floats]:
        """Return the least and the most that places may carry, arrays (row,), MW."""
        upper = np.concatenate([self.rating, self.forward], axis=1)[places.period, places.element]
        lower = np.concatenate([self.rating, self.reverse], axis=1)[places.period, places.element]
        lost = places.contingency != NONE
        after = self.emergency[places.period[lost], places.element[lost]]
        upper[lost] = lower[lost] = after
        return -lower, upper

    def weights(self, topology: Topology, places: Places) -> sparse.csr_array:
        """Return rows, sparse array (row, line), whose products with flows are what places carry."""
        lost = np.flatnonzero(places.contingency != NONE)
        kept = np.flatnonzero(places.contingency == NONE)
        every = sparse.vstack([sparse.eye_array(self.lines), self.weight], format="csr")
        rows = [every[places.element[kept]]]
        if len(lost):
            after = self.contingencies.after(topology)
            rows.append(after.weights(places.contingency[lost], places.element[lost]))
        order = np.argsort(np.concatenate([kept, lost]), kind="stable")
        return sparse.csr_array(sparse.vstack(rows, format="csr")[order])

    def broken(self, flow: Floats, schedule: TopologySchedule, standing: Places) -> Places:
        """Return the places beyond their limits that do not stand yet; flow : (period, line), MW.

        Of the contingencies that break a line's limit in a period only the worst: rows for the others
        are seldom needed once it holds.
        """
        as_is = self._broken_as_is(flow)
        found = as_is[as_is.found_in(standing) < 0]
        for topology, periods in _by_topology(schedule):
            found += self._worst(self._broken_after(topology, flow, periods), standing)
        return found

    def _broken_as_is(self, flow: Floats) -> Places:
        carried = np.concatenate([flow, self.corridor_flow(flow)], axis=1)
        upper = np.concatenate([self.rating, self.forward], axis=1) + FLOW_TOLERANCE
        lower = np.concatenate([self.rating, self.reverse], axis=1) + FLOW_TOLERANCE
        period, element = np.nonzero((carried > upper) | (carried < -lower))
        return Places(np.full(len(period), NONE), element, period)

    def _broken_after(
        self, topology: Topology, flow: Floats, periods: Integers
    ) -> tuple[Places, Floats]:
        """Return what is beyond emergency ratings after any contingency, and by how much, MW."""
        limited = np.flatnonzero(np.isfinite(self.emergency).any(axis=0))
        limit = self.emergency[np.ix_(periods, limited)] + FLOW_TOLERANCE
        found, over = [Places.none()], [np.zeros(0)]
        for some, flows in self.contingencies.after(topology).blocks(flow[periods], limited):
            excess = np.abs(flows) - limit
            contingency, period, line = np.nonzero(excess > 0)
            found.append(Places(some[contingency], limited[line], periods[period]))
            over.append(excess[contingency, period, line])
        return sum(found[1:], found[0]), np.concatenate(over)

    def _worst(self, broken: tuple[Places, Floats], standing: Places) -> Places:
        """Return, for each line and period, the place furthest beyond its limit."""
        places, over = broken
        fresh = places.found_in(standing) < 0
        places, over = places[fresh], over[fresh]
        order = np.lexsort([-over, places.element, places.period])
        places = places[order]
        same = (np.diff(places.element) == 0) & (np.diff(places.period) == 0)
        return places[np.concatenate([[True], ~same])[: len(places)]]


def _by_topology(schedule: TopologySchedule) -> "list[tuple[Topology, Integers]]":
    """Pair each topology of a schedule with its periods."""
    return [
        (schedule.topologies[number], np.flatnonzero(schedule.index == number))
        for number in np.unique(schedule.index).tolist()
    ]
