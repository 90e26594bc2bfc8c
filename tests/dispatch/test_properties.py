"""What must hold for any case: names, order, units of money and far-away islands change nothing else."""

from typing import Any

import numpy as np
import pytest

from tests.dispatch.building import Row, case_of
from tests.dispatch.drawing import lossless
from tests.dispatch.running import cost, finished, solved
from tests.dispatch.test_published import FIVE_BUSES

SEEDS = [0, 5, 8, 19, 22]
MONEY = {
    "offers": ["cost_per_mwh"], "fuels": ["price_per_gj"], "renewables": ["offer_per_mwh"],
    "units": ["no_load_cost_per_h", "variable_om_per_mwh", "start_cost", "cold_start_cost"],
    "storage": ["throughput_cost_per_mwh", "end_value_per_mwh"], "loads": ["unserved_per_mwh"],
    "reserves": ["shortage_per_mwh"],
}  # fmt: skip
NAMED = {
    "buses": "bus", "lines": "line", "dc_ties": "tie", "units": "unit", "offers": "unit",
    "heat_rates": "unit", "renewables": "plant", "storage": "store", "loads": "load",
    "outages": "name",
}  # fmt: skip
TABLES = [*NAMED, "fuels"]


def renamed(name: str) -> str:
    return name[::-1] + " renamed"


def shuffled(system: dict[str, Any], random: np.random.Generator) -> dict[str, Any]:
    """Every element under another name and in another place of its table; blocks keep their order."""
    changed = dict(system)
    for table in NAMED:
        rows = [_renamed_row(table, row) for row in system[table]]
        if table not in ("offers", "heat_rates"):
            rows = [rows[place] for place in random.permutation(len(rows))]
        changed[table] = rows
    return changed


def _renamed_row(table: str, row: Row) -> Row:
    columns = {NAMED[table], "bus", "from_bus", "to_bus"}
    return {key: renamed(value) if key in columns else value for key, value in row.items()}


@pytest.mark.parametrize("seed", SEEDS)
def test_other_names_and_another_order_only_rename_results(tmp_path, convex_case, seed):
    system, results = lossless(seed), solved(convex_case(seed))
    again = solved(case_of(tmp_path / "again", **shuffled(system, np.random.default_rng(seed))))
    assert cost(again) == pytest.approx(cost(results), rel=1e-7)
    for dimension in ("bus", "line", "unit", "plant", "store", "tie", "load"):
        assert sorted(again[dimension].values) == sorted(map(renamed, results[dimension].values))
    demand = again["load_demand"].sel(load=[renamed(load) for load in results["load"].values])
    np.testing.assert_array_equal(demand, results["load_demand"])


def test_reordered_five_buses_have_the_same_prices_and_flows_by_name(tmp_path):
    """This optimum is unique, so that every result must follow its element's name."""
    random = np.random.default_rng(1)
    results = solved(case_of(tmp_path / "case", **FIVE_BUSES))
    mixed = {
        name: rows if name == "offers" else [rows[place] for place in random.permutation(len(rows))]
        for name, rows in FIVE_BUSES.items()
    }
    again = solved(case_of(tmp_path / "mixed", **mixed))
    for name in ("price", "line_flow", "unit_output", "line_shadow_price", "congestion_rent"):
        np.testing.assert_allclose(
            again[name].reindex_like(results[name]), results[name], atol=1e-7
        )


@pytest.mark.parametrize("seed", SEEDS)
def test_costs_three_times_as_high_make_cost_three_times_as_high(tmp_path, convex_case, seed):
    system = lossless(seed)
    scaled = system | {table: [_dearer(table, row) for row in system[table]] for table in MONEY}
    scaled["settings"] = {
        section: {key: 3 * value for key, value in values.items()}
        for section, values in system["settings"].items()
    }
    results = solved(convex_case(seed))
    dearer = solved(case_of(tmp_path / "dearer", **scaled))
    assert cost(dearer) == pytest.approx(3 * cost(results), rel=1e-7)


def _dearer(table: str, row: Row) -> Row:
    return {
        key: 3 * value if key in MONEY[table] and value is not None else value
        for key, value in row.items()
    }


def test_offers_three_times_as_high_make_prices_three_times_as_high(tmp_path):
    results = solved(case_of(tmp_path / "case", **FIVE_BUSES))
    offers = [row | {"cost_per_mwh": 3 * row["cost_per_mwh"]} for row in FIVE_BUSES["offers"]]
    dearer = solved(case_of(tmp_path / "dearer", **(FIVE_BUSES | {"offers": offers})))
    for name in ("price", "line_shadow_price", "price_energy", "price_congestion", "unit_cost"):
        np.testing.assert_allclose(dearer[name], 3 * results[name], atol=1e-7)
    np.testing.assert_allclose(dearer["line_flow"], results["line_flow"], atol=1e-7)


def test_an_island_of_its_own_changes_nothing_elsewhere(tmp_path):
    """A bus that feeds itself and two buses that only look on, all without a line to the rest."""
    more = {
        "buses": [{"bus": "F"}, {"bus": "G"}, {"bus": "H"}],
        "lines": [{"line": "G-H", "from_bus": "G", "to_bus": "H", "reactance_pu": 0.1}],
        "units": [{"unit": "F1", "bus": "F", "max_output_mw": 50}],
        "offers": [{"unit": "F1", "up_to_mw": 50, "cost_per_mwh": 77}],
        "loads": [{"load": "F load", "bus": "F", "mw": 20}],
    }
    results = solved(case_of(tmp_path / "case", **FIVE_BUSES))
    larger = {name: rows + more[name] for name, rows in FIVE_BUSES.items()}
    again = solved(case_of(tmp_path / "larger", **larger))
    assert cost(again) == pytest.approx(cost(results) + 2 * 20 * 77)
    for name in ("price", "price_energy", "price_congestion", "line_flow", "unit_output"):
        there = again[name].sel({dim: results[dim] for dim in results[name].dims})
        np.testing.assert_allclose(there, results[name], atol=1e-7)
    assert again["price"].sel(bus="F").values == pytest.approx(77)
    assert again["line_flow"].sel(line="G-H").values == pytest.approx(0)


@pytest.mark.parametrize("seed", SEEDS)
def test_without_limits_there_is_one_price_an_island(convex_case, seed):
    run = finished(convex_case(seed), limits="none")
    island = np.stack([topology.island for topology in run.inputs.whole.topology.topologies])
    island = island[run.inputs.whole.topology.index]
    for t, price in enumerate(run.kept.price):
        for number in np.unique(island[t]):
            assert np.ptp(price[island[t] == number]) < 1e-7
    assert not run.kept.line_dual.any()


@pytest.mark.parametrize("seed", SEEDS)
def test_line_limits_never_make_a_case_cheaper(convex_case, seed):
    case = convex_case(seed)
    free, limited = (cost(solved(case, limits=limits)) for limits in ("none", "lines"))
    assert limited >= free - 1e-7 * abs(free)
