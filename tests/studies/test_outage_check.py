"""When lines may be switched out: by hand, against plain runs, and in the words of the command."""

import json
from functools import cache

import numpy as np
import pytest

from simulator.errors import OptionError
from simulator.studies.base import StudySettings
from simulator.studies.outage_check import (
    OutageCheck,
    answer_outage_check,
    check_outage_check,
    outage_check,
)
from tests.dispatch.building import case_of
from tests.dispatch.drawing import secured
from tests.dispatch.running import cost, solved
from tests.studies.test_command import call, done

HOUR = 1.0


def ring(folder, **more):
    """Three equal lines of 100 MW in a ring: cheap power at a, dear at c, 60 then 150 MW of load at c."""
    lines = [("ab", "a", "b"), ("bc", "b", "c"), ("ac", "a", "c")]
    return case_of(
        folder,
        buses=[{"bus": bus} for bus in "abc"],
        lines=[
            {"line": name, "from_bus": one, "to_bus": other, "reactance_pu": 0.1, "rating_mw": 100}
            for name, one, other in lines
        ],
        units=[
            {"unit": "cheap", "bus": "a", "max_output_mw": 200},
            {"unit": "dear", "bus": "c", "max_output_mw": 40},
        ],
        offers=[
            {"unit": "cheap", "up_to_mw": 200, "cost_per_mwh": 10},
            {"unit": "dear", "up_to_mw": 40, "cost_per_mwh": 50},
        ],
        loads=[{"load": "town", "bus": "c", "mw": [60.0, 150.0]}],
        **more,
    )


def hourly(**settings):
    return OutageCheck(("ac",), HOUR, StudySettings(hours=2, commitment="given", **settings))


def test_by_hand(tmp_path):
    """With ac out, all comes by ab and bc, 100 MW at most, and losing either splits off c.

    Hour 1: 60 MW as before, nothing extra. Hour 2: with all lines in, ac carries two thirds of what a sends,
    150 MW at most; with ac out 100 MW, 40 MW dear, 10 MW unserved at 10,000.
    """
    found = outage_check(ring(tmp_path / "case"), hourly())
    at = found.sel(line="ac")
    assert at["extra_cost"].values == pytest.approx([0, 10 * 10_000 + 40 * 50 - 50 * 10])
    assert at["extra_unserved"].values == pytest.approx([0, 10], abs=1e-6)
    assert at["islanding"].values.tolist() == [2, 2]
    assert at["newly_congested_names"].values[0] == ""
    assert set(at["newly_congested_names"].values[1].split(", ")) <= {"ab", "bc"}
    assert at["secure"].values.tolist() == [False, False]
    assert at["rank"].values.tolist() == [1, 2]
    assert "cannot be out securely" in found.attrs["recommendation"]


def test_with_another_way_round_an_outage_is_secure_by_hand(tmp_path):
    """A second line from a to c: with one out the other and the way by b are left, for 60 MW enough."""
    case = ring(tmp_path / "case")
    twin = case_of(
        tmp_path / "twin",
        buses=[{"bus": bus} for bus in case.buses.index],
        lines=[
            *({"line": name, **row} for name, row in _plain(case.lines).items()),
            {"line": "twin", "from_bus": "a", "to_bus": "c", "reactance_pu": 0.1, "rating_mw": 100},
        ],
        units=[
            {"unit": "cheap", "bus": "a", "max_output_mw": 200},
            {"unit": "dear", "bus": "c", "max_output_mw": 40},
        ],
        offers=[
            {"unit": "cheap", "up_to_mw": 200, "cost_per_mwh": 10},
            {"unit": "dear", "up_to_mw": 40, "cost_per_mwh": 50},
        ],
        loads=[{"load": "town", "bus": "c", "mw": [60.0, 150.0]}],
    )
    at = outage_check(twin, hourly()).sel(line="ac")
    assert at["secure"].values.tolist() == [True, False]
    # Hour 2: twin carries 100 of 150 MW; after its loss the 150 MW would go by b, on lines of 100 MW.
    assert at["worst_overload"].values == pytest.approx([0, 50], abs=1e-6)
    assert at["worst_overload_name"].values[1] in {
        "ab after loss of twin", "bc after loss of twin", "twin after loss of ab",
        "twin after loss of bc",
    }  # fmt: skip
    secure = outage_check(twin, hourly(limits="secure")).sel(line="ac")
    assert secure["worst_overload"].values == pytest.approx([0, 0], abs=1e-3)
    assert secure["extra_unserved"].values == pytest.approx([0, 10], abs=1e-6)


def _plain(lines):
    columns = ["from_bus", "to_bus", "reactance_pu", "rating_mw"]
    return lines[columns].to_dict("index")


@pytest.mark.parametrize("limits", ["lines", "secure"])
def test_extra_costs_are_those_of_runs_with_the_outage_in_the_case(random_secured, limits):
    case, lines = random_secured
    length, whole = case.time.period_hours, len(case.time) * case.time.period_hours
    settings = StudySettings(None, whole, whole, whole, "relaxed", limits)
    found = outage_check(case, OutageCheck(lines, 2 * length, settings))
    base = cost(solved(case, limits=limits))
    for line in lines:
        for block in range(found.sizes["block"]):
            at = found.sel(line=line).isel(block=block)
            out = case.with_outage("line", line, at["block_from"].item(), at["block_until"].item())
            extra = cost(solved(out, limits=limits)) - base
            assert at["extra_cost"].item() == pytest.approx(extra, abs=1e-6 * abs(base))


@pytest.fixture(params=[302, 305, 308])
def random_secured(request, secured_cases):
    case = secured_cases(request.param)
    return case, tuple(map(str, case.lines.index[:3]))


@pytest.fixture(scope="module")
def secured_cases(tmp_path_factory):
    return cache(lambda seed: case_of(tmp_path_factory.mktemp("outage") / "case", **secured(seed)))


def test_any_number_of_workers_finds_the_same(tmp_path):
    case = ring(tmp_path / "case")
    alone, together = (answer_outage_check(case, hourly(), workers=count) for count in (1, 2))
    for name in alone.dataset.data_vars:
        np.testing.assert_array_equal(alone.dataset[name], together.dataset[name], err_msg=name)


def test_every_problem_is_told_at_once(tmp_path):
    case = ring(tmp_path / "case")
    wrong = OutageCheck(("ca", "ac", "ac"), 0.7, StudySettings(hours=99))
    with pytest.raises(OptionError) as refused:
        check_outage_check(case, wrong)
    text = str(refused.value)
    assert 'found "ca", choose one of network/lines.csv' in text
    for option in ("--line", "--block-hours", "--hours"):
        assert option in text


def test_from_the_command_to_the_folder(tmp_path):
    case = ring(tmp_path / "case")
    assert len(case.lines) == 3
    out, exported = tmp_path / "out", tmp_path / "csv"
    result = done("outage-check", tmp_path / "case", "--all-lines", "--block-hours", 1, "--hours", 2,
                  "--commitment", "given", "--workers", 1, "--out", out, "--json")  # fmt: skip
    record = json.loads(result.stdout)
    assert record["study"] == "outage-check"
    assert len(record["answers"]) == 6
    assert record["answers"][0]["rank"] == 1
    page = (out / "page.html").read_text()
    assert "The safest time of each line" in page
    assert "planning aid" in page
    done("export", out, exported, "--to", "csv")
    assert (exported / "answers.csv").read_text().count("\n") == 7
    done("page", out)
    refused = call("outage-check", tmp_path / "case", "--hours", 2, "--out", tmp_path / "x")
    assert refused.exit_code == 2
    assert "--line" in refused.stderr
