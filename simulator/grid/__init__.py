"""Network algebra of the DC approximation: flows, PTDF, LODF, islands, topologies by period.

Public names: `AfterLoss`, `Cells`, `Contingencies`, `LineLosses`, `Network`, `Topology`, `TopologySchedule`,
`common_cells`.
"""

from simulator.grid.contingencies import AfterLoss, Contingencies
from simulator.grid.islands import Cells, common_cells
from simulator.grid.losses import LineLosses
from simulator.grid.network import Network, TopologySchedule
from simulator.grid.topology import Topology

__all__ = [
    "AfterLoss", "Cells", "Contingencies", "LineLosses", "Network", "Topology", "TopologySchedule",
    "common_cells",
]  # fmt: skip
