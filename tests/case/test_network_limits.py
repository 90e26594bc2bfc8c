"""Corridors, contingencies and what losses ask of a case."""

import math

import numpy as np
import pytest

from simulator.case import read_case, series
from simulator.errors import CaseError
from tests.support import NETWORK_LIMITS, case_texts, problems_of, small_case, write_case

CORRIDORS, CONTINGENCIES = "network/corridors.csv", "network/contingencies.csv"
LINES = "network/lines.csv"


def test_tables_are_read_with_their_defaults(tmp_path):
    case = small_case(tmp_path, NETWORK_LIMITS)
    assert case.corridors["forward_mw"].tolist() == [130, math.inf]
    assert case.corridors["reverse_mw"].tolist() == [math.inf, 90]
    assert case.corridor_lines["weight"].tolist() == [1, 1, 0.5, -0.5]
    assert case.contingencies["contingency"].tolist() == ["gale", "gale", "N-S"]
    assert "2 corridors, 2 contingencies" in str(case)


def test_an_hourly_profile_multiplies_both_limits_of_a_corridor(tmp_path):
    case, span = small_case(tmp_path, NETWORK_LIMITS), slice(3, 7)
    warmth = case.profiles["warmth"].to_numpy()[span]
    forward = series.corridor_limit(case, span, "forward_mw")
    np.testing.assert_allclose(forward[:, 0], 130 * warmth)
    assert np.isinf(forward[:, 1]).all()
    assert np.isinf(series.corridor_limit(case, span, "reverse_mw")[:, 0]).all()


def test_a_corridor_has_a_line(tmp_path):
    files = NETWORK_LIMITS | {CORRIDORS: NETWORK_LIMITS[CORRIDORS] + "west,10,,\n"}
    (problem,) = problems_of(write_case(tmp_path, files))
    assert (problem.path, problem.row, problem.column) == (CORRIDORS, 4, "corridor")


def test_a_limit_profile_is_never_negative(tmp_path):
    path = "hourly/weather.csv"
    problems = problems_of(write_case(tmp_path, NETWORK_LIMITS, {(path, 4, "warmth"): "-0.5"}))
    assert [(p.path, p.row, p.column) for p in problems] == [(path, 4, "warmth")] * 2
    assert "limit_profile" in problems[1].rule


def test_resistance_below_zero_is_refused_only_with_losses(tmp_path):
    gain = {(LINES, 3, "resistance_pu"): "-0.01"}
    case = small_case(tmp_path / "without", cells=gain)
    with pytest.raises(CaseError, match="resistance_pu"):
        case.with_settings(network={"losses": True})
    lossy = case_texts()["case.toml"].replace("losses = false", "losses = true")
    (problem,) = problems_of(write_case(tmp_path / "with", {"case.toml": lossy}, gain))
    assert (problem.path, problem.row, problem.column) == (LINES, 3, "resistance_pu")


def test_losses_without_any_resistance_are_warned_of(tmp_path):
    lossy = case_texts()["case.toml"].replace("losses = false", "losses = true")
    rows = len(case_texts()[LINES].strip().splitlines())
    none = {(LINES, row, "resistance_pu"): "0" for row in range(2, rows + 1)}
    assert not read_case(write_case(tmp_path / "without", cells=none)).warnings
    case = read_case(write_case(tmp_path / "with", {"case.toml": lossy}, none))
    (warning,) = case.warnings
    assert warning.path == LINES
    assert "network.losses" in warning.rule
    some = dict(list(none.items())[1:]) | {(LINES, 2, "resistance_pu"): "0.01"}
    assert not read_case(write_case(tmp_path / "some", {"case.toml": lossy}, some)).warnings


def test_an_empty_table_of_contingencies_is_the_default(tmp_path):
    case = read_case(write_case(tmp_path, {CONTINGENCIES: "contingency,line\n"}))
    assert case.contingencies.empty
