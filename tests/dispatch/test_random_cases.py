"""Random small cases against the model written out once more: cost, prices, flows, rents."""

import numpy as np
import pytest
import xarray as xr

from simulator.case import Case
from simulator.errors import SolveError
from simulator.horizon import Run
from simulator.results import to_dataset
from tests.dispatch import power_flow
from tests.dispatch.program import Name, Optimum, Program
from tests.dispatch.running import cost, finished, solved
from tests.dispatch.written_out import written_out

SEEDS = range(40)
COST_TOLERANCE = 1e-7  # of the total
PRICE_TOLERANCE = 1e-5  # currency/MWh
STEP = 1e-3  # MW
WAYS = ("forward", "reverse")
RESERVED = ("reserved", "priced", "missed")


@pytest.mark.parametrize("mode", ["given", "relaxed"])
@pytest.mark.parametrize("seed", SEEDS)
def test_a_run_in_one_window_is_the_optimum_of_the_model_written_out(random_case, seed, mode):
    case = random_case(seed)
    program = written_out(case, mode)
    optimum = program.solve()
    try:
        run = finished(case, mode)
    except SolveError:
        assert optimum is None
        return
    results = to_dataset(run)
    if optimum is None:
        assert stores_end_short(case, results)
        return
    optimum = one_way(program, optimum, results)
    assert cost(results) == pytest.approx(optimum.cost, rel=COST_TOLERANCE, abs=1e-5)
    check_prices(case, results, program, np.random.default_rng(seed))
    check_network(run)


def one_way(program: Program, optimum: Optimum, results: xr.Dataset) -> Optimum:
    """Close the ways that ties do not go in the results, where an optimum would go both at once.

    To burn energy in losses there and back pays where prices are negative, and no real link does it.
    """
    flow = results["tie_flow"].to_pandas()
    ways = [(tie, t, flow[tie].iloc[t]) for tie in flow.columns for t in range(len(flow))]
    both = [min(optimum.value[way, tie, t] for way in WAYS) for tie, t, _ in ways]
    if max(both, default=0.0) < 1e-6:
        return optimum
    program.fix({("forward", tie, t): 0.0 for tie, t, sent in ways if sent < 1e-9})
    program.fix({("reverse", tie, t): 0.0 for tie, t, sent in ways if sent > -1e-9})
    closed = program.solve()
    assert closed is not None
    assert closed.cost > optimum.cost - COST_TOLERANCE * abs(optimum.cost)
    return closed


def stores_end_short(case: Case, results: xr.Dataset) -> bool:
    """Tell whether a store ends below its final energy: the one contradiction a run goes on with."""
    end = results["stored_energy"].values[-1]
    return bool((end < case.storage["final_mwh"].to_numpy(float) - 1e-6).any())


@pytest.mark.parametrize("seed", [*SEEDS[:16], 46, 118, 141])
def test_the_best_on_off_decisions_cost_what_an_integer_program_finds(random_case, seed):
    """And prices are those of the linear program that is left when they are fixed (5.5)."""
    case = random_case(seed).with_settings(commitment={"mip_gap": 0.0})
    program = written_out(case, "optimal")
    optimum = written_out(case, "optimal", one_way=True).solve()
    if optimum is None:
        return
    results = to_dataset(finished(case, "optimal"))
    assert cost(results) == pytest.approx(optimum.cost, rel=1e-6)
    on = results["unit_on"].to_pandas()
    program.fix({
        ("on", unit, t): round(value)
        for unit in on.columns for t, value in enumerate(on[unit])
    })  # fmt: skip
    fixed = program.solve()
    assert fixed is not None
    fixed = one_way(program, fixed, results)
    assert cost(results) == pytest.approx(fixed.cost, rel=COST_TOLERANCE, abs=1e-5)
    check_prices(case, results, program, np.random.default_rng(seed))


def check_prices(case: Case, results: xr.Dataset, program: Program, random) -> None:
    """A price is what a little more and a little less asked for cost; where both agree, just that.

    Cost is convex in what is withdrawn at a bus, and in what is required of a reserve: its slopes a step
    before and a step after enclose every price that is right; where the two agree there is only one.
    """
    for row, variable, places in (("balance", "price", 5), ("reserves", "reserve_price", 2)):
        price = results[variable].to_pandas()
        for _ in range(places if price.size else 0):
            t, name = int(random.integers(len(price))), str(random.choice(price.columns))
            low, high = (
                slope(program, (row, name, t), step) / case.time.period_hours
                for step in (-STEP, STEP)
            )
            found = price[name].iloc[t]
            assert low - PRICE_TOLERANCE <= found <= high + PRICE_TOLERANCE, (row, name, t)


def slope(program: Program, name: Name, step: float) -> float:
    """What one more MW asked for costs when `step` is; ±inf where that cannot be."""
    optimum = program.solve({name: step})
    return float(np.copysign(np.inf, step)) if optimum is None else optimum.dual[name]


def check_network(run: Run) -> None:
    """Flows follow from injections, keep to ratings, and collect the rents of formulation.md 5.2."""
    case, out = run.case, power_flow.lines_out(run.case)
    results = to_dataset(run)
    injection = power_flow.injections(run)
    flow = power_flow.flows(case, injection, out)
    np.testing.assert_allclose(results["line_flow"], flow, atol=power_flow.TOLERANCE)
    assert (np.abs(flow) <= results["line_rating"].to_numpy() + power_flow.TOLERANCE).all()
    by_shifters = power_flow.flows(case, np.zeros_like(injection), out)
    shadow = results["line_shadow_price"].to_numpy()
    rent = (shadow * np.sign(flow) * (flow - by_shifters)).sum(axis=1)
    paid = -(results["price"].to_numpy() * injection).sum(axis=1)
    np.testing.assert_allclose(paid, rent, atol=1e-4, rtol=1e-7)


def test_the_random_cases_meet_what_they_are_meant_to_meet(random_case):
    """Of ten cases, some are short, some congested, some split, some full to overflowing."""
    met = dict.fromkeys(
        ["short", "congested", "split", "spilled", "stored", "tied", "started", *RESERVED], 0
    )
    for seed in range(10):
        case = random_case(seed)
        try:
            results = solved(case)
        except SolveError:
            continue
        seen = {
            "short": results["load_unserved"], "congested": results["line_shadow_price"],
            "spilled": results["surplus"], "stored": results["storage_charge"],
            "tied": abs(results["tie_flow"]), "started": results["unit_start"],
            "split": power_flow.lines_out(case), "reserved": results["unit_reserve"],
            "priced": results["reserve_price"], "missed": results["reserve_shortage"],
        }  # fmt: skip
        for name, values in seen.items():
            met[name] += bool((np.asarray(values) > 1e-3).any())
    assert min(met.values()) >= 1, met
