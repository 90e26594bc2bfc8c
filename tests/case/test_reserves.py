"""What reserve products ask for, and what a case says of them."""

import numpy as np

from simulator.case import series
from tests.support import small_case

RESERVES = "fleet/reserves.csv"


def asked(case):
    return series.reserve_requirement(case, slice(0, len(case.time)))


def test_a_requirement_is_an_amount_by_profile_and_a_share_of_the_load_of_its_zone(tmp_path):
    """By hand: 10 MW × watch + 3 % of 150 MW × demand everywhere; 6 MW in the south."""
    case = small_case(tmp_path)
    demand, watch = (case.profiles[name].to_numpy() for name in ("demand", "watch"))
    np.testing.assert_allclose(asked(case)[:, 0], 10 * watch + 0.03 * 150 * demand)
    np.testing.assert_allclose(asked(case)[:, 1], 6)


def test_a_share_of_load_counts_the_zone_only_and_no_load_that_feeds_in(tmp_path):
    cells = {(RESERVES, 3, "requirement_mw"): "", (RESERVES, 3, "percent_of_load"): "50"}
    case = small_case(tmp_path / "a", cells=cells)
    demand = case.profiles["demand"].to_numpy()
    np.testing.assert_allclose(asked(case)[:, 1], 0.5 * 150 * demand)
    cells |= {(RESERVES, 3, "zone"): "north"}
    np.testing.assert_array_equal(asked(small_case(tmp_path / "b", cells=cells))[:, 1], 0)
    fed = case.with_load("sunny roofs", "Midfen", -40.0)
    np.testing.assert_array_equal(asked(fed), asked(case))
    more = case.with_load("hall", "Midfen", 40.0)
    np.testing.assert_allclose(asked(more)[:, 1] - asked(case)[:, 1], 20)


def test_a_span_is_cut_out_of_the_whole(tmp_path):
    case = small_case(tmp_path)
    span = slice(7, 20)
    np.testing.assert_array_equal(series.reserve_requirement(case, span), asked(case)[span])


def test_the_price_of_shortage_follows_that_of_unserved_load(tmp_path):
    case = small_case(tmp_path).with_settings(penalties={"unserved": 900.0})
    assert case.reserves["shortage_per_mwh"].tolist() == [450.0, 400.0]


def test_the_summary_names_the_products_where_there_are_any(tmp_path):
    text = str(small_case(tmp_path / "a"))
    assert "2: spinning (up, 10 MW and 3 % of load), lowering (down, 6 MW)" in text
    assert "reserves" not in str(small_case(tmp_path / "b", {RESERVES: None}))
