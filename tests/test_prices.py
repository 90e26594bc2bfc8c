"""Price parts and rents (formulation.md 5), by hand and by what must hold whatever the numbers."""

import numpy as np
import pytest

from simulator.prices import congestion_rent, energy_and_congestion, reference_weights


def test_weights_follow_demand_island_by_island():
    """Buses 0, 1 and 2, 3 are islands; a negative load weighs nothing."""
    demand = np.array([[30.0, 10.0, -5.0, 20.0], [0.0, 0.0, 40.0, 40.0]])
    island = np.array([[0, 0, 1, 1], [0, 0, 1, 1]])
    weights = reference_weights(demand, island)
    assert weights[0] == pytest.approx([0.75, 0.25, 0, 1])
    assert weights[1] == pytest.approx([0.5, 0.5, 0.5, 0.5])


def test_islands_may_split_and_join_from_one_period_to_the_next():
    demand = np.array([[10.0, 30.0], [10.0, 30.0]])
    weights = reference_weights(demand, np.array([[0, 0], [0, 1]]))
    np.testing.assert_allclose(weights, [[0.25, 0.75], [1, 1]])


def test_energy_is_the_price_of_the_load_weighted_reference():
    price = np.array([[20.0, 40.0, 90.0]])
    island = np.array([[0, 0, 1]])
    energy, congestion = energy_and_congestion(price, np.array([[0.25, 0.75, 1.0]]), island)
    assert energy[0] == pytest.approx([35, 35, 90])
    assert congestion[0] == pytest.approx([-15, 5, 0])


@pytest.mark.parametrize("seed", range(10))
def test_parts_add_up_and_congestion_is_nothing_at_the_reference(seed):
    random = np.random.default_rng(seed)
    shape = int(random.integers(1, 8)), int(random.integers(1, 12))
    price, demand = random.normal(40, 30, shape), random.normal(20, 40, shape)
    island = random.integers(0, 3, shape)
    weights = reference_weights(demand, island)
    energy, congestion = energy_and_congestion(price, weights, island)
    np.testing.assert_allclose(energy + congestion, price, atol=1e-10)
    for t in range(shape[0]):
        for number in np.unique(island[t]):
            here = island[t] == number
            assert weights[t, here].sum() == pytest.approx(1)
            assert weights[t, here].min() >= 0
            assert np.ptp(energy[t, here]) < 1e-10
            assert weights[t, here] @ congestion[t, here] == pytest.approx(0, abs=1e-9)


def test_rent_is_shadow_price_times_flow_times_hours_whatever_the_direction():
    dual, flow = np.array([[-16.0, 5.0, 0.0]]), np.array([[400.0, -20.0, 90.0]])
    assert congestion_rent(dual, flow, 0.5)[0] == pytest.approx([3200, 50, 0])
