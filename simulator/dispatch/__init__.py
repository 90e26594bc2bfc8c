"""One window of a run: its inputs, the fleet half in Pyomo, the compiled matrix, the solver, line rows.

Public names: `Point`, `Priced`, `RunInputs`, `State`, `WindowInputs`, `WindowModel`, `WindowSolution`.
"""

from simulator.dispatch.inputs import RunInputs, WindowInputs
from simulator.dispatch.point import Point
from simulator.dispatch.priced import Priced
from simulator.dispatch.state import State
from simulator.dispatch.window import WindowModel, WindowSolution

__all__ = ["Point", "Priced", "RunInputs", "State", "WindowInputs", "WindowModel", "WindowSolution"]
