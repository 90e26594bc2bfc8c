"""By hand (b): all bus angles in one raw matrix, given to HiGHS through its own interface.

Public names: `AllAngles`, `Program`, `programs`, `solve_by_matrix`.

The fleet half is the engine's compiled one. Its balance rows give way to one row a bus and period; every
line and period has a flow column with the line's rating as its bounds, and a row that ties it to the
angles at its ends. The optimum is that of the engine's model (formulation.md 2.5 and 2.6). HiGHS keeps
its defaults; only solving and handing over numbers is timed, not laying the arrays out.
"""

from dataclasses import dataclass
from typing import Any

import highspy
import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from simulator.dispatch import State, WindowInputs
from simulator.dispatch.compiled import compile_fleet
from simulator.dispatch.fleet import fleet_data
from simulator.dispatch.injections import InjectionMap
from simulator.grid import Network
from tests.benchmarks.budget import Budget, OverBudgetError
from tests.benchmarks.cases import Subject

__all__ = ["AllAngles", "Program", "programs", "solve_by_matrix"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True)
class Program:
    """One window: matrix (row, column) by columns, and whole arrays of bounds and costs."""

    matrix: sparse.csc_array
    cost: Floats
    lower: Floats
    upper: Floats
    row_lower: Floats
    row_upper: Floats


class AllAngles:
    """Lays windows of one shape out as matrices whose entries keep their places."""

    def __init__(self, network: Network, inputs: WindowInputs, state: State) -> None:
        self.network = network
        self.fleet = compile_fleet(inputs, fleet_data(inputs, state))
        self.injection = InjectionMap(inputs, dict(self.fleet.columns))
        rows = np.arange(self.fleet.matrix.shape[0])
        self._kept = np.setdiff1d(rows, self.fleet.rows["balance"])

    def program(self, inputs: WindowInputs, state: State) -> Program:
        """Return a window's program: the fleet's columns, then angles, then flows."""
        vectors = self.fleet.vectors(fleet_data(inputs, state))
        exchange = self.fleet.columns["exchange"]
        vectors.lower[exchange] = vectors.upper[exchange] = 0.0
        angle, rating = self._angle_bounds(inputs).ravel(), inputs.limits.rating.ravel()
        free, demand = np.zeros(len(angle) + len(rating)), inputs.demand_at_bus.ravel()
        shift = (-self._susceptance(inputs) * self.network.phase_shift).ravel()
        return Program(
            self._matrix(inputs, state),
            np.concatenate([vectors.cost, free]),
            np.concatenate([vectors.lower, -angle, -rating]),
            np.concatenate([vectors.upper, angle, rating]),
            np.concatenate([vectors.row_lower[self._kept], demand, shift]),
            np.concatenate([vectors.row_upper[self._kept], demand, shift]),
        )

    def _angle_bounds(self, inputs: WindowInputs) -> Floats:
        """Return bounds of the angles, array (period, bus): zero at each island's reference."""
        bounds = np.full((inputs.periods, inputs.buses), np.inf)
        for number, topology in enumerate(inputs.topology.topologies):
            here = np.flatnonzero(inputs.topology.index == number)
            bounds[np.ix_(here, topology.reference)] = 0.0
        return bounds

    def _susceptance(self, inputs: WindowInputs) -> Floats:
        """Return susceptances, array (period, line), MW/rad; zero where a line is out."""
        running = np.stack([topology.in_service for topology in inputs.topology.topologies])
        return np.where(running[inputs.topology.index], self.network.susceptance, 0.0)

    def _matrix(self, inputs: WindowInputs, state: State) -> sparse.csc_array:
        """Stack fleet rows, bus balances, and flow − b·(θ_from − θ_to) = −b·φ."""
        periods, buses, lines = inputs.periods, inputs.buses, inputs.limits.rating.shape[1]
        hour, fleet = np.arange(periods)[:, None], self._fleet_rows(inputs, state)
        at_bus = self.injection.at_bus.tocoo()
        injected = _placed(
            (np.tile(at_bus.data, (periods, 1)), hour * buses + at_bus.row,
             self.injection.columns[:, at_bus.col]),
            shape=(periods * buses, fleet.shape[1]),
        )  # fmt: skip
        line, weight = hour * lines + np.arange(lines), self._susceptance(inputs)
        start, end = hour * buses + self.network.from_bus, hour * buses + self.network.to_bus
        one, shape = np.ones(line.shape), (periods * buses, periods * lines)
        leaving = _placed((-one, start, line), (one, end, line), shape=shape)
        angles = _placed((-weight, line, start), (weight, line, end), shape=shape[::-1])
        flows = sparse.eye_array(periods * lines)
        stacked = [[fleet, None, None], [injected, None, leaving], [None, angles, flows]]
        return sparse.csc_array(sparse.block_array(stacked))

    def _fleet_rows(self, inputs: WindowInputs, state: State) -> sparse.csr_array:
        """Return the fleet's rows but its balances, with this window's coefficients."""
        filled = self.fleet.filled(inputs, fleet_data(inputs, state))
        return sparse.csr_array(filled)[self._kept]


def _placed(*parts: tuple[Floats, Integers, Integers], shape: tuple[int, int]) -> sparse.csr_array:
    """Build a sparse array from (values, rows, columns); zeros keep their places."""
    values, rows, columns = (
        np.concatenate([np.ravel(part[axis]) for part in parts]) for axis in range(3)
    )
    return sparse.csr_array(sparse.coo_array((values, (rows, columns)), shape=shape))


class _Quiet(highspy.Highs):
    """HiGHS without Python callbacks: installing them prints a banner."""

    def enableCallbacks(self) -> None:  # noqa: N802  (the library's name)
        """Leave callbacks off."""


class _Solver:
    """One HiGHS object; silent, on one thread, otherwise as it comes."""

    def __init__(self) -> None:
        self.highs: Any = _Quiet()  # type: ignore[no-untyped-call]
        self.highs.setOptionValue("output_flag", False)
        self.highs.setOptionValue("threads", 1)
        self._last: Program | None = None

    def give(self, program: Program) -> None:
        """Hand over a whole program; what HiGHS knew before is gone."""
        lp, matrix = highspy.HighsLp(), program.matrix
        lp.num_row_, lp.num_col_ = matrix.shape
        lp.col_cost_, lp.col_lower_, lp.col_upper_ = program.cost, program.lower, program.upper
        lp.row_lower_, lp.row_upper_ = program.row_lower, program.row_upper
        lp.a_matrix_.format_ = highspy.MatrixFormat.kColwise
        lp.a_matrix_.start_, lp.a_matrix_.index_ = matrix.indptr, matrix.indices
        lp.a_matrix_.value_ = matrix.data
        self.highs.passModel(lp)
        self._last = program

    def change(self, program: Program) -> None:
        """Put a program's numbers in place of the last one's; HiGHS goes on from its basis."""
        if self._last is None:
            self.give(program)
            return
        rows, columns = (np.arange(size, dtype=np.int32) for size in program.matrix.shape)
        self.highs.changeColsBounds(len(columns), columns, program.lower, program.upper)
        self.highs.changeColsCost(len(columns), columns, program.cost)
        self.highs.changeRowsBounds(len(rows), rows, program.row_lower, program.row_upper)
        column = np.repeat(columns, np.diff(program.matrix.indptr))
        moved = np.flatnonzero(program.matrix.data != self._last.matrix.data)
        for place in moved.tolist():
            self.highs.changeCoeff(
                int(program.matrix.indices[place]), int(column[place]), program.matrix.data[place]
            )
        self._last = program

    def optimum(self, budget: Budget) -> float:
        """Solve within what is left of the budget."""
        self.highs.setOptionValue("time_limit", self.highs.getRunTime() + budget.left())
        self.highs.run()
        status = self.highs.getModelStatus()
        if status == highspy.HighsModelStatus.kTimeLimit:
            raise OverBudgetError(budget.seconds)
        if status != highspy.HighsModelStatus.kOptimal:
            raise RuntimeError(f"the matrix by hand ended with status {status.name}")
        return float(self.highs.getInfo().objective_function_value)


def programs(subject: Subject) -> list[Program]:
    """Lay out every window, from the state the engine hands on."""
    states = subject.rolled[0]
    layout = AllAngles(Network.of(subject.case), subject.windows[0], states[0])
    return [layout.program(*pair) for pair in zip(subject.windows, states, strict=True)]


def solve_by_matrix(laid_out: list[Program], seconds: float, *, from_basis: bool) -> list[float]:
    """Solve windows one after another; return the optimum of each.

    from_basis : change the numbers of one model, whose next solve starts from the last basis
    seconds : what all of it may take
    """
    solver, budget, optima = _Solver(), Budget(seconds), []
    for program in laid_out:
        if from_basis:
            solver.change(program)
        else:
            solver.give(program)
        optima.append(solver.optimum(budget))
    return optima
