"""Systems whose answer is published, or follows from two lines of algebra. Sources stand beside them."""

import numpy as np
import pytest

from tests.dispatch.building import Row, case_of
from tests.dispatch.running import cost, finished, solved


def steps(unit: str, slope: float, level: float, most: float, width: float) -> list[Row]:
    """Offers in steps that follow a marginal cost level + slope·P, each at the cost of its middle.

    The first step is half as wide, so that multiples of the width lie in the middle of a step.
    """
    breaks = np.append(np.arange(width / 2, most, width), most)
    middles = (np.append(0.0, breaks[:-1]) + breaks) / 2
    return [
        {"unit": unit, "up_to_mw": float(end), "cost_per_mwh": float(level + slope * middle)}
        for end, middle in zip(breaks, middles, strict=True)
    ]


# F. Li, R. Bo, "Small test systems for power system economic studies", IEEE PES General Meeting 2010.
# Data from memory; the expected values were confirmed with an independent linear program.
FIVE_BUSES: dict[str, list[Row]] = {
    "buses": [{"bus": name} for name in "ABCDE"],
    "lines": [
        {"line": "A-B", "from_bus": "A", "to_bus": "B", "reactance_pu": 0.0281, "rating_mw": 400},
        {"line": "A-D", "from_bus": "A", "to_bus": "D", "reactance_pu": 0.0304},
        {"line": "A-E", "from_bus": "A", "to_bus": "E", "reactance_pu": 0.0064},
        {"line": "B-C", "from_bus": "B", "to_bus": "C", "reactance_pu": 0.0108},
        {"line": "C-D", "from_bus": "C", "to_bus": "D", "reactance_pu": 0.0297},
        {"line": "D-E", "from_bus": "D", "to_bus": "E", "reactance_pu": 0.0297, "rating_mw": 240},
    ],
    "units": [
        {"unit": "A1", "bus": "A", "max_output_mw": 40},
        {"unit": "A2", "bus": "A", "max_output_mw": 170},
        {"unit": "C1", "bus": "C", "max_output_mw": 520},
        {"unit": "D1", "bus": "D", "max_output_mw": 200},
        {"unit": "E1", "bus": "E", "max_output_mw": 600},
    ],
    "offers": [
        {"unit": "A1", "up_to_mw": 40, "cost_per_mwh": 14},
        {"unit": "A2", "up_to_mw": 170, "cost_per_mwh": 15},
        {"unit": "C1", "up_to_mw": 520, "cost_per_mwh": 30},
        {"unit": "D1", "up_to_mw": 200, "cost_per_mwh": 40},
        {"unit": "E1", "up_to_mw": 600, "cost_per_mwh": 10},
    ],
    "loads": [
        {"load": "B load", "bus": "B", "mw": 300},
        {"load": "C load", "bus": "C", "mw": 300},
        {"load": "D load", "bus": "D", "mw": 400},
    ],
}  # fmt: skip


@pytest.mark.parametrize("minutes", [60, 15])
def test_five_buses(tmp_path, minutes):
    results = solved(case_of(tmp_path / "case", minutes=minutes, **FIVE_BUSES))
    price = results["price"].to_pandas().iloc[0]
    assert price.round(2).to_dict() == {"A": 16.98, "B": 26.38, "C": 30.0, "D": 39.94, "E": 10.0}
    assert cost(results) / (2 * minutes / 60) == pytest.approx(17479.9, abs=0.05)
    assert results["line_flow"].sel(line="D-E").values == pytest.approx(-240)
    limited = results["line_shadow_price"].to_pandas().iloc[0]
    assert list(limited.index[limited > 1e-6]) == ["D-E"]


def test_five_buses_without_limits_have_one_price(tmp_path):
    """1,000 MW from the cheapest: 600 at 10, 40 at 14, 170 at 15 and 190 of 520 at 30."""
    results = solved(case_of(tmp_path / "case", **FIVE_BUSES), limits="none")
    assert results["price"].values == pytest.approx(30.0)
    assert cost(results) / 2 == pytest.approx(600 * 10 + 40 * 14 + 170 * 15 + 190 * 30)
    assert results["line_shadow_price"].max() == 0


# D. Kirschen, G. Strbac, Fundamentals of Power System Economics, 2004, chapter 6: two regions joined
# by one line. Values from memory; they follow from equating marginal costs.
@pytest.mark.parametrize(
    ("rating", "flow", "prices", "surplus"),
    [(None, 933.3, (24.33, 24.33), 0.0), (400, 400.0, (19.0, 35.0), 6400.0)],
)
def test_two_regions(tmp_path, rating, flow, prices, surplus):
    step, most = 1.0, 2000.0  # steps of 1 MW: prices to 0.01 and 0.02, flows to 1 MW
    line = {"line": "tie line", "from_bus": "one", "to_bus": "two", "reactance_pu": 0.1}
    results = solved(case_of(
        tmp_path / "case",
        buses=[{"bus": "one"}, {"bus": "two"}],
        lines=[line | {"rating_mw": rating}],
        units=[{"unit": "1", "bus": "one", "max_output_mw": most},
               {"unit": "2", "bus": "two", "max_output_mw": most}],
        offers=steps("1", 0.01, 10, most, step) + steps("2", 0.02, 13, most, step),
        loads=[{"load": "1", "bus": "one", "mw": 500}, {"load": "2", "bus": "two", "mw": 1500}],
    ))  # fmt: skip
    assert results["line_flow"].values == pytest.approx(flow, abs=step)
    assert results["price"].values[0] == pytest.approx(prices, abs=0.02)
    assert results["congestion_rent"].values[:, 0] == pytest.approx(surplus, abs=1e-6)


# A. Wood, B. Wollenberg, Power Generation, Operation and Control, example 3A: three units, one load.
# Values from memory; λ, the outputs and the total cost follow from equal marginal costs.
WOOD = {"1": (561, 7.92, 0.001562, 150, 600), "2": (310, 7.85, 0.00194, 100, 400),
        "3": (78, 7.97, 0.00482, 50, 200)}  # fmt: skip


def test_three_units_share_a_load_at_equal_marginal_cost(tmp_path):
    step = 0.5  # MW; marginal cost changes by at most 2·0.00482·0.5 over a step
    results = solved(case_of(
        tmp_path / "case",
        buses=[{"bus": "the only one"}],
        units=[
            {"unit": name, "bus": "the only one", "min_output_mw": least, "max_output_mw": most,
             "no_load_cost_per_h": fixed}
            for name, (fixed, _, _, least, most) in WOOD.items()
        ],
        offers=[
            row for name, (_, level, square, _, most) in WOOD.items()
            for row in steps(name, 2 * square, level, most, step)
        ],
        loads=[{"load": "all", "bus": "the only one", "mw": 850}],
    ), "given")  # fmt: skip
    assert results["price"].values == pytest.approx(9.148, abs=0.005)
    assert results["unit_output"].values[0] == pytest.approx([393.2, 334.6, 122.2], abs=step)
    assert cost(results) / 2 == pytest.approx(8194.36, abs=0.01)


def test_a_triangle_splits_flow_by_its_reactances(tmp_path):
    """By hand: of 90 MW from 1 to 3, the path 1-2-3 of reactance 0.2 takes 0.1/(0.1 + 0.2).

    With the direct line limited to 50 MW, each MW more at bus 3 has to come from the unit there.
    """
    triangle = [
        {"line": "1-2", "from_bus": "1", "to_bus": "2", "reactance_pu": 0.1},
        {"line": "2-3", "from_bus": "2", "to_bus": "3", "reactance_pu": 0.1},
        {"line": "1-3", "from_bus": "1", "to_bus": "3", "reactance_pu": 0.1},
    ]
    system = {
        "buses": [{"bus": name} for name in "123"],
        "units": [{"unit": "cheap", "bus": "1", "max_output_mw": 200},
                  {"unit": "dear", "bus": "3", "max_output_mw": 200}],
        "offers": [{"unit": "cheap", "up_to_mw": 200, "cost_per_mwh": 20},
                   {"unit": "dear", "up_to_mw": 200, "cost_per_mwh": 50}],
        "loads": [{"load": "city", "bus": "3", "mw": 90}],
    }  # fmt: skip
    free = solved(case_of(tmp_path / "free", lines=triangle, **system))
    assert free["line_flow"].values[0] == pytest.approx([30, 30, 60])
    triangle[2]["rating_mw"] = 50
    limited = solved(case_of(tmp_path / "limited", lines=triangle, **system))
    assert limited["line_flow"].values[0] == pytest.approx([25, 25, 50])
    assert limited["unit_output"].values[0] == pytest.approx([75, 15])
    triangle[2]["rating_mw"] = 59.999  # a hair too small counts as well
    tight = solved(case_of(tmp_path / "tight", lines=triangle, **system))
    assert tight["line_flow"].values[0, 2] == pytest.approx(59.999, abs=1e-6)
    # Bus 2 takes from bus 1 with PTDF 1/3 on 1-3 (path 1-3-2 of two against one): a third of the
    # dear unit's backing is asked for, half of what bus 3 asks with 2/3.
    assert limited["price"].values[0] == pytest.approx([20, 35, 50])
    assert limited["line_shadow_price"].values[0] == pytest.approx([0, 0, 45])


def test_a_phase_shifter_drives_flow_around_a_loop_by_hand(tmp_path):
    """Two lines of 0.1 pu side by side, one with +3 degrees at its from end, nothing injected.

    θ_from − θ_to = φ/2 balances them: the shifted line carries −100·(φ/2)/0.1, the other as much back.
    """
    pair = [{"line": name, "from_bus": "1", "to_bus": "2", "reactance_pu": 0.1} for name in "ab"]
    pair[0]["phase_shift_deg"] = 3
    results = solved(case_of(
        tmp_path / "case", lines=pair, buses=[{"bus": "1"}, {"bus": "2"}],
        units=[{"unit": "idle", "bus": "1", "max_output_mw": 10}],
        offers=[{"unit": "idle", "up_to_mw": 10, "cost_per_mwh": 1}],
        loads=[{"load": "none", "bus": "2", "mw": 0}],
    ))  # fmt: skip
    around = 100 * np.radians(3) / 2 / 0.1
    assert results["line_flow"].values[0] == pytest.approx([-around, around])


def test_a_solution_meets_the_conditions_of_an_optimum(tmp_path):
    """Five buses: units within their limits earn just their cost, full ones more, idle ones less."""
    run = finished(case_of(tmp_path / "case", **FIVE_BUSES))
    output, price = run.kept.output[0], run.kept.price[0]
    cost_of = np.array([offer["cost_per_mwh"] for offer in FIVE_BUSES["offers"]], dtype=float)
    margin = price[[0, 0, 2, 3, 4]] - cost_of
    most = np.array([unit["max_output_mw"] for unit in FIVE_BUSES["units"]], dtype=float)
    assert (margin[output < most - 1e-6] < 1e-6).all()
    assert (margin[output > 1e-6] > -1e-6).all()
    np.testing.assert_allclose(margin[(output > 1e-6) & (output < most - 1e-6)], 0, atol=1e-9)


# S. A. Kazarlis, A. G. Bakirtzis, V. Petridis, "A genetic algorithm solution to the unit commitment
# problem", IEEE Transactions on Power Systems 11(1), 1996: ten units, 24 hours, spinning reserve 10 % of
# load. Data and the best known cost from memory; an independent integer program with ten-segment costs
# gave 563,937.687 when its plan was costed with the quadratics.
BEST_KNOWN = 563_937.69
TEN_LOADS = [700, 750, 850, 950, 1000, 1100, 1150, 1200, 1300, 1400, 1450, 1500, 1400, 1300, 1200, 1050,
             1000, 1100, 1200, 1400, 1300, 1100, 900, 800]  # fmt: skip
TEN_UNITS = {
    "max_output_mw": [455, 455, 130, 130, 162, 80, 85, 55, 55, 55],
    "min_output_mw": [150, 150, 20, 20, 25, 20, 25, 10, 10, 10],
    "min_up_h": [8, 8, 5, 5, 6, 3, 3, 1, 1, 1],
    "start_cost": [4500, 5000, 550, 560, 900, 170, 260, 30, 30, 30],
    "cold_after_h": [5, 5, 4, 4, 4, 2, 2, 0, 0, 0],
    "initial_hours": [8, 8, -5, -5, -6, -3, -3, -1, -1, -1],
}  # fmt: skip
TEN_COSTS = np.array([
    [1000, 970, 700, 680, 450, 370, 480, 660, 665, 670],
    [16.19, 17.26, 16.60, 16.50, 19.70, 22.26, 27.74, 25.92, 27.27, 27.79],
    [.00048, .00031, .002, .00211, .00398, .00712, .00079, .00413, .00222, .00173],
])  # fmt: skip
"""a, b, c of the cost a + b·P + c·P² of an hour at P MW."""


def quadratic(on: np.ndarray, output: np.ndarray) -> float:
    """Running cost of the units that are on, both arrays (hour, unit)."""
    a, b, c = TEN_COSTS
    return float((on * (a + b * output + c * output**2)).sum())


def ten_units() -> dict[str, list[Row]]:
    """The system as tables; curves are straight in ten pieces between minimum and maximum."""
    units = [
        {"unit": f"{number}", "bus": "all", **dict(zip(TEN_UNITS, values, strict=True)),
         "min_down_h": values[2], "cold_start_cost": 2 * values[3], "no_load_cost_per_h": fixed}
        for number, (fixed, *values) in enumerate(zip(TEN_COSTS[0], *TEN_UNITS.values(), strict=True))
    ]  # fmt: skip
    offers = []
    for unit, b, c in zip(units, *TEN_COSTS[1:], strict=True):
        low = 0.0
        for high in np.linspace(unit["min_output_mw"], unit["max_output_mw"], 11).tolist():
            cost = float(b + c * (low + high))  # of the chord from low to high
            offers.append({"unit": unit["unit"], "up_to_mw": high, "cost_per_mwh": cost})
            low = high
    return {
        "buses": [{"bus": "all"}], "units": units, "offers": offers,
        "loads": [{"load": "all", "bus": "all", "mw": TEN_LOADS}],
        "reserves": [{"product": "spinning", "direction": "up", "percent_of_load": 10}],
    }  # fmt: skip


def test_ten_units_for_a_day_cost_what_the_best_plan_known_does(tmp_path):
    case = case_of(tmp_path / "case", {"commitment": {"mip_gap": 0.0}}, periods=24, **ten_units())
    results = solved(case, "optimal")
    on, output = results["unit_on"].to_numpy().round(), results["unit_output"].to_numpy()
    found = quadratic(on, output) + float(results["unit_start_cost"].sum())
    assert found == pytest.approx(BEST_KNOWN, rel=2e-4)
    spare = (on * TEN_UNITS["max_output_mw"] - output).sum(axis=1)
    assert (spare >= 0.1 * np.array(TEN_LOADS) - 1e-6).all()
    assert float(results["reserve_shortage"].max()) == pytest.approx(0)
