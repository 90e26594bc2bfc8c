"""Runs as they come pass the audit, whatever the case, the mode and the windows."""

from pathlib import Path

import numpy as np
import pytest

from simulator.audit import audit
from simulator.case import read_case
from simulator.errors import CaseError, SolveError
from simulator.horizon import MODES, plan_run, run
from simulator.results import open_run, save, to_dataset
from tests.audit.plants import town_case
from tests.dispatch.building import case_of
from tests.dispatch.drawing import drawn, secured
from tests.support import write_case

RTS_GMLC = Path(__file__).parents[2].parent / "shared" / "data" / "rts-gmlc"
WINDOWS = {"one window": (99, 99), "seen ahead": (5, 2), "one by one": (1, 1)}


def failed(checks):
    return [check for check in checks if not check.passed]


def solved(case, mode, window=99, keep=99, limits="lines"):
    """The results of a run over all periods of a case."""
    count, length = len(case.time), case.time.period_hours
    plan = plan_run(
        case, hours=count * length, window_hours=min(window, count) * length,
        keep_hours=min(keep, count) * length, commitment=mode, limits=limits,
    )  # fmt: skip
    return to_dataset(run(case, plan))


@pytest.mark.parametrize("mode", MODES)
@pytest.mark.parametrize("windows", WINDOWS)
@pytest.mark.parametrize("seed", range(200, 212))
def test_random_cases_pass(tmp_path, seed, windows, mode):
    try:
        case = case_of(tmp_path / "case", **drawn(seed))
        dataset = solved(case, mode, *WINDOWS[windows])
    except (CaseError, SolveError):
        pytest.skip("the case contradicts itself")
    checks = failed(audit(case, dataset))
    if windows != "one window":  # what a store must end with may be out of reach by then
        checks = [check for check in checks if check.name != "final energy"]
    assert not checks


@pytest.mark.parametrize("mode", MODES)
@pytest.mark.parametrize("seed", range(300, 308))
def test_random_cases_with_corridors_and_contingencies_pass(tmp_path, seed, mode):
    try:
        case = case_of(tmp_path / "case", **secured(seed))
        dataset = solved(case, mode, limits="secure")
    except (CaseError, SolveError):
        pytest.skip("the case contradicts itself")
    checks = audit(case, dataset)
    names = {check.name for check in checks}
    assert {"security", "pairs"} <= names
    assert ("corridor limits" in names) == (not case.corridors.empty)
    assert not failed(checks)


@pytest.mark.parametrize("mode", MODES)
def test_periods_of_a_quarter_hour_pass(tmp_path, mode):
    case = read_case(write_case(tmp_path / "case", hours=12, step=15))
    assert not failed(audit(case, solved(case, mode, 24, 12)))


@pytest.mark.parametrize(
    ("start", "twice"), [("2026-10-25T00:00", "+00:00"), ("2026-03-29T00:00", None)]
)
def test_days_of_a_clock_change_pass_and_name_local_hours(tmp_path, start, twice):
    case = read_case(write_case(tmp_path / "case", hours=12, start=start))
    dataset = solved(case, "relaxed", 6, 3)
    assert not failed(audit(case, dataset))
    dataset["line_flow"].to_numpy()[2, 1] += 1.0
    where = next(check.where for check in audit(case, dataset) if check.name == "flows")
    hour = "01:00+00:00" if twice else "03:00+01:00"
    assert where == f'line "M-S" at {start[:10]}T{hour}'


@pytest.mark.parametrize("mode", MODES)
def test_without_limits_there_is_one_price_an_island_and_no_check_of_limits(town, mode):
    dataset = solved(town, mode, 12, 8, limits="none")
    checks = audit(town, dataset)
    assert not failed(checks)
    assert "line limits" not in {check.name for check in checks}
    dataset["line_shadow_price"].to_numpy()[0, 0] = 1.0
    assert "shadow prices" in {check.name for check in failed(audit(town, dataset))}


def test_a_network_of_buses_without_lines_passes(tmp_path):
    case = case_of(
        tmp_path / "case",
        buses=[{"bus": "Cove"}, {"bus": "Isle"}],
        units=[{"unit": "motor", "bus": "Isle", "max_output_mw": 5}],
        offers=[{"unit": "motor", "up_to_mw": 5, "cost_per_mwh": 100}],
        loads=[{"load": "huts", "bus": "Isle", "mw": 3}, {"load": "inn", "bus": "Cove", "mw": 1}],
    )
    assert not failed(audit(case, solved(case, "given")))


def test_a_line_with_a_rating_of_zero_passes(tmp_path):
    case = town_case(tmp_path / "case", {("lines", "H-M", "rating_mw"): 0.0})
    dataset = solved(case, "given", 12, 8)
    assert float(dataset["line_shadow_price"].sel(line="H-M").max()) > 1
    assert not failed(audit(case, dataset))


def test_a_run_that_was_written_and_read_again_passes(tmp_path, town, dataset):
    save(dataset, {}, tmp_path / "run", force=False)
    assert audit(town, open_run(tmp_path / "run")) == audit(town, dataset)


def test_the_order_of_dimensions_does_not_matter(town, dataset):
    turned = dataset.transpose("unit", "bus", "line", ...)
    assert audit(town, turned) == audit(town, dataset)


def test_a_week_of_rts_gmlc_passes():
    if not RTS_GMLC.is_dir():
        pytest.skip("the RTS-GMLC case is not here")
    case = read_case(RTS_GMLC)
    dataset = to_dataset(run(case, plan_run(case, "2020-07-06", 168, commitment="relaxed")))
    assert not failed(audit(case, dataset))
    assert np.count_nonzero(dataset["line_shadow_price"]) > 0
