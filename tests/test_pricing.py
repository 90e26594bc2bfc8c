"""Two kinds of price of one plan: with its decisions fixed, and of the relaxation (formulation.md 5.5)."""

import numpy as np
import pytest

from simulator.audit import audit
from simulator.errors import OptionError, SolveError
from simulator.horizon import plan_run, run
from simulator.results import to_dataset
from tests.dispatch.building import case_of
from tests.dispatch.drawing import drawn

ONE_UNIT = {
    "buses": [{"bus": "b"}],
    "units": [{"unit": "u", "bus": "b", "min_output_mw": 50, "max_output_mw": 100,
               "no_load_cost_per_h": 500, "start_cost": 1000, "initial_hours": 5,
               "initial_output_mw": 60}],
    "offers": [{"unit": "u", "up_to_mw": 100, "cost_per_mwh": 20}],
}  # fmt: skip


def priced(case, pricing, **how):
    hours = len(case.time) * case.time.period_hours
    plan = plan_run(case, hours=hours, commitment="optimal", pricing=pricing, **how)
    return to_dataset(run(case, plan))


def test_a_relaxed_price_spreads_no_load_cost_over_full_output(tmp_path):
    """60 MW need 0.6 of a unit of 100 MW: 20 + 500/100. With the unit on, one more MW costs 20."""
    case = case_of(tmp_path / "case", **ONE_UNIT, loads=[{"load": "l", "bus": "b", "mw": 60}])
    fixed, relaxed = priced(case, "fixed"), priced(case, "relaxed")
    assert fixed["price"].values == pytest.approx(20)
    assert relaxed["price"].values == pytest.approx(25)
    for results in (fixed, relaxed):
        assert results["price_fixed"].values == pytest.approx(20)
        assert results["price_relaxed"].values == pytest.approx(25)
    assert (fixed.attrs["pricing"], relaxed.attrs["pricing"]) == ("fixed", "relaxed")
    for amount in ("unit_output", "unit_on", "cost", "line_flow"):
        np.testing.assert_array_equal(fixed[amount], relaxed[amount])


def test_a_relaxed_price_spreads_a_start_over_the_run(tmp_path):
    """Two hours from a cold unit: (1000 + 2·500)/100 above 2·20, however the hours share it."""
    unit = ONE_UNIT["units"][0] | {"initial_hours": -50, "initial_output_mw": None}
    case = case_of(
        tmp_path / "case", **(ONE_UNIT | {"units": [unit]}),
        loads=[{"load": "l", "bus": "b", "mw": [60, 60]}],
    )  # fmt: skip
    assert priced(case, "relaxed")["price"].values.sum() == pytest.approx(60)
    assert priced(case, "fixed")["price"].values.sum() == pytest.approx(40)


@pytest.mark.parametrize("mode", ["given", "relaxed"])
def test_relaxed_prices_are_refused_where_nothing_is_decided(tmp_path, mode):
    case = case_of(tmp_path / "case", **ONE_UNIT, loads=[{"load": "l", "bus": "b", "mw": 60}])
    with pytest.raises(OptionError, match=r"--pricing relaxed.*--commitment optimal"):
        plan_run(case, hours=2, commitment=mode, pricing="relaxed")


@pytest.mark.parametrize("seed", range(300, 312))
def test_random_plans_with_relaxed_prices_pass_the_audit(tmp_path, seed):
    """Parts, shadow prices and the rent identity hold of the relaxation; amounts at fixed prices."""
    case = case_of(tmp_path / "case", **drawn(seed))
    try:
        results = priced(case, "relaxed", window_hours=4 * case.time.period_hours,
                         keep_hours=2 * case.time.period_hours)  # fmt: skip
    except SolveError:
        pytest.skip("the case contradicts itself")
    failed = [check for check in audit(case, results) if not check.passed]
    assert not [check for check in failed if check.name != "final energy"]


@pytest.mark.parametrize("seed", [300, 302])
def test_a_price_of_the_wrong_kind_is_found(tmp_path, seed):
    case = case_of(tmp_path / "case", **drawn(seed))
    results = priced(case, "relaxed")
    assert not np.allclose(results["price_fixed"], results["price_relaxed"])
    results.attrs["pricing"] = "fixed"
    failed = [check.name for check in audit(case, results) if not check.passed]
    assert "kind of price" in failed
