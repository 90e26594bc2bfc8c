"""The ends and the colours of the price scale."""

import numpy as np
import pytest

from simulator.report.figures import price_picture
from simulator.report.view import View
from tests.report.conftest import results


def scale(prices: np.ndarray) -> dict[str, object]:
    dataset = results(len(prices))
    dataset["price"][:] = prices[:, None]
    return price_picture(View(dataset, {}))["scale"]


def usual() -> np.ndarray:
    return np.linspace(20.0, 60.0, 100)


def test_the_scale_spans_usual_prices():
    found = scale(usual())
    assert (found["low"], found["high"]) == (20.0, 60.0)


def test_a_spike_does_not_flatten_the_rest():
    prices = usual()
    prices[3] = 10_000.0
    found = scale(prices)
    assert found["high"] < 120
    assert found["most"] == 10_000.0


@pytest.mark.parametrize("lowest", [-0.5, -400.0])
def test_a_rare_negative_price_is_blue(lowest):
    prices = usual()
    prices[3] = lowest
    found = scale(prices)
    assert found["low"] < 0
    assert found["stops"][0] == (0.0, "var(--below-2)")
    zero = next(at for at, colour in found["stops"] if colour == "var(--zero)")
    assert zero == pytest.approx(-found["low"] / (found["high"] - found["low"]), abs=1e-3)


def test_rounding_noise_below_zero_is_no_negative_price():
    prices = usual()
    prices[3] = -1e-9
    assert "var(--zero)" not in [colour for _, colour in scale(prices)["stops"]]


def test_one_price_has_a_scale_of_its_own():
    found = scale(np.full(30, 42.0))
    assert (found["low"], found["high"]) == (41.5, 42.5)


def test_prices_all_below_zero_have_no_orange():
    found = scale(-usual())
    assert [colour for _, colour in found["stops"]] == [
        "var(--below-2)",
        "var(--below-1)",
        "var(--zero)",
    ]
