"""A run's plan of on and off, saved as a case: the rest stays as it was, and it runs to the same end."""

import csv
import json
import shutil
import tomllib
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from simulator.audit import audit
from simulator.case import Case, read_case
from simulator.case.commitment_folder import refuse_commitment, save_commitment
from simulator.errors import OptionError
from simulator.horizon import Run, plan_run, run
from simulator.results import to_dataset
from tests.dispatch.building import case_of
from tests.dispatch.drawing import drawn
from tests.support import write_case
from tests.test_cli import call, done, refused

PLAN = "hourly/commitment.csv"
CELLS = {
    ("fleet/units.csv", 3, "initial_hours"): "-1",
    ("fleet/units.csv", 3, "initial_output_mw"): "0",
}


def solved(folder: Path, mode: str, **how: object) -> tuple[Case, Run, xr.Dataset]:
    case = read_case(folder)
    finished = run(case, plan_run(case, **{"hours": 24, "commitment": mode, **how}))
    return case, finished, to_dataset(finished)


def saved(source: Path, folder: Path, **how: object) -> tuple[Path, xr.Dataset]:
    """Run a case in mode optimal and save its plan."""
    case, finished, dataset = solved(source, "optimal", **how)
    save_commitment(case, source, finished.on_seen, finished.plan.span, folder)
    return folder, dataset


@pytest.fixture(scope="module")
def source(tmp_path_factory) -> Path:
    return write_case(tmp_path_factory.mktemp("source") / "case", cells=CELLS)


@pytest.fixture(scope="module")
def plan(source, tmp_path_factory) -> tuple[Path, xr.Dataset]:
    """The plan of the second 24 of 48 hours, from 06:00 on, window 36 h."""
    how = {"start": "2027-01-11T06:00", "window_hours": 30, "keep_hours": 24}
    return saved(source, tmp_path_factory.mktemp("plan") / "case", **how)


def test_only_settings_units_and_the_plan_differ(source, plan):
    folder, _ = plan
    files = {path.relative_to(source).as_posix() for path in source.rglob("*") if path.is_file()}
    found = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}
    assert found == files | {PLAN}
    changed = {
        path for path in files if (source / path).read_bytes() != (folder / path).read_bytes()
    }
    assert changed == {"case.toml", "fleet/units.csv"}
    settings = tomllib.loads((source / "case.toml").read_text())
    settings["commitment"]["mode"] = "given"
    assert tomllib.loads((folder / "case.toml").read_text()) == settings
    before, after = (pd.read_csv(each / "fleet/units.csv", dtype=str) for each in (source, folder))
    assert after["on_profile"].tolist() == ["on peat 1", "on gas 1", "on gas 2"]
    pd.testing.assert_frame_equal(
        before.drop(columns="on_profile"), after.drop(columns="on_profile")
    )


def test_the_plan_covers_what_the_run_saw_in_times_with_offset(plan):
    folder, dataset = plan
    with (folder / PLAN).open(newline="") as file:
        header, *rows = csv.reader(file)
    assert header == ["time", "on peat 1", "on gas 1", "on gas 2"]
    assert rows[0][0] == "2027-01-11T06:00:00+00:00"
    assert len(rows) == 30
    kept = np.array([row[1:] for row in rows[:24]], int)
    np.testing.assert_array_equal(kept, np.rint(dataset["unit_on"]))
    assert read_case(folder).time.local[0].isoformat() == "2027-01-11T06:00:00+00:00"


def test_the_saved_plan_runs_to_the_same_cost_and_the_same_on_and_off(plan):
    folder, dataset = plan
    case, _, again = solved(folder, None, window_hours=30, keep_hours=24)
    assert case.settings.commitment.mode == again.attrs["commitment"] == "given"
    assert float(again["cost"].sum()) == pytest.approx(float(dataset["cost"].sum()), rel=1e-6)
    np.testing.assert_array_equal(again["unit_on"], np.rint(dataset["unit_on"]))
    np.testing.assert_allclose(again["unit_start"], dataset["unit_start"], atol=1e-6)
    assert all(check.passed for check in audit(case, again))


@pytest.mark.parametrize("seed", range(8))
def test_random_plans_run_to_the_same_cost(tmp_path, seed):
    case_of(tmp_path / "case", **drawn(seed))
    periods = len(read_case(tmp_path / "case").time)
    hours = periods * read_case(tmp_path / "case").time.period_hours
    how = {"hours": hours, "window_hours": hours, "keep_hours": hours}
    folder, dataset = saved(tmp_path / "case", tmp_path / "plan", **how)
    again = solved(folder, "given", **how)[2]
    scale = float(np.abs(dataset["cost"]).sum())
    off = abs(float(again["cost"].sum()) - float(dataset["cost"].sum()))
    assert off <= 1e-6 * max(1.0, scale)
    np.testing.assert_array_equal(again["unit_on"], np.rint(dataset["unit_on"]))
    np.testing.assert_allclose(again["unit_start"], dataset["unit_start"], atol=1e-6)


def test_rolled_windows_keep_the_plan(source, tmp_path):
    how = {"hours": 36, "window_hours": 18, "keep_hours": 12}
    folder, dataset = saved(source, tmp_path / "plan", **how)
    _, _, again = solved(folder, "given", **how)
    np.testing.assert_array_equal(again["unit_on"], np.rint(dataset["unit_on"]))
    assert len(pd.read_csv(folder / PLAN)) == 24 + 18


def test_a_plan_edited_as_a_table_runs(plan, tmp_path):
    folder, dataset = plan
    edited = shutil.copytree(folder, tmp_path / "edited")
    table = pd.read_csv(edited / PLAN)
    table.loc[8:12, "on gas 1"] = 0
    table.to_csv(edited / PLAN, index=False)
    case, _, again = solved(edited, "given", window_hours=30, keep_hours=24)
    on = again["unit_on"].sel(unit="gas 1").to_numpy()
    assert on[8:13].tolist() == [0] * 5
    expected = dataset["unit_on"].sel(unit="gas 1").to_numpy()
    np.testing.assert_array_equal(
        np.delete(on, range(8, 13)), np.rint(np.delete(expected, range(8, 13)))
    )
    assert expected[8:13].sum() > 0
    assert float(again["cost"].sum()) > float(dataset["cost"].sum())
    assert all(check.passed for check in audit(case, again))


def test_a_plan_saved_again_replaces_the_plan_and_adds_no_file(plan, tmp_path):
    folder = plan[0]
    case, finished, _ = solved(folder, "given", window_hours=30, keep_hours=24)
    again = tmp_path / "again"
    save_commitment(case, folder, finished.on_seen, finished.plan.span, again)
    assert (again / PLAN).read_bytes() == (folder / PLAN).read_bytes()
    assert (again / "fleet/units.csv").read_bytes() == (folder / "fleet/units.csv").read_bytes()
    assert (again / "case.toml").read_bytes() == (folder / "case.toml").read_bytes()


def test_names_that_are_taken_stay_free_of_clashes(tmp_path):
    """A file and a profile of the new names, used by something else, and names that cut to one."""
    long = "x" * 64
    cells = {
        ("fleet/units.csv", 2, "unit"): long, ("fleet/heat_rates.csv", 2, "unit"): long,
        ("fleet/heat_rates.csv", 3, "unit"): long, ("fleet/units.csv", 3, "unit"): "note, \"gas\"",
        ("fleet/offers.csv", 2, "unit"): "note, \"gas\"", ("fleet/offers.csv", 3, "unit"): "note, \"gas\"",
        ("fleet/offers.csv", 4, "unit"): "note, \"gas\"",
        ("demand/loads.csv", 2, "profile"): "on " + "x" * 61,
    }  # fmt: skip
    source = write_case(tmp_path / "case", cells=cells)
    times = pd.read_csv(source / "hourly/demand.csv")["time"]
    pd.DataFrame({"time": times, "on " + "x" * 61: 0.9}).to_csv(source / PLAN, index=False)
    folder, dataset = saved(source, tmp_path / "plan")
    assert (folder / PLAN).read_bytes() == (source / PLAN).read_bytes()
    case, _, again = solved(folder, "given")
    assert case.units["on_profile"].tolist() == [
        "on " + "x" * 59 + " 2",
        'on note, "gas"',
        "on gas 2",
    ]
    assert (folder / "hourly/commitment 2.csv").is_file()
    np.testing.assert_array_equal(again["unit_on"], np.rint(dataset["unit_on"]))


@pytest.mark.parametrize(
    "text",
    [
        'format = 1\nname = "a"\n',
        'format = 1\nname = "a" # mode = "given"\n\n[commitment] # how\nmip_gap = 0.01\n[horizon]\n',
        "format = 1\nname = 'mode = \"x\"'\n[commitment]\r\nmode = 'optimal' # as ever\r\n",
        'format = 1\nname = "a"\ncommitment = { mip_gap = 0.01, mode = "relaxed" }\n',
        'format = 1\nname = "a"\ncommitment = {mip_gap = 0.01}\n',
        'format = 1\nname = "a"\ncommitment.mip_gap = 0.01\n',
        '\ufeffformat = 1\nname = "a"\n"commitment"."mode" = "optimal"\n',
    ],
)
def test_the_mode_is_set_in_any_way_of_writing_it(tmp_path, text):
    source = write_case(tmp_path / "case", {"case.toml": text.encode()})
    case = read_case(source)
    save_commitment(case, source, np.ones((5, 3)), slice(2, 7), tmp_path / "plan")
    found = (tmp_path / "plan/case.toml").read_bytes().decode()
    assert tomllib.loads(found.removeprefix("\ufeff"))["commitment"]["mode"] == "given"
    assert found.startswith("\ufeff") == text.startswith("\ufeff")
    lines = [
        line for line in text.split("\n") if "commitment" not in line and "mode = '" not in line
    ]
    assert set(lines) <= set(found.split("\n"))


def test_a_unit_that_is_partly_on_is_refused_and_nothing_written(source, tmp_path):
    case = read_case(source)
    on = np.ones((6, 3))
    on[2, 1] = 0.25
    with pytest.raises(OptionError, match=r'2\.3.*"gas 1" on by 0\.25 at 2027-01-11T02:00\+00:00'):
        save_commitment(case, source, on, slice(0, 6), tmp_path / "plan")
    with pytest.raises(OptionError, match="mode relaxed"):
        refuse_commitment(source, tmp_path / "plan", "relaxed")
    with pytest.raises(OptionError, match="two periods"):
        save_commitment(case, source, on[:1], slice(0, 1), tmp_path / "plan")
    assert list(tmp_path.iterdir()) == []


def test_a_case_that_is_not_the_one_that_was_run_is_refused_and_nothing_written(tmp_path):
    source = write_case(tmp_path / "case")
    case = read_case(source)
    cells = {
        ("fleet/units.csv", 2, "max_output_mw"): "100.5",
        ("fleet/heat_rates.csv", 3, "up_to_mw"): "100.5",
    }
    write_case(source, cells=cells)
    with pytest.raises(OptionError, match="as it was run"):
        save_commitment(case, source, np.ones((6, 3)), slice(0, 6), tmp_path / "plan")
    assert [path.name for path in tmp_path.iterdir()] == ["case"]


def test_the_command_saves_a_plan_that_the_command_runs(source, tmp_path):
    folder = tmp_path / "plan"
    rest = ("--hours", 24, "--window-hours", 24)
    first = done(
        "week", source, *rest, "--out", tmp_path / "a", "--save-commitment", folder, "--json"
    )
    second = done("week", folder, *rest, "--out", tmp_path / "b", "--json")
    assert f"commitment written to {folder}" in first.stderr
    costs = [json.loads(each.stdout)["totals"]["cost"] for each in (first, second)]
    assert costs[1] == pytest.approx(costs[0], rel=1e-6)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a", "b", "plan"]


def test_the_command_refuses_what_it_could_not_save_before_it_runs(source, tmp_path):
    def said(folder: Path, *rest: object) -> str:
        return refused("week", source, "--hours", 24, "--out", tmp_path / "out",
                       "--save-commitment", folder, *rest)  # fmt: skip

    assert "mode relaxed" in said(tmp_path / "plan", "--commitment", "relaxed")
    for folder in (
        source,
        source / "hourly",
        source.parent,
        tmp_path / "out",
        tmp_path / "out/plan",
    ):
        assert "apart from the case" in said(folder, "--force")
    assert list(tmp_path.iterdir()) == []
    letters = tmp_path / "letters"
    letters.mkdir()
    (letters / "letter.txt").write_text("keep")
    assert "pass --force" in said(letters)
    assert f"without {PLAN}" in said(letters, "--force")
    assert [path.name for path in tmp_path.rglob("*")] == ["letters", "letter.txt"]


def test_force_replaces_a_plan_saved_before(plan, tmp_path, source):
    folder = shutil.copytree(plan[0], tmp_path / "plan")
    (folder / "hourly/mine.txt").write_text("of no use")
    result = call("week", source, "--hours", 24, "--window-hours", 24, "--out", tmp_path / "out",
                  "--save-commitment", folder, "--force")  # fmt: skip
    assert result.exit_code == 0, result.output
    assert not (folder / "hourly/mine.txt").exists()
    assert len(pd.read_csv(folder / PLAN)) == 24
