"""Reserves by hand (formulation.md 2.7): who provides, what it costs, what it makes of energy prices."""

import numpy as np
import pytest

from simulator.dispatch.compiled import compile_fleet
from simulator.dispatch.fleet import fleet_data
from simulator.dispatch.inputs import run_inputs
from simulator.dispatch.state import initial_state
from tests.dispatch.building import Row, case_of
from tests.dispatch.running import cost, solved
from tests.dispatch.test_rules_by_hand import outage

MODES = ["given", "relaxed", "optimal"]


def two_units(
    folder, load, product: Row, *, cheap: Row | None = None, dear: Row | None = None, **more
):
    """A cheap and a dear unit of 100 MW at one bus, and one reserve product."""
    return case_of(
        folder, buses=[{"bus": "b"}],
        units=[{"unit": "cheap", "bus": "b", "max_output_mw": 100, **(cheap or {})},
               {"unit": "dear", "bus": "b", "max_output_mw": 100, **(dear or {})}],
        offers=[{"unit": "cheap", "up_to_mw": 100, "cost_per_mwh": 20},
                {"unit": "dear", "up_to_mw": 100, "cost_per_mwh": 50}],
        loads=[{"load": "l", "bus": "b", "mw": load}],
        reserves=[{"product": "r", "direction": "up", **product}], **more,
    )  # fmt: skip


@pytest.mark.parametrize("minutes", [60, 15])
@pytest.mark.parametrize("mode", MODES)
def test_reserve_is_paid_what_its_provider_could_earn_with_energy(tmp_path, mode, minutes):
    """The dear unit can raise by 60 MW/h × 10 min = 10 MW of the 30 asked for, the cheap one any amount.

    So the cheap one keeps 20 free, and the dear one gives 10 of the 90 MW of load. A MW more of load
    costs 50. A MW more of reserve moves a MW of energy from 20 to 50: it costs 30, whatever the length
    of a period.
    """
    product = {"requirement_mw": 30, "response_minutes": 10}
    case = two_units(
        tmp_path / "case", 90.0, product, dear={"ramp_up_mw_per_h": 60}, minutes=minutes
    )
    results = solved(case, mode)
    assert results["unit_output"].values[0] == pytest.approx([80, 10])
    assert results["unit_reserve"].values[0, :, 0] == pytest.approx([20, 10])
    assert results["price"].values == pytest.approx(50)
    assert results["reserve_price"].values == pytest.approx(30)
    assert cost(results) == pytest.approx((80 * 20 + 10 * 50) * 2 * minutes / 60)


@pytest.mark.parametrize("mode", MODES)
def test_downward_reserve_is_paid_what_it_costs_to_run_above_the_minimum(tmp_path, mode):
    """The cheap unit can lower by 6 of the 16 MW asked for, so the dear one runs 10 above its minimum.

    A MW more of load is the cheap unit's, at 20; a MW more of reserve moves one from 20 to 50.
    """
    product = {"direction": "down", "requirement_mw": 16, "response_minutes": 6}
    case = two_units(
        tmp_path / "case", 90.0, product,
        cheap={"min_output_mw": 30, "ramp_down_mw_per_h": 60, "must_run": True},
        dear={"min_output_mw": 20, "must_run": True},
    )  # fmt: skip
    results = solved(case, mode)
    assert results["unit_output"].values[0] == pytest.approx([60, 30])
    assert results["unit_reserve"].values[0, :, 0] == pytest.approx([6, 10])
    assert results["price"].values == pytest.approx(20)
    assert results["reserve_price"].values == pytest.approx(30)


@pytest.mark.parametrize("mode", MODES)
def test_what_is_short_costs_its_price_and_lifts_that_of_energy(tmp_path, mode):
    """Of 200 MW, 185 are load: 15 of 30 MW of reserve are short at 500.

    A MW more of load takes one of the dear unit's, and its reserve: 50 + 500.
    """
    product = {"requirement_mw": 30, "shortage_per_mwh": 500}
    results = solved(two_units(tmp_path / "case", 185.0, product), mode)
    assert results["reserve_shortage"].values == pytest.approx(15)
    assert results["reserve_price"].values == pytest.approx(500)
    assert results["price"].values == pytest.approx(550)
    assert results["cost"].sel(component="reserve_shortage").values == pytest.approx(15 * 500)
    assert cost(results) / 2 == pytest.approx(100 * 20 + 85 * 50 + 15 * 500)


def test_load_is_served_before_reserve_where_it_is_worth_more(tmp_path):
    """205 MW of load on 200 MW: 5 unserved at 10000, all reserve short at 500."""
    product = {"requirement_mw": 30, "shortage_per_mwh": 500}
    results = solved(two_units(tmp_path / "case", 205.0, product))
    assert results["load_unserved"].values == pytest.approx(5)
    assert results["reserve_shortage"].values == pytest.approx(30)
    assert results["reserve_price"].values == pytest.approx(500)


def test_a_price_of_reserve_never_exceeds_that_of_shortage_where_nobody_can_provide(tmp_path):
    product = {"requirement_mw": 30, "response_minutes": 10, "shortage_per_mwh": 70}
    still = {"ramp_up_mw_per_h": 0, "ramp_down_mw_per_h": 0, "initial_output_mw": 40}
    results = solved(two_units(tmp_path / "case", 80.0, product, cheap=still, dear=still), "given")
    assert results["reserve_price"].values == pytest.approx(70)
    assert results["reserve_shortage"].values == pytest.approx(30)
    assert results["unit_reserve"].values == pytest.approx(0)


@pytest.mark.parametrize(("shortage", "on", "total"), [(31, 1, 1900), (29, 0, 1600 + 290)])
def test_a_unit_is_put_on_for_reserve_where_that_is_cheaper_than_being_short(
    tmp_path, shortage, on, total
):
    """The cheap unit has 20 of 30 MW free. With the dear one on, at its minimum of 10, it has all 30,

    for 10·(50 − 20) an hour, which is 30 for each MW that would else be short.
    """
    product = {"requirement_mw": 30, "shortage_per_mwh": shortage}
    results = solved(
        two_units(tmp_path / "case", 80.0, product, dear={"min_output_mw": 10}), "optimal"
    )
    assert results["unit_on"].values[:, 1] == pytest.approx(on)
    assert cost(results) / 2 == pytest.approx(total)


@pytest.mark.parametrize("mode", MODES)
def test_an_outage_takes_headroom_with_it_in_every_window(tmp_path, mode):
    """The cheap unit at 60 % in the third of four hours, windows of two: 60 − 40 MW are left for reserve."""
    still = {"ramp_up_mw_per_h": 0, "ramp_down_mw_per_h": 0}
    product = {"requirement_mw": 50, "response_minutes": 60, "shortage_per_mwh": 5}
    case = two_units(
        tmp_path / "case", 40.0, product, periods=4, dear=still, cheap={"must_run": True},
        outages=[row | {"name": "cheap"} for row in outage(2, 3, 60)],
    )  # fmt: skip
    results = solved(case, mode, window=2, keep=1)
    assert results["reserve_shortage"].values[:, 0] == pytest.approx([0, 0, 30, 0])
    assert results["unit_output"].values[:, 0] == pytest.approx(40)


@pytest.mark.parametrize("mode", MODES)
def test_a_zone_is_held_ready_by_its_own_units(tmp_path, mode):
    """North has cheap power and room to spare, the south must keep 20 of its own 50 MW free: 15 for reserve

    in the south, none elsewhere.
    """
    case = case_of(
        tmp_path / "case",
        buses=[{"bus": "n", "zone": "north"}, {"bus": "s", "zone": "south"}],
        lines=[{"line": "n-s", "from_bus": "n", "to_bus": "s", "reactance_pu": 0.1}],
        units=[{"unit": "north", "bus": "n", "max_output_mw": 300},
               {"unit": "south", "bus": "s", "max_output_mw": 50}],
        offers=[{"unit": "north", "up_to_mw": 300, "cost_per_mwh": 25},
                {"unit": "south", "up_to_mw": 50, "cost_per_mwh": 10}],
        loads=[{"load": "l", "bus": "s", "mw": 100}, {"load": "m", "bus": "n", "mw": 60}],
        reserves=[
            {"product": "there", "direction": "up", "zone": "south", "percent_of_load": 20},
            {"product": "anywhere", "direction": "up", "percent_of_load": 20},
        ],
    )  # fmt: skip
    results = solved(case, mode)
    assert results["reserve_requirement"].values[0] == pytest.approx([20, 32])
    assert results["unit_output"].values[0] == pytest.approx([130, 30])
    assert results["reserve_price"].values[0] == pytest.approx([15, 0])
    assert results["unit_reserve"].sel(product="there").values[0] == pytest.approx([0, 20])
    assert results["price"].values == pytest.approx(25)


def test_two_products_share_the_room_of_a_unit(tmp_path):
    """Of 100 MW of load the cheap unit serves 65, since it alone can provide both products, 20 and 15 MW.

    One more MW of either costs 30; the slow product's response time does not count where room binds.
    """
    still = {"ramp_up_mw_per_h": 0, "ramp_down_mw_per_h": 0}
    case = case_of(
        tmp_path / "case", buses=[{"bus": "b"}],
        units=[{"unit": "cheap", "bus": "b", "max_output_mw": 100, "ramp_up_mw_per_h": 60},
               {"unit": "dear", "bus": "b", "max_output_mw": 100, **still}],
        offers=[{"unit": "cheap", "up_to_mw": 100, "cost_per_mwh": 20},
                {"unit": "dear", "up_to_mw": 100, "cost_per_mwh": 50}],
        loads=[{"load": "l", "bus": "b", "mw": 100}],
        reserves=[
            {"product": "quick", "direction": "up", "requirement_mw": 20, "response_minutes": 30},
            {"product": "slow", "direction": "up", "requirement_mw": 15, "response_minutes": 60},
        ],
    )  # fmt: skip
    results = solved(case, "given")
    assert results["unit_output"].values[0] == pytest.approx([65, 35])
    assert results["unit_reserve"].values[0, 0] == pytest.approx([20, 15])
    assert results["reserve_price"].sum("time").values == pytest.approx([60, 60])


def test_more_than_asked_is_not_called_provided(tmp_path):
    results = solved(two_units(tmp_path / "case", 50.0, {"requirement_mw": 30}), "given")
    assert results["unit_reserve"].sum("unit").values == pytest.approx(30)
    assert results["reserve_price"].values == pytest.approx(0)


def test_a_case_without_products_has_no_trace_of_reserves_in_its_model(tmp_path):
    case = case_of(
        tmp_path / "case", buses=[{"bus": "b"}], units=[{"unit": "u", "bus": "b", "max_output_mw": 9}],
        offers=[{"unit": "u", "up_to_mw": 9, "cost_per_mwh": 1}],
        loads=[{"load": "l", "bus": "b", "mw": 5}],
    )  # fmt: skip
    for mode in MODES:
        inputs = run_inputs(case, slice(0, 2), 2, mode, "lines").whole
        fleet = compile_fleet(inputs, fleet_data(inputs, initial_state(case, inputs.unit)))
        names = {*fleet.columns, *fleet.rows}
        assert not [name for name in names if "reserve" in name or "room" in name]


@pytest.mark.parametrize("mode", MODES)
def test_a_run_in_windows_holds_the_reserve_of_every_hour(tmp_path, mode):
    load = [60.0, 80, 95, 110, 90, 70]
    product = {"percent_of_load": 10, "response_minutes": 15}
    slow = {"ramp_up_mw_per_h": 60, "min_output_mw": 10}
    case = two_units(tmp_path / "case", load, product, periods=6, cheap=slow, dear=slow)
    results = solved(case, mode, window=3, keep=2)
    held = results["unit_reserve"].sum("unit").values[:, 0]
    np.testing.assert_allclose(
        held + results["reserve_shortage"].values[:, 0], 0.1 * np.array(load)
    )
