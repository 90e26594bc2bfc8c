"""Studies from the command line to what is left behind: folder, page, export, messages."""

import json
from pathlib import Path

import pandas as pd
import pytest
from typer.testing import CliRunner, Result

from simulator.cli import app
from simulator.studies.folder import open_study
from tests.support import write_case

HOSTILE = "<script>alert(1)</script>"


def call(*arguments: object) -> Result:
    return CliRunner().invoke(app, [str(argument) for argument in arguments])


def done(*arguments: object) -> Result:
    result = call(*arguments)
    assert result.exit_code == 0, result.output
    return result


def refused(*arguments: object) -> list[str]:
    result = call(*arguments)
    assert result.exit_code == 2, result.output
    assert result.stdout == ""
    assert "Traceback" not in result.stderr
    return result.stderr.splitlines()


@pytest.fixture(scope="module")
def case(tmp_path_factory) -> Path:
    """The small case, one of its buses with a hostile name."""
    folder = tmp_path_factory.mktemp("small") / "case"
    write_case(folder)
    for path in folder.rglob("*.csv"):
        path.write_text(path.read_text().replace("Midfen", HOSTILE))
    return folder


RUN = ("--commitment", "relaxed", "--workers", 1)


@pytest.fixture(scope="module")
def load(case, tmp_path_factory) -> tuple[Path, Result]:
    out = tmp_path_factory.mktemp("studies") / "load"
    return out, done("new-load", case, "--all-buses", "--mw", 5, "--mw", 20, "--largest",
                     "--largest-within", 25, "--hours", 24, *RUN, "--out", out)  # fmt: skip


@pytest.fixture(scope="module")
def store(case, tmp_path_factory) -> tuple[Path, Result]:
    out = tmp_path_factory.mktemp("studies") / "store"
    return out, done("storage-sites", case, "--power-mw", 5, "--hours", 2, "--hours", 4, "--run-hours", 24,
                     "--cycles-a-day", 1, *RUN, "--out", out)  # fmt: skip


def test_a_new_load_ends_in_a_recommendation_with_its_basis(load):
    out, result = load
    record = json.loads((out / "study.json").read_text("utf-8"))
    said = " ".join(result.stdout.split())
    assert record["recommendation"] in said
    assert "Of 3 buses, 3 can take 20 MW with all load served" in said
    assert "Full runs of 24 hours" in said
    assert record["audit"] == {"passed": True, "runs": record["audit"]["runs"], "failed": {}}
    assert len(record["answers"]) == 6
    assert f"written to {out}" in result.stderr
    assert sorted(path.name for path in out.iterdir()) == ["page.html", "results.nc", "study.json"]
    assert [path.name for path in out.parent.iterdir()] == ["load"]


def test_storage_sites_say_screening_place_and_saving(store):
    out, result = store
    said = " ".join(result.stdout.split())
    assert "2 h: of 3 sites run with the store in place" in said
    assert "held in the screening, not with the store in place" in said
    dataset = open_study(out)
    assert dataset.sizes["duration"] == 2
    assert dataset.attrs["screening"].startswith("linear program")


@pytest.mark.parametrize("study", ["load", "store"])
def test_the_page_holds_answers_definitions_and_caution_and_is_written_again_the_same(
    study, request
):
    out, _ = request.getfixturevalue(study)
    before = (out / "page.html").read_bytes()
    text = before.decode()
    assert "What the figures mean" in text
    assert "not for real-time control" in text
    assert "Congestion cost is the total cost of a run less that of the same run without" in text
    assert HOSTILE not in text
    assert "&lt;script&gt;alert(1)" in text
    done("page", out)
    assert (out / "page.html").read_bytes() == before


@pytest.mark.parametrize("kind", ["csv", "parquet", "xlsx"])
@pytest.mark.parametrize("study", ["load", "store"])
def test_a_study_is_exported(study, kind, request, tmp_path):
    out, _ = request.getfixturevalue(study)
    found = json.loads(done("export", out, tmp_path / "x", "--to", kind, "--json").stdout)
    assert sorted(found["files"]) == sorted(path.name for path in (tmp_path / "x").iterdir())
    done("export", out, tmp_path / "x", "--to", kind, "--force")
    if kind == "csv":
        answers = pd.read_csv(tmp_path / "x" / "answers.csv")
        dataset = open_study(out)
        second = "size" if study == "load" else "duration"
        assert len(answers) == dataset.sizes["bus"] * dataset.sizes[second]
        name = "extra_production_cost" if study == "load" else "screening_earnings"
        assert answers[f"{name} [EUR]"].sum() == pytest.approx(float(dataset[name].sum()))


def test_a_study_is_no_map_layer_and_a_run_is_no_study(load, tmp_path):
    assert 'found "geojson"' in refused("export", load[0], tmp_path / "x", "--to", "geojson")[0]
    assert list(tmp_path.iterdir()) == []
    assert "must hold" in refused("page", tmp_path)[0]


def test_everything_wrong_with_a_call_is_told_at_once_and_nothing_written(case, load, tmp_path):
    said = refused("new-load", case, "--bus", "Northfenn", "--all-buses", "--mw", -1, "--profile", "demnd",
                   "--from", "2027-13-01", "--out", load[0])  # fmt: skip
    assert len(said) == 6
    assert all(line.startswith("error: --") for line in said)
    assert "--force" in said[0]
    assert 'did you mean "Northfen"?' in "\n".join(said)
    said = refused("storage-sites", case, "--power-mw", 0, "--hours", 4, "--charge-efficiency", 2,
                   "--out", tmp_path / "x")  # fmt: skip
    assert len(said) == 3
    assert list(tmp_path.iterdir()) == []


def test_force_replaces_only_a_study(case, load, tmp_path):
    (tmp_path / "run").mkdir()
    (tmp_path / "run" / "run.json").write_text("{}")
    rest = ("--bus", "Northfen", "--mw", 5, "--no-largest", "--hours", 24, *RUN)
    assert (
        "without study.json"
        in refused("new-load", case, *rest, "--out", tmp_path / "run", "--force")[0]
    )
    found = json.loads(
        done("new-load", case, *rest, "--out", load[0].parent / "again", "--json").stdout
    )
    assert found["answers"][0]["bus"] == "Northfen"
    done("new-load", case, *rest, "--out", load[0].parent / "again", "--force")


def test_help_shows_an_example():
    for command in ("new-load", "storage-sites"):
        assert f"Example: rampline {command}" in done(command, "--help").stdout
