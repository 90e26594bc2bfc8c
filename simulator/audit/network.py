"""Islands and power flow, from the lines of the case and nothing else.

Public names: `Network`, `PowerFlow`.

With A the incidence (line, bus), b = base_mva/(reactance·tap) in MW/rad, φ the phase shift in rad
(formulation.md 2.6):  flow = b·(A·θ − φ)  and  Aᵀ·flow = injection,  so  AᵀbA·θ = injection + Aᵀb·φ.
"""

from collections.abc import Callable
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse import csgraph
from scipy.sparse.linalg import splu

from simulator.audit.evidence import Evidence
from simulator.case import series
from simulator.errors import AuditError

__all__ = ["Network", "PowerFlow"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

_BLOCK = 16  # more right-hand sides at once wake BLAS threads, which takes longer than the work


class Network:
    """The network over the periods of a run: one power flow for each set of lines in service.

    in_service : array (period, line); from_bus, to_bus : positions, arrays (line,)
    """

    def __init__(self, evidence: Evidence) -> None:
        lines = evidence.case.lines
        self.buses, self.periods = len(evidence.names["bus"]), evidence.periods
        self.from_bus = evidence.bus(lines, "from_bus")
        self.to_bus = evidence.bus(lines, "to_bus")
        reactance = (lines["reactance_pu"] * lines["tap_ratio"]).to_numpy(float)
        self._susceptance = evidence.case.settings.base_mva / reactance
        self._shift = np.deg2rad(lines["phase_shift_deg"].to_numpy(float))
        self.in_service = series.in_service(evidence.case, evidence.span)
        self._flows = self._one_for_each_state()

    @cached_property
    def states(self) -> "list[tuple[Integers, Booleans]]":
        """Pair the periods of each distinct set of lines in service with that set, array (line,)."""
        return [(periods, self.in_service[periods[0]]) for periods, _ in self._flows]

    def islands(self, used: Booleans) -> int:
        """Return the number of islands that some lines leave; used : array (line,)."""
        return int(_islands(self.from_bus, self.to_bus, used, self.buses).max(initial=-1)) + 1

    def _one_for_each_state(self) -> "list[tuple[Integers, PowerFlow]]":
        """Pair each distinct set of lines in service with the periods that have it."""
        periods_of: dict[bytes, list[int]] = {}
        for period, state in enumerate(self.in_service):
            periods_of.setdefault(state.tobytes(), []).append(period)
        return [
            (np.array(periods), self.power_flow(self.in_service[periods[0]]))
            for periods in periods_of.values()
        ]

    def power_flow(self, used: Booleans) -> "PowerFlow":
        """Return the power flow with these lines in service, array (line,)."""
        susceptance = np.where(used, self._susceptance, 0.0)
        return PowerFlow(self.from_bus, self.to_bus, used, susceptance, self._shift, self.buses)

    def _by_state(self, width: int, part: "Callable[[PowerFlow, Integers], Floats]") -> Floats:
        found = np.zeros((self.periods, width))
        for periods, flow in self._flows:
            found[periods] = part(flow, periods)
        return found

    def flows(self, injection: Floats) -> Floats:
        """Return line flows (period, line), MW, from injections (period, bus), MW."""
        return self._by_state(
            len(self.from_bus), lambda flow, periods: flow.flows(injection[periods])
        )

    @cached_property
    def shift_flows(self) -> Floats:
        """What phase shifters alone make flow, array (period, line), MW."""
        return self.flows(np.zeros((self.periods, self.buses)))

    def collected(self, weight: Floats) -> Floats:
        """Return Σ_l PTDF_ln·weight_l, array (period, bus), for weights (period, line)."""
        return self._by_state(self.buses, lambda flow, periods: flow.collected(weight[periods]))

    def island_sum(self, values: Floats) -> Floats:
        """Give every bus the sum of values (period, bus) over its island."""
        return self._by_state(
            self.buses, lambda flow, periods: flow.over_island(values[periods], np.add)
        )

    def island_peak(self, values: Floats) -> Floats:
        """Give every bus the largest of values (period, bus), none negative, over its island."""
        return self._by_state(
            self.buses, lambda flow, periods: flow.over_island(values[periods], np.maximum)
        )


def _islands(from_bus: Integers, to_bus: Integers, used: Booleans, buses: int) -> Integers:
    """Return the number of the island each bus is in, array (bus,)."""
    links = sparse.coo_array((used[used], (from_bus[used], to_bus[used])), shape=(buses, buses))
    island: Integers = csgraph.connected_components(links, directed=False)[1]
    return island


class PowerFlow:
    """The power flow of one set of lines in service.

    island : array (bus,); incidence, weighted : sparse arrays (line, bus), A and b·A
    """

    def __init__(
        self,
        from_bus: Integers,
        to_bus: Integers,
        used: Booleans,
        susceptance: Floats,
        shift: Floats,
        buses: int,
    ) -> None:
        self.island = _islands(from_bus, to_bus, used, buses)
        line = np.arange(len(from_bus))
        ends = np.concatenate([line, line]), np.concatenate([from_bus, to_bus])
        signs = np.repeat([1.0, -1.0], len(line))
        incidence = sparse.csr_array((signs, ends), shape=(len(line), buses))
        self.incidence = incidence
        self.weighted = sparse.csr_array(sparse.diags_array(susceptance) @ incidence)
        self._matrix = sparse.csc_array(incidence.T @ self.weighted)
        self._pushed = susceptance * shift
        self._into_bus = incidence.T @ self._pushed

    @cached_property
    def solved(self) -> Integers:
        """All buses but the last of each island, whose angle is zero."""
        backwards = np.unique(self.island[::-1], return_index=True)[1]
        return np.setdiff1d(np.arange(len(self.island)), len(self.island) - 1 - backwards)

    @cached_property
    def _factor(self) -> Any:
        try:
            return splu(sparse.csc_matrix(self._matrix[self.solved][:, self.solved]))
        except RuntimeError as error:
            raise AuditError(
                "the power flow, must have one solution, found a singular susceptance matrix, "
                "check the negative reactances"
            ) from error

    def _angles(self, right: Floats) -> Floats:
        """Return bus angles (bus, column), rad, for right-hand sides of that shape, MW."""
        angle = np.zeros(right.shape)
        if len(self.solved):
            for first in range(0, right.shape[1], _BLOCK):
                block = slice(first, first + _BLOCK)
                angle[self.solved, block] = self._factor.solve(right[self.solved, block])
        return angle

    def flows(self, injection: Floats) -> Floats:
        """Return line flows (period, line), MW, from injections (period, bus), MW."""
        angle = self._angles(injection.T + self._into_bus[:, None])
        return (self.weighted @ angle).T - self._pushed

    def collected(self, weight: Floats) -> Floats:
        """Return Σ_l PTDF_ln·weight_l, array (row, bus), for weights (row, line)."""
        return self._angles(self.weighted.T @ weight.T).T

    def over_island(self, values: Floats, ufunc: np.ufunc) -> Floats:
        """Give every bus what a ufunc makes of values (period, bus) over its island."""
        found = np.zeros((len(values), int(self.island.max(initial=-1)) + 1))
        ufunc.at(found.T, self.island, values.T)
        return found[:, self.island]
