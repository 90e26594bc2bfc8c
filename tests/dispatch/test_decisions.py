"""On/off decisions against brute force over all plans, across seams of windows, and out of time."""

import dataclasses
from itertools import product

import numpy as np
import pytest

from simulator.case import Case
from simulator.dispatch import search
from simulator.horizon import plan_run, run
from simulator.results import run_record, to_dataset
from tests.dispatch.building import Row, case_of
from tests.dispatch.running import cost, finished

PERIODS = 6
UNSERVED, SURPLUS = 900.0, 150.0


def small_fleet(seed: int, *, periods: int = PERIODS, longest: int = 4) -> dict[str, list[Row]]:
    """Three units at one bus, without ramps, and a load that wants them on and off."""
    random = np.random.default_rng(seed)
    units, offers = [], []
    for name, most in zip("abc", random.uniform(40, 120, 3).round(1).tolist(), strict=True):
        hot, hours = round(float(random.uniform(0, 2500)), 1), int(random.integers(-6, 7)) or 3
        least = round(most * float(random.uniform(0.3, 0.7)), 1)
        units.append({
            "unit": name, "bus": "b", "min_output_mw": least, "max_output_mw": most,
            "no_load_cost_per_h": round(float(random.uniform(0, 600)), 1), "start_cost": hot,
            "cold_start_cost": hot + round(float(random.uniform(0, 2000)), 1),
            "cold_after_h": int(random.integers(0, 3)), "min_up_h": int(random.integers(1, longest + 1)),
            "min_down_h": int(random.integers(1, longest + 1)), "initial_hours": hours,
            "initial_output_mw": least if hours > 0 else None,
        })  # fmt: skip
        price = round(float(random.uniform(10, 60)), 1)
        offers.append({"unit": name, "up_to_mw": most, "cost_per_mwh": price})
    total = sum(row["max_output_mw"] for row in units)
    shape = random.uniform(0.1, 1.0, periods)
    if periods > PERIODS:  # low at night, high by day, so that units go off and come back
        day = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(periods) / 24)
        shape = 0.05 + 0.8 * day + 0.15 * shape
    load = (total * shape).round(1).tolist()
    return {
        "buses": [{"bus": "b"}], "units": units, "offers": offers,
        "loads": [{"load": "l", "bus": "b", "mw": load}],
    }  # fmt: skip


def written(folder, system, periods: int = PERIODS) -> Case:
    settings = {
        "penalties": {"unserved": UNSERVED, "surplus": SURPLUS}, "commitment": {"mip_gap": 0.0},
    }  # fmt: skip
    return case_of(folder, settings, periods=periods, **system)


def cheapest_of_all_plans(system: dict[str, list[Row]]) -> float:
    """Cost of the best of all on/off plans: no solver, no model."""
    load = system["loads"][0]["mw"]
    price = {row["unit"]: row["cost_per_mwh"] for row in system["offers"]}
    hour = np.array([
        [cost_of_an_hour(system["units"], price, on, demand) for on in product((0, 1), repeat=3)]
        for demand in load
    ])  # fmt: skip
    plans = [allowed_plans(unit) for unit in system["units"]]
    on = [np.array([plan for plan, _ in choices]) for choices in plans]
    started = [np.array([amount for _, amount in choices]) for choices in plans]
    total = started[0][:, None, None] + started[1][None, :, None] + started[2][None, None, :]
    for t in range(PERIODS):
        place = 4 * on[0][:, None, None, t] + 2 * on[1][None, :, None, t] + on[2][None, None, :, t]
        total = total + hour[t][place]
    return float(total.min())


def cost_of_an_hour(units, price, on, demand: float) -> float:
    """Fill up from the minimum in order of cost; what is missing is unserved, what is over is spilled."""
    running = [unit for unit, is_on in zip(units, on, strict=True) if is_on]
    output = sum(unit["min_output_mw"] for unit in running)
    spent = sum(
        unit["no_load_cost_per_h"] + unit["min_output_mw"] * price[unit["unit"]] for unit in running
    )
    if output > demand:
        return spent + (output - demand) * SURPLUS
    for unit in sorted(running, key=lambda unit: price[unit["unit"]]):
        more = min(unit["max_output_mw"] - unit["min_output_mw"], demand - output)
        output, spent = output + more, spent + more * price[unit["unit"]]
    return spent + (demand - output) * UNSERVED


def allowed_plans(unit: Row) -> list[tuple[tuple[int, ...], float]]:
    """On/off plans that keep minimum times, each with the cost of its starts."""
    found = []
    for plan in product((0, 1), repeat=PERIODS):
        state, since, spent = unit["initial_hours"] > 0, abs(unit["initial_hours"]), 0.0
        for on in plan:
            if bool(on) == state:
                since += 1
                continue
            if since < unit["min_up_h" if state else "min_down_h"]:
                break
            if on:
                cold = since > unit["min_down_h"] + unit["cold_after_h"]
                spent += unit["cold_start_cost" if cold else "start_cost"]
            state, since = bool(on), 1
        else:
            found.append((plan, spent))
    return found


@pytest.mark.parametrize("seed", range(30))
def test_the_plan_is_the_best_of_all_plans(tmp_path, seed):
    system = small_fleet(seed)
    results = to_dataset(finished(written(tmp_path / "case", system), "optimal"))
    assert cost(results) == pytest.approx(cheapest_of_all_plans(system), rel=1e-9)


def test_one_long_window_is_the_optimum_and_rolled_ones_are_never_cheaper(tmp_path):
    for seed in range(6):
        case = written(tmp_path / str(seed), small_fleet(seed))
        whole, rolled = (cost(to_dataset(finished(case, "optimal", keep=keep))) for keep in (6, 2))
        short = cost(to_dataset(finished(case, "optimal", window=3, keep=2)))
        assert rolled == pytest.approx(whole, rel=1e-9)  # each window sees to the end
        assert short > whole * (1 - 1e-9)


DAYS = 4
HOURS = 24 * DAYS


def lengths(on: np.ndarray, hours_before: float) -> list[tuple[bool, int]]:
    """State and length of every run of a unit that ends within the hours; the first counts what was."""
    state, since, found = hours_before > 0, int(abs(hours_before)), []
    for now in on > 0.5:
        if now != state:
            found.append((state, since))
            state, since = now, 0
        since += 1
    return found


@pytest.mark.parametrize("seed", range(10))
def test_no_seam_breaks_a_minimum_time(tmp_path, seed):
    """Windows that look 24 h past what is kept, cut anywhere; counted from the decisions alone."""
    keep = int(np.random.default_rng(seed).integers(5, 25))
    system = small_fleet(700 + seed, periods=HOURS, longest=12)
    case = written(tmp_path / "case", system, HOURS).with_settings(commitment={"mip_gap": 0.01})
    done = finished(case, "optimal", window=keep + 24, keep=keep)
    assert done.window[-1] >= 3
    on = to_dataset(done)["unit_on"].to_pandas()
    for unit in system["units"]:
        for was_on, length in lengths(on[unit["unit"]].to_numpy(), unit["initial_hours"]):
            assert length >= unit["min_up_h" if was_on else "min_down_h"], (unit["unit"], was_on)
    assert np.abs(np.diff(on.to_numpy(), axis=0)).sum() > 3


def test_out_of_time_the_best_plan_is_used_and_its_gap_is_told(tmp_path, monkeypatch):
    """A search whose bound stays 10 % below its plan, and whose time is over when it returns."""
    case = written(tmp_path / "case", small_fleet(3))
    best = cost(to_dataset(finished(case, "optimal")))
    searched, clock = search.Search._run, iter(range(0, 10**6, 1000))

    def poor_bound(self, gap, start, seconds):
        return dataclasses.replace(searched(self, gap, start, seconds), bound=0.9 * best)

    monkeypatch.setattr(search.Search, "_run", poor_bound)
    monkeypatch.setattr(search.time, "perf_counter", lambda: float(next(clock)))
    done = run(case, plan_run(case, hours=PERIODS, commitment="optimal"))
    monkeypatch.undo()
    results = to_dataset(done)
    assert cost(results) == pytest.approx(best)
    (window,) = run_record(done, results, {})["windows"]
    assert window["time_limit"]
    assert 0 < window["gap"] <= 0.1 + 1e-9
