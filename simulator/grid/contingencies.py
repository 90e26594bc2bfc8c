"""What lines carry after others are lost, for all contingencies of a topology at once.

Public names: `AfterLoss`, `Contingencies`.

With T the flows that 1 MW sent along each lost line causes (`Topology.transfer`) and K the lines of a
contingency, flow after the loss is flow + M·flow_K with M = T·(1 − T_KK)⁻¹, and none on the lost lines
themselves: the lines K carry what is sent along them and nothing else, so opening them changes nothing.
For one line M is its column of line outage distribution factors. Where 1 − T_KK is singular, the loss
splits an island.
"""

from collections.abc import Iterator
from copy import copy
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import sparse

from simulator.case import Case
from simulator.grid.network import Network
from simulator.grid.topology import Topology

__all__ = ["AfterLoss", "Contingencies"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

_SINGULAR = 1e-7
_AT_ONCE = (
    2_000_000  # flows of one block of contingencies; a larger one leaves the processor's cache
)


@dataclass(frozen=True, eq=False)
class Contingencies:
    """Lines that may be lost, those of one contingency together.

    names : labels (contingency,)
    owner, line : arrays (lost line,), the contingency and the line, in the order of contingencies
    """

    names: pd.Index
    owner: Integers
    line: Integers
    _made: dict[bytes, "AfterLoss"] = field(default_factory=dict, repr=False)

    @classmethod
    def of(cls, case: Case, network: Network) -> "Contingencies":
        """Read the contingencies of a case; by default each line whose loss leaves the network whole."""
        table = case.contingencies
        if table.empty:
            lines = np.arange(len(network.line_names))
            whole = network.topology(np.ones(len(lines), dtype=bool))
            lines = lines[~whole.splits(lines)]
            return cls(network.line_names[lines], np.arange(len(lines)), lines)
        owner, names = pd.factorize(table["contingency"])
        order = np.argsort(owner, kind="stable")
        line = network.line_names.get_indexer(pd.Index(table["line"]))
        return cls(pd.Index(names), owner[order], line[order])

    @classmethod
    def none(cls) -> "Contingencies":
        """Return no contingency."""
        nothing = np.zeros(0, dtype=np.int64)
        return cls(pd.Index([], dtype=str), nothing, nothing)

    def __len__(self) -> int:
        return len(self.names)

    def after(self, topology: Topology) -> "AfterLoss":
        """Return what each loss does in a topology, worked out once and kept."""
        key = np.packbits(topology.in_service).tobytes()
        if key not in self._made:
            self._made[key] = AfterLoss(topology, self)
        return self._made[key]


class AfterLoss:
    """The contingencies of one topology.

    splits : array (contingency,), whether its loss would split an island
    idle : array (contingency,), whether all its lines are out already
    owner, line : arrays (lost line,), of the contingencies that are neither
    """

    def __init__(self, topology: Topology, contingencies: Contingencies) -> None:
        count = len(contingencies)
        lost = topology.in_service[contingencies.line]
        owner, line = contingencies.owner[lost], contingencies.line[lost]
        self._topology = topology
        self.idle: Booleans = np.bincount(owner, minlength=count) == 0
        transfer = _own_transfer(topology, line)
        inverses, self.splits = _inverses(transfer, owner, count)
        held = ~self.splits[owner]
        self.owner, self.line = owner[held], line[held]
        self._inverse = inverses[held][:, held]

    @cached_property
    def factors(self) -> Floats:
        """M, array (line, lost line), dimensionless: −1 on the line itself, 0 on those lost with it."""
        moved = self._topology.transfer(self.line) @ self._inverse
        together = self.owner[:, None] == self.owner
        rows, columns = np.nonzero(together)
        moved[self.line[rows], columns] = -(self.line[rows] == self.line[columns]).astype(float)
        return np.asarray(moved)

    def blocks(
        self, flow: Floats, lines: Integers, only: Integers | None = None
    ) -> Iterator[tuple[Integers, Floats]]:
        """Yield contingencies and flows of some lines after each, a block at a time.

        flow : array (period, line), MW; lines : positions; only : the contingencies asked for, by
            default all that hold
        Each block is positions (contingency,) and an array (contingency, period, line), MW.
        """
        if only is not None:
            yield from self._only(only).blocks(flow, lines)
            return
        held, first = np.unique(self.owner, return_index=True)
        step = max(1, _AT_ONCE // max(1, len(flow) * len(lines)))
        factors, before = self.factors[lines], flow[:, lines]
        for start in range(0, len(held), step):
            some = held[start : start + step]
            begin = first[start]
            end = first[start + step] if start + step < len(first) else len(self.owner)
            moved = (
                factors[:, begin:end].T[:, None, :] * flow[:, self.line[begin:end]].T[:, :, None]
            )
            if end - begin > len(some):
                moved = np.add.reduceat(moved, first[start : start + step] - begin, axis=0)
            moved += before
            yield some, moved

    def _only(self, contingencies: Integers) -> "AfterLoss":
        """Return the same for some of the contingencies."""
        wanted, part = np.isin(self.owner, contingencies), copy(self)
        part.owner, part.line = self.owner[wanted], self.line[wanted]
        part.__dict__["factors"] = self.factors[:, wanted]
        return part

    def weights(self, contingency: Integers, line: Integers) -> sparse.csr_array:
        """Return rows, sparse array (row, line), whose products with flows are flows after losses."""
        first = np.searchsorted(self.owner, contingency)
        size = np.searchsorted(self.owner, contingency, side="right") - first
        row = np.repeat(np.arange(len(line)), size)
        entry = np.arange(len(row)) - np.repeat(np.cumsum(size) - size, size) + first[row]
        own = np.arange(len(line))
        shape = (len(line), len(self._topology.line_names))
        values = np.concatenate([np.ones(len(line)), self.factors[line[row], entry]])
        places = np.concatenate([own, row]), np.concatenate([line, self.line[entry]])
        return sparse.csr_array((values, places), shape=shape)


def _own_transfer(topology: Topology, line: Integers) -> Floats:
    """Return T_KK of all lost lines, array (lost line, lost line)."""
    return topology.transfer(line)[line] if len(line) else np.zeros((0, 0))


def _inverses(transfer: Floats, owner: Integers, count: int) -> tuple[sparse.csr_array, Booleans]:
    """Return (1 − T_KK)⁻¹ of every contingency on the diagonal of one matrix, and which have none."""
    splits = np.zeros(count, dtype=bool)
    blocks = []
    for contingency, size in zip(*np.unique(owner, return_counts=True), strict=True):
        own = (
            np.flatnonzero(owner == contingency)
            if size > 1
            else np.searchsorted(owner, [contingency])
        )
        system = np.eye(size) - transfer[np.ix_(own, own)]
        splits[contingency] = np.linalg.svd(system, compute_uv=False)[-1] < _SINGULAR
        blocks.append(np.eye(size) if splits[contingency] else np.linalg.inv(system))
    if not blocks:
        return sparse.csr_array((0, 0)), splits
    return sparse.csr_array(sparse.block_diag(blocks)), splits
