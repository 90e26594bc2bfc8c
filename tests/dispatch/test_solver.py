"""The border to HiGHS: every status has words, options are checked, failures are raised."""

import highspy
import numpy as np
import pytest
from scipy import sparse

from simulator.dispatch import solver
from simulator.dispatch.compiled import Vectors
from simulator.dispatch.solver import STATUS, LinearSolver


def program(lower: float, upper: float) -> LinearSolver:
    """Minimise 2x + 3y with lower ≤ x + y ≤ upper, 0 ≤ x ≤ 4, 0 ≤ y ≤ 10."""
    vectors = Vectors(
        np.zeros(2), np.array([4.0, 10.0]), np.array([2.0, 3.0]), np.array([lower]), np.array([upper])
    )  # fmt: skip
    solver = LinearSolver()
    solver.load(sparse.csc_array(np.array([[1.0, 1.0]])), vectors)
    return solver


def test_every_status_of_the_solver_has_words():
    known = {getattr(status, "name", status) for status in STATUS}
    assert known == set(highspy.HighsModelStatus.__members__)
    assert all(STATUS.values())


def test_a_wrong_option_or_value_is_refused():
    lp = program(5, 20)
    lp.set_option("random_seed", 3)
    failure = solver.SolverError
    with pytest.raises(failure, match="no_such_option"):
        lp.set_option("no_such_option", 1)
    with pytest.raises(failure, match="presolve"):
        lp.set_option("presolve", "perhaps")


def test_a_small_program_has_the_solution_found_by_hand():
    """x is cheaper: 4 of it and 1 of y; one more asked for costs 3."""
    lp = program(5, 20)
    lp.run()
    values, duals = lp.solution()
    assert lp.objective == pytest.approx(11)
    assert values == pytest.approx([4, 1])
    assert duals == pytest.approx([3])


def test_an_infeasible_program_is_not_believed_to_be_solved():
    lp = program(15, 20)
    with pytest.raises(solver.SolverError, match="infeasible"):
        lp.run()
    rows, columns = lp.contradictions()
    assert len(rows) + len(columns) > 0


def test_rows_added_and_changed_move_the_optimum():
    lp = program(5, 20)
    lp.run()
    only_x = sparse.csr_array(np.array([[1.0, 0.0]]))
    lp.add_rows(only_x, np.array([0.0]), np.array([1.5]))
    lp.run()
    assert lp.objective == pytest.approx(2 * 1.5 + 3 * 3.5)
    lp.set_row_bounds(np.array([1]), np.array([0.0]), np.array([3.0]))
    lp.run()
    assert lp.objective == pytest.approx(2 * 3 + 3 * 2)
    assert lp.rows == 2


def test_a_solver_that_gives_up_on_a_basis_starts_again_from_nothing(monkeypatch):
    """Giving up is played: the first run's status says nothing, as after excessive dual values."""
    lp = program(5, 20)
    told = iter([highspy.HighsModelStatus.kNotset])
    asked = lp._highs.getModelStatus
    monkeypatch.setattr(lp._highs, "getModelStatus", lambda: next(told, None) or asked())
    lp.run()
    assert lp.objective == pytest.approx(11)
    always = highspy.HighsModelStatus.kSolveError
    monkeypatch.setattr(lp._highs, "getModelStatus", lambda: always)
    with pytest.raises(solver.SolverError, match="solve error"):
        lp.run()


def test_a_model_loaded_again_has_nothing_of_the_last_one_left():
    lp = program(5, 20)
    lp.run()
    lp.add_rows(sparse.csr_array(np.array([[1.0, 0.0]])), np.array([0.0]), np.array([1.5]))
    lp.run()
    one = np.zeros(1)
    lp.load(sparse.csc_array(np.ones((1, 1))), Vectors(one, one + 9, one + 1, one + 4, one + 6))
    lp.run()
    assert (lp.rows, lp.objective) == (1, pytest.approx(4))
