"""Resistive losses of lines, and flows that make good for them.

Public names: `LineLosses`.

A line with resistance r in per unit that carries f loses ρ·f², ρ = r/base_mva in 1/MW: the first term of the
real power lost in the line at voltages of one per unit (see for instance Wood, Wollenberg & Sheblé, Power
Generation, Operation and Control, 2014; from memory). Half of it is drawn at each end. So with T the PTDF,
D the buses' halves and s the flow of phase shifters

    flow = T·(injection − D·ρ·flow²) + s,

where f is the flow in the middle of the line. Around a flow f⁰, with g = 2ρf⁰ and w any weights of flows,
d(w·flow) = m·T·d(injection) with m = w − g·(Dᵀ·(Tᵀ·m)). Both are solved by iteration: D·T·g is what one more
MW loses, a few per cent.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from simulator.case import Case
from simulator.grid.network import Network, TopologySchedule

__all__ = ["LineLosses"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

_AGREES = 1e-12  # relative
_MOST = 200


@dataclass(frozen=True, eq=False)
class LineLosses:
    """What lines lose.

    rate : array (line,), ρ, 1/MW; from_bus, to_bus : positions, arrays (line,); buses : how many
    """

    rate: Floats
    from_bus: Integers
    to_bus: Integers
    buses: int

    @classmethod
    def of(cls, case: Case, network: Network) -> "LineLosses":
        """Read the losses of a case."""
        rate = case.lines["resistance_pu"].to_numpy(float) / case.settings.base_mva
        return cls(rate, network.from_bus, network.to_bus, len(network.bus_names))

    def lost(self, flow: Floats) -> Floats:
        """Return what lines lose, array (period, line), MW."""
        return self.rate * flow**2

    def slope(self, flow: Floats) -> Floats:
        """Return what one more MW of each line's flow loses, array (period, line)."""
        return 2 * self.rate * flow

    def drawn(self, lost: Floats) -> Floats:
        """Return D·lost: half of what lines lose at each end, array (period, bus), MW."""
        at_bus = np.zeros((len(lost), self.buses))
        np.add.at(at_bus.T, self.from_bus, lost.T / 2)
        np.add.at(at_bus.T, self.to_bus, lost.T / 2)
        return at_bus

    def halves(self, at_bus: Floats) -> Floats:
        """Return Dᵀ·values: the mean of both ends of each line, array (row, line)."""
        mean: Floats = (at_bus[:, self.from_bus] + at_bus[:, self.to_bus]) / 2
        return mean

    def flows(self, schedule: TopologySchedule, injection: Floats) -> Floats:
        """Return flows, array (period, line), MW, from injections (period, bus), MW.

        What injections and losses do not balance is taken up by the reference of each island.
        """
        flow = schedule.flows(injection)
        for _ in range(_MOST):
            last, flow = flow, schedule.flows(injection - self.drawn(self.lost(flow)))
            if _agree(last, flow):
                return flow
        raise ArithmeticError("losses that grow beyond what the lines carry")

    def factors(self, schedule: TopologySchedule, slope: Floats, weight: Floats) -> Floats:
        """Return m·T, array (row, bus): what one more MW injected adds to weighted flows.

        slope, weight : arrays (row, line); schedule : the topology of each row
        """
        own = weight
        factors = schedule.collected(own)
        for _ in range(_MOST):
            last, own = own, weight - slope * self.halves(factors)
            factors = schedule.collected(own)
            if _agree(last, own):
                return factors
        raise ArithmeticError("losses that grow beyond what the lines carry")


def _agree(one: Floats, other: Floats) -> bool:
    size = np.abs(other).max(initial=1.0)
    return bool(np.abs(one - other).max(initial=0.0) <= _AGREES * size)
