"""Windows (formulation.md 4): rolled with full look-ahead they cost what one window costs; updated in

place they are what a fresh model is; short ones go on to the end.
"""

import numpy as np
import pytest
from scipy import sparse

from simulator.dispatch import WindowModel
from simulator.dispatch.counts import Counts
from simulator.dispatch.inputs import run_inputs
from simulator.dispatch.state import initial_state
from simulator.errors import OptionError, SolveError
from simulator.horizon import plan_run, run
from simulator.results import to_dataset
from tests.dispatch.building import Row, case_of
from tests.dispatch.running import cost, finished

ROLLED = [0, 3, 5, 8, 11, 14, 16, 19, 22, 23, 27, 28]


@pytest.mark.parametrize("seed", ROLLED)
def test_windows_that_see_to_the_end_cost_what_one_window_costs(convex_case, seed):
    """Stores, ramps, minimum times and starts all reach across the windows' edges.

    A state is all that an optimum hands on, so that what is left of it stays optimal.
    """
    case = convex_case(seed)
    for mode in ("given", "relaxed"):
        try:
            whole = finished(case, mode)
        except SolveError:
            continue
        rolled = finished(case, mode, keep=1 + seed % 3)
        assert rolled.window[-1] > 0
        assert cost(to_dataset(rolled)) == pytest.approx(cost(to_dataset(whole)), rel=1e-7), mode


@pytest.mark.parametrize("seed", ROLLED)
def test_short_windows_go_on_to_the_end_and_are_never_cheaper(convex_case, seed):
    """What one window keeps must leave the next a way on, unless the case contradicts itself."""
    case = convex_case(seed)
    for mode in ("given", "relaxed"):
        try:
            whole = to_dataset(finished(case, mode))
        except SolveError:
            continue
        short = to_dataset(finished(case, mode, window=2, keep=1))
        ended = short["stored_energy"].values[-1]
        if (ended < case.storage["final_mwh"].to_numpy(float) - 1e-6).any():
            continue  # energy that the whole run paid for is missing at the end
        assert cost(short) > cost(whole) * (1 - 1e-7 * np.sign(cost(whole))) - 1e-6, mode


def test_a_run_that_starts_later_on_the_axis_takes_its_hours_from_there(tmp_path):
    """The second half of a case is the case of the second half."""
    system: dict[str, list[Row]] = {
        "buses": [{"bus": "b"}],
        "units": [{"unit": "u", "bus": "b", "max_output_mw": 100, "fuel": "gas"}],
        "heat_rates": [{"unit": "u", "up_to_mw": 100, "heat_rate_gj_per_mwh": 8}],
        "fuels": [{"fuel": "gas", "price_per_gj": 5, "price_profile": "gas"}],
        "outages": [{"kind": "unit", "name": "u", "from": "2027-03-01T05:00",
                     "until": "2027-03-01T06:00", "available_percent": 30}],
    }  # fmt: skip
    load, price = [40.0, 50, 60, 70, 80, 90], [1.0, 1.1, 1.2, 1.3, 1.4, 1.5]
    case = case_of(
        tmp_path / "case", **system, periods=6, profiles={"gas": price},
        loads=[{"load": "l", "bus": "b", "mw": load}],
    )  # fmt: skip
    plan = plan_run(case, "2027-03-01T03:00", 3, window_hours=3, keep_hours=1, commitment="relaxed")
    results = to_dataset(run(case, plan))
    assert results["time"].values[0] == np.datetime64("2027-03-01T03:00")
    assert results["unit_output"].values[:, 0] == pytest.approx([70, 80, 30])
    assert results["load_unserved"].values[:, 0] == pytest.approx([0, 0, 60])
    assert results["price"].values[:2, 0] == pytest.approx([52, 56])


@pytest.mark.parametrize("how", [{"window_hours": 0}, {"keep_hours": 0}, {"hours": 0}])
def test_a_length_of_nothing_is_refused(convex_case, how):
    with pytest.raises(OptionError, match="at least one"):
        plan_run(convex_case(0), **({"hours": 1, "commitment": "given"} | how))


def matrix_of(model: WindowModel, rows: int) -> sparse.csc_array:
    """The first rows of the matrix that stands in the solver."""
    lp = model._solver._highs.getLp()
    stored = lp.a_matrix_
    shape = (lp.num_row_, lp.num_col_)
    columns = (np.array(stored.value_), np.array(stored.index_), np.array(stored.start_))
    return sparse.csr_array(sparse.csc_array(columns, shape=shape))[:rows]


@pytest.mark.parametrize("mode", ["given", "relaxed"])
@pytest.mark.parametrize("seed", [2, 8, 9, 16, 17, 26])
def test_a_model_updated_in_place_is_the_model_built_afresh(convex_case, seed, mode):
    """Derates and outages move matrix entries; bounds, costs and line rows move with the window."""
    case = convex_case(seed)
    periods = len(case.time)
    length, keep = periods // 2, max(periods // 4, 1)
    inputs = run_inputs(case, slice(0, periods), periods, mode, "lines")
    state = initial_state(case, inputs.whole.unit)
    model = None
    for number, first in enumerate(range(0, periods - length + 1, keep)):
        window = inputs.window(number, first, length)
        model = model or WindowModel(window, state, Counts())
        assert model.fits(window)
        updated = model.solve(window, state)
        fresh = WindowModel(window, state, Counts())
        anew = fresh.solve(window, state)
        assert updated.objective == pytest.approx(anew.objective, rel=1e-9, abs=1e-6)
        rows = model.fleet.matrix.shape[0]
        difference = matrix_of(model, rows) - matrix_of(fresh, rows)
        assert abs(difference).max() < 1e-12
        state = updated.state_after(state, keep, window.unit.hot_periods, whole=False)
    assert model is not None
    assert model.counts.builds == 1
