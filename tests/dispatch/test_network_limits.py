"""Corridors and contingencies against the model written out with every angle after every loss."""

from pathlib import Path

import numpy as np
import pytest

from simulator.case import Case, read_case
from simulator.errors import SolveError
from simulator.horizon import Run, plan_run, run
from simulator.results import to_dataset
from tests.dispatch import power_flow
from tests.dispatch.building import case_of
from tests.dispatch.running import cost, finished
from tests.dispatch.test_random_cases import COST_TOLERANCE, check_prices, stores_end_short
from tests.dispatch.written_out import written_out

SEEDS = range(300, 340)
RTS_GMLC = Path(__file__).parents[3] / "shared" / "data" / "rts-gmlc"


def check_against_the_program(case: Case, limits: str, mode: str, seed: int) -> None:
    program = written_out(case, mode, secure=limits == "secure")
    optimum = program.solve()
    try:
        found = finished(case, mode, limits=limits)
    except SolveError:
        assert optimum is None
        return
    results = to_dataset(found)
    if optimum is None:
        assert stores_end_short(case, results)
        return
    assert cost(results) == pytest.approx(optimum.cost, rel=COST_TOLERANCE, abs=1e-5)
    check_prices(case, results, program, np.random.default_rng(seed))
    check_rents(found)


@pytest.mark.parametrize("limits", ["lines", "secure"])
@pytest.mark.parametrize("seed", SEEDS)
def test_a_limited_run_is_the_optimum_of_the_model_written_out(secured_case, seed, limits):
    mode = "given" if seed % 3 == 0 else "relaxed"
    check_against_the_program(secured_case(seed), limits, mode, seed)


def check_rents(found: Run) -> None:
    """5.2 with all kinds of limit; what phase shifters alone make flow is taken off the flows."""
    results, out = to_dataset(found), power_flow.lines_out(found.case)
    injection = power_flow.injections(found)
    still = power_flow.flows(found.case, np.zeros_like(injection), out)
    flow, shadow = results["line_flow"].to_numpy(), results["line_shadow_price"].to_numpy()
    rent = (shadow * np.sign(flow) * (flow - still)).sum(axis=1)
    members = found.case.corridor_lines
    for corridor, rows in members.groupby("corridor"):
        lines = found.case.lines.index.get_indexer(rows["line"])
        over = ((flow - still)[:, lines] * rows["weight"].to_numpy()).sum(axis=1)
        at = results.sel(corridor=corridor)
        rent += (at["corridor_shadow_price"] * at["corridor_limit_side"]).to_numpy() * over
    for pair in range(results.sizes["pair"]):
        one = results.isel(pair=pair)
        t = int(np.flatnonzero(results["time"] == one["pair_time"])[0])
        lost = lost_lines(found.case, str(one["pair_contingency"].item()))
        alone = power_flow.flows(found.case, np.zeros_like(injection[[t]]), out[[t]] | lost)[0]
        over = (
            one["pair_flow"].item() - alone[found.case.lines.index.get_loc(one["pair_line"].item())]
        )
        rent[t] += one["pair_shadow_price"].item() * one["pair_limit_side"].item() * over
    paid = -(results["price"].to_numpy() * injection).sum(axis=1)
    np.testing.assert_allclose(paid, rent, atol=1e-4, rtol=1e-7)


def lost_lines(case: Case, contingency: str) -> np.ndarray:
    """Tell which lines a contingency takes out, array (line,)."""
    table = case.contingencies
    if table.empty:
        return case.lines.index == contingency
    return case.lines.index.isin(table["line"][table["contingency"] == contingency])


def check_every_loss(found: Run) -> int:
    """Apply every contingency by a power flow of its own; return how many lines are at their limit."""
    case, out = found.case, power_flow.lines_out(found.case)[found.plan.span][: found.plan.periods]
    injection = power_flow.injections(found)
    held = found.inputs.whole.limits.contingencies
    emergency, met = found.kept_inputs.limits.emergency, 0
    for name in held.names:
        lost = lost_lines(case, name)
        for state in np.unique(out, axis=0):
            here = (out == state).all(axis=1)
            if not (lost & ~state).any() or pieces(case, state | lost) > pieces(case, state):
                continue
            flow = power_flow.flows(case, injection[here], out[here] | lost)
            assert (np.abs(flow) <= emergency[here] + power_flow.TOLERANCE).all(), name
            met += int((np.abs(flow) > emergency[here] - 1e-4).sum())
    return met


def pieces(case: Case, out: np.ndarray) -> int:
    """How many islands the lines leave that are not out, by the rank of their incidence."""
    buses = case.buses.index
    ends = np.zeros((len(case.lines), len(buses)))
    for sign, end in ((1, "from_bus"), (-1, "to_bus")):
        ends[np.arange(len(ends)), buses.get_indexer(case.lines[end])] = sign
    left = ends[~out]
    return len(buses) - (int(np.linalg.matrix_rank(left)) if len(left) else 0)


@pytest.mark.parametrize("seed", SEEDS)
def test_a_secure_run_is_within_emergency_ratings_after_every_loss(secured_case, seed):
    try:
        check_every_loss(finished(secured_case(seed), "relaxed", limits="secure"))
    except SolveError:
        pytest.skip("the case contradicts itself")


def test_the_random_cases_meet_what_they_are_meant_to_meet(secured_case):
    met = dict.fromkeys(["pairs", "corridors", "of several lines", "left out"], 0)
    for seed in SEEDS[:20]:
        try:
            found = finished(secured_case(seed), "relaxed", limits="secure")
        except SolveError:
            continue
        results, held = to_dataset(found), found.inputs.whole.limits.contingencies
        table = found.case.contingencies
        several = {name for name, rows in table.groupby("contingency") if len(rows) > 1}
        met["pairs"] += bool((results["pair_shadow_price"] > 1e-3).any())
        met["of several lines"] += bool(several & set(results["pair_contingency"].to_numpy()))
        met["corridors"] += bool((results["corridor_shadow_price"] > 1e-3).any())
        after = [held.after(topology) for topology in found.inputs.whole.topology.topologies]
        met["left out"] += any((each.splits | each.idle).any() for each in after)
    assert min(met.values()) >= 2, met


def test_a_day_of_rts_gmlc_survives_every_loss():
    if not RTS_GMLC.is_dir():
        pytest.skip("the RTS-GMLC case is not here")
    case = read_case(RTS_GMLC)
    plan = plan_run(case, "2020-07-07", 24, window_hours=24, commitment="relaxed", limits="secure")
    assert check_every_loss(run(case, plan)) > 0


def ring(folder, **more):
    """Three equal lines in a ring: cheap power at a, dear at c, 120 MW of load at c."""
    lines = [("ab", "a", "b"), ("bc", "b", "c"), ("ac", "a", "c")]
    return case_of(
        folder,
        buses=[{"bus": bus} for bus in "abc"],
        lines=[
            {"line": name, "from_bus": one, "to_bus": other, "reactance_pu": 0.1, "rating_mw": 100,
             "emergency_rating_mw": 110}
            for name, one, other in lines
        ],
        units=[
            {"unit": "cheap", "bus": "a", "max_output_mw": 200},
            {"unit": "dear", "bus": "c", "max_output_mw": 200},
        ],
        offers=[
            {"unit": "cheap", "up_to_mw": 200, "cost_per_mwh": 10},
            {"unit": "dear", "up_to_mw": 200, "cost_per_mwh": 50},
        ],
        loads=[{"load": "town", "bus": "c", "mw": [120.0, 30.0]}],
        **more,
    )  # fmt: skip


def test_security_by_hand(tmp_path):
    """After the loss of ac all of the cheap power goes by b, which carries 110 MW: cheap 110, dear 10.

    As things are ac would carry 80 of 120 MW, so without security all is cheap. One more MW of emergency
    rating saves 50 − 10 a MWh.
    """
    case = ring(tmp_path)
    results = to_dataset(finished(case, "given", limits="secure"))
    assert results["unit_output"].values[0] == pytest.approx([110, 10])
    assert results["price"].values[0, [0, 2]] == pytest.approx([10, 50])
    lost = set(results["pair_contingency"].to_numpy()) | set(results["pair_line"].to_numpy())
    assert lost <= {"ab", "bc", "ac"}
    assert results["pair_shadow_price"].sum() == pytest.approx(40)
    assert results["pair_flow"].to_numpy() == pytest.approx(110)
    assert results["pair_rent"].sum() == pytest.approx(110 * 40)
    assert not results["line_shadow_price"].any()
    free = to_dataset(finished(case, "given", limits="lines"))
    assert free["unit_output"].values[0] == pytest.approx([120, 0])
    assert free.sizes["pair"] == 0


def test_a_corridor_by_hand(tmp_path):
    """A corridor of ac and bc lets 90·0.8 MW into c in the first hour; the rest is dear."""
    case = ring(
        tmp_path,
        corridors=[{"corridor": "into c", "forward_mw": 90, "limit_profile": "shape"}],
        corridor_lines=[{"corridor": "into c", "line": "ac"}, {"corridor": "into c", "line": "bc"}],
        profiles={"shape": [0.8, 1.0]},
    )
    results = to_dataset(finished(case, "given"))
    assert results["corridor_flow"].values[:, 0] == pytest.approx([72, 30])
    assert results["unit_output"].values[0] == pytest.approx([72, 48])
    assert results["corridor_shadow_price"].values[:, 0] == pytest.approx([40, 0])
    assert results["corridor_limit_side"].values[:, 0].tolist() == [1, 0]
    assert results["corridor_rent"].values[:, 0] == pytest.approx([72 * 40, 0])
    assert results["corridor_congestion_hours"].item() == 1
    free = to_dataset(finished(case, "given", limits="none"))
    assert free["unit_output"].values[0] == pytest.approx([120, 0])
