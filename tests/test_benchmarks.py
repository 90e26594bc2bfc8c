"""The benchmarks measure what they say: their cases are drawn from a seed, their optima are the same."""

from copy import copy

import numpy as np
import pandas as pd
import pyomo.environ as pyo
import pytest
from pyomo.contrib.appsi.solvers import Highs

from simulator.audit import audit
from simulator.grid import Network
from simulator.results import to_dataset
from tests.benchmarks.by_hand_matrix import programs, solve_by_matrix
from tests.benchmarks.by_hand_pyomo import window_model
from tests.benchmarks.cases import Subject
from tests.benchmarks.measure import measure
from tests.benchmarks.synthetic import CLOSE, synthetic_tables, write_synthetic
from tests.dispatch.running import finished

BUSES = 40


@pytest.fixture(scope="module")
def subject(tmp_path_factory):
    return Subject(write_synthetic(tmp_path_factory.mktemp("synthetic"), BUSES))


def test_a_seed_draws_one_case():
    first, again, other = (synthetic_tables(BUSES, seed) for seed in (1, 1, 2))
    for path, table in first.items():
        pd.testing.assert_frame_equal(table, again[path])
        assert not table.equals(other[path]), path


@pytest.mark.parametrize("buses", [BUSES, 300])
def test_a_synthetic_network_is_as_large_as_asked_and_near_its_limits(buses):
    tables = synthetic_tables(buses)
    size = {path.split("/")[1].removesuffix(".csv"): len(table) for path, table in tables.items()}
    assert size["buses"] == buses
    assert size["lines"] == pytest.approx(1.5 * buses, abs=1)
    assert size["units"] == buses // 5
    assert size["renewables"] == buses // 10
    assert size["loads"] > buses / 2


def test_without_limits_about_three_of_a_hundred_line_hours_are_near_their_limit(subject):
    free = finished(subject.case, limits="none", periods=120, window=48, keep=24)
    near = abs(free.kept.flow) >= CLOSE * free.kept_inputs.limits.rating
    assert 0.02 < near.mean() < 0.05


def test_the_smallest_case_runs_and_its_audit_passes(subject):
    checks = audit(subject.case, to_dataset(subject.finished))
    assert [check.name for check in checks if not check.passed] == []
    assert subject.rolled[2].counts.limit_rows > 0


@pytest.mark.parametrize("from_basis", [False, True])
def test_the_matrix_by_hand_has_the_engines_optimum(subject, from_basis):
    few = programs(subject)[:2]
    optima = solve_by_matrix(few, 100.0, from_basis=from_basis)
    np.testing.assert_allclose(optima, subject.optima[:2], rtol=1e-9)


def test_the_pyomo_model_by_hand_has_the_engines_optimum(subject):
    network, state = Network.of(subject.case), subject.rolled[0][1]
    model = window_model(network, subject.windows[1], state)
    Highs().solve(model)
    assert pyo.value(model.cost) == pytest.approx(subject.optima[1], rel=1e-9)


def test_a_way_by_hand_over_its_budget_is_said_to_be(subject):
    hasty = copy(subject)
    hasty.budget = 1e-6
    (result,) = measure("small", hasty, ["by hand: matrix"], 2)
    assert result.over == 1e-6
    assert result.seconds == []
