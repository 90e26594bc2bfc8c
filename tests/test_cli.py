"""The command line as a user meets it: exit codes, what goes to which stream, what is left behind."""

import dataclasses
import json
import re
import signal
import subprocess
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner, Result

import simulator.audit
import simulator.horizon
from simulator.cli import app
from simulator.dispatch import search
from simulator.dispatch.solver import SolverError
from simulator.errors import SolveError
from tests.support import write_case

DEMO = Path(__file__).parents[1] / "profiles" / "fennholm"
DAY = ("--hours", 24, "--commitment", "relaxed")
COMMANDS = ("check", "week", "page", "export", "compare")


def call(*arguments: object) -> Result:
    """Call the command in this process."""
    return CliRunner().invoke(app, [str(argument) for argument in arguments])


def done(*arguments: object) -> Result:
    """Call the command and expect it to succeed."""
    result = call(*arguments)
    assert result.exit_code == 0, result.output
    return result


def refused(*arguments: object) -> str:
    """Call the command, expect it to refuse and to print nothing else; return what it says."""
    result = call(*arguments)
    assert result.exit_code == 2, result.output
    assert result.stdout == ""
    assert "Traceback" not in result.stderr
    return result.stderr


def document(result: Result) -> Any:
    """The one JSON document on standard output."""
    return json.loads(result.stdout)


@pytest.fixture(scope="module")
def case(tmp_path_factory) -> Path:
    """The small case without reserves, so that some results have no element."""
    return write_case(tmp_path_factory.mktemp("small") / "case", {"fleet/reserves.csv": None})


@pytest.fixture(scope="module")
def small(case, tmp_path_factory) -> Path:
    """The folder of a run of the small case."""
    folder = tmp_path_factory.mktemp("runs") / "small"
    done("week", case, "--hours", 48, "--out", folder)  # on and off decided, as the case asks
    return folder


@pytest.fixture(scope="module")
def demo(tmp_path_factory) -> Mapping[str, Path]:
    """Two days of the demo case in which lines are congested, with and without their limits."""
    base = tmp_path_factory.mktemp("demo")
    for limits in ("lines", "none"):
        done("week", DEMO, "--from", "2027-01-05", "--hours", 48, "--commitment", "relaxed",
             "--limits", limits, "--out", base / limits)  # fmt: skip
    return {limits: base / limits for limits in ("lines", "none")}


def test_help_lists_the_commands_and_each_shows_an_example():
    listed = done("--help").stdout
    for command in COMMANDS:
        assert command in listed
        assert f"Example: rampline {command}" in done(command, "--help").stdout


def test_a_sound_case_is_described(case):
    assert "Three fens" in done("check", case).stdout
    assert document(done("check", case, "--json"))["case"] == "Three fens"


@pytest.mark.parametrize("command", ["check", "week"])
def test_every_problem_of_a_case_is_listed_and_nothing_written(command, tmp_path):
    case = write_case(
        tmp_path / "case",
        cells={
            ("network/lines.csv", 2, "to_bus"): "Midfenn",
            ("fleet/units.csv", 3, "max_output_mw"): "-5",
        },
    )
    rest = ["--out", tmp_path / "out"] if command == "week" else []
    said = refused(command, case, *rest, "--json")
    assert 'network/lines.csv:2:to_bus: line "N-M"' in said
    assert 'did you mean "Midfen"?' in said
    assert "fleet/units.csv:3:max_output_mw" in said
    count = re.search(r"^(\d+) problems; nothing was written$", said, re.MULTILINE)
    assert count is not None
    assert int(count[1]) == len(said.splitlines()) - 1 >= 2
    assert [path.name for path in tmp_path.iterdir()] == ["case"]


def test_a_run_leaves_results_record_and_page(small):
    assert sorted(path.name for path in small.iterdir()) == [
        "page.html", "results.nc", "run.json",
    ]  # fmt: skip
    assert json.loads((small / "run.json").read_text())["audit"]["passed"] is True


def test_a_run_prints_one_document_or_a_summary(case, tmp_path):
    found = document(done("week", case, *DAY, "--out", tmp_path / "a", "--json"))
    assert found["folder"] == str(tmp_path / "a")
    assert found["totals"]["served_mwh"] > 0
    summary = done("week", case, *DAY, "--out", tmp_path / "b").stdout
    assert "Cost by component" in summary


def test_an_existing_folder_is_refused_without_force(case, tmp_path):
    (tmp_path / "out").mkdir()
    assert "--force" in refused("week", case, *DAY, "--out", tmp_path / "out")
    assert list((tmp_path / "out").iterdir()) == []
    done("week", case, *DAY, "--out", tmp_path / "out", "--force")
    assert (tmp_path / "out" / "results.nc").exists()
    (tmp_path / "letters").mkdir()
    (tmp_path / "letters" / "letter.txt").write_text("keep")
    said = refused("week", case, *DAY, "--out", tmp_path / "letters", "--force")
    assert "without run.json" in said
    assert (tmp_path / "letters" / "letter.txt").exists()


@pytest.mark.parametrize(
    "rest",
    [
        ["--limits", "some"],
        ["--commitment", "perhaps"],
        ["--from", "yesterday"],
        ["--hours", "-3"],
        ["--hours", "9999999"],
        ["--nothing-like-this"],
    ],
)
def test_a_wrong_option_is_refused_and_nothing_written(case, tmp_path, rest):
    refused("week", case, *rest, "--out", tmp_path / "out")
    assert list(tmp_path.iterdir()) == []


def test_a_solver_that_cannot_finish_ends_with_its_own_code(case, tmp_path, monkeypatch):
    def stop(*_: object) -> None:
        raise SolveError(1, "time limit", ['unit "peat 1" at 2027-01-11T05:00'])

    monkeypatch.setattr(simulator.horizon, "run", stop)
    result = call("week", case, "--hours", 48, "--out", tmp_path / "out", "--json")
    assert result.exit_code == 3
    assert result.stdout == ""
    assert "window 1" in result.stderr
    assert 'unit "peat 1"' in result.stderr
    assert list(tmp_path.iterdir()) == []


def test_an_audit_that_fails_is_kept_and_ends_with_its_own_code(case, tmp_path, monkeypatch):
    check = {"name": "balance", "worst": 0.5, "where": "island of bus \"Midfen\"",
             "tolerance": 1e-5, "passed": False}  # fmt: skip
    monkeypatch.setattr(
        simulator.audit, "audit_record", lambda _: {"passed": False, "checks": [check]}
    )
    result = call("week", case, *DAY, "--out", tmp_path / "out", "--json")
    assert result.exit_code == 4
    assert document(result)["audit"]["passed"] is False
    assert 'audit: balance is off by 0.5 at island of bus "Midfen"' in result.stderr
    assert "The audit of this run failed" in (tmp_path / "out" / "page.html").read_text("utf-8")


def test_the_page_of_a_run_is_written_again_the_same(small):
    before = (small / "page.html").read_bytes()
    (small / "page.html").unlink()
    result = done("page", small)
    assert result.stdout == ""
    assert (small / "page.html").read_bytes() == before
    assert len(list(small.iterdir())) == 3


@pytest.mark.parametrize("command", ["page", "export", "compare"])
def test_a_folder_that_is_no_run_is_refused(command, case, small, tmp_path):
    rest = {
        "page": [],
        "export": [tmp_path / "out", "--to", "csv"],
        "compare": [small, "--page", tmp_path / "changes.html"],
    }[command]
    assert "must hold" in refused(command, case, *rest)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("kind", ["csv", "geojson", "parquet", "xlsx"])
def test_a_run_is_exported(small, tmp_path, kind):
    result = done("export", small, tmp_path / kind, "--to", kind, "--json")
    found = document(result)
    assert found["folder"] == str(tmp_path / kind)
    assert sorted(found["files"]) == sorted(path.name for path in (tmp_path / kind).iterdir())
    assert [path.name for path in tmp_path.iterdir()] == [kind]
    if kind != "geojson":
        assert "unit_reserve" in found["left_out"]
        absent = ("reserve", "corridor", "pair")
        assert all(any(kind in name for kind in absent) for name in found["left_out"])
        assert f"left out, nothing in the case: {', '.join(found['left_out'])}" in result.stderr


def test_an_export_keeps_to_a_new_or_empty_folder(small, tmp_path):
    done("export", small, tmp_path / "out", "--to", "geojson")
    said = refused("export", small, tmp_path / "out", "--to", "csv")
    assert "pass --force" in said
    done("export", small, tmp_path / "out", "--to", "csv", "--force")
    assert not (tmp_path / "out" / "buses.geojson").exists()
    assert "results.nc" in refused("export", small, small, "--to", "csv", "--force")
    assert 'found "pdf"' in refused("export", small, tmp_path / "other", "--to", "pdf")
    assert (small / "results.nc").exists()


def test_geojson_of_a_case_without_positions_is_refused(tmp_path):
    buses = "bus\nNorthfen\nMidfen\nSouthfen\n"
    bare = write_case(tmp_path / "case", {"network/buses.csv": buses, "fleet/reserves.csv": None})
    done("week", bare, *DAY, "--out", tmp_path / "run")
    said = refused("export", tmp_path / "run", tmp_path / "map", "--to", "geojson")
    assert 'found none for "Northfen", "Midfen", "Southfen", give them' in said
    assert not (tmp_path / "map").exists()


def test_no_plan_in_time_ends_with_what_stopped_it_and_leaves_nothing(case, tmp_path, monkeypatch):
    """HiGHS finds some plan of a small case in any time, so that its having none is played."""

    def none_found(*_):
        raise SolverError("time limit")

    monkeypatch.setattr(search.Search, "_run", none_found)
    result = call("week", case, "--hours", 24, "--commitment", "optimal", "--out", tmp_path / "out")
    assert result.exit_code == 3
    assert "window 0" in result.stderr
    assert "time limit" in result.stderr
    assert "raise commitment.seconds in case.toml" in result.stderr
    assert not (tmp_path / "out").exists()


def test_a_window_that_ran_out_of_time_is_named_with_its_gap(case, tmp_path, monkeypatch):
    """The clock of the search says the time is over as soon as it has a plan."""
    searched, clock = search.Search._run, iter(range(0, 10**6, 1000))

    def poor_bound(self, gap, start, seconds):
        plan = searched(self, gap, start, seconds)
        return dataclasses.replace(plan, bound=-1e12)

    monkeypatch.setattr(search.Search, "_run", poor_bound)
    monkeypatch.setattr(search.time, "perf_counter", lambda: float(next(clock)))
    result = done("week", case, "--hours", 24, "--commitment", "optimal", "--out", tmp_path / "run")
    assert "window 0 from 2027-01-11T00:00:00+00:00 stopped after 120 s" in result.stderr
    assert "asked for 0.01%" in result.stderr
    record = json.loads((tmp_path / "run" / "run.json").read_text())
    assert record["windows"][0]["time_limit"] is True
    assert 0 < record["windows"][0]["gap"] < 1


def test_names_that_look_like_formulas_stay_text_from_case_to_export(case, tmp_path):
    text = (case / "network" / "buses.csv").read_text().replace("north", "=1+1")
    hostile = write_case(tmp_path / "case", {"network/buses.csv": text.replace("N=1+1", "North")})
    done("week", hostile, *DAY, "--out", tmp_path / "run")
    done("export", tmp_path / "run", tmp_path / "tables", "--to", "csv")
    assert "Northfen,'=1+1," in (tmp_path / "tables" / "bus.csv").read_text()


def test_without_line_limits_the_demo_costs_less_and_no_line_is_congested(demo):
    found = document(done("compare", demo["lines"], demo["none"], "--json"))
    assert found["totals"]["cost"]["change"] < -1000
    assert found["totals"]["unserved_mwh"]["first"] == 0
    assert found["settings"] == {"network.limits": {"first": "lines", "second": "none"}}
    states = [line["status"] for line in found["congestion_hours"].values()]
    assert states.count("no longer congested") >= 2
    assert set(states) == {"no longer congested", "as many hours"}
    back = document(done("compare", demo["none"], demo["lines"], "--json"))
    assert back["totals"]["cost"]["change"] == -found["totals"]["cost"]["change"]
    newly = [line["status"] for line in back["congestion_hours"].values()]
    assert newly.count("newly congested") == states.count("no longer congested")


def test_a_comparison_is_printed_and_written_as_a_page(demo, tmp_path):
    page = tmp_path / "pages" / "changes.html"
    result = done("compare", demo["lines"], demo["none"], "--page", page)
    assert "No longer congested" in result.stdout
    assert "network.limits" in result.stdout
    assert f"written to {page}" in result.stderr
    assert "No longer congested" in page.read_text("utf-8")
    assert [path.name for path in page.parent.iterdir()] == ["changes.html"]
    assert document(done("compare", demo["lines"], demo["none"], "--page", page, "--json"))


def test_a_run_compared_with_itself_changes_nothing(demo):
    found = document(done("compare", demo["lines"], demo["lines"], "--json"))
    assert {row["change"] for row in found["totals"].values()} == {0.0}
    assert found["settings"] == {}


def test_runs_over_other_hours_are_not_compared(small, demo):
    said = refused("compare", small, demo["lines"])
    assert f"2027-01-11T00:00+00:00 to 2027-01-13T00:00+00:00 in periods of 1 h in {small}" in said
    assert "2027-01-05T00:00+00:00 to 2027-01-07T00:00+00:00" in said


INTERRUPTED = """
import sys, time
import {module}
def wait(*_):
    print("writing", flush=True)
    time.sleep(60)
{module}.{function} = wait
from simulator.cli import main
main()
"""


@pytest.mark.parametrize(
    ("module", "function"),
    [
        ("simulator.report.page", "write_page"),
        ("simulator.report.export", "_values"),
        ("simulator.horizon", "run"),
    ],
)
def test_an_interrupt_leaves_nothing_half_written(case, small, tmp_path, module, function):
    """The process is stopped for certain while it solves or writes, by the signal of Ctrl-C."""
    script = INTERRUPTED.format(module=module, function=function)
    out = tmp_path / "out"
    arguments = (
        ["export", small, out, "--to", "csv"]
        if module.endswith("export")
        else ["week", case, *DAY, "--out", out]
    )
    with subprocess.Popen(
        [sys.executable, "-c", script, *map(str, arguments)],
        cwd=Path(__file__).parents[1],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    ) as process:
        assert process.stdout is not None
        assert process.stdout.readline() == "writing\n"
        half = [path.name for path in tmp_path.iterdir()]
        process.send_signal(signal.SIGINT)
        _, said = process.communicate(timeout=30)
    assert process.returncode == 130
    assert "interrupted; nothing was written" in said
    assert "Traceback" not in said
    assert len(half) == (module != "simulator.horizon")
    assert list(tmp_path.iterdir()) == []
