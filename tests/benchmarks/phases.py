"""The phases that are measured: each prepares what it needs, then is one call that is timed.

Public names: `BY_HAND`, `PHASES`, `SIX_WINDOWS`, `Phase`.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import Any

from simulator.audit import audit
from simulator.case import read_case
from simulator.dispatch.compiled import compile_fleet
from simulator.dispatch.fleet import fleet_data
from simulator.dispatch.formulation import state_fleet
from simulator.dispatch.injections import InjectionMap
from simulator.dispatch.limit_rows import LimitRows
from simulator.dispatch.point import Point
from simulator.dispatch.solver import LinearSolver
from simulator.report.page import page_html
from simulator.results import run_record, to_dataset
from tests.benchmarks.by_hand_matrix import programs, solve_by_matrix
from tests.benchmarks.by_hand_pyomo import solve_by_pyomo
from tests.benchmarks.cases import Subject

__all__ = ["BY_HAND", "PHASES", "SIX_WINDOWS", "Phase"]

Work = Callable[[], Any]


@dataclass(frozen=True)
class Phase:
    """A phase by name.

    what : what is timed, in words
    prepare : makes what is not timed, and returns the call that is; where that solves all windows it
        returns the optimum of each
    """

    name: str
    what: str
    prepare: Callable[[Subject], Work]


def _build(subject: Subject) -> Work:
    span, state = subject.plan.windows[0], subject.first_state

    def work() -> None:
        window = subject.run_inputs().window(0, *span)
        state_fleet(window, fleet_data(window, state))

    return work


def _compile(subject: Subject) -> Work:
    window = subject.windows[0]
    data = fleet_data(window, subject.first_state)
    return lambda: compile_fleet(window, data)


def _from_scratch(subject: Subject) -> Work:
    return partial(subject.model().solve, subject.windows[0], subject.first_state)


def _from_basis(subject: Subject) -> Work:
    model, state = subject.model(), subject.first_state
    first = model.solve(subject.windows[0], state)
    return partial(model.solve, subject.windows[1], subject.after(state, first), first.left)


def _line_rows(subject: Subject) -> Work:
    window, found = subject.windows[-1], subject.rolled[2]
    data, fleet = fleet_data(window, subject.rolled[0][-1]), found.fleet
    injection = InjectionMap(window, dict(fleet.columns))
    rows = LimitRows(window, fleet, injection, fleet.matrix.shape[0])
    solver = LinearSolver()
    solver.load(found.fleet.filled(window, data), found.fleet.vectors(data))
    point = Point.at(window, -window.demand_at_bus)
    return partial(rows.add, solver, window, point, found.limits.places)


def _six_windows(subject: Subject) -> Work:
    model = subject.model()
    return lambda: [solution.objective for solution in subject.roll(model)[1]]


def _page(subject: Subject) -> Work:
    dataset = to_dataset(subject.finished)
    record = run_record(subject.finished, dataset, {})
    record["audit"] = {"passed": True, "checks": []}
    return lambda: page_html(dataset, record)


def _audit(subject: Subject) -> Work:
    dataset = to_dataset(subject.finished)
    return lambda: audit(subject.case, dataset)


def _results(subject: Subject) -> Work:
    finished = subject.finished
    return lambda: to_dataset(finished)


def _by_pyomo(subject: Subject) -> Work:
    _ = subject.rolled
    return partial(solve_by_pyomo, subject)


def _by_matrix(subject: Subject, *, from_basis: bool) -> Work:
    return partial(solve_by_matrix, programs(subject), subject.budget, from_basis=from_basis)


SIX_WINDOWS = "six windows"
BY_HAND = ("by hand: Pyomo", "by hand: matrix", "by hand: matrix, from its basis")
PHASES = {
    phase.name: phase
    for phase in (
        Phase("read", "folder → case", lambda subject: partial(read_case, subject.folder)),
        Phase("build", "arrays of the run, one window's rows in Pyomo", _build),
        Phase("compile", "rows in Pyomo, and the matrix made of them", _compile),
        Phase("window from scratch", "the first window, its line rows found", _from_scratch),
        Phase("window from basis", "the second window, after the first", _from_basis),
        Phase("line rows", "all rows of the last window, computed and added at once", _line_rows),
        Phase(
            SIX_WINDOWS,
            "windows of 48 h rolled by 24 h, one model, its build left out",
            _six_windows,
        ),
        Phase("results", "run → dataset", _results),
        Phase("audit", "dataset proved from the case", _audit),
        Phase("page", "dataset → page", _page),
        Phase(BY_HAND[0], "all angles, built and solved anew each window", _by_pyomo),
        Phase(
            BY_HAND[1],
            "all angles, each window from scratch",
            partial(_by_matrix, from_basis=False),
        ),
        Phase(BY_HAND[2], "all angles, one model kept", partial(_by_matrix, from_basis=True)),
    )
}
"""Every phase by its name, in the order of a run, then the same windows by hand."""
