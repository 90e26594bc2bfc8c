"""What one more MW injected does where lines lose power, from the nodal balances of each period.

Public names: `Margins`.

Bus n balances injection_n = Σ_l A_ln·f_l + Σ_l |A_ln|·ρ_l·f_l²/2 with f = b·(A·θ − φ). Its derivative by
angles is J = (A + |A|·g/2)ᵀ·b·A with g = 2ρf, one bus of each island left out, so that weighted flows w·f
change with injections by J⁻ᵀ·Aᵀ·b·w. One factorisation a period; nothing is iterated.
"""

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse.linalg import splu

from simulator.audit.evidence import Evidence
from simulator.audit.network import Network

__all__ = ["Margins"]

Floats = NDArray[np.float64]


class Margins:
    """Derivatives of flows and losses by injections, period by period.

    slope : array (period, line), what one more MW of flow loses
    """

    def __init__(self, evidence: Evidence, network: Network) -> None:
        self._network = network
        self.slope = 2 * evidence.loss_rate * evidence["line_flow"]

    def of_flows(self, weight: Floats) -> Floats:
        """Return what one more MW at each bus adds to weighted flows, array (period, bus)."""
        found = np.zeros((len(weight), self._network.buses))
        for periods, used in self._network.states:
            flow = self._network.power_flow(used)
            kept, incidence, weighted = flow.solved, flow.incidence, flow.weighted
            ends = abs(incidence)
            for period in periods.tolist():
                drawn = incidence + sparse.diags_array(self.slope[period] / 2) @ ends
                jacobian = sparse.csc_matrix((drawn.T @ weighted)[kept][:, kept])
                right = weighted.T @ weight[period]
                if len(kept):
                    found[period, kept] = splu(jacobian).solve(right[kept], trans="T")
        return found

    def at_ends(self, at_bus: Floats) -> Floats:
        """Return the mean of both ends of each line, array (row, line), for values (row, bus)."""
        mean: Floats = (at_bus[:, self._network.from_bus] + at_bus[:, self._network.to_bus]) / 2
        return mean
