"""Hard data that contradict each other end in a `SolveError` that says where (formulation.md 1.5)."""

import pytest

from simulator.errors import SolveError
from tests.dispatch.building import case_of
from tests.dispatch.running import finished, solved


def small(folder, unit, *, periods=4, load=20.0, **more):
    """One bus, the unit in question and one that can do everything."""
    return case_of(
        folder, periods=periods,
        buses=[{"bus": "b"}],
        units=[{"unit": "quick", "bus": "b", "max_output_mw": 500},
               {"unit": "slow", "bus": "b", "max_output_mw": 400, **unit}],
        offers=[{"unit": "slow", "up_to_mw": 400, "cost_per_mwh": 30},
                {"unit": "quick", "up_to_mw": 500, "cost_per_mwh": 50}],
        loads=[{"load": "l", "bus": "b", "mw": load}],
        **more,
    )  # fmt: skip


def test_a_unit_scheduled_off_from_an_output_it_cannot_leave_is_named(tmp_path):
    unit = {"initial_output_mw": 300, "ramp_down_mw_per_h": 50, "on_profile": "never"}
    case = small(tmp_path / "case", unit, profiles={"never": [0.0] * 4})
    with pytest.raises(SolveError) as caught:
        solved(case, "given")
    error = caught.value
    assert (error.window, error.status) == (0, "infeasible")
    assert any('unit "slow"' in text and "2027-03-01T00:00" in text for text in error.elements)
    assert not any("quick" in text for text in error.elements)
    for words in ("window 0", "infeasible", 'unit "slow"', "2027-03-01T00:00"):
        assert words in str(error)


def test_the_window_and_the_hour_of_a_later_contradiction_are_named(tmp_path):
    """A phase shifter of 3 degrees drives 26 MW around its loop; ratings of 10 MW from 03:00 on cannot

    hold both lines, whatever is injected.
    """
    pair = [
        {"line": name, "from_bus": "a", "to_bus": "b", "reactance_pu": 0.1, "rating_mw": 100,
         "rating_profile": "late"}
        for name in ("shifted", "plain")
    ]  # fmt: skip
    pair[0]["phase_shift_deg"] = 3
    case = case_of(
        tmp_path / "case", periods=5, buses=[{"bus": "a"}, {"bus": "b"}], lines=pair,
        units=[{"unit": "u", "bus": "a", "max_output_mw": 100}],
        offers=[{"unit": "u", "up_to_mw": 100, "cost_per_mwh": 20}],
        loads=[{"load": "l", "bus": "b", "mw": 30}], profiles={"late": [1.0, 1, 1, 0.1, 0.1]},
    )  # fmt: skip
    with pytest.raises(SolveError) as caught:
        finished(case, window=1, keep=1)
    assert (caught.value.window, caught.value.status) == (3, "infeasible")
    assert any("line" in text and "2027-03-01T03:00" in text for text in caught.value.elements)


def test_shortage_and_surplus_are_no_contradictions(tmp_path):
    short = solved(small(tmp_path / "short", {}, load=1000.0), "given")
    assert short["load_unserved"].values == pytest.approx(100)
    assert short["price"].values == pytest.approx(10000)
    full = solved(small(tmp_path / "full", {"min_output_mw": 80}, load=20.0), "given")
    assert full["surplus"].values == pytest.approx(60)
    assert full["price"].values == pytest.approx(-1000)


def test_a_line_too_small_for_its_load_is_no_contradiction(tmp_path):
    case = case_of(
        tmp_path / "case",
        buses=[{"bus": "a"}, {"bus": "b"}],
        lines=[{"line": "a-b", "from_bus": "a", "to_bus": "b", "reactance_pu": 0.1, "rating_mw": 0}],
        units=[{"unit": "u", "bus": "a", "max_output_mw": 100}],
        offers=[{"unit": "u", "up_to_mw": 100, "cost_per_mwh": 20}],
        loads=[{"load": "l", "bus": "b", "mw": 30}],
    )  # fmt: skip
    run = finished(case)
    assert run.kept.unserved == pytest.approx(30)
    assert run.kept.price[0] == pytest.approx([20, 10000])
