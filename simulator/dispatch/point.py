"""Where flows and losses are linearised.

Public names: `Point`, `loss_factors`.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from simulator.dispatch.inputs import WindowInputs
from simulator.grid import TopologySchedule

__all__ = ["Point", "loss_factors"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Point:
    """Injections and the flows they cause.

    Near them, weighted flows are w·flow + factors·(injections − injection).

    injection : array (period, bus), MW; flow : array (period, line), MW
    slope : array (period, line), what one more MW of flow loses; None where nothing is lost, and then
        flows are linear and any point is as good as another
    """

    injection: Floats
    flow: Floats
    slope: Floats | None

    @classmethod
    def at(cls, inputs: WindowInputs, injection: Floats) -> "Point":
        """Return the point of some injections."""
        losses = inputs.losses
        flow = _flows(inputs, injection)
        return cls(injection, flow, None if losses is None else losses.slope(flow))

    def factors(self, inputs: WindowInputs, period: Integers, weight: Floats) -> Floats:
        """Return what one more MW at each bus adds to weighted flows, array (row, bus).

        period : array (row,); weight : array (row, line)
        """
        rows = TopologySchedule(inputs.topology.topologies, inputs.topology.index[period])
        if inputs.losses is None or self.slope is None:
            return rows.collected(weight)
        return inputs.losses.factors(rows, self.slope[period], weight)


def _flows(inputs: WindowInputs, injection: Floats) -> Floats:
    """Return flows, array (period, line), MW; losses, if they count, are drawn at the lines' ends."""
    if inputs.losses is None:
        return inputs.topology.flows(injection)
    return inputs.losses.flows(inputs.topology, injection)


def loss_factors(inputs: WindowInputs, flow: Floats) -> Floats:
    """Return what one more MW injected at each bus adds to losses at some flows, array (period, bus)."""
    if inputs.losses is None:
        return np.zeros((len(flow), inputs.buses))
    slope = inputs.losses.slope(flow)
    return inputs.losses.factors(inputs.topology, slope, slope)
