"""Why a unit is on, worked out by hand: one unit of 10 to 100 MW at 50 per MWh, hour by hour."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pytest

from simulator.reasons import REASONS, Circumstances, unit_reasons
from simulator.results import to_dataset
from tests.dispatch.building import case_of
from tests.dispatch.running import finished

MINIMUM, COST = 10.0, 50.0


def hours(output: Sequence[float], price: Sequence[float], **changes: object) -> Circumstances:
    """The circumstances of one unit that is on where it has output and starts where it had none."""
    power = np.array(output, float)[:, None]
    on = (power > 0).astype(float)
    none = np.zeros_like(power)
    at = Circumstances(
        given=False, length=1.0, on=on, start=np.diff(on, axis=0, prepend=on[:1]).clip(0),
        output=power, minimum=np.full_like(power, MINIMUM), price=np.array(price, float)[:, None],
        relaxed_price=np.array(price, float)[:, None],
        congestion=none, cost=COST * power,
        last_cost=np.where(power > MINIMUM, COST, -np.inf), reserve=none,
        must_run=np.array([False]), restart_costs=np.array([False]), up_periods=np.array([1]),
        on_before=np.array([0.0]), ramp_up=np.array([np.inf]), ramp_down=np.array([np.inf]),
        start_ramp=np.array([np.inf]), stop_ramp=np.array([np.inf]),
        falling=none > 0,
    )  # fmt: skip
    return replace(at, **changes)


def reasons(output: Sequence[float], price: Sequence[float], **changes: object) -> list[str]:
    codes = unit_reasons(hours(output, price, **changes))
    assert codes.dtype == np.int8
    return [REASONS[code] for code in codes[:, 0]]


def column(*values: float) -> np.ndarray:
    return np.array(values, float)[:, None]


def test_off_and_in_the_money():
    assert reasons([0, 100, 60, 10], [90, 90, 50, 50]) == ["off"] + ["in_the_money"] * 3


def test_the_last_mwh_counts_even_where_the_hour_does_not_pay_its_no_load_cost():
    cost = column(60 * COST + 300, 10 * COST + 300)
    assert reasons([60, 10], [50, 55], cost=cost) == ["in_the_money", "other"]


def test_output_that_costs_nothing_is_no_need():
    idle = hours([60, 10, 10, 10], [60, 20, 0, 0], restart_costs=np.array([True]))
    idle = replace(idle, output=column(60, 10, 0, 0), cost=column(3000, 500, 0, 0))
    idle = replace(idle, on=column(1, 1, 1, 0))
    found = [REASONS[code] for code in unit_reasons(idle)[:, 0]]
    assert found == ["in_the_money", "other", "at_no_cost", "off"]


def test_only_the_congestion_part_of_the_price_pays():
    found = reasons([60, 60, 60], [55, 55, 45], congestion=column(20, 2, 20))
    assert found == ["line", "in_the_money", "other"]


def test_what_pays_at_the_relaxed_price_only_is_needed_whole_and_worth_waiting_for():
    """Out of the money twice; the second hour pays in the relaxation, and a start would cost something."""
    relaxed = {"relaxed_price": column(90, 20, 60, 20)}
    assert reasons([60, 10, 10, 10], [90, 20, 20, 20], **relaxed) == [
        "in_the_money", "other", "needed_whole", "other",
    ]  # fmt: skip
    found = reasons([60, 10, 10, 10], [90, 20, 20, 20], restart_costs=np.array([True]), **relaxed)
    assert found == ["in_the_money", "kept_on", "needed_whole", "kept_on"]


def test_reserve_that_has_a_price_comes_before_what_ties_hours_together():
    found = reasons(
        [10, 10],
        [20, 20],
        reserve=column(5, 0),
        must_run=np.array([True]),
        up_periods=np.array([9]),
    )
    assert found == ["reserve", "must_run"]


def test_in_mode_given_the_schedule_explains_what_does_not_pay():
    found = reasons([10, 60], [20, 60], given=True, must_run=np.array([True]))
    assert found == ["given", "in_the_money"]


@pytest.mark.parametrize(("up", "held"), [(1, 0), (2, 2), (3, 3), (9, 4)])
def test_minimum_up_time_since_a_start(up, held):
    found = reasons([0, 10, 10, 10, 10], [20] * 5, up_periods=np.array([up]))
    assert found == ["off"] + ["minimum_up_time"] * held + ["other"] * (4 - held)


def test_minimum_up_time_from_before_the_run():
    found = reasons([10, 10, 10], [20] * 3, up_periods=np.array([5]), on_before=np.array([3.0]))
    assert found == ["minimum_up_time"] * 2 + ["other"]


def test_what_was_left_of_a_minimum_up_time_ends_where_an_outage_takes_the_unit_out():
    found = reasons(
        [10, 0, 10, 10], [20] * 4, up_periods=np.array([6]), on_before=np.array([1.0]),
        start=np.zeros((4, 1)),
    )  # fmt: skip
    assert found == ["minimum_up_time", "off", "other", "other"]


def test_ramps_down_from_the_hour_before_and_up_to_the_hour_after():
    prices = [60, 20, 20, 20, 20, 60]
    found = reasons(
        [100, 60, 20, 10, 30, 60], prices, ramp_down=np.array([40.0]), ramp_up=np.array([30.0])
    )
    assert found == ["in_the_money", "ramp", "ramp", "other", "ramp", "in_the_money"]


def test_a_unit_that_stops_in_part_has_more_room_to_come_down():
    """From 34 to 20.5 MW with a ramp of 13: a seventh of the unit stops, from up to 24 MW."""
    share = column(1, 0.85, 0.85)
    at = hours([34, 20.5, 8], [60, 20, 20], on=share, cost=column(0, 9e9, 9e9),
               ramp_down=np.array([13.0]), stop_ramp=np.array([24.0]))  # fmt: skip
    assert [REASONS[code] for code in unit_reasons(at)[:, 0]] == ["in_the_money", "other", "ramp"]


def test_a_derate_overrides_the_ramp_down():
    falling = np.array([[False], [True]])
    assert reasons([100, 20], [60, 20], ramp_down=np.array([40.0]), falling=falling) == [
        "in_the_money", "other",
    ]  # fmt: skip


def test_kept_on_between_two_hours_that_pay_if_another_start_costs_something():
    output, price = [60, 10, 10, 60, 10, 0], [60, 20, 20, 60, 20, 20]
    kept = reasons(output, price, restart_costs=np.array([True]))
    assert kept == ["in_the_money", "kept_on", "kept_on", "in_the_money", "other", "off"]
    free = reasons(output, price)
    assert free == ["in_the_money", "other", "other", "in_the_money", "other", "off"]


def test_kept_on_past_the_end_of_the_run_but_not_in_its_hour_of_start():
    found = reasons([0, 10, 10, 10], [20] * 4, restart_costs=np.array([True]))
    assert found == ["off", "other", "kept_on", "kept_on"]


def test_prices_below_zero_and_half_hours():
    assert reasons([10, 10], [-20, 60], length=0.5, cost=column(250, 250)) == [
        "other", "in_the_money",
    ]  # fmt: skip


def test_reasons_of_a_solved_run(tmp_path):
    """A base unit of 60 MW at least, kept through a cheap night since starting again is dear."""
    case = case_of(
        tmp_path / "case", periods=6, buses=[{"bus": "b"}],
        units=[
            {"unit": "base", "bus": "b", "min_output_mw": 60, "max_output_mw": 100,
             "start_cost": 9000, "initial_hours": 10},
            {"unit": "peak", "bus": "b", "max_output_mw": 100, "start_cost": 1, "initial_hours": -9},
        ],
        offers=[
            {"unit": "base", "up_to_mw": 100, "cost_per_mwh": 30},
            {"unit": "peak", "up_to_mw": 100, "cost_per_mwh": 80},
        ],
        renewables=[{"plant": "wind", "bus": "b", "capacity_mw": 100, "profile": "night"}],
        loads=[{"load": "l", "bus": "b", "mw": [120, 90, 90, 90, 90, 120]}],
        profiles={"night": [0, 0, 1, 1, 0, 0]},
    )  # fmt: skip
    dataset = to_dataset(finished(case, "optimal"))
    named = np.array(dataset["unit_reason"].attrs["flag_meanings"].split())
    found = named[dataset["unit_reason"].sel(unit="base").to_numpy()].tolist()
    assert found == ["in_the_money"] * 2 + ["kept_on"] * 2 + ["in_the_money"] * 2
    peak = named[dataset["unit_reason"].sel(unit="peak").to_numpy()].tolist()
    assert peak[0] == peak[-1] == "in_the_money"
    assert dataset["unit_reason"].attrs["flag_values"].dtype == np.int8
