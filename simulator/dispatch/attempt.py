"""A window while it is being solved.

Public names: `Attempt`.
"""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from simulator.dispatch.fleet import FleetData
from simulator.dispatch.inputs import WindowInputs
from simulator.dispatch.ties import TieDirections

__all__ = ["Attempt"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


class Attempt:
    """What is known so far: values and duals of the last solve, and the flows they mean.

    data : the window in numbers; fixed : flow that demand and phase shifters cause, (period, line), MW
    solution (column,), row_dual (row,); flow : array (period, line), MW
    """

    solution: Floats
    row_dual: Floats
    flow: Floats

    def __init__(
        self, inputs: WindowInputs, data: FleetData, columns: Mapping[str, Integers]
    ) -> None:
        self.data = data
        self.ties = TieDirections(inputs, columns)
        self.fixed = inputs.topology.flows(-inputs.demand_at_bus)
