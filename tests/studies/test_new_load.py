"""What a new load costs: cases by hand, bounds that convexity gives, every mode, bad input."""

import numpy as np
import pytest

from simulator.errors import OptionError
from simulator.studies.base import StudySettings
from simulator.studies.new_load import NewLoad, answer_new_load, new_load
from tests.studies.networks import climbing, triangle, two_buses
from tests.support import small_case

TWO_HOURS = StudySettings(hours=2, commitment="given")
ONE_WINDOW = {"hours": 48, "window_hours": 48, "keep_hours": 48}


def asked(case, bus, mw, settings=TWO_HOURS, **more):
    """The answers for one bus and size."""
    request = NewLoad((bus,), (mw,), settings=settings, **{"largest": False, **more})
    return new_load(case, request).sel(bus=bus, size=mw)


def test_before_the_bottleneck_a_load_costs_its_energy_and_congests_nothing(tmp_path):
    found = asked(two_buses(tmp_path), "a", 80.0)
    assert found["extra_production_cost"] == pytest.approx(2 * 80 * 10)
    assert found["extra_cost_per_mwh"] == pytest.approx(10)
    assert found["congestion_cost_caused"] == pytest.approx(0)
    assert found["own_payment"] == pytest.approx(2 * 80 * 10)
    assert found["others_payment"] == pytest.approx(0)
    assert found["lines_congested"] == 0


def test_behind_the_bottleneck_the_closed_form_holds(tmp_path):
    """50 + 80 MW at b, 100 by line: an hour costs 100·10 + 30·50 instead of 50·10; free it is 130·10."""
    found = asked(two_buses(tmp_path), "b", 80.0)
    assert found["extra_production_cost"] == pytest.approx(2 * (1000 + 1500 - 500))
    assert found["congestion_cost_caused"] == pytest.approx(2 * (2500 - 1300))
    assert found["own_energy"] == pytest.approx(160)
    assert found["own_payment"] == pytest.approx(2 * 80 * 50)
    assert found["others_payment"] == pytest.approx(2 * 50 * 40)
    assert (found["price_without"], found["price_with"]) == pytest.approx((10, 50))
    assert (found["lines_congested"], found["hours_congested"]) == (1, 2)
    assert found["line_hours_congested"].sel(line="ab") == 2
    assert found["extra_penalty_cost"] == pytest.approx(0)
    small = asked(two_buses(tmp_path / "again"), "b", 30.0)  # the line has room for 50
    assert small["extra_production_cost"] == pytest.approx(2 * 30 * 10)
    assert small["congestion_cost_caused"] == pytest.approx(0)


def test_in_a_triangle_a_load_lowers_congestion_or_raises_it_by_where_it_is(tmp_path):
    """Without the load: a feeds in 60, b 60: 3,600 an hour; free 100·10 + 20·50 = 2,000.

    30 MW at a: a makes 90, an hour 3,900, free 100·10 + 50·50 = 3,500: congestion 400 instead of 1,600.
    At b: b makes 90, 5,100, free 3,500. At c: (a + 150)/3 ≤ 60, so a 30 and b 120: 6,300, free 3,500.
    """
    case = triangle(tmp_path)
    request = NewLoad((), (30.0,), largest=False, settings=TWO_HOURS)
    found = new_load(case, request).isel(size=0)
    assert float(found["base_congestion_cost"]) == pytest.approx(2 * 1600)
    assert found["congestion_cost_caused"].to_numpy() == pytest.approx([-2400, 0, 2400])
    assert found["extra_production_cost"].to_numpy() == pytest.approx([2 * 300, 2 * 1500, 2 * 2700])


def test_the_largest_size_and_the_line_that_stops_it(tmp_path):
    """At b 100 by line and 200 made there, less 50; at a 500 made there and 100 back over the line."""
    case = two_buses(tmp_path)
    found = new_load(case, NewLoad((), (10.0,), settings=TWO_HOURS))
    assert found["largest_size"].to_numpy() == pytest.approx([600, 250])
    assert found["smallest_refused"].to_numpy() == pytest.approx([601, 251])
    assert found["stopped_by"].to_numpy().tolist() == ["line", "line"]
    assert found["stopped_by_name"].to_numpy().tolist() == ["ab", "ab"]


def test_plain_shortage_and_a_ramp_are_named(tmp_path):
    wide = two_buses(tmp_path / "wide", rating=1000.0)
    found = new_load(wide, NewLoad(("b",), (10.0,), settings=TWO_HOURS)).isel(bus=0)
    assert float(found["largest_size"]) == pytest.approx(650)
    assert found["stopped_by"].item() == "shortage"
    slow = climbing(tmp_path / "slow")
    settings = StudySettings(hours=3, commitment="given")
    found = new_load(slow, NewLoad(("a",), (5.0,), largest_within_mw=0.5, settings=settings)).isel(
        bus=0
    )
    # From 100 MW before the run the unit reaches 120, 140 and 160 against 100, 110 and 120.
    assert float(found["largest_size"]) == pytest.approx(20)
    assert (found["stopped_by"].item(), found["stopped_by_name"].item()) == ("ramp", "slow")
    assert found["stopped_at"].item() == "2027-03-01T00:00+00:00"


def test_a_stated_price_rise_stops_sooner(tmp_path):
    """At b the price is 10 up to 50 MW more and 50 beyond."""
    case = two_buses(tmp_path)
    request = NewLoad(("b",), (10.0,), most_price_rise=30.0, settings=TWO_HOURS)
    found = new_load(case, request).isel(bus=0)
    assert float(found["largest_size"]) in {
        49.0,
        50.0,
    }  # at 50 itself the price is any from 10 to 50
    assert (found["stopped_by"].item(), found["stopped_by_name"].item()) == ("price", "ab")


def test_what_goes_unserved_is_counted_apart_from_production(tmp_path):
    found = asked(two_buses(tmp_path), "b", 260.0)
    assert found["extra_unserved"] == pytest.approx(2 * 10)
    assert found["extra_penalty_cost"] == pytest.approx(2 * 10 * 10000)
    assert found["extra_production_cost"] == pytest.approx(2 * (100 * 10 + 200 * 50 - 500))


@pytest.fixture(scope="module")
def fens(tmp_path_factory):
    return small_case(tmp_path_factory.mktemp("fens") / "case")


@pytest.fixture(scope="module")
def bare(tmp_path_factory):
    """The same without reserves, which follow load and so cost more with it than its price says."""
    return small_case(tmp_path_factory.mktemp("bare") / "case", {"fleet/reserves.csv": None})


@pytest.mark.parametrize("bus", ["Northfen", "Midfen", "Southfen"])
@pytest.mark.parametrize("mw", [0.1, 4.0, 15.0])
def test_extra_cost_lies_between_the_old_and_the_new_price(bare, bus, mw):
    """Cost is convex in load, and prices are its slopes at both ends: in one window, to the last digit.

    For 0.1 MW both ends meet: extra cost ≈ Σ price·0.1·Δ.
    """
    found = asked(bare, bus, mw, StudySettings(commitment="relaxed", **ONE_WINDOW))
    extra = float(found["extra_production_cost"] + found["extra_penalty_cost"])
    low = float(found["price_without"]) * mw * 48
    high = float(found["price_with"]) * mw * 48
    assert low - 1e-4 <= extra <= high + 1e-4
    if mw == 0.1:
        assert extra == pytest.approx(low, rel=0.02)


@pytest.mark.parametrize("limits", ["none", "lines"])
@pytest.mark.parametrize("mode", ["given", "relaxed", "optimal"])
def test_every_mode_with_limits_and_without(fens, mode, limits):
    settings = StudySettings(hours=24, commitment=mode, limits=limits)
    request = NewLoad(("Midfen",), (8.0,), profile="demand", largest=False, settings=settings)
    answer = answer_new_load(fens, request)
    found = answer.dataset.isel(bus=0, size=0)
    assert answer.record["audit"]["passed"]
    assert float(found["extra_production_cost"]) > 0
    profile = fens.profiles["demand"].to_numpy()[:24]
    assert float(found["own_energy"]) == pytest.approx(8 * profile.sum())
    assert float(found["cost_allowance"]) == 0 or mode == "optimal"
    if limits == "none":
        assert float(found["congestion_cost_caused"]) == 0
    assert answer.dataset.attrs["commitment"] == mode


def test_a_difference_within_the_gap_is_marked(tmp_path):
    """With a gap of half the cost no small load's cost is known."""
    case = small_case(tmp_path / "case").with_settings(
        commitment={"mode": "optimal", "mip_gap": 0.5}
    )
    settings = StudySettings(hours=48, window_hours=48, keep_hours=48)
    answer = answer_new_load(case, NewLoad(("Midfen",), (0.01,), largest=False, settings=settings))
    found = answer.dataset.isel(bus=0, size=0)
    if float(found["cost_allowance"]) == 0:
        pytest.skip("the search proved its plan best all the same")
    assert bool(found["cost_within_gap"]) == (
        abs(float(found["extra_production_cost"])) <= float(found["cost_allowance"])
    )
    assert bool(found["cost_within_gap"])
    assert "gaps of the search allow" in answer.dataset.attrs["recommendation"]


def test_every_problem_is_told_at_once(fens):
    request = NewLoad(
        ("Midfenn", "Midfen", "Midfen"), (-1.0, float("inf")), profile="demnd", largest_within_mw=0.0,
        most_price_rise=-5.0, settings=StudySettings(start="yesterday"),
    )  # fmt: skip
    with pytest.raises(OptionError) as caught:
        new_load(fens, request)
    said = str(caught.value).splitlines()
    assert [line.split(",")[0] for line in said] == [
        "--bus", "--bus", "--mw", "--mw", "--largest-within", "--most-price-rise", "--profile", "--from",
    ]  # fmt: skip
    assert 'did you mean "Midfen"?' in said[0]
    assert 'did you mean "demand"?' in said[6]


def test_renaming_buses_only_renames_answers_and_names_that_are_taken_do_no_harm(tmp_path):
    case = two_buses(tmp_path).with_load("new load 1", "b", 5.0)
    found = asked(case, "b", 80.0)
    assert found["own_energy"] == pytest.approx(160)
    assert found["others_payment"] == pytest.approx(2 * 55 * 40)


def test_the_dataset_says_what_everything_is(fens):
    found = new_load(
        fens,
        NewLoad(
            ("Midfen",),
            (5.0,),
            largest=False,
            settings=StudySettings(hours=24, commitment="relaxed"),
        ),
    )
    for variable in found.data_vars.values():
        assert variable.attrs["units"]
        assert variable.attrs["long_name"]
    assert np.isfinite(found["extra_production_cost"].to_numpy()).all()
    assert "24 hours" in found.attrs["basis"]
