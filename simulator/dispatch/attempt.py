"""A window while it is being solved.

Public names: `Attempt`.
"""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from simulator.dispatch.fleet import FleetData
from simulator.dispatch.inputs import WindowInputs
from simulator.dispatch.point import Point
from simulator.dispatch.ties import TieDirections

__all__ = ["Attempt"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


class Attempt:
    """What is known so far: values and duals of the last solve, and the flows they mean.

    data : the window in numbers; point : where flows and losses are linearised
    solution (column,), row_dual (row,); reached : the point the solution leads to
    loss_gap : how far losses are from those of the flows, MW, at most
    """

    solution: Floats
    row_dual: Floats
    reached: Point
    loss_gap = 0.0

    def __init__(
        self, inputs: WindowInputs, data: FleetData, columns: Mapping[str, Integers], point: Point
    ) -> None:
        self.data = data
        self.ties = TieDirections(inputs, columns)
        self.point = point

    @property
    def flow(self) -> Floats:
        """Flows of the solution, array (period, line), MW."""
        return self.reached.flow
