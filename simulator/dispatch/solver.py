"""The one border to HiGHS: options checked, every status mapped, failures raised.

Public names: `BASIC`, `LOWER`, `Decision`, `LinearSolver`, `SolverError`, `STATUS`.

HiGHS reports a wrong option only by a return code, and `run()` may return "ok" on an infeasible model,
so every call's code is checked and only the model status is believed.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import highspy
import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from simulator.dispatch.compiled import Vectors

__all__ = ["BASIC", "LOWER", "STATUS", "Decision", "LinearSolver", "SolverError"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Statuses = NDArray[np.int8]

OPTIONS: Mapping[str, Any] = {
    "output_flag": False,
    "threads": 1,
    "random_seed": 0,
    "presolve": "off",  # the last basis is worth more than presolve, which would discard it
    "solver": "simplex",
    "mip_heuristic_run_root_reduced_cost": False,  # half the time of a search, for no better plan
}

INTEGER_OPTIONS: Mapping[str, Any] = {"presolve": "on", "solver": "choose"}
"""What differs from `OPTIONS` in an integer solve."""

STATUS: Mapping[str, str] = {
    "kNotset": "not set",
    "kLoadError": "load error",
    "kModelError": "model error",
    "kPresolveError": "presolve error",
    "kSolveError": "solve error",
    "kPostsolveError": "postsolve error",
    "kModelEmpty": "empty model",
    "kOptimal": "optimal",
    "kInfeasible": "infeasible",
    "kUnboundedOrInfeasible": "unbounded or infeasible",
    "kUnbounded": "unbounded",
    "kObjectiveBound": "objective bound reached",
    "kObjectiveTarget": "objective target reached",
    "kTimeLimit": "time limit",
    "kIterationLimit": "iteration limit",
    "kUnknown": "unknown",
    "kSolutionLimit": "solution limit",
    "kInterrupt": "interrupted",
    "kMemoryLimit": "memory limit",
    "kHighsInterrupt": "interrupted",
}
"""Every model status HiGHS knows, in words; a test pins that none is missing."""

GAVE_UP = frozenset({
    highspy.HighsModelStatus.kNotset, highspy.HighsModelStatus.kSolveError,
    highspy.HighsModelStatus.kUnknown,
})  # fmt: skip
"""Statuses that say nothing of the model."""

VIOLATION = 1e-6


class SolverError(Exception):
    """The solver ended without an optimum; `status` says how, in words."""

    def __init__(self, status: str) -> None:
        self.status = status
        super().__init__(f"the solver ended with status {status}")


@dataclass(frozen=True, eq=False)
class Decision:
    """The best plan found: values of all columns, the bound no plan's objective is below, its cost."""

    values: Floats
    bound: float
    cost: float


class _Quiet(highspy.Highs):
    """HiGHS without Python callbacks: installing them prints a banner on standard output."""

    def enableCallbacks(self) -> None:  # noqa: N802  (the library's name)
        """Leave callbacks off."""


class LinearSolver:
    """One HiGHS object that lives as long as the shape of its model, and keeps its basis."""

    def __init__(self) -> None:
        self._highs: Any = _Quiet()  # type: ignore[no-untyped-call]  # its stubs lack many methods
        for name, value in OPTIONS.items():
            self.set_option(name, value)

    def load(self, matrix: sparse.csc_array, vectors: Vectors) -> None:
        """Put a model in place of the last one; nothing of that one's solution or basis is left."""
        lp = highspy.HighsLp()
        lp.num_row_, lp.num_col_ = matrix.shape
        lp.col_cost_, lp.col_lower_, lp.col_upper_ = vectors.cost, vectors.lower, vectors.upper
        lp.row_lower_, lp.row_upper_ = vectors.row_lower, vectors.row_upper
        lp.a_matrix_.format_ = highspy.MatrixFormat.kColwise
        lp.a_matrix_.start_, lp.a_matrix_.index_ = matrix.indptr, matrix.indices
        lp.a_matrix_.value_ = matrix.data
        self._check(self._highs.passModel(lp), "the model")

    def _check(self, code: Any, what: str) -> None:
        if code == highspy.HighsStatus.kError:
            raise SolverError(f"refusal of {what}")

    def set_option(self, name: str, value: Any) -> None:
        """Set a solver option; an unknown name or value is refused."""
        self._check(self._highs.setOptionValue(name, value), f"option {name} = {value}")

    @property
    def rows(self) -> int:
        """Number of rows, line rows included."""
        return int(self._highs.getNumRow())

    def set_vectors(self, vectors: Vectors) -> None:
        """Replace bounds and costs of all columns and bounds of the first rows, as whole arrays."""
        columns = np.arange(len(vectors.cost), dtype=np.int32)
        size = len(columns)
        self._check(
            self._highs.changeColsBounds(size, columns, vectors.lower, vectors.upper),
            "column bounds",
        )
        self._check(self._highs.changeColsCost(size, columns, vectors.cost), "costs")
        self.set_row_bounds(np.arange(len(vectors.row_lower)), vectors.row_lower, vectors.row_upper)

    def set_column_bounds(self, columns: Integers, lower: Floats, upper: Floats) -> None:
        """Replace the bounds of some columns."""
        places = columns.astype(np.int32)
        code = self._highs.changeColsBounds(len(places), places, lower, upper)
        self._check(code, "column bounds")

    def set_row_bounds(self, rows: Integers, lower: Floats, upper: Floats) -> None:
        """Replace the bounds of some rows."""
        code = self._highs.changeRowsBounds(len(rows), rows.astype(np.int32), lower, upper)
        self._check(code, "row bounds")

    def add_rows(self, matrix: sparse.csr_array, lower: Floats, upper: Floats) -> None:
        """Append rows; the basis is kept, the new rows enter as basic."""
        starts, indices = matrix.indptr[:-1].astype(np.int32), matrix.indices.astype(np.int32)
        code = self._highs.addRows(
            len(lower), lower, upper, matrix.nnz, starts, indices, matrix.data
        )
        self._check(code, "rows of limits")

    def replace_rows(
        self, first: int, matrix: sparse.csr_array, lower: Floats, upper: Floats
    ) -> None:
        """Put other rows in place of all from `first` on; the basis is lost."""
        rows = np.arange(first, self.rows, dtype=np.int32)
        self._check(self._highs.deleteRows(len(rows), rows), "a deletion of rows")
        self.add_rows(matrix, lower, upper)

    def basis(self) -> tuple[Statuses, Statuses]:
        """Return the status of every column and row as numbers; `BASIC` marks the basic ones."""
        found = self._highs.getBasis()
        return _numbers(found.col_status), _numbers(found.row_status)

    def set_basis(self, columns: Statuses, rows: Statuses) -> None:
        """Start the next run from these statuses; what is singular or miscounted is repaired."""
        basis = highspy.HighsBasis()
        basis.col_status = [_STATUSES[number] for number in columns.tolist()]
        basis.row_status = [_STATUSES[number] for number in rows.tolist()]
        basis.valid = basis.alien = True
        self._check(self._highs.setBasis(basis), "a starting basis")

    def run(self) -> None:
        """Solve from the current basis; raise `SolverError` unless the result is optimal.

        A basis can be so far from feasible that the solver gives up in its numbers; it then starts again
        from nothing, since whether a model has an optimum does not hang on a basis.
        """
        self._highs.run()
        status = self._highs.getModelStatus()
        if status in GAVE_UP:
            self._check(self._highs.clearSolver(), "a fresh start")
            self._highs.run()
            status = self._highs.getModelStatus()
        if status != highspy.HighsModelStatus.kOptimal:
            raise SolverError(STATUS[status.name])

    def run_integer(
        self, binaries: Integers, gap: float, seconds: float, start: Floats | None
    ) -> Decision:
        """Solve with some columns binary; raise `SolverError` if no plan is found in time.

        gap : relative gap at which to stop; start : column values to start from, NaN where unknown
        """
        highs, count = self._highs, len(binaries)
        places = binaries.astype(np.int32)
        kinds = {kind: np.full(count, int(kind), dtype=np.uint8) for kind in _KINDS}
        self._check(highs.changeColsIntegrality(count, places, kinds[_INTEGER]), "binary columns")
        for name, value in INTEGER_OPTIONS.items():
            self.set_option(name, value)
        self.set_option("mip_rel_gap", gap)
        self.set_option("time_limit", highs.getRunTime() + seconds)
        if start is not None:
            self._propose(start)
        try:
            highs.run()
            return self._decision()
        finally:
            self._check(highs.changeColsIntegrality(count, places, kinds[_CONTINUOUS]), "columns")
            for name in INTEGER_OPTIONS:
                self.set_option(name, OPTIONS[name])
            self.set_option("time_limit", float("inf"))

    def _propose(self, start: Floats) -> None:
        known = np.flatnonzero(~np.isnan(start))
        code = self._highs.setSolution(len(known), known.astype(np.int32), start[known])
        self._check(code, "a starting plan")

    def _decision(self) -> Decision:
        status, info = self._highs.getModelStatus(), self._highs.getInfo()
        if info.primal_solution_status != highspy.SolutionStatus.kSolutionStatusFeasible:
            raise SolverError(STATUS[status.name])
        if status not in {highspy.HighsModelStatus.kOptimal, highspy.HighsModelStatus.kTimeLimit}:
            raise SolverError(STATUS[status.name])
        values = np.asarray(self._highs.getSolution().col_value)
        return Decision(values, float(info.mip_dual_bound), float(info.objective_function_value))

    @property
    def iterations(self) -> int:
        """Simplex iterations of the last run."""
        return int(self._highs.getInfo().simplex_iteration_count)

    @property
    def objective(self) -> float:
        """Objective of the last run."""
        return float(self._highs.getInfo().objective_function_value)

    def solution(self) -> tuple[Floats, Floats]:
        """Return column values and row duals of the last run."""
        found = self._highs.getSolution()
        return np.asarray(found.col_value), np.asarray(found.row_dual)

    def row_values(self) -> Floats:
        """Return row values of the last run."""
        return np.asarray(self._highs.getSolution().row_value)

    def reduced_costs(self) -> Floats:
        """Return column duals of the last run."""
        return np.asarray(self._highs.getSolution().col_dual)

    def contradictions(self) -> tuple[Integers, Integers]:
        """Return rows and columns that must be broken, in a solution that breaks as little as it can."""
        self._check(self._highs.feasibilityRelaxation(1.0, 1.0, 1.0), "a search for contradictions")
        found, lp = self._highs.getSolution(), self._highs.getLp()
        return (
            _outside(found.row_value, lp.row_lower_, lp.row_upper_),
            _outside(found.col_value, lp.col_lower_, lp.col_upper_),
        )


_INTEGER, _CONTINUOUS = highspy.HighsVarType.kInteger, highspy.HighsVarType.kContinuous
_KINDS = (_INTEGER, _CONTINUOUS)
_STATUSES = list(highspy.HighsBasisStatus.__members__.values())
BASIC = int(highspy.HighsBasisStatus.kBasic)
LOWER = int(highspy.HighsBasisStatus.kLower)


def _numbers(statuses: Any) -> Statuses:
    return np.fromiter(map(int, statuses), dtype=np.int8, count=len(statuses))


def _outside(values: Any, lower: Any, upper: Any) -> Integers:
    value = np.asarray(values)
    if not len(value):
        return np.zeros(0, dtype=int)
    over = np.maximum(value - np.asarray(upper), np.asarray(lower) - value)
    return np.flatnonzero(over > VIOLATION)
