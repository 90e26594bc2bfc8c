"""The whole network and the topologies it takes over the periods of a run.

Public names: `Network`, `TopologySchedule`.
"""

from dataclasses import dataclass, field
from functools import cached_property
from hashlib import blake2b

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import sparse

from simulator.case import Case
from simulator.grid.topology import Topology

__all__ = ["Network", "TopologySchedule"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]


@dataclass(frozen=True)
class TopologySchedule:
    """Which topology holds in which period.

    topologies : the distinct ones, in order of first use
    index : array (period,), position in `topologies`
    """

    topologies: tuple[Topology, ...]
    index: Integers

    def __getitem__(self, periods: slice) -> "TopologySchedule":
        return TopologySchedule(self.topologies, self.index[periods])

    @cached_property
    def key(self) -> Integers:
        """A number of the topology of each period, array (period,), the same in any schedule."""
        made = [blake2b(topology.in_service.tobytes(), digest_size=8).digest()
                for topology in self.topologies]  # fmt: skip
        numbers = np.array(
            [int.from_bytes(each, "big", signed=True) for each in made], dtype=np.int64
        )
        return numbers[self.index]

    def flows(self, injection: Floats) -> Floats:
        """Return flows (period, line), MW, from injections (period, bus), MW, topology by topology."""
        lines = len(self.topologies[0].line_names)
        flow = np.zeros((len(injection), lines))
        for number in np.unique(self.index):
            periods = np.flatnonzero(self.index == number)
            flow[periods] = self.topologies[number].flows(injection[periods])
        return flow

    def collected(self, weight: Floats) -> Floats:
        """Return Σ_l PTDF_ln·weight_l, array (period, bus), for weights (period, line)."""
        total = np.zeros((len(weight), len(self.topologies[0].bus_names)))
        for number in np.unique(self.index):
            periods = np.flatnonzero(self.index == number)
            total[periods] = self.topologies[number].collected(weight[periods])
        return total

    def shift_flow(self) -> Floats:
        """Return the flow from phase shifters alone, array (period, line), MW."""
        return np.stack([topology.shift_flow for topology in self.topologies])[self.index]


@dataclass(frozen=True, eq=False)
class Network:
    """Lines between buses, with susceptances; makes each `Topology` once.

    line_names, bus_names : labels
    from_bus, to_bus : arrays (line,), positions of buses
    susceptance : array (line,), base_mva/(reactance·tap), MW/rad, negative for negative reactance
    phase_shift : array (line,), rad, added at the from end
    """

    line_names: pd.Index
    bus_names: pd.Index
    from_bus: Integers
    to_bus: Integers
    susceptance: Floats
    phase_shift: Floats
    _made: dict[bytes, Topology] = field(default_factory=dict, repr=False)

    @classmethod
    def of(cls, case: Case) -> "Network":
        """Read the network of a case."""
        lines, buses = case.lines, case.buses.index
        return cls(
            line_names=lines.index,
            bus_names=buses,
            from_bus=buses.get_indexer(pd.Index(lines["from_bus"])),
            to_bus=buses.get_indexer(pd.Index(lines["to_bus"])),
            susceptance=case.settings.base_mva
            / (lines["reactance_pu"] * lines["tap_ratio"]).to_numpy(float),
            phase_shift=np.deg2rad(lines["phase_shift_deg"].to_numpy(float)),
        )

    @property
    def incidence(self) -> sparse.csr_array:
        """Array (line, bus): +1 at the from bus, −1 at the to bus; rows sum to zero."""
        lines = np.arange(len(self.line_names))
        rows = np.concatenate([lines, lines])
        columns = np.concatenate([self.from_bus, self.to_bus])
        values = np.repeat([1.0, -1.0], len(lines))
        shape = (len(lines), len(self.bus_names))
        return sparse.csr_array((values, (rows, columns)), shape=shape)

    def topology(self, in_service: Booleans) -> Topology:
        """Return the topology with these lines in service, array (line,), made once and kept."""
        key = np.packbits(in_service).tobytes()
        if key not in self._made:
            self._made[key] = Topology(
                self.line_names, self.bus_names, self.incidence, self.susceptance, self.phase_shift,
                in_service.copy(),
            )  # fmt: skip
        return self._made[key]

    def schedule(self, in_service: Booleans) -> TopologySchedule:
        """Return the topologies of all periods from lines in service, array (period, line)."""
        states, first, index = np.unique(in_service, axis=0, return_index=True, return_inverse=True)
        order = np.argsort(first)
        rank = np.argsort(order)
        return TopologySchedule(
            tuple(self.topology(states[number]) for number in order), rank[index.reshape(-1)]
        )
