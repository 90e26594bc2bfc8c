"""Islands that split and join over a run, without changing the shape of the balance rows.

Public names: `Cells`, `common_cells`.

A *cell* is a set of buses that share an island in every topology of a run. Each cell has one balance
row a period (formulation.md 2.5); cells of one island are joined by an exchange column that is free
while they are joined and fixed at zero while they are apart. So a planned outage that splits the
network changes bounds, not the matrix.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from simulator.grid.topology import Topology

__all__ = ["Cells", "common_cells"]

Integers = NDArray[np.int64]


@dataclass(frozen=True)
class Cells:
    """The common refinement of the islands of several topologies.

    cell : array (bus,), number of the cell a bus is in
    pair_from, pair_to : arrays (pair,), cells that some topology joins
    joined : array (topology, pair), bool: the pair's exchange is free in that topology
    """

    cell: Integers
    pair_from: Integers
    pair_to: Integers
    joined: NDArray[np.bool_]

    @property
    def count(self) -> int:
        """Number of cells."""
        return int(self.cell.max()) + 1


def common_cells(topologies: Sequence[Topology]) -> Cells:
    """Find the cells of some topologies and the pairs that each of them joins.

    In each topology an island's cells hang as a star on the first of them, so that joined cells
    exchange freely and no exchange is there twice.
    """
    labels = np.stack([topology.island for topology in topologies])
    first_bus, cell = np.unique(labels, axis=1, return_index=True, return_inverse=True)[1:]
    stars = [_star(labels[number, first_bus]) for number in range(len(topologies))]
    pairs = sorted(set().union(*stars))
    joined = np.array([[pair in star for pair in pairs] for star in stars], dtype=bool)
    ends = np.array(pairs, dtype=int).reshape(-1, 2)
    return Cells(cell.reshape(-1), ends[:, 0], ends[:, 1], joined.reshape(len(stars), len(pairs)))


def _star(island_of_cell: Integers) -> set[tuple[int, int]]:
    """Return pairs (first cell of the island, other cell of it)."""
    hub: dict[int, int] = {}
    pairs = set()
    for cell, island in enumerate(island_of_cell.tolist()):
        if island in hub:
            pairs.add((hub[island], cell))
        else:
            hub[island] = cell
    return pairs
