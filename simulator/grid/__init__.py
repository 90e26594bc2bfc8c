"""Network algebra of the DC approximation: flows, PTDF, LODF, islands, topologies by period.

Public names: `Network`, `Topology`, `TopologySchedule`, `Cells`, `common_cells`.
"""

from simulator.grid.islands import Cells, common_cells
from simulator.grid.network import Network, TopologySchedule
from simulator.grid.topology import Topology

__all__ = ["Cells", "Network", "Topology", "TopologySchedule", "common_cells"]
