"""One topology: the lines in service, their islands, one sparse factorisation and what follows from it.

Public names: `Topology`.

With A the incidence (line, bus), b the susceptance base_mva/(reactance·tap) in MW/rad and φ the phase
shift in rad (formulation.md 2.6):

    flow = b·(A·θ − φ),   Aᵀ·flow = injection,   so   flow = PTDF·injection + shift_flow.

One bus of every island is the reference: its angle and its column of the PTDF are zero.
"""

from functools import cached_property
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse import csgraph
from scipy.sparse.linalg import splu

from simulator.errors import CaseError, OptionError, Problem

__all__ = ["Topology"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

_SOLVE_TOLERANCE = 1e-6
_BRIDGE_TOLERANCE = 1e-7
_COLUMNS = 16  # more right-hand sides at once wake the BLAS threads, which costs more than it saves


class Topology:
    """The network with some lines in service; made by `Network.topology`, which keeps it.

    line_names, bus_names : labels of every (line, …) and (bus, …) array below
    in_service : array (line,), bool
    island : array (bus,), number of the island a bus is in, from 0 in bus order
    """

    def __init__(
        self,
        line_names: pd.Index,
        bus_names: pd.Index,
        incidence: sparse.csr_array,
        susceptance: Floats,
        phase_shift: Floats,
        in_service: NDArray[np.bool_],
    ) -> None:
        self.line_names, self.bus_names = line_names, bus_names
        self.in_service = in_service
        self._phase_shift = phase_shift
        self._susceptance = np.where(in_service, susceptance, 0.0)
        self._incidence = sparse.csr_array(sparse.diags_array(in_service.astype(float)) @ incidence)
        self._incidence.eliminate_zeros()  # a stored zero would count as a link between islands
        self._weighted = sparse.csr_array(sparse.diags_array(self._susceptance) @ self._incidence)
        links = abs(self._incidence.T @ self._incidence)
        self.island: Integers = csgraph.connected_components(links, directed=False)[1].astype(int)

    def __repr__(self) -> str:
        out = int((~self.in_service).sum())
        return f"Topology({len(self.bus_names)} buses, {out} lines out, {self.islands} islands)"

    @property
    def islands(self) -> int:
        """Number of islands."""
        return int(self.island.max()) + 1

    @cached_property
    def reference(self) -> Integers:
        """The first bus of each island, array (island,): its angle is zero."""
        return np.unique(self.island, return_index=True)[1]

    @cached_property
    def _kept(self) -> Integers:
        return np.setdiff1d(np.arange(len(self.bus_names)), self.reference)

    @cached_property
    def susceptance_matrix(self) -> sparse.csc_array:
        """AᵀbA, array (bus, bus), MW/rad; rows sum to zero."""
        return sparse.csc_array(self._incidence.T @ self._weighted)

    @cached_property
    def _factor(self) -> Any:
        reduced = sparse.csc_matrix(self.susceptance_matrix[self._kept][:, self._kept])
        try:
            factor = splu(reduced)
        except RuntimeError as error:
            raise self._singular() from error
        probe = np.ones(len(self._kept))
        if np.abs(reduced @ factor.solve(probe) - probe).max() > _SOLVE_TOLERANCE:
            raise self._singular()
        return factor

    def _singular(self) -> CaseError:
        found = "a singular susceptance matrix"
        return CaseError([Problem(
            "network/lines.csv", 1, "reactance_pu", "the network", "reactances must not cancel each other",
            found, "check the negative reactances",
        )])  # fmt: skip

    def angles(self, injection: Floats) -> Floats:
        """Return bus angles in rad, array (bus, column), for injections of that shape in MW."""
        angle = np.zeros(injection.shape)
        for start in range(0, injection.shape[1] if len(self._kept) else 0, _COLUMNS):
            block = slice(start, start + _COLUMNS)
            angle[self._kept, block] = self._factor.solve(injection[self._kept, block])
        return angle

    @cached_property
    def shift_flow(self) -> Floats:
        """The flow that phase shifters cause without any injection, array (line,), MW."""
        if not self._phase_shift.any():
            return np.zeros(len(self.line_names))
        pushed = self._weighted.T @ self._phase_shift
        angle = self.angles(pushed[:, None])[:, 0]
        flow: Floats = self._weighted @ angle - self._susceptance * self._phase_shift
        return flow

    def flows(self, injection: Floats) -> Floats:
        """Return line flows, array (period, line), MW, from injections (period, bus), MW (2.6).

        Injections of each island must sum to zero; what is left over is taken up by its reference.
        """
        flow: Floats = (self._weighted @ self.angles(injection.T)).T + self.shift_flow
        return flow

    def ptdf_rows(self, lines: Integers) -> Floats:
        """Return rows of the PTDF, array (line, bus), for line positions; zero for lines out."""
        if not len(lines):
            return np.zeros((0, len(self.bus_names)))
        return self.angles(self._weighted[lines].toarray().T).T

    def collected(self, weight: Floats) -> Floats:
        """Return Σ_l PTDF_ln·weight_l, array (period, bus), for weights (period, line)."""
        return self.angles(self._weighted.T @ weight.T).T

    def ptdf(self, lines: list[str]) -> pd.DataFrame:
        """Return rows of the PTDF as a labelled frame, lines by name down, buses across."""
        rows = self.ptdf_rows(self.line_names.get_indexer(pd.Index(lines)))
        return pd.DataFrame(rows, index=pd.Index(lines, name="line"), columns=self.bus_names)

    def transfer(self, lines: Integers) -> Floats:
        """Return the flows caused by 1 MW sent from each given line's from bus to its to bus.

        Array (line, given line), dimensionless: PTDF·Aᵀ for these columns.
        """
        sent = self._incidence[lines].toarray().T
        flows: Floats = self._weighted @ self.angles(sent)
        return flows

    def splits(self, lines: Integers) -> NDArray[np.bool_]:
        """Tell, for each line position, whether its loss alone would split an island."""
        own = self.transfer(lines)[lines, np.arange(len(lines))]
        result: NDArray[np.bool_] = np.abs(1 - own) < _BRIDGE_TOLERANCE
        return result

    def lodf(self, lines: Integers) -> Floats:
        """Return line outage distribution factors, array (line, lost line), dimensionless.

        Entry (l, k) is the share of line k's flow that line l takes over when k is lost:
        transfer_lk / (1 − transfer_kk); −1 on the lost line itself. Raises `OptionError` for a line
        whose loss splits the network, where no such share exists.
        """
        moved = self.transfer(lines)
        own = moved[lines, np.arange(len(lines))]
        bridges = np.abs(1 - own) < _BRIDGE_TOLERANCE
        if bridges.any():
            names = ", ".join(f'"{name}"' for name in self.line_names[lines[bridges]][:5])
            raise OptionError(f"the loss of {names} splits the network: leave these lines out")
        factors = moved / (1 - own)
        factors[lines, np.arange(len(lines))] = np.where(self.in_service[lines], -1.0, 0.0)
        return factors
