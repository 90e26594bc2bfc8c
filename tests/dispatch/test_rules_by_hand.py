"""Rules of formulation.md 2.2 to 2.4 one by one, on cases small enough to do by hand."""

import numpy as np
import pytest

from simulator.results import to_dataset
from tests.dispatch.building import Row, case_of
from tests.dispatch.running import cost, finished, solved

FULL = "2027-03-01T{:02d}:00"


def one_unit(folder, unit: Row, load, *, price=20.0, spare=100.0, mode="relaxed", **more):
    """A unit at a price beside a dearer spare one that can do all; output, on and starts of the first."""
    case = case_of(
        folder, buses=[{"bus": "b"}], periods=len(load),
        units=[{"unit": "u", "bus": "b", "max_output_mw": 100, **unit},
               {"unit": "spare", "bus": "b", "max_output_mw": 1000}],
        offers=[{"unit": "u", "up_to_mw": 100, "cost_per_mwh": price},
                {"unit": "spare", "up_to_mw": 1000, "cost_per_mwh": spare}],
        loads=[{"load": "l", "bus": "b", "mw": load}], **more,
    )  # fmt: skip
    return finished(case, mode)


def outage(first: int, until: int, percent: float = 0.0) -> list[Row]:
    return [{"kind": "unit", "name": "u", "from": FULL.format(first), "until": FULL.format(until),
             "available_percent": percent}]  # fmt: skip


def test_ramps_hold_from_the_initial_output_on(tmp_path):
    """Up by 30 an hour; down by 40, soon enough that nothing has to be spilled when the load is gone."""
    unit = {"initial_output_mw": 20, "ramp_up_mw_per_h": 30, "ramp_down_mw_per_h": 40}
    run = one_unit(tmp_path / "case", unit, [100.0, 100, 100, 100, 0, 0], mode="given")
    assert run.kept.output[:, 0] == pytest.approx([50, 80, 80, 40, 0, 0])


def test_an_initial_output_of_nothing_holds_the_first_ramp_too(tmp_path):
    for mode in ("given", "relaxed"):
        unit = {"initial_output_mw": 0, "ramp_up_mw_per_h": 30}
        run = one_unit(tmp_path / mode, unit, [80.0] * 3, mode=mode)
        assert run.kept.output[:, 0] == pytest.approx([30, 60, 80]), mode


def test_ramps_are_per_hour_whatever_the_period(tmp_path):
    unit = {"initial_output_mw": 20, "ramp_up_mw_per_h": 40}
    run = one_unit(tmp_path / "case", unit, [100.0] * 4, mode="given", minutes=15)
    assert run.kept.output[:, 0] == pytest.approx([30, 40, 50, 60])


def test_a_unit_starts_and_stops_within_its_start_and_stop_ramps(tmp_path):
    unit = {
        "min_output_mw": 30, "ramp_up_mw_per_h": 50, "start_ramp_mw": 40, "stop_ramp_mw": 35,
        "initial_hours": -5, "on_profile": "on",
    }  # fmt: skip
    on = {"on": [0.0, 1, 1, 1, 1, 0]}
    run = one_unit(tmp_path / "case", unit, [100.0] * 6, mode="given", profiles=on)
    assert run.kept.output[:, 0] == pytest.approx([0, 40, 90, 85, 35, 0])


def test_what_is_left_of_a_minimum_up_time_holds(tmp_path):
    """On for 1 of 3 hours: on for 2 more, at its minimum, though the spare unit is cheaper."""
    unit = {"min_output_mw": 40, "min_up_h": 3, "initial_hours": 1, "initial_output_mw": 40}
    run = one_unit(tmp_path / "case", unit, [90.0] * 4, spare=5.0)
    assert run.kept.on[:, 0] == pytest.approx([1, 1, 0, 0])
    assert run.kept.output[:, 0] == pytest.approx([40, 40, 0, 0])


def test_what_is_left_of_a_minimum_down_time_holds(tmp_path):
    unit = {"min_output_mw": 40, "min_down_h": 4, "initial_hours": -2}
    run = one_unit(tmp_path / "case", unit, [100.0] * 4)
    assert run.kept.on[:, 0] == pytest.approx([0, 0, 1, 1])


def test_times_that_are_no_whole_periods_count_in_full(tmp_path):
    """Off for 2 of 2.5 hours, a period an hour: one period more."""
    unit = {"min_output_mw": 40, "min_down_h": 2.5, "initial_hours": -2}
    run = one_unit(tmp_path / "case", unit, [100.0] * 3)
    assert run.kept.on[:, 0] == pytest.approx([0, 1, 1])


@pytest.mark.parametrize(("off", "start_cost"), [(1, 500), (2, 500), (3, 900), (4, 900)])
def test_a_start_is_cold_after_min_down_and_cold_after_hours_off(tmp_path, off, start_cost):
    """min_down_h 1 and cold_after_h 1.5: hot up to 2.5 hours off, cold from 3 on."""
    unit = {
        "start_cost": 500, "cold_start_cost": 900, "cold_after_h": 1.5, "min_down_h": 1,
        "min_output_mw": 50, "initial_output_mw": 50, "on_profile": "on",
    }  # fmt: skip
    on, load = {"on": [0.0] * off + [1.0] * 2}, [0.0] * off + [100.0] * 2
    for mode in ("given", "relaxed"):
        run = one_unit(tmp_path / mode, unit, load, mode=mode, profiles=on, spare=5000.0)
        assert run.kept.start[:, 0] == pytest.approx([0] * off + [1, 0]), mode
        assert cost(to_dataset(run)) == pytest.approx(start_cost + 20 * 200), mode


def test_a_cold_start_is_told_from_a_hot_one_before_the_run(tmp_path):
    unit = {"start_cost": 500, "cold_start_cost": 900, "cold_after_h": 2, "min_down_h": 1}
    for hours, start_cost in ((-1, 500), (-3, 500), (-4, 900)):
        run = one_unit(
            tmp_path / str(hours), unit | {"initial_hours": hours}, [100.0] * 2, spare=5000.0
        )
        assert cost(to_dataset(run)) == pytest.approx(start_cost + 20 * 200), hours


def test_a_full_outage_turns_a_unit_off_and_it_has_to_start_again(tmp_path):
    """Whatever its minimum up time and stop ramp; back by its start ramp, at its start cost."""
    unit = {
        "min_output_mw": 20, "min_up_h": 9, "min_down_h": 4, "initial_output_mw": 100,
        "initial_hours": 1, "ramp_down_mw_per_h": 10, "stop_ramp_mw": 20, "ramp_up_mw_per_h": 50,
        "start_ramp_mw": 30, "start_cost": 700,
    }  # fmt: skip
    for mode in ("given", "relaxed"):
        run = one_unit(
            tmp_path / mode, unit, [100.0] * 6, mode=mode, outages=outage(1, 3), spare=2000.0
        )
        assert run.kept.output[:, 0] == pytest.approx([100, 0, 0, 30, 80, 100]), mode
        assert run.kept.on[:, 0] == pytest.approx([1, 0, 0, 1, 1, 1]), mode
        assert run.kept.start[:, 0] == pytest.approx([0, 0, 0, 1, 0, 0]), mode


def test_a_derate_overrides_ramps_down_but_not_up(tmp_path):
    unit = {"initial_output_mw": 100, "ramp_down_mw_per_h": 10, "ramp_up_mw_per_h": 25}
    run = one_unit(
        tmp_path / "case", unit, [100.0] * 5, mode="given", outages=outage(1, 3, 40), spare=2000.0
    )
    assert run.kept.output[:, 0] == pytest.approx([100, 40, 40, 65, 90])


def test_a_derate_below_minimum_output_lowers_it_and_it_returns_as_fast_as_the_unit_can(tmp_path):
    """Nothing is asked of a unit that it cannot do: 40 MW again only after 10 and 30."""
    unit = {"min_output_mw": 40, "initial_output_mw": 40, "ramp_up_mw_per_h": 20}
    for mode in ("given", "relaxed"):
        run = one_unit(
            tmp_path / mode, unit | {"must_run": True}, [0.0] * 4, mode=mode, outages=outage(1, 2, 10)
        )  # fmt: skip
        assert run.kept.output[:, 0] == pytest.approx([40, 10, 30, 40]), mode
        assert run.kept.surplus[:, 0] == pytest.approx([40, 10, 30, 40]), mode


def test_must_run_holds_save_in_a_full_outage(tmp_path):
    unit = {"min_output_mw": 40, "must_run": True}
    run = one_unit(tmp_path / "case", unit, [90.0] * 4, spare=5.0, outages=outage(2, 3))
    assert run.kept.output[:, 0] == pytest.approx([40, 40, 0, 40])


def test_a_curve_that_falls_below_the_minimum_is_paid_in_its_order(tmp_path):
    """Up to 50 MW at 40, from there at 10: at its minimum of 50 it costs 2,000, at 60 MW 2,100."""
    case = case_of(
        tmp_path / "case", buses=[{"bus": "b"}],
        units=[{"unit": "u", "bus": "b", "max_output_mw": 100, "min_output_mw": 50}],
        offers=[{"unit": "u", "up_to_mw": 50, "cost_per_mwh": 40},
                {"unit": "u", "up_to_mw": 100, "cost_per_mwh": 10}],
        loads=[{"load": "l", "bus": "b", "mw": [50.0, 60.0]}],
    )  # fmt: skip
    results = solved(case, "given")
    assert results["unit_cost"].values[:, 0] == pytest.approx([2000, 2100])
    assert results["price"].values[1] == pytest.approx([10])


def test_fuel_carbon_and_operation_add_up_to_the_cost_of_heat(tmp_path):
    """8 GJ/MWh at 5 per GJ times 1.1, 0.05 t/GJ at 20 per t, 3 per MWh: 44 + 8 + 3."""
    case = case_of(
        tmp_path / "case", {"emissions": {"carbon_price_per_t": 20.0}}, buses=[{"bus": "b"}],
        units=[{"unit": "u", "bus": "b", "max_output_mw": 100, "fuel": "gas", "variable_om_per_mwh": 3}],
        heat_rates=[{"unit": "u", "up_to_mw": 100, "heat_rate_gj_per_mwh": 8}],
        fuels=[{"fuel": "gas", "price_per_gj": 5, "co2_t_per_gj": 0.05, "price_profile": "gas"}],
        loads=[{"load": "l", "bus": "b", "mw": 70}], profiles={"gas": [1.1, 1.1]}, minutes=30,
    )  # fmt: skip
    results = solved(case, "given")
    assert results["price"].values == pytest.approx(55)
    assert results["emissions"].values == pytest.approx(70 * 8 * 0.05 / 2)
    assert cost(results) == pytest.approx(70 * 55)


def test_a_store_moves_energy_less_its_losses(tmp_path):
    """Half-hours. Each MWh out takes 1/0.8 from the store, that 1/0.9 from the grid, an hour's loss 10 %.

    It pays to charge at 10 and give back at 100: of 20 MWh in the store, 20·0.9^0.5 are left half an
    hour later, and 0.8 of those serve the load.
    """
    case = case_of(
        tmp_path / "case", buses=[{"bus": "b"}], minutes=30, periods=2,
        units=[{"unit": "u", "bus": "b", "max_output_mw": 300},
               {"unit": "dear", "bus": "b", "max_output_mw": 300, "on_profile": "late"}],
        offers=[{"unit": "u", "up_to_mw": 300, "cost_per_mwh": 10},
                {"unit": "dear", "up_to_mw": 300, "cost_per_mwh": 100}],
        storage=[{"store": "s", "bus": "b", "charge_mw": 500, "energy_mwh": 20, "initial_mwh": 0,
                  "charge_efficiency": 0.9, "discharge_efficiency": 0.8, "loss_percent_per_h": 10}],
        loads=[{"load": "l", "bus": "b", "mw": [0.0, 400.0]}], profiles={"late": [0.0, 1.0]},
    )  # fmt: skip
    kept = finished(case, "given").kept
    left = 20 * np.sqrt(0.9)
    assert kept.charge[:, 0] == pytest.approx([20 / 0.9 / 0.5, 0])
    assert kept.discharge[:, 0] == pytest.approx([0, left * 0.8 / 0.5])
    assert kept.stored[:, 0] == pytest.approx([20, 0])
    assert kept.output[1] == pytest.approx([300, 100 - left * 0.8 / 0.5])


def test_final_energy_is_there_at_the_end_of_the_run_though_windows_look_past_it(tmp_path):
    """A full store must not sell in the dear last hours what it could buy back cheaply after the end."""
    price = [10.0, 11, 500, 600, 10, 12]
    case = case_of(
        tmp_path / "case", buses=[{"bus": "b"}], periods=6,
        units=[{"unit": "u", "bus": "b", "max_output_mw": 100, "fuel": "oil"}],
        heat_rates=[{"unit": "u", "up_to_mw": 100, "heat_rate_gj_per_mwh": 1}],
        fuels=[{"fuel": "oil", "price_per_gj": 1, "price_profile": "oil"}],
        storage=[{"store": "s", "bus": "b", "charge_mw": 10, "energy_mwh": 20, "initial_mwh": 20}],
        loads=[{"load": "l", "bus": "b", "mw": 50}], profiles={"oil": price},
    )  # fmt: skip
    run = finished(case, "given", periods=4, window=3, keep=1)
    assert run.kept.stored[:, 0] == pytest.approx([20, 20, 20, 20])
    assert run.inputs.whole.periods == 6
    longer = finished(case, "given", periods=6)
    assert longer.kept.stored[:, 0] == pytest.approx([20, 20, 10, 0, 10, 20])


def test_end_value_is_what_energy_is_worth_to_a_window_that_sees_no_further(tmp_path):
    """Short windows keep energy only for its worth: at 15 they fill up at a price of 10, at 5 they empty."""
    for worth, stored in ((15.0, 30.0), (5.0, 10.0)):
        case = case_of(
            tmp_path / str(worth), buses=[{"bus": "b"}], periods=8,
            units=[{"unit": "u", "bus": "b", "max_output_mw": 100}],
            offers=[{"unit": "u", "up_to_mw": 100, "cost_per_mwh": 10}],
            storage=[{"store": "s", "bus": "b", "charge_mw": 10, "energy_mwh": 40, "initial_mwh": 20,
                      "final_mwh": 0, "end_value_per_mwh": worth}],
            loads=[{"load": "l", "bus": "b", "mw": 50}],
        )  # fmt: skip
        run = finished(case, "given", window=1, keep=1)
        assert run.kept.stored[0, 0] == pytest.approx(stored)


def test_a_tie_loses_a_share_of_what_enters_and_links_prices_by_it(tmp_path):
    """Of 50 MW that enter at a, 45 arrive at b; b's power costs 20/0.9."""
    case = case_of(
        tmp_path / "case", buses=[{"bus": "a"}, {"bus": "b"}],
        dc_ties=[{"tie": "t", "from_bus": "b", "to_bus": "a", "forward_mw": 100, "loss_percent": 10}],
        units=[{"unit": "u", "bus": "a", "max_output_mw": 200}],
        offers=[{"unit": "u", "up_to_mw": 200, "cost_per_mwh": 20}],
        loads=[{"load": "l", "bus": "b", "mw": 45}],
    )  # fmt: skip
    results = solved(case, "given")
    assert results["tie_flow"].values == pytest.approx(-50)
    assert results["unit_output"].values == pytest.approx(50)
    assert results["price"].values[0] == pytest.approx([20, 20 / 0.9])


def test_a_line_without_rating_stays_unlimited_whatever_its_rating_profile(tmp_path):
    case = case_of(
        tmp_path / "case", buses=[{"bus": "a"}, {"bus": "b"}], periods=2,
        lines=[{"line": "a-b", "from_bus": "a", "to_bus": "b", "reactance_pu": 0.1,
                "rating_profile": "off"}],
        units=[{"unit": "u", "bus": "a", "max_output_mw": 200}],
        offers=[{"unit": "u", "up_to_mw": 200, "cost_per_mwh": 20}],
        loads=[{"load": "l", "bus": "b", "mw": 25}], profiles={"off": [0.0, 1.0]},
    )  # fmt: skip
    results = solved(case, "given")
    assert results["line_flow"].values[:, 0] == pytest.approx([25, 25])
    assert np.isinf(results["line_rating"].values).all()


def test_lines_out_split_the_network_and_join_it_again(tmp_path):
    """While the line is out the far bus is on its own dear unit; prices part and meet again."""
    case = case_of(
        tmp_path / "case", buses=[{"bus": "a"}, {"bus": "b"}], periods=4,
        lines=[{"line": "a-b", "from_bus": "a", "to_bus": "b", "reactance_pu": 0.1}],
        units=[{"unit": "cheap", "bus": "a", "max_output_mw": 200},
               {"unit": "dear", "bus": "b", "max_output_mw": 30}],
        offers=[{"unit": "cheap", "up_to_mw": 200, "cost_per_mwh": 20},
                {"unit": "dear", "up_to_mw": 30, "cost_per_mwh": 90}],
        loads=[{"load": "l", "bus": "b", "mw": 25}, {"load": "k", "bus": "a", "mw": 10}],
        outages=[{"kind": "line", "name": "a-b", "from": FULL.format(1), "until": "2027-03-01T02:30"}],
    )  # fmt: skip
    for window in (4, 1):
        results = solved(case, "given", window=window, keep=1)
        assert results["line_flow"].values[:, 0] == pytest.approx([25, 0, 0, 25])
        assert results["price"].sel(bus="b").values == pytest.approx([20, 90, 90, 20])
        assert results["price"].sel(bus="a").values == pytest.approx(20)
