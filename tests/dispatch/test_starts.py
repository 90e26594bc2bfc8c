"""A window's result is a function of its inputs, the state handed over and the start, bit for bit.

That is what makes a run stopped and resumed, or done by any number of workers, the same run.
"""

import dataclasses

import numpy as np
import pytest

from simulator.dispatch import WindowModel
from simulator.dispatch.counts import Counts
from simulator.dispatch.inputs import run_inputs
from simulator.dispatch.start import shifted
from simulator.dispatch.state import initial_state
from simulator.errors import SolveError
from simulator.horizon import plan_run, run
from tests.dispatch.running import finished

MODES = ["given", "relaxed", "optimal"]


def assert_same(first, second):
    for item in dataclasses.fields(first):
        values = getattr(first, item.name), getattr(second, item.name)
        if dataclasses.is_dataclass(values[0]):
            assert_same(*values)
        else:
            np.testing.assert_array_equal(*values, err_msg=item.name)


@pytest.mark.parametrize("mode", MODES)
@pytest.mark.parametrize("seed", [2, 8, 9, 16, 26])
def test_what_a_model_solved_before_leaves_no_trace(convex_case, seed, mode):
    """The windows of a run, each solved again by a model that solved others in between, or none."""
    case = convex_case(seed)
    periods = len(case.time)
    length, keep = periods // 2, max(periods // 4, 1)
    inputs = run_inputs(case, slice(0, periods), periods, mode, "lines")
    state, start, steps = initial_state(case, inputs.whole.unit), None, []
    model = WindowModel(inputs.window(0, 0, length), state, Counts())
    for number, first in enumerate(range(0, periods - length + 1, keep)):
        window = inputs.window(number, first, length)
        solution = model.solve(window, state, start)
        steps.append((window, state, start, solution))
        hot = window.unit.hot_periods
        state = solution.state_after(state, keep, hot, whole=mode == "optimal")
        start = solution.left
    assert len(steps) > 1
    for window, state, start, solution in reversed(steps):
        assert_same(model.solve(window, state, start), solution)
        assert_same(WindowModel(window, state, Counts()).solve(window, state, start), solution)


@pytest.mark.parametrize("mode", MODES)
@pytest.mark.parametrize("seed", [0, 5, 14, 22])
def test_a_run_like_another_is_the_same_whatever_its_model_did_since(convex_case, seed, mode):
    case = convex_case(seed)
    plan = plan_run(case, hours=len(case.time) * case.time.period_hours, commitment=mode,
                    window_hours=3 * case.time.period_hours, keep_hours=case.time.period_hours)  # fmt: skip
    try:
        base = run(case, plan)
    except SolveError:
        pytest.skip("this case contradicts itself")
    once = run(case, plan, like=base)
    assert once.counts.builds == 0
    run(case, dataclasses.replace(plan, limits="none"), like=once)
    again = run(case, plan, like=base)
    assert_same(once.kept, again.kept)
    assert once.kept.objective == pytest.approx(base.kept.objective, rel=1e-6)


def test_hours_seen_before_keep_their_status_and_new_ones_take_the_last():
    columns = {"output": np.array([[0, 1], [2, 3], [4, 5]])}
    status = np.arange(6, dtype=np.int8)
    assert shifted(status, columns, 1, 3).tolist() == [2, 3, 4, 5, 4, 5]
    assert shifted(status, columns, 0, 3).tolist() == status.tolist()


@pytest.mark.parametrize("seed", range(12))
def test_decisions_are_within_the_gap_asked_for(random_case, seed):
    """The gap is that of the plan as run, prices' solve included, against the search's bound."""
    try:
        done = finished(random_case(seed), "optimal")
    except SolveError:
        pytest.skip("this case contradicts itself")
    asked = done.case.settings.commitment.mip_gap
    assert all(record.gap <= asked for record in done.counts.windows)
