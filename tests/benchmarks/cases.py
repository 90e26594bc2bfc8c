"""The cases that are measured.

Public names: `CASES`, `BenchmarkCase`, `Subject`.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

from simulator.case import Case, read_case
from simulator.dispatch import RunInputs, State, WindowInputs, WindowModel, WindowSolution
from simulator.dispatch.counts import Counts
from simulator.dispatch.inputs import run_inputs
from simulator.dispatch.state import initial_state
from simulator.horizon import Plan, Run, plan_run, run
from tests.benchmarks.synthetic import write_synthetic

__all__ = ["CASES", "BenchmarkCase", "Subject"]

ROOT = Path(__file__).parents[2]
WINDOWS, WINDOW_HOURS, KEEP_HOURS = 6, 48, 24


@dataclass(frozen=True)
class BenchmarkCase:
    """A case by name.

    folder : makes the case's folder, given one to write to; None where its data are not there
    start : the day the windows begin, by default the first of the data
    """

    name: str
    folder: Callable[[Path], Path | None]
    start: str | None = None


def _there(path: Path) -> Callable[[Path], Path | None]:
    return lambda _: path if path.is_dir() else None


def _synthetic(buses: int) -> Callable[[Path], Path | None]:
    return lambda scratch: write_synthetic(scratch, buses)


CASES = {
    case.name: case
    for case in (
        BenchmarkCase("demo", _there(ROOT / "profiles" / "fennholm"), "2027-01-11"),
        BenchmarkCase(
            "rts-gmlc", _there(ROOT.parent / "shared" / "data" / "rts-gmlc"), "2020-07-13"
        ),
        *(BenchmarkCase(str(buses), _synthetic(buses)) for buses in (40, 300, 1000, 3000, 10000)),
    )
}
"""Every case by its name; a number is a synthetic network of that many buses."""


class Subject:
    """One case made ready, and what the phases need of it, each made when first asked for.

    Six windows of 48 h rolled by 24 h, in mode `relaxed`.
    budget : seconds that solving them by hand may take
    """

    def __init__(self, folder: Path, start: str | None = None, budget: float = 300.0) -> None:
        self.folder, self.start, self.budget = folder, start, budget

    @cached_property
    def case(self) -> Case:
        """The case, read."""
        return read_case(self.folder)

    @cached_property
    def plan(self) -> Plan:
        """Six windows in mode `relaxed`."""
        return plan_run(
            self.case, self.start, WINDOWS * KEEP_HOURS, window_hours=WINDOW_HOURS,
            keep_hours=KEEP_HOURS, commitment="relaxed", limits="lines",
        )  # fmt: skip

    def run_inputs(self) -> RunInputs:
        """Make the arrays of the run afresh."""
        plan = self.plan
        return run_inputs(self.case, plan.span, plan.periods, plan.mode, plan.limits)

    @cached_property
    def inputs(self) -> RunInputs:
        """The arrays of the run."""
        return self.run_inputs()

    @cached_property
    def windows(self) -> list[WindowInputs]:
        """The inputs of every window."""
        return [self.inputs.window(n, *span) for n, span in enumerate(self.plan.windows)]

    @cached_property
    def first_state(self) -> State:
        """The state before the first window."""
        return initial_state(self.case, self.inputs.whole.unit)

    def after(self, state: State, solution: WindowSolution) -> State:
        """Return the state a window hands on."""
        hot = self.inputs.whole.unit.hot_periods
        return solution.state_after(state, self.plan.keep, hot, whole=False)

    def model(self) -> WindowModel:
        """Return a model of these windows that has solved nothing."""
        return WindowModel(self.windows[0], self.first_state, Counts())

    def roll(self, model: WindowModel) -> tuple[list[State], list[WindowSolution]]:
        """Solve every window; return the state before each, and its solution."""
        state, states = self.first_state, list[State]()
        solutions: list[WindowSolution] = []
        for window in self.windows:
            states.append(state)
            left = solutions[-1].left if solutions else None
            solutions.append(model.solve(window, state, left))
            state = self.after(state, solutions[-1])
        return states, solutions

    @cached_property
    def rolled(self) -> tuple[list[State], list[WindowSolution], WindowModel]:
        """The state before each window, its solution, and the model, all as the engine finds them.

        By-hand models start each window from the same state, so that all of them solve the same
        linear programs: an optimum that is not unique may hand on another state.
        """
        model = self.model()
        return *self.roll(model), model

    @cached_property
    def finished(self) -> Run:
        """The run of the same windows, for all that comes after it."""
        return run(self.case, self.plan)

    @property
    def optima(self) -> list[float]:
        """The optimum of each window, as the engine finds it."""
        return [solution.objective for solution in self.rolled[1]]
