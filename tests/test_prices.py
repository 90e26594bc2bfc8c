"""Price parts and rents (formulation.md 5), by hand and by what must hold whatever the numbers."""

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from simulator.prices import (
    congestion_rent,
    energy_and_congestion,
    local_days,
    make_whole,
    reference_weights,
    reserve_revenue,
)  # fmt: skip


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


def day_of(price: list[float], output: list[float], **more: object) -> xr.Dataset:
    """Hours of one unit at one bus, running at 50 per MWh, from 22:00 UTC on."""
    hours = pd.date_range("2027-10-30T22:00", periods=len(price), freq="h")
    shape = {"time": hours, "bus": ["b"], "unit": ["u"], "unit_bus": ("unit", ["b"])}
    columns = {"price": ("bus", price), "unit_output": ("unit", output),
               "unit_cost": ("unit", [50 * each for each in output]),
               "unit_start_cost": ("unit", [0.0] * len(price))}  # fmt: skip
    data = {name: (("time", other), np.array(values, float)[:, None])
            for name, (other, values) in columns.items()}  # fmt: skip
    attributes = {"period_hours": 1.0, "time_zone": "Europe/Dublin"}
    return xr.Dataset(data, shape, attributes).assign(more)


def test_make_whole_is_what_a_local_day_falls_short_of_and_never_less_than_nothing():
    """Summer time ends: 22:00 UTC is 23:00 of the 30th; the 31st has 25 hours, from 23:00 UTC on."""
    price, output = [10.0] * 27, [0.0] * 27
    output[0], output[1], output[25], output[26] = 4.0, 2.0, 1.0, 3.0
    price[26] = 60.0
    dataset = day_of(price, output)
    dataset["unit_start_cost"][1] = 70.0
    assert np.unique(local_days(dataset)).tolist() == ["2027-10-30", "2027-10-31", "2027-11-01"]
    short = make_whole(dataset)
    assert short[:, 0].tolist() == [4 * 40, 3 * 40 + 70, 0]


def test_reserve_revenue_counts_against_make_whole_amounts():
    held = xr.DataArray(np.array([[[3.0, 0.0]], [[1.0, 2.0]]]), dims=("time", "unit", "product"))
    worth = xr.DataArray(np.array([[5.0, 1.0], [0.0, 10.0]]), dims=("time", "product"))
    dataset = day_of([10, 10], [4, 4], unit_reserve=held, reserve_price=worth)
    dataset.attrs["period_hours"] = 0.5
    assert reserve_revenue(dataset)[:, 0].tolist() == [7.5, 10.0]
    assert make_whole(dataset)[:, 0].tolist() == [4 * 50 - 20 - 7.5, 4 * 50 - 20 - 10]
