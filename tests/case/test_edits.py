"""Changed copies of a case: same rules, and the original never changes."""

from dataclasses import fields

import numpy as np
import pandas as pd
import pytest

from simulator.case import model, read_case
from simulator.case.settings import Network
from simulator.errors import CaseError
from tests.support import write_case


@pytest.fixture(scope="module")
def case(tmp_path_factory):
    return read_case(write_case(tmp_path_factory.mktemp("case")))


def held(case):
    """Return copies of everything a case holds."""
    tables = {name: getattr(case, name).copy(deep=True) for name in model.TABLES}
    return {**tables, "profiles": case.profiles.copy(deep=True)}, case.settings, case.warnings


def problem_of(edit):
    with pytest.raises(CaseError) as caught:
        edit()
    (problem,) = caught.value.problems
    assert (problem.path, problem.row) == ("edit", 1)
    return problem


EDITS = {
    "load": lambda case: case.with_load("hall", "Northfen", 25),
    "store": lambda case: case.with_store("new cells", "Northfen", 10, 20),
    "limits": lambda case: case.without_limits(),
    "outage": lambda case: case.with_outage("line", "M-S", "2027-01-11T06:00", "2027-01-11T09:00"),
    "settings": lambda case: case.with_settings(emissions={"carbon_price_per_t": 90}),
}


@pytest.mark.parametrize("edit", EDITS)
def test_an_edit_leaves_the_original_unchanged(case, edit):
    tables, settings, warnings = held(case)
    changed = EDITS[edit](case)
    assert changed is not case
    after, settings_after, warnings_after = held(case)
    assert (settings_after, warnings_after) == (settings, warnings)
    for name, frame in tables.items():
        pd.testing.assert_frame_equal(frame, after[name])
    assert {field.name for field in fields(changed)} == {field.name for field in fields(case)}


def test_a_load_of_one_power(case):
    changed = case.with_load("hall", "Northfen", 25)
    row = changed.loads.loc["hall"]
    assert (row["bus"], row["scale_mw"], row["unserved_per_mwh"]) == ("Northfen", 25.0, 5000.0)
    assert (changed.profiles[row["profile"]] == 1.0).all()
    assert len(changed.loads) == len(case.loads) + 1


def test_a_load_that_varies(case):
    power = np.linspace(-5, 40, len(case.time))
    changed = case.with_load("hall", "Northfen", power, unserved_per_mwh=9000)
    row = changed.loads.loc["hall"]
    np.testing.assert_array_equal(changed.profiles[row["profile"]] * row["scale_mw"], power)
    assert row["unserved_per_mwh"] == 9000.0
    power[:] = 0
    assert changed.profiles[row["profile"]].iloc[-1] == 40.0


def test_a_profile_name_that_is_taken_gets_a_number(case):
    changed = case.with_load("wind", "Northfen", 1).with_load("demand", "Midfen", 2)
    assert changed.loads.loc[["wind", "demand"], "profile"].tolist() == ["wind 2", "demand 2"]


@pytest.mark.parametrize(
    "mw", [[1, 2], np.ones((48, 1)), np.nan, [np.inf] * 48, "much", None, 1e13]
)
def test_a_power_that_is_none_is_refused(case, mw):
    problem = problem_of(lambda: case.with_load("hall", "Northfen", mw))
    assert (problem.column, problem.subject) == ("mw", 'load "hall"')


@pytest.mark.parametrize(
    ("edit", "column", "words"),
    [
        (lambda c: c.with_load("hall", "Norhfen", 1), "bus", 'did you mean "Northfen"?'),
        (
            lambda c: c.with_load("town", "Northfen", 1),
            "load",
            "must be the only load of that name",
        ),
        (lambda c: c.with_load("", "Northfen", 1), "load", "must be filled in"),
        (lambda c: c.with_load("x" * 65, "Northfen", 1), "load", "at most 64 characters"),
        (
            lambda c: c.with_load("hall", "Northfen", 1, unserved_per_mwh=-1),
            "unserved_per_mwh",
            "at least 0",
        ),
        (lambda c: c.with_store("s", "Nowhere", 1, 2), "bus", "must name a bus"),
        (
            lambda c: c.with_store("cells", "Midfen", 1, 2),
            "store",
            "must be the only store of that name",
        ),
        (lambda c: c.with_store("s", "Midfen", -1, 2), "charge_mw", "at least 0"),
        (lambda c: c.with_store("s", "Midfen", float("inf"), 2), "charge_mw", "must be a number"),
        (
            lambda c: c.with_store("s", "Midfen", 1, 2, discharge_mw=-1),
            "discharge_mw",
            "at least 0",
        ),
        (
            lambda c: c.with_store("s", "Midfen", 1, 2, charge_efficiency=1.1),
            "charge_efficiency",
            "at most 1",
        ),
        (
            lambda c: c.with_store("s", "Midfen", 1, 2, initial_mwh=3),
            "initial_mwh",
            "at most energy_mwh",
        ),
        (
            lambda c: c.with_outage("lines", "N-M", "2027-01-11", "2027-01-12"),
            "kind",
            "must be one of",
        ),
        (
            lambda c: c.with_outage("line", "NM", "2027-01-11", "2027-01-12"),
            "name",
            'did you mean "N-M"?',
        ),
        (
            lambda c: c.with_outage("line", "N-M", "soon", "2027-01-12"),
            "from",
            "must be an ISO 8601 time",
        ),
        (
            lambda c: c.with_outage("line", "N-M", "2027-01-12", "2027-01-12"),
            "until",
            "must be after from",
        ),
        (
            lambda c: c.with_outage("line", "N-M", "2027-01-11", "2027-01-12", 50),
            "available_percent",
            "must be 0",
        ),
        (
            lambda c: c.with_settings(horizon={"keep_hours": 72}),
            "horizon.keep_hours",
            "at most window_hours",
        ),
        (
            lambda c: c.with_settings(horizon={"keep_hours": 1.5}),
            "horizon.keep_hours",
            "whole number of periods",
        ),
        (lambda c: c.with_settings(horizn={}), "horizn", 'did you mean "horizon"?'),
        (lambda c: c.with_settings(time_zone="UTC"), "time_zone", "must stay"),
    ],
)
def test_an_edit_that_breaks_a_rule_is_refused(case, edit, column, words):
    problem = problem_of(lambda: edit(case))
    assert problem.column == column
    assert words in str(problem)


def test_several_faults_of_an_edit_are_told_together(case):
    with pytest.raises(CaseError) as caught:
        case.with_store("s", "Nowhere", -1, 2)
    assert [p.column for p in caught.value.problems] == ["charge_mw", "bus"]


def test_a_store_has_the_defaults_of_the_format(case):
    row = case.with_store("s", "Midfen", 10, 40).storage.loc["s"]
    assert row[["discharge_mw", "initial_mwh", "final_mwh", "end_value_per_mwh"]].tolist() == [
        10,
        20,
        20,
        0,
    ]
    row = case.with_store(
        "s", "Midfen", 10, 40, discharge_mw=5, initial_mwh=0, end_value_per_mwh=30
    ).storage.loc["s"]
    assert row[["discharge_mw", "initial_mwh", "final_mwh", "end_value_per_mwh"]].tolist() == [
        5,
        0,
        0,
        30,
    ]


def test_outages_take_text_and_times_with_and_without_offset(case):
    changed = case.with_outage(
        "unit", "gas 1", pd.Timestamp("2027-01-11T06:00"), "2027-01-11T09:00+01:00", 25
    )
    changed = changed.with_outage(
        "storage", "cells", pd.Timestamp("2027-01-11T06:00", tz="Asia/Tokyo"), "2027-01-12"
    )
    hours = [(row["from"].hour, row["until"].hour) for _, row in changed.outages.tail(2).iterrows()]
    assert hours == [(6, 8), (21, 0)]
    assert changed.outages["available_percent"].tolist() == [50.0, 0.0, 25.0, 0.0]


def test_edits_add_up(case):
    changed = (
        case.with_load("hall", "Northfen", 5).with_store("s", "Northfen", 1, 2).without_limits()
    )
    changed = changed.with_load("barn", "Southfen", 6)
    assert list(changed.loads.index) == ["town", "works", "hall", "barn"]
    assert list(changed.storage.index) == ["cells", "s"]
    assert changed.settings.network.limits == "none"


def test_limits_are_lifted_and_nothing_else_changes(case):
    changed = case.without_limits()
    assert changed.settings == case.settings.model_copy(update={"network": Network(limits="none")})
    pd.testing.assert_frame_equal(changed.lines, case.lines)


def test_a_section_may_be_given_whole_or_in_part(case):
    whole = case.with_settings(network=Network(limits="none"))
    part = case.with_settings(network={"limits": "none"})
    assert whole.settings == part.settings
    assert case.with_settings(horizon={"window_hours": 72}).settings.horizon.keep_hours == 24.0
    assert case.with_settings(name="dry year").settings.name == "dry year"


def test_what_follows_from_settings_follows_the_new_ones(case):
    changed = case.with_settings(emissions={"carbon_price_per_t": 30}, penalties={"unserved": 6000})
    more = changed.blocks["cost_per_mwh"] - case.blocks["cost_per_mwh"]
    np.testing.assert_allclose(more, [11 * 0.1 * 20, 9.5 * 0.1 * 20, 0, 0, 0, 0], atol=1e-12)
    assert changed.loads["unserved_per_mwh"].tolist() == [6000.0, 8000.0]


def test_an_odd_edit_is_warned_of_once(case):
    changed = case.with_outage("line", "N-M", "2028-01-01", "2028-01-02").with_load(
        "hall", "Northfen", 1
    )
    assert [(w.path, w.column) for w in changed.warnings] == [("edit", "from")]
