"""One window of a run: its inputs, the fleet half in Pyomo, the compiled matrix, the solver, line rows.

Public names: `Priced`, `RunInputs`, `State`, `WindowInputs`, `WindowModel`, `WindowSolution`,
`loss_factors`.
"""

from simulator.dispatch.inputs import RunInputs, WindowInputs
from simulator.dispatch.point import loss_factors
from simulator.dispatch.priced import Priced
from simulator.dispatch.state import State
from simulator.dispatch.window import WindowModel, WindowSolution

__all__ = [
    "Priced", "RunInputs", "State", "WindowInputs", "WindowModel", "WindowSolution", "loss_factors",
]  # fmt: skip
