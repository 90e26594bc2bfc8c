"""The dataset and folder of a run keep to results-format.md and come back as they were saved."""

import json
import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from simulator.errors import OptionError
from simulator.results import open_run, run_record, save, to_dataset
from tests.dispatch.building import case_of
from tests.dispatch.drawing import drawn
from tests.dispatch.running import finished
from tests.support import small_case

FORMAT_PAGE = Path(__file__).parents[2] / "shared" / "results-format.md"
SECONDS = {"read": 0.1, "results": 0.2, "total": 0.5}


@pytest.fixture(scope="module")
def finished_run(tmp_path_factory):
    """A case with something of every kind and more wind than it can take, two windows of a day."""
    cells = {("fleet/renewables.csv", 2, "capacity_mw"): "400"}
    case = small_case(tmp_path_factory.mktemp("small") / "case", cells=cells)
    return finished(case, "relaxed", window=36, keep=24)


@pytest.fixture(scope="module")
def dataset(finished_run) -> xr.Dataset:
    return to_dataset(finished_run)


AT_CORRIDORS, AT_PAIRS = ("time", "corridor"), ("pair",)
NETWORK = {
    "line_loss": (("time", "line"), "MW"),
    "security_hours": (("line",), "h"),
    "corridor_flow": (AT_CORRIDORS, "MW"),
    "corridor_forward_limit": (AT_CORRIDORS, "MW"),
    "corridor_reverse_limit": (AT_CORRIDORS, "MW"),
    "corridor_shadow_price": (AT_CORRIDORS, "currency/MWh"),
    "corridor_limit_side": (AT_CORRIDORS, "1"),
    "corridor_rent": (AT_CORRIDORS, "currency"),
    "corridor_congestion_hours": (("corridor",), "h"),
    "corridor_hours_at_limit": (("corridor",), "h"),
    "pair_flow": (AT_PAIRS, "MW"),
    "pair_rating": (AT_PAIRS, "MW"),
    "pair_shadow_price": (AT_PAIRS, "currency/MWh"),
    "pair_limit_side": (AT_PAIRS, "1"),
    "pair_rent": (AT_PAIRS, "currency"),
    "main_cause": (("time", "bus"), "1"),
    "main_cause_part": (("time", "bus"), "currency/MWh"),
}


def promised() -> dict[str, tuple[tuple[str, ...], str]]:
    """Variable → dimensions and unit, from the table of results-format.md."""
    rows = re.findall(r"^\| (`.*?) \| (.*?) \| (.*?) \|$", FORMAT_PAGE.read_text(), re.MULTILINE)
    found = {}
    for names, dimensions, unit in rows:
        if names.startswith("`rampline"):
            continue
        variables = re.findall(r"`(\w+)`", names)
        dims = tuple(re.sub(r"\(.*\)", "", dimensions).replace(" ", "").split(","))
        units = unit.split(", ") if len(unit.split(", ")) > 1 else [unit] * len(variables)
        found |= {name: (dims, one) for name, one in zip(variables, units, strict=True)}
    return found


@pytest.mark.skipif(not FORMAT_PAGE.is_file(), reason="the shared pages are not here")
def test_variables_dimensions_and_units_are_just_those_promised(dataset):
    found = {
        name: (tuple(map(str, variable.dims)), variable.attrs["units"])
        for name, variable in dataset.data_vars.items()
    }
    expected = promised()
    assert len(expected) > 25
    more = {
        **NETWORK,
        "ramp_limited_hours": (("unit",), "h"),
        "make_whole": (("day", "unit"), "currency"),
        "unit_reason": (("time", "unit"), "1"),
        "reserve_requirement": (("time", "product"), "MW"),
        "unit_reserve": (("time", "unit", "product"), "MW"),
    }
    assert found == expected | more
    components = re.search(r"component \((.*?)\)", FORMAT_PAGE.read_text())
    assert components is not None
    assert dataset["component"].values.tolist() == re.findall(r"`(\w+)`", components[1])


def test_every_variable_says_its_unit_and_name_and_nothing_is_missing(dataset):
    for name, variable in dataset.data_vars.items():
        assert variable.attrs["units"], name
        assert variable.attrs["long_name"], name
        assert not variable.isnull().any(), name
    for name in ("bus_zone", "bus_latitude", "line_from_bus", "line_to_bus", "unit_bus",
                 "unit_technology"):  # fmt: skip
        assert name in dataset.coords


def test_a_dimension_without_elements_is_there_with_length_0(tmp_path):
    case = case_of(
        tmp_path / "case",
        buses=[{"bus": "b"}],
        units=[{"unit": "u", "bus": "b", "max_output_mw": 10}],
        offers=[{"unit": "u", "up_to_mw": 10, "cost_per_mwh": 5}],
        loads=[{"load": "l", "bus": "b", "mw": 7}],
    )
    run = finished(case)
    empty = to_dataset(run)
    assert {dim: empty.sizes[dim] for dim in ("line", "plant", "store", "tie", "product")} == {
        "line": 0, "plant": 0, "store": 0, "tie": 0, "product": 0
    }  # fmt: skip
    save(empty, run_record(run, empty, SECONDS), tmp_path / "run", force=False)
    xr.testing.assert_identical(open_run(tmp_path / "run"), empty)


def test_numbers_of_one_element_agree_with_each_other(dataset):
    """Definitions of formulation.md 1 and 5 that tie one variable to another."""
    hours = dataset.attrs["period_hours"]
    np.testing.assert_allclose(
        dataset["curtailment"], dataset["renewable_available"] - dataset["renewable_output"], atol=1e-9
    )  # fmt: skip
    np.testing.assert_allclose(
        dataset["price"],
        dataset["price_energy"] + dataset["price_congestion"] + dataset["price_loss"],
        atol=1e-9,
    )
    rent = dataset["line_shadow_price"] * abs(dataset["line_flow"]) * hours
    np.testing.assert_allclose(dataset["congestion_rent"], rent, atol=1e-9)
    priced = (dataset["line_shadow_price"] > 1e-6).sum("time") * hours
    np.testing.assert_array_equal(dataset["congestion_hours"], priced)
    full = (abs(dataset["line_flow"]) >= dataset["line_rating"] - 1e-4).sum("time") * hours
    np.testing.assert_array_equal(dataset["hours_at_limit"], full)
    by_component = dataset["cost"].sum("time").to_series()
    assert by_component["unit_running"] == pytest.approx(float(dataset["unit_cost"].sum()))
    assert by_component["unit_start"] == pytest.approx(float(dataset["unit_start_cost"].sum()))
    assert (dataset["line_shadow_price"] >= 0).all()
    for name in ("congestion_hours", "curtailment", "storage_charge", "unit_start_cost"):
        assert float(dataset[name].sum()) > 0, name


def test_times_are_utc_and_windows_are_numbered(dataset, finished_run):
    assert dataset["time"].values[0] == np.datetime64("2027-01-11T00:00")
    assert dataset.sizes["time"] == 48
    assert dataset["window"].values.tolist() == [0] * 24 + [1] * 24
    assert dataset.attrs["time_zone"] == "Europe/Dublin"
    assert dataset.attrs["Conventions"] == "CF-1.11"
    assert finished_run.times.tz_localize(None).equals(pd.DatetimeIndex(dataset["time"].values))


def test_a_saved_run_comes_back_as_it_was(dataset, finished_run, tmp_path):
    folder = tmp_path / "outputs" / "run"
    record = run_record(finished_run, dataset, SECONDS)
    save(dataset, record, folder, force=False)
    xr.testing.assert_identical(open_run(folder), dataset)
    assert json.loads((folder / "run.json").read_text()) == json.loads(json.dumps(record))
    assert [path.name for path in folder.parent.iterdir()] == ["run"]


def test_plain_xarray_reads_the_file(dataset, finished_run, tmp_path):
    save(dataset, run_record(finished_run, dataset, SECONDS), tmp_path / "run", force=False)
    with xr.open_dataset(tmp_path / "run" / "results.nc", engine="netcdf4") as plain:
        np.testing.assert_array_equal(plain["price"].values, dataset["price"].values)
        assert plain["time"].values[1] - plain["time"].values[0] == np.timedelta64(1, "h")
        assert plain["unit_output"].sel(unit="gas 1").attrs["units"] == "MW"


@pytest.mark.parametrize("seed", [1, 6, 17])
def test_random_runs_come_back_as_they_were(tmp_path, seed):
    run = finished(case_of(tmp_path / "case", **drawn(seed)))
    dataset = to_dataset(run)
    save(dataset, run_record(run, dataset, SECONDS), tmp_path / "run", force=False)
    xr.testing.assert_identical(open_run(tmp_path / "run"), dataset)


def test_the_record_holds_what_the_page_asks_for(dataset, finished_run):
    record = run_record(finished_run, dataset, SECONDS)
    assert {"format", "case", "from", "until", "settings", "totals", "counts", "seconds",
            "versions"} <= set(record)  # fmt: skip
    assert {"cost", "served_mwh", "unserved_mwh", "curtailed_mwh", "surplus_mwh", "emissions_t",
            "congestion_rent", "congestion_hours"} <= set(record["totals"])  # fmt: skip
    assert {"windows", "lp_solves", "mip_solves", "line_rows", "rebuilds"} <= set(record["counts"])
    assert record["counts"]["windows"] == 2
    assert record["until"] == "2027-01-13T00:00:00+00:00"
    totals = record["totals"]
    assert totals["cost"] == pytest.approx(float(dataset["cost"].sum()))
    demand = float(dataset["load_demand"].sum()) * dataset.attrs["period_hours"]
    assert totals["served_mwh"] == pytest.approx(demand - totals["unserved_mwh"])


def test_an_existing_folder_is_refused_without_force_and_replaced_whole_with_it(
    dataset, finished_run, tmp_path
):
    record = run_record(finished_run, dataset, SECONDS)
    save(dataset, record, tmp_path / "run", force=False)
    (tmp_path / "run" / "page.html").write_text("an old page")
    with pytest.raises(OptionError, match="--force"):
        save(dataset, record, tmp_path / "run", force=False)
    assert (tmp_path / "run" / "page.html").exists()
    save(dataset, record, tmp_path / "run", force=True)
    assert not (tmp_path / "run" / "page.html").exists()
    assert [path.name for path in tmp_path.iterdir()] == ["run"]


def test_a_folder_that_is_no_run_is_never_replaced(dataset, finished_run, tmp_path):
    (tmp_path / "letters").mkdir()
    (tmp_path / "letters" / "keep.txt").write_text("keep")
    record = run_record(finished_run, dataset, SECONDS)
    with pytest.raises(OptionError, match=r"run\.json"):
        save(dataset, record, tmp_path / "letters", force=True)
    assert (tmp_path / "letters" / "keep.txt").read_text() == "keep"
    with pytest.raises(OptionError, match=r"results\.nc"):
        open_run(tmp_path / "letters")


def test_a_save_that_fails_leaves_the_old_run_and_nothing_else(dataset, finished_run, tmp_path):
    record = run_record(finished_run, dataset, SECONDS)
    save(dataset, record, tmp_path / "run", force=False)
    with pytest.raises(TypeError):
        save(dataset, record | {"settings": object()}, tmp_path / "run", force=True)
    assert [path.name for path in tmp_path.iterdir()] == ["run"]
    xr.testing.assert_identical(open_run(tmp_path / "run"), dataset)
