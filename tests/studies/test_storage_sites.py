"""Where a store goes: cases by hand, bounds that convexity gives, every mode, bad input."""

import numpy as np
import pytest

from simulator.errors import OptionError
from simulator.studies.base import StudySettings
from simulator.studies.storage_sites import StorageSites, answer_storage_sites, storage_sites
from tests.studies.networks import two_buses
from tests.support import small_case

TWO_HOURS = StudySettings(hours=2, commitment="given")
LOSSLESS = {"charge_efficiency": 1.0, "discharge_efficiency": 1.0}


@pytest.fixture
def evening(tmp_path):
    """50 MW at b, then 130, of which the line brings 100: prices 10, then 50 at b and 10 at a."""
    return two_buses(tmp_path, demand=[50.0, 130.0])


def test_a_small_store_behind_the_bottleneck_keeps_all_it_was_promised(evening):
    """20 MW bought at 10 and sold at 50; prices stay, so owner, system and screening agree."""
    found = storage_sites(evening, StorageSites(20.0, (1.0,), settings=TWO_HOURS, **LOSSLESS))
    at_b = found.isel(duration=0).sel(bus="b")
    for name in ("screening_earnings", "earned", "system_saving", "congestion_cost_avoided"):
        assert float(at_b[name]) == pytest.approx(20 * 40), name
    assert float(at_b["capture_rate"]) == pytest.approx(1)
    assert float(at_b["screening_rank"]) == 1
    assert float(at_b["cycles_per_day"]) == pytest.approx(12)  # once in two hours
    at_a = found.isel(duration=0).sel(bus="a")
    assert float(at_a["screening_earnings"]) == pytest.approx(0)
    assert float(at_a["system_saving"]) == pytest.approx(0)


def test_a_large_store_narrows_the_spread_it_lives_on(evening):
    """60 MW are promised 60·40; 30 MW are all the line leaves to be gained, so 30·40 are saved."""
    found = storage_sites(evening, StorageSites(60.0, (1.0,), settings=TWO_HOURS, **LOSSLESS))
    at_b = found.isel(duration=0).sel(bus="b")
    assert float(at_b["screening_earnings"]) == pytest.approx(60 * 40)
    assert float(at_b["system_saving"]) == pytest.approx(30 * 40)
    assert float(at_b["earned"]) <= 30 * 40 + 1e-6
    assert float(at_b["capture_rate"]) <= 0.5 + 1e-9


@pytest.fixture(scope="module")
def fens(tmp_path_factory):
    return small_case(tmp_path_factory.mktemp("fens") / "case")


@pytest.fixture(scope="module")
def bare(tmp_path_factory):
    """The same without reserves, which follow load and so cost more with it than its price says."""
    return small_case(tmp_path_factory.mktemp("bare") / "case", {"fleet/reserves.csv": None})


def test_a_saving_lies_between_what_is_earned_in_place_and_the_screening(bare):
    """Cost is convex in what a store does, and prices are its slopes with the store and without."""
    settings = StudySettings(hours=48, window_hours=48, keep_hours=48, commitment="relaxed")
    request = StorageSites(6.0, (1.0, 4.0), loss_percent_per_h=0.5, settings=settings)
    answer = answer_storage_sites(bare, request)
    found = answer.dataset
    assert answer.record["audit"]["passed"]
    assert bool(found["in_place"].all())
    earned, saving, promised = (
        found[name].to_numpy() for name in ("earned", "system_saving", "screening_earnings")
    )
    assert (earned <= saving + 1e-4).all()
    assert (saving <= promised + 1e-4).all()
    assert saving.max() > 0
    assert (np.diff(promised, axis=1) >= -1e-6).all()  # a longer store is promised no less


@pytest.mark.parametrize("limits", ["none", "lines"])
@pytest.mark.parametrize("mode", ["given", "relaxed", "optimal"])
def test_every_mode_with_limits_and_without(fens, mode, limits):
    settings = StudySettings(hours=24, commitment=mode, limits=limits)
    answer = answer_storage_sites(
        fens, StorageSites(5.0, (2.0,), best=1, spread=1, settings=settings)
    )
    assert answer.record["audit"]["passed"]
    found = answer.dataset.isel(duration=0)
    assert int(found["in_place"].sum()) == 2
    assert np.isfinite(found["earned"].to_numpy()[found["in_place"].to_numpy()]).all()
    if limits == "none":
        np.testing.assert_allclose(
            found["congestion_cost_avoided"].to_numpy()[found["in_place"]], 0
        )
        assert np.isnan(found["rank_correlation"])


def test_best_and_spread_choose_from_both_ends(fens):
    settings = StudySettings(hours=24, commitment="relaxed")
    one = storage_sites(fens, StorageSites(5.0, (2.0,), best=1, spread=0, settings=settings))
    assert one["in_place"].to_numpy().sum() == 1
    ranks = one["screening_rank"].where(one["in_place"], drop=True)
    assert float(ranks.min()) == 1


def test_every_problem_is_told_at_once(fens):
    request = StorageSites(
        0.0, (4.0, 4.0, -1.0), ("Midfenn",), charge_efficiency=0.0, discharge_efficiency=1.1,
        loss_percent_per_h=100.0, throughput_cost_per_mwh=-1.0, cycles_per_day=0.0, best=0, spread=-1,
        settings=StudySettings(hours=-3),
    )  # fmt: skip
    with pytest.raises(OptionError) as caught:
        storage_sites(fens, request)
    assert [line.split(",")[0] for line in str(caught.value).splitlines()] == [
        "--power-mw", "--hours", "--charge-efficiency", "--discharge-efficiency",
        "--loss-percent-per-h", "--throughput-cost", "--cycles-a-day", "--top", "--spread", "--bus",
        "--hours", "--hours",
    ]  # fmt: skip
