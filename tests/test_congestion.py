"""What congestion costs and which line causes it (formulation.md 5.1, 5.4), on solved cases."""

import numpy as np
import pytest

from simulator.causes import price_cause
from simulator.errors import OptionError, SolveError
from simulator.horizon import plan_run, run, without_limits
from simulator.results import run_record, to_dataset
from tests.dispatch.building import case_of
from tests.dispatch.drawing import secured
from tests.dispatch.running import finished
from tests.dispatch.test_network_limits import ring


def three_buses(folder, rating=40.0):
    """A triangle of equal reactances: cheap power at a, dear at b, 120 MW of load at c."""
    return case_of(
        folder,
        buses=[{"bus": "a"}, {"bus": "b"}, {"bus": "c"}],
        lines=[
            {"line": "ab", "from_bus": "a", "to_bus": "b", "reactance_pu": 0.1},
            {
                "line": "ac",
                "from_bus": "a",
                "to_bus": "c",
                "reactance_pu": 0.1,
                "rating_mw": rating,
            },
            {"line": "bc", "from_bus": "b", "to_bus": "c", "reactance_pu": 0.1},
        ],
        units=[
            {"unit": "cheap", "bus": "a", "max_output_mw": 200},
            {"unit": "dear", "bus": "b", "max_output_mw": 200},
        ],
        offers=[
            {"unit": "cheap", "up_to_mw": 200, "cost_per_mwh": 10},
            {"unit": "dear", "up_to_mw": 200, "cost_per_mwh": 50},
        ],
        loads=[{"load": "town", "bus": "c", "mw": [120.0, 30.0]}],
    )


@pytest.fixture
def solved(tmp_path):
    case = three_buses(tmp_path)
    return case, run(case, plan_run(case, hours=2, commitment="given"))


def test_congestion_cost_by_hand(solved):
    """Flow a to c is (2·cheap + dear)/3 ≤ 40 with cheap + dear = 120: cheap 0, dear 120.

    So the first hour costs 120·50 instead of 120·10; the second has no congestion.
    """
    limited = solved[1]
    record = run_record(limited, to_dataset(limited), {}, without_limits(limited))
    assert record["totals"]["congestion_cost"] == pytest.approx(120 * 40)


def test_the_twin_is_the_run_without_limits_on_the_same_model(solved):
    case, limited = solved
    twin = without_limits(limited)
    fresh = run(case, plan_run(case, hours=2, commitment="given", limits="none"))
    assert twin.counts.builds == 0
    np.testing.assert_allclose(twin.kept.output, fresh.kept.output, atol=1e-9)
    np.testing.assert_allclose(twin.kept.price, fresh.kept.price, atol=1e-9)
    assert twin.plan.limits == "none"


def test_causes_add_up_to_the_congestion_part(solved):
    case, limited = solved
    dataset = to_dataset(limited)
    for bus in dataset["bus"].values:
        causes = price_cause(case, dataset, bus)["contribution"].groupby("time").sum()
        expected = dataset["price_congestion"].sel(bus=bus).to_series()
        np.testing.assert_allclose(
            causes.reindex(expected.index, fill_value=0.0), expected, atol=1e-9
        )


def test_the_cause_is_the_line_with_the_factor_by_hand(tmp_path):
    """With 60 MW allowed: cheap 60, dear 60, line ac full; prices a 10, b 50, c 90.

    One MW from a to c puts 2/3 on ac, from b to c 1/3, so with all load at c the factors are 2/3,
    1/3, 0 and the shadow price is (90 − 10)/(2/3) = 120.
    """
    case = three_buses(tmp_path, rating=60.0)
    dataset = to_dataset(run(case, plan_run(case, hours=2, commitment="given")))
    first = dataset["time"].values[0]
    assert dataset["price"].sel(time=first).values == pytest.approx([10, 50, 90])
    cause = price_cause(case, dataset, "a", first)
    assert list(cause.index) == [(first, "ac")]
    assert cause.iloc[0].tolist() == pytest.approx([2 / 3, 120, -80])
    assert price_cause(case, dataset, "b", first).iloc[0].tolist() == pytest.approx(
        [1 / 3, 120, -40]
    )


@pytest.mark.parametrize("limits", ["lines", "secure"])
@pytest.mark.parametrize("seed", range(300, 312))
def test_causes_of_every_kind_add_up_and_the_main_one_is_the_largest(tmp_path, seed, limits):
    case = case_of(tmp_path / "case", **secured(seed))
    try:
        dataset = to_dataset(finished(case, limits=limits))
    except SolveError:
        pytest.skip("the case contradicts itself")
    for bus in dataset["bus"].values[::2]:
        causes = price_cause(case, dataset, bus)["contribution"]
        total = causes.groupby("time").sum()
        expected = dataset["price_congestion"].sel(bus=bus).to_series()
        np.testing.assert_allclose(
            total.reindex(expected.index, fill_value=0.0), expected, atol=1e-6
        )
        largest = causes.abs().groupby("time").max().reindex(expected.index, fill_value=0.0)
        np.testing.assert_allclose(abs(dataset["main_cause_part"].sel(bus=bus)), largest, atol=1e-9)
        named = dataset["main_cause"].sel(bus=bus).values
        for time, name in zip(dataset["time"].values, named, strict=True):
            if name >= 0:
                share = causes[time, str(dataset["cause"].values[name])]
                part = dataset["main_cause_part"].sel(bus=bus, time=time).item()
                assert np.atleast_1d(share) == pytest.approx(part)


def test_the_cause_may_be_a_line_after_a_loss(tmp_path):
    """The ring of three after the loss of ac, by hand: what a sends goes by ab and bc."""
    case = ring(tmp_path / "case")
    dataset = to_dataset(finished(case, "given", limits="secure"))
    cause = price_cause(case, dataset, "a", dataset["time"].values[0])
    assert cause["contribution"].sum() == pytest.approx(-40)
    assert set(cause.index.get_level_values("cause")) <= {
        f"{line} after loss of {lost}" for line in ("ab", "bc", "ac") for lost in ("ab", "bc", "ac")
    }
    name = dataset["cause"].values[dataset["main_cause"].sel(bus="a").values[0]]
    assert " after loss of " in name


def test_an_unknown_bus_is_refused(solved):
    case, limited = solved
    with pytest.raises(OptionError, match='found "z"'):
        price_cause(case, to_dataset(limited), "z")
