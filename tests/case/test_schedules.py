"""What is said of schedules that break the rules of their units."""

import pytest

from tests.dispatch.building import case_of


def said(folder, plan, mode="given", outages=(), minutes=60, **unit):
    """Return column and finding of the warnings on a unit that follows a plan, a letter a period."""
    case = case_of(
        folder / "case",
        {"commitment": {"mode": mode}},
        minutes=minutes,
        periods=len(plan),
        buses=[{"bus": "b"}],
        units=[{"unit": "u", "bus": "b", "max_output_mw": 100, "on_profile": "plan"} | unit],
        offers=[{"unit": "u", "up_to_mw": 100, "cost_per_mwh": 20}],
        loads=[{"load": "l", "bus": "b", "mw": 50}],
        profiles={"plan": [int(each) for each in plan]},
        outages=[{"kind": "unit", "name": "u", "from": first, "until": until}
                 for first, until in outages],
    )  # fmt: skip
    return [(each.column, each.found) for each in case.warnings]


@pytest.mark.parametrize(
    ("plan", "unit", "column", "found"),
    [
        ("110011", {"must_run": True}, "must_run", "2 h from 2027-03-01T02:00+00:00"),
        ("001101", {"min_up_h": 3}, "min_up_h", "2 h from 2027-03-01T02:00+00:00"),
        ("110101", {"min_down_h": 2}, "min_down_h", "1 h from 2027-03-01T02:00+00:00 and 1 more"),
    ],
)
def test_a_broken_rule_is_told_once_with_where_it_begins(tmp_path, plan, unit, column, found):
    assert said(tmp_path, plan, **unit) == [(column, found)]


@pytest.mark.parametrize(
    ("plan", "unit"),
    [
        ("011100", {"min_up_h": 3}),  # as long as asked for
        ("100011", {"min_down_h": 3}),
        ("100001", {"min_up_h": 4}),  # what lies beyond the data is not known
        ("011110", {"min_down_h": 4}),
        ("111111", {"must_run": True, "min_up_h": 4, "min_down_h": 4}),
    ],
)
def test_a_plan_within_the_rules_is_not_odd(tmp_path, plan, unit):
    assert said(tmp_path, plan, **unit) == []


def test_minimum_times_count_hours_not_periods(tmp_path):
    assert said(tmp_path / "a", "011110", minutes=30, min_up_h=2) == []
    found = said(tmp_path / "b", "011100", minutes=30, min_up_h=2)
    assert found == [("min_up_h", "1.5 h from 2027-03-01T00:30+00:00")]


def test_an_outage_asks_for_no_minimum_time(tmp_path):
    """It holds a unit that must run off, ends a minimum up time, and the unit may start after it."""
    hour = [("2027-03-01T02:00", "2027-03-01T03:00")]
    rules = {"must_run": True, "min_up_h": 6, "min_down_h": 6}
    assert said(tmp_path / "a", "111111", outages=hour, **rules) == []
    assert said(tmp_path / "b", "111011", outages=hour, min_down_h=6) == []


@pytest.mark.parametrize("mode", ["relaxed", "optimal"])
def test_a_schedule_that_nothing_follows_is_not_looked_at(tmp_path, mode):
    assert said(tmp_path, "110011", mode=mode, must_run=True) == []
