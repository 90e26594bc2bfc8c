"""What a price-taking store can earn, against a linear program written out here and closed forms."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import sparse
from scipy.optimize import linprog

from simulator.studies.arbitrage import StoreTerms, best_earnings, daily_spread

DAY = np.arange(24 * 30) // 24


def by_linprog(price: np.ndarray, store: StoreTerms, hours: float, day: np.ndarray) -> np.ndarray:
    """The same programs as one block program over all series, in energies, by scipy.

    Columns: bought and sold (MWh at the bus) and stored energy; written from formulation.md 2.4.
    """
    periods, series = price.shape
    one = sparse.identity(periods)
    keep = (1 - store.loss_percent_per_h / 100) ** hours
    balance = sparse.hstack([
        -store.charge_efficiency * one, one / store.discharge_efficiency,
        one - keep * sparse.eye(periods, k=-1),
    ])  # fmt: skip
    rows = np.arange(periods)
    drawn = sparse.coo_matrix(
        (np.full(periods, 1 / store.discharge_efficiency), (day[:periods], periods + rows)),
        shape=(day[:periods].max() + 1, 3 * periods),
    )
    limited = np.isfinite(store.cycles_per_day)
    cost = np.concatenate(
        [np.concatenate([p, store.throughput_cost_per_mwh - p, 0 * p]) for p in price.T]
    )
    bounds = [(0, store.charge_mw * hours)] * periods + [(0, store.discharge_mw * hours)] * periods
    bounds += [(0, store.energy_mwh)] * periods
    found = linprog(
        cost, A_eq=sparse.block_diag([balance] * series), b_eq=np.zeros(periods * series),
        A_ub=sparse.block_diag([drawn] * series) if limited else None,
        b_ub=np.full(drawn.shape[0] * series, store.cycles_per_day * store.energy_mwh) if limited else None,
        bounds=bounds * series, method="highs",
    )  # fmt: skip
    assert found.status == 0
    return -(cost * found.x).reshape(series, -1).sum(axis=1)


def random_store(random: np.random.Generator, *, cycles: bool) -> StoreTerms:
    power = random.uniform(1, 100, 2)
    return StoreTerms(
        *power, power.max() * random.choice([0.3, 1.0, 2.7, 8.0]),
        random.choice([1.0, random.uniform(0.6, 1)]), random.choice([1.0, random.uniform(0.6, 1)]),
        random.choice([0.0, random.uniform(0, 3)]), random.choice([0.0, random.uniform(0, 12)]),
        random.uniform(0.1, 2.0) if cycles else np.inf,
    )  # fmt: skip


def random_prices(random: np.random.Generator, periods: int, series: int) -> np.ndarray:
    """Prices with repeats, plateaus and negative hours."""
    price = random.normal(40, 30, (periods, series))
    price[:, ::3] = price[:, ::3].round(-1)
    price[random.random((periods, series)) < 0.2] = 20.0
    return price


@pytest.mark.parametrize("seed", range(12))
def test_thousands_of_series_match_a_program_written_out(seed):
    """12 stores of random terms, 100 random series each; with the limit on cycles 20 each below."""
    random = np.random.default_rng(seed)
    store, hours = random_store(random, cycles=False), random.choice([0.5, 1.0])
    price = random_prices(random, 60, 100)
    found = best_earnings(price, store, hours, DAY[:60])
    np.testing.assert_allclose(found, by_linprog(price, store, hours, DAY), rtol=1e-8, atol=1e-6)


@pytest.mark.parametrize("seed", range(12))
def test_many_short_series_match_too(seed):
    random = np.random.default_rng(100 + seed)
    store = random_store(random, cycles=False)
    price = random_prices(random, 9, 200)
    found = best_earnings(price, store, 1.0, DAY[:9])
    np.testing.assert_allclose(found, by_linprog(price, store, 1.0, DAY), rtol=1e-8, atol=1e-6)


@pytest.mark.parametrize("seed", range(8))
def test_a_limit_on_cycles_matches(seed):
    random = np.random.default_rng(200 + seed)
    store = random_store(random, cycles=True)
    price = random_prices(random, 72, 20)
    found = best_earnings(price, store, 1.0, DAY[:72])
    np.testing.assert_allclose(found, by_linprog(price, store, 1.0, DAY), rtol=1e-8, atol=1e-6)


def test_the_two_ways_agree_where_the_limit_is_out_of_reach():
    random = np.random.default_rng(7)
    price = random_prices(random, 500, 4)
    terms = (20.0, 30.0, 90.0, 0.9, 0.95, 0.2, 1.5)
    endless = best_earnings(price, StoreTerms(*terms), 1.0, DAY[:500])
    limited = best_earnings(price, StoreTerms(*terms, cycles_per_day=1e6), 1.0, DAY[:500])
    np.testing.assert_allclose(endless, limited, rtol=1e-9)


prices = st.lists(st.floats(-50, 200), min_size=2, max_size=40)


@given(prices, st.floats(0.5, 1.0))
@settings(max_examples=100, deadline=None)
def test_a_small_store_of_any_power_earns_every_rise(values, efficiency):
    """With power to fill and empty in an hour and no energy left over: E·Σ max(0, η·p_{t+1} − p_t).

    Closed form: from one hour to the next the store is full or empty, whichever pays; with η the
    round trip. Prices are taken at zero and above, where charging against discharging never pays;
    holding through an hour is selling and buying back, so with losses it is counted by the larger
    of both, by a recursion over two states written here.
    """
    price = np.abs(np.array(values))
    store = StoreTerms(1e3, 1e3, 10.0, charge_efficiency=efficiency)
    empty, full = 0.0, -np.inf
    for now in price:
        buy, sell = now * 10.0 / efficiency, now * 10.0
        empty, full = max(empty, full + sell), max(full, empty - buy)
    found = best_earnings(price[:, None], store, 1.0, np.zeros(len(price), int))
    assert found[0] == pytest.approx(max(empty, 0.0), rel=1e-9, abs=1e-7)


@given(prices)
@settings(max_examples=100, deadline=None)
def test_lossless_with_unlimited_power_earns_the_sum_of_rises(values):
    price = np.array([0.0, *np.abs(values)])
    store = StoreTerms(1e6, 1e6, 10.0)
    found = best_earnings(price[:, None], store, 1.0, np.zeros(len(price), int))
    rises = np.maximum(np.diff(price), 0).sum() * 10.0
    assert found[0] == pytest.approx(rises, rel=1e-7, abs=1e-5)


def test_endless_energy_without_loss_sells_each_hour_at_the_dearest_ahead():
    """One hour's charge each, sold later: with unlimited discharge Σ max(0, max later price − p_t)·P."""
    price = np.array([30.0, 10.0, 40.0, 20.0, 25.0, 5.0])
    store = StoreTerms(2.0, 1e6, 1e6)
    later = np.maximum.accumulate(price[::-1])[::-1]
    expected = 2.0 * np.maximum(later - price, 0).sum()
    found = best_earnings(price[:, None], store, 1.0, np.zeros(6, int))
    assert found[0] == pytest.approx(expected)


def test_nothing_is_earned_on_a_flat_price_and_something_on_a_negative_one_by_loss():
    store = StoreTerms(10.0, 10.0, 20.0, 0.9, 0.9)
    flat = best_earnings(np.full((48, 1), 33.0), store, 1.0, DAY[:48])
    assert flat[0] == pytest.approx(0.0, abs=1e-9)
    # As 2.4 states it: at −10 it charges 10 and gives back 10·0.9·0.9 in the same hour.
    paid = best_earnings(np.full((1, 1), -10.0), store, 1.0, DAY[:1])
    assert paid[0] == pytest.approx(100.0)


def test_scaling_prices_scales_earnings_and_more_store_earns_more():
    random = np.random.default_rng(3)
    price = random_prices(random, 100, 10)
    small, large = StoreTerms(5.0, 5.0, 10.0, 0.9, 0.9), StoreTerms(5.0, 5.0, 20.0, 0.9, 0.9)
    one = best_earnings(price, small, 1.0, DAY[:100])
    np.testing.assert_allclose(best_earnings(3 * price, small, 1.0, DAY[:100]), 3 * one)
    assert (best_earnings(price, large, 1.0, DAY[:100]) >= one - 1e-9).all()


def test_the_daily_spread_leaves_out_days_that_are_too_short():
    price = np.r_[np.arange(24.0), np.arange(24.0) + 5, [1000.0, -1000.0]][:, None]
    assert daily_spread(price, 2.0, 1.0, DAY[:50])[0] == pytest.approx(22.0)
    assert np.isnan(daily_spread(price[:2], 2.0, 1.0, DAY[:2])[0])
