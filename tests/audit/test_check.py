"""The verdict itself: worst residual, its place, and what never passes; and what the audit may import."""

import ast
import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import simulator.audit
from simulator.audit import Check, audit_record
from simulator.audit.check import Residual, apart, judge

HOURS = pd.date_range("2026-10-25T00:00", periods=3, freq="h", tz="UTC").tz_convert("Europe/Dublin")
NAMES = pd.Index(["north", "south"])


def residual(values, rule=""):
    return Residual("line", NAMES, rule, np.array(values, float))


def test_the_worst_of_several_residuals_is_named():
    first = residual([[0.0, 1.0], [0.0, 0.0], [0.0, 0.0]], "one")
    second = residual([[0.0, 0.0], [3.0, 0.0], [0.0, 0.0]], "another")
    check = judge("flows", 2.0, HOURS, [first, second])
    assert (check.worst, check.where) == (3.0, 'line "north" (another) at 2026-10-25T01:00+00:00')
    assert not check.passed


def test_an_hour_that_comes_twice_is_told_apart_by_its_offset():
    wheres = {judge("", 0.0, HOURS, [residual(np.eye(3, 2, -k))]).where[-22:] for k in (0, 1)}
    assert wheres == {"2026-10-25T01:00+01:00", "2026-10-25T01:00+00:00"}


def test_a_missing_number_is_worse_than_any_and_never_passes():
    check = judge("flows", np.inf, HOURS, [residual([9.0, 0.0]), residual([0.0, np.nan])])
    assert np.isnan(check.worst)
    assert check.where == 'line "south"'
    assert not check.passed


@pytest.mark.parametrize("values", [[], [[-1.0, 0.0]]])
def test_nothing_off_is_nowhere(values):
    parts = [residual(values)] if values else [Residual("tie", NAMES[:0], "", np.zeros((3, 0)))]
    assert judge("flows", 0.0, HOURS, parts) == Check("flows", 0.0, "", 0.0)


def test_a_residual_at_the_tolerance_passes():
    assert Check("flows", 1e-5, "", 1e-5).passed
    assert not Check("flows", 1.1e-5, "", 1e-5).passed


def test_infinite_alike_is_the_same_and_infinite_unlike_is_not():
    endless = np.array([np.inf, np.inf, -np.inf])
    assert apart(endless, np.array([np.inf, 1.0, np.inf])).tolist() == [0.0, np.inf, np.inf]


def test_the_record_holds_every_check_and_is_plain_json():
    checks = [Check("flows", 0.5, 'line "x"', 1.0), Check("prices", float("nan"), 'bus "y"', 1.0)]
    record = audit_record(checks)
    assert json.loads(json.dumps(record, allow_nan=False)) == {
        "passed": False,
        "checks": [
            {"name": "flows", "worst": 0.5, "where": 'line "x"', "tolerance": 1.0, "passed": True},
            {
                "name": "prices",
                "worst": None,
                "where": 'bus "y"',
                "tolerance": 1.0,
                "passed": False,
            },
        ],
    }
    assert audit_record(checks[:1])["passed"]


def imported(path):
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (name.name for name in node.names)
        elif isinstance(node, ast.ImportFrom):
            yield node.module


def test_the_audit_shares_no_code_with_what_it_audits():
    folder = Path(simulator.audit.__file__).parent
    own = {name for path in folder.glob("*.py") for name in imported(path)}
    allowed = ("simulator.audit", "simulator.case", "simulator.errors")
    assert {
        name for name in own if name.startswith("simulator") and not name.startswith(allowed)
    } == set()
    assert not {name.split(".")[0] for name in own} & {"pyomo", "highspy"}
