"""The case folder and the one frozen `Case` it becomes.

Public names: `Case`, `TimeAxis`, `read_case`.
"""

from simulator.case.model import Case, TimeAxis
from simulator.case.reader import read_case

__all__ = ["Case", "TimeAxis", "read_case"]
