"""Which columns inject where.

Public names: `InjectionMap`.
"""

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from simulator.dispatch.inputs import WindowInputs

__all__ = ["InjectionMap"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


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
