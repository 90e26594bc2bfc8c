"""Exports are opened again with other libraries: the same numbers, no formulas, whole folders."""

import csv
import json
import zipfile
from pathlib import Path

import numpy as np
import openpyxl
import pandas as pd
import pytest
import xarray as xr

from simulator.errors import OptionError
from simulator.report import export
from simulator.report.export import FORMATS, export_run, sheets
from simulator.report.page import CAUTION
from simulator.report.view import View
from tests.report.conftest import BUSES, HOSTILE, record, results

NAMES = ["=1+1", "@x", HOSTILE, "-2 east", "+3"]
ZONES = ["=cmd|' /C calc'!A0", "", "\tsouth", "north", "north"]
EMPTY = ("reserve_price", "reserve_shortage", "reserve_requirement", "unit_reserve")


def renamed(dataset: xr.Dataset, names: list[str]) -> xr.Dataset:
    """The dataset with other names for its buses, wherever they stand."""
    known = dict(zip(BUSES, names, strict=True))
    ends = {
        name: (dimension, [known[bus] for bus in dataset[name].to_numpy()])
        for dimension, name in [
            ("line", "line_from_bus"), ("line", "line_to_bus"), ("tie", "tie_from_bus"),
            ("tie", "tie_to_bus"), ("load", "load_bus"), ("unit", "unit_bus"),
        ]
    }  # fmt: skip
    east = dataset["bus_longitude"].assign_attrs(units="degrees_east")
    return dataset.assign_coords(bus=names, bus_zone=("bus", ZONES), **ends).assign_coords(
        bus_longitude=("bus", east.to_numpy(), east.attrs)
    )


@pytest.fixture(scope="module")
def hostile() -> xr.Dataset:
    return renamed(results(), NAMES)


@pytest.fixture(scope="module")
def folders(hostile, tmp_path_factory) -> dict[str, Path]:
    """One export in each format."""
    base = tmp_path_factory.mktemp("exports")
    for kind in FORMATS:
        export_run(hostile, record(), kind, base / kind)
    return {kind: base / kind for kind in FORMATS}


@pytest.fixture(scope="module")
def book(folders) -> openpyxl.Workbook:
    return openpyxl.load_workbook(folders["xlsx"] / "results.xlsx")


def rows_of(page) -> list[list]:
    return [[cell.value for cell in row] for row in page.iter_rows()]


def finite(values) -> np.ndarray:
    values = np.array(values, dtype=float)
    return np.where(np.isfinite(values), values, np.nan)


def filled(dataset: xr.Dataset) -> list[str]:
    return [
        str(name)
        for name, variable in dataset.data_vars.items()
        if name not in EMPTY and variable.dims != ("pair",)
    ]


def numbered(dataset: xr.Dataset) -> list[str]:
    return [name for name in filled(dataset) if name not in ("unit_reason", "main_cause")]


def local_times(dataset: xr.Dataset) -> pd.DatetimeIndex:
    return dataset.indexes["time"].tz_localize("UTC").tz_convert("Europe/Dublin")


def test_a_workbook_has_a_sheet_a_variable_and_says_first_what_it_is_about(hostile, book):
    names = book.sheetnames
    assert names[0] == "about"
    assert set(filled(hostile)) <= set(names)
    assert not set(EMPTY) & set(names)
    assert max(map(len, names)) <= 31
    assert len({name.casefold() for name in names}) == len(names)


@pytest.mark.parametrize("name", ["price", "line_rating", "unit_on", "cost", "window"])
def test_a_workbook_holds_the_numbers_of_the_dataset(hostile, book, name):
    heading, *rows = rows_of(book[name])
    assert heading[:2] == ["time [Europe/Dublin]", "time [UTC]"]
    values = hostile[name].to_numpy().reshape(len(rows), -1)
    found = finite([row[2:] for row in rows])
    np.testing.assert_allclose(found, finite(values), rtol=1e-15)  # a workbook holds 15 digits
    times = hostile.indexes["time"]
    assert [row[1] for row in rows] == list(times.to_pydatetime())
    assert [row[0] for row in rows] == list(local_times(hostile).tz_localize(None).to_pydatetime())


def test_headings_carry_names_and_units(book):
    assert rows_of(book["price"])[0][2:] == [f"{name} [EUR/MWh]" for name in NAMES]
    assert rows_of(book["window"])[0][2] == "window [1]"
    assert rows_of(book["congestion_hours"])[0] == ["line", "congestion_hours [h]"]


def test_a_variable_without_time_has_a_row_an_element(hostile, book):
    _, *rows = rows_of(book["congestion_hours"])
    assert [row[0] for row in rows] == hostile["line"].to_numpy().tolist()
    assert [row[1] for row in rows] == hostile["congestion_hours"].to_numpy().tolist()


def test_a_workbook_calculates_no_text_of_the_case(folders, book):
    cells = [cell for page in book for row in page.iter_rows() for cell in row]
    assert {cell.data_type for cell in cells} <= {"s", "n", "d", "b"}
    risky = [cell for cell in cells if cell.data_type == "s" and cell.value[0] in "=+-@\t"]
    assert {"=1+1", "@x", "=1+1 [EUR/MWh]", ZONES[0]} <= {cell.value for cell in risky}
    assert all(cell.quotePrefix for cell in risky)
    with zipfile.ZipFile(folders["xlsx"] / "results.xlsx") as parts:
        for name in parts.namelist():
            assert b"<f>" not in parts.read(name), name


def test_letters_that_a_workbook_cannot_hold_are_replaced(dataset, run, tmp_path):
    dataset.attrs["case_name"] = "bell\x07"
    export_run(dataset, run, "xlsx", tmp_path / "book")
    about = openpyxl.load_workbook(tmp_path / "book" / "results.xlsx")["about"]
    assert dict(rows_of(about))["case"] == "bell\N{REPLACEMENT CHARACTER}"


def read_csv(folder: Path, name: str) -> pd.DataFrame:
    return pd.read_csv(folder / f"{name}.csv")


def test_codes_are_exported_in_words(hostile, folders, book):
    words = {0: "off", 1: "in the money", 2: "line", 3: "kept on", 4: "other"}
    expected = [[words[code] for code in row] for row in hostile["unit_reason"].to_numpy().tolist()]
    frame = pd.read_parquet(folders["parquet"] / "unit_reason.parquet")
    assert frame.iloc[:, 1:].to_numpy().tolist() == expected
    assert frame.columns[1] == "Peatworks 1 [in words]"
    assert read_csv(folders["csv"], "unit_reason").iloc[:, 1:].to_numpy().tolist() == expected
    assert [row[2:] for row in rows_of(book["unit_reason"])[1:]] == expected


def test_what_is_priced_after_a_loss_is_one_table(hostile, folders, book):
    frame = pd.read_parquet(folders["parquet"] / "pair.parquet")
    assert frame.columns.tolist() == [
        "time", "line", "contingency", "flow [MW]", "rating [MW]", "shadow price [EUR/MWh]",
        "limit side [1]", "rent [EUR]",
    ]  # fmt: skip
    assert str(frame["time"].dt.tz) == "Europe/Dublin"
    times = pd.DatetimeIndex(hostile["pair_time"].to_numpy()).tz_localize("UTC")
    assert list(frame["time"]) == list(times.tz_convert("Europe/Dublin"))
    assert frame["rent [EUR]"].tolist() == hostile["pair_rent"].to_numpy().tolist()
    assert len(read_csv(folders["csv"], "pair")) == len(rows_of(book["pair"])) - 1 == len(frame)


def test_causes_are_exported_by_name(hostile, folders):
    frame = pd.read_parquet(folders["parquet"] / "main_cause.parquet").iloc[:, 1:].to_numpy()
    names = [*hostile["cause"].to_numpy().tolist(), ""]
    expected = [[names[code] for code in row] for row in hostile["main_cause"].to_numpy().tolist()]
    assert frame.tolist() == expected


def test_amounts_by_day_have_a_row_a_day(hostile, book):
    heading, *rows = rows_of(book["make_whole"])
    assert heading[:2] == ["day", "Peatworks 1 [EUR]"]
    assert [row[0] for row in rows] == ["2027-10-30", "2027-10-31"]
    found = np.array([row[1:] for row in rows])
    np.testing.assert_allclose(found, hostile["make_whole"], rtol=1e-14)
    assert found.max() > 0


def test_csv_holds_the_numbers_of_the_dataset(hostile, folders):
    for name in numbered(hostile):
        frame = read_csv(folders["csv"], name)
        values = hostile[name].to_numpy().reshape(len(frame), -1)
        found = finite(frame.iloc[:, 1:])
        np.testing.assert_allclose(found, finite(values), rtol=1e-15, err_msg=name)
        if "time" in hostile[name].dims:
            assert list(pd.to_datetime(frame["time"], utc=True)) == list(
                local_times(hostile).tz_convert("UTC")
            )


def test_csv_times_are_local_with_their_offset(folders):
    times = read_csv(folders["csv"], "price")["time"]
    assert times[25:28].tolist() == [
        "2027-10-31T01:00+01:00",
        "2027-10-31T01:00+00:00",
        "2027-10-31T02:00+00:00",
    ]


def test_csv_puts_an_apostrophe_before_a_text_that_would_be_calculated(folders):
    with (folders["csv"] / "bus.csv").open(newline="", encoding="utf-8") as file:
        table = list(csv.DictReader(file))
    assert [row["bus"] for row in table] == ["'=1+1", "'@x", HOSTILE, "'-2 east", "'+3"]
    assert [row["zone"] for row in table] == [f"'{ZONES[0]}", "", "'\tsouth", "north", "north"]
    assert [float(row["longitude [degrees_east]"]) for row in table] == [
        -8.4, -7.2, -8.9, -7.6, -8.6,
    ]  # fmt: skip
    headings = read_csv(folders["csv"], "price").columns.tolist()
    assert headings == ["time", "'=1+1 [EUR/MWh]", "'@x [EUR/MWh]", f"{HOSTILE} [EUR/MWh]",
                        "'-2 east [EUR/MWh]", "'+3 [EUR/MWh]"]  # fmt: skip


def test_negative_numbers_stay_numbers(hostile, folders):
    assert float(hostile["line_flow"].min()) < 0
    assert "'" not in (folders["csv"] / "line_flow.csv").read_text().split("\n", 1)[1]


def test_a_rating_without_limit_is_blank_in_csv_and_infinite_in_parquet(folders):
    text = read_csv(folders["csv"], "line_rating")
    assert text["L5 f [MW]"].isna().all()
    frame = pd.read_parquet(folders["parquet"] / "line_rating.parquet")
    assert np.isinf(frame["L5 f [MW]"]).all()


def test_parquet_holds_the_dataset_with_zoned_times(hostile, folders):
    for name in numbered(hostile):
        frame = pd.read_parquet(folders["parquet"] / f"{name}.parquet")
        values = hostile[name].to_numpy().reshape(len(frame), -1)
        np.testing.assert_array_equal(frame.iloc[:, 1:].to_numpy(), values, err_msg=name)
    price = pd.read_parquet(folders["parquet"] / "price.parquet")
    assert str(price["time"].dt.tz) == "Europe/Dublin"
    assert list(price["time"]) == list(local_times(hostile))
    assert price.columns.tolist()[1] == "=1+1 [EUR/MWh]"


@pytest.mark.parametrize("kind", ["csv", "parquet", "xlsx"])
def test_every_table_format_says_what_it_is_about(folders, book, kind):
    if kind == "xlsx":
        rows = rows_of(book["about"])
    elif kind == "csv":
        rows = read_csv(folders["csv"], "about").to_numpy().tolist()
    else:
        rows = pd.read_parquet(folders["parquet"] / "about.parquet").to_numpy().tolist()
    about = {term: str(value) for term, value in rows}
    assert about["case"] == "Five lochs"
    assert about["caution"] == CAUTION
    assert about["from"] == "2027-10-30T00:00+01:00"
    assert about["until"] == "2027-10-31T23:00+00:00"
    assert about["setting commitment.mode"] == "optimal"
    assert about["price"] == "locational price, EUR/MWh, by time and bus"
    assert "left out" in about["reserve_price"]
    assert about["audit"] == "passed"
    assert about["window 1 gap"] == "0.0123"
    assert about["window 1 time limit"] == "True"


def test_a_bare_record_is_enough(dataset):
    about = dict(sheets(View(dataset, {}))[0].frame.to_numpy().tolist())
    assert about["audit"] == "not audited"


def test_variables_without_elements_are_left_out_and_named(dataset, run, tmp_path):
    made = export_run(dataset.isel(store=slice(0)), run, "csv", tmp_path / "tables")
    assert set(made.left_out) == {
        *EMPTY, "storage_charge", "storage_discharge", "stored_energy",
    }  # fmt: skip
    assert sorted(made.files) == sorted(path.name for path in (tmp_path / "tables").iterdir())
    assert "store.csv" not in made.files


def layer(folders: dict[str, Path], name: str) -> dict:
    return json.loads((folders["geojson"] / f"{name}.geojson").read_text(encoding="utf-8"))


@pytest.mark.parametrize(
    ("name", "shape", "size"),
    [("buses", "Point", 5), ("lines", "LineString", 6), ("ties", "LineString", 1)],
)
def test_a_layer_is_a_feature_collection(folders, name, shape, size):
    """The members that RFC 7946, sections 3 and 4, asks for, and no other reference system."""
    found = layer(folders, name)
    assert found["type"] == "FeatureCollection"
    assert "crs" not in found
    assert found["about"]["caution"] == CAUTION
    assert len(found["features"]) == size
    for feature in found["features"]:
        assert set(feature) == {"type", "id", "geometry", "properties"}
        assert feature["type"] == "Feature"
        assert feature["geometry"]["type"] == shape
        places = feature["geometry"]["coordinates"]
        for east, north in [places] if shape == "Point" else places:
            assert -9 < east < -7
            assert 52 < north < 55


def test_buses_carry_their_prices(hostile, folders):
    features = layer(folders, "buses")["features"]
    assert [feature["properties"]["bus"] for feature in features] == NAMES
    assert features[0]["geometry"]["coordinates"] == [-8.4, 54.1]
    price = hostile["price"].sel(bus="@x")
    found = features[1]["properties"]
    assert found["mean_price_per_mwh"] == pytest.approx(float(price.mean()))
    assert found["lowest_price_per_mwh"] == float(price.min())
    assert found["highest_price_per_mwh"] == float(price.max())
    assert found["voltage_kv"] is None
    assert found["currency"] == "EUR"


def test_lines_carry_their_loading_and_congestion(hostile, folders):
    features = {each["id"]: each for each in layer(folders, "lines")["features"]}
    found = features["L1 b"]["properties"]
    line = hostile.sel(line="L1 b")
    share = 100 * np.abs(line["line_flow"]) / line["line_rating"]
    assert (found["from_bus"], found["to_bus"]) == ("=1+1", HOSTILE)
    assert features["L1 b"]["geometry"]["coordinates"] == [[-8.4, 54.1], [-8.9, 53.7]]
    assert found["mean_loading_percent"] == pytest.approx(float(share.mean()))
    assert found["highest_loading_percent"] == pytest.approx(100.0)
    assert found["congestion_hours"] == float(line["congestion_hours"]) > 0
    assert found["hours_at_limit"] == float(line["hours_at_limit"])
    assert found["congestion_rent"] == pytest.approx(float(line["congestion_rent"].sum()))


def test_a_line_without_rating_has_neither_rating_nor_loading(folders):
    found = layer(folders, "lines")["features"][5]["properties"]
    assert found["rating_mw"] is None
    assert found["mean_loading_percent"] is None
    assert found["highest_loading_percent"] is None


def test_ties_carry_what_they_send(hostile, folders):
    found = layer(folders, "ties")["features"][0]["properties"]
    flow = hostile["tie_flow"].to_numpy()
    assert found["sent_forward_mwh"] == pytest.approx(flow[flow > 0].sum())
    assert found["sent_back_mwh"] == pytest.approx(-flow[flow < 0].sum())


def test_geojson_without_ties_leaves_the_layer_out(dataset, run, tmp_path):
    made = export_run(dataset.isel(tie=slice(0)), run, "geojson", tmp_path / "map")
    assert made.files == ("buses.geojson", "lines.geojson")
    assert made.left_out == ("ties",)


def test_geojson_refuses_buses_without_a_position_and_names_five(dataset, run, tmp_path):
    wide = dataset.isel(bus=[0, 1, 2, 3, 4, 0, 1]).assign_coords(
        bus=[f"bus {number}" for number in range(7)]
    )
    wide["bus_latitude"][1:] = np.nan
    with pytest.raises(OptionError) as refused:
        export_run(wide, run, "geojson", tmp_path / "map")
    assert (
        'found none for "bus 1", "bus 2", "bus 3", "bus 4", "bus 5", … (6 in all)'
        in str(refused.value)
    )  # fmt: skip
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_holds_something_is_refused_and_only_an_export_is_replaced(
    dataset, run, tmp_path
):
    (tmp_path / "out").mkdir()
    export_run(dataset, run, "geojson", tmp_path / "out")
    with pytest.raises(OptionError, match="--force"):
        export_run(dataset, run, "csv", tmp_path / "out")
    export_run(dataset, run, "xlsx", tmp_path / "out", force=True)
    assert [path.name for path in (tmp_path / "out").iterdir()] == ["results.xlsx"]
    (tmp_path / "out" / "letter.txt").write_text("keep")
    with pytest.raises(OptionError, match=r'"letter\.txt"'):
        export_run(dataset, run, "csv", tmp_path / "out", force=True)
    assert (tmp_path / "out" / "letter.txt").read_text() == "keep"
    assert [path.name for path in tmp_path.iterdir()] == ["out"]


def test_a_file_is_no_folder_to_replace(dataset, run, tmp_path):
    (tmp_path / "about.csv").write_text("keep")
    for force in (False, True):
        with pytest.raises(OptionError, match="must be a new or an empty folder"):
            export_run(dataset, run, "csv", tmp_path / "about.csv", force=force)
    with pytest.raises(OptionError, match="must be a folder that can be written"):
        export_run(dataset, run, "csv", tmp_path / "about.csv" / "within")
    assert (tmp_path / "about.csv").read_text() == "keep"


def test_an_export_that_is_cut_off_leaves_the_old_one_and_nothing_else(
    dataset, run, tmp_path, monkeypatch
):
    export_run(dataset, run, "geojson", tmp_path / "out")

    def stop(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(export, "_fill", stop)
    with pytest.raises(KeyboardInterrupt):
        export_run(dataset, run, "xlsx", tmp_path / "out", force=True)
    assert [path.name for path in tmp_path.iterdir()] == ["out"]
    assert len(list((tmp_path / "out").iterdir())) == 3


def test_a_move_that_is_cut_off_brings_the_old_folder_back(dataset, run, tmp_path, monkeypatch):
    export_run(dataset, run, "geojson", tmp_path / "out")
    move = Path.rename

    def broken(path: Path, target: Path) -> Path:
        if path.name == "new":
            raise KeyboardInterrupt
        return move(path, target)

    monkeypatch.setattr(Path, "rename", broken)
    with pytest.raises(KeyboardInterrupt):
        export_run(dataset, run, "csv", tmp_path / "out", force=True)
    assert [path.name for path in tmp_path.iterdir()] == ["out"]
    assert (tmp_path / "out" / "buses.geojson").exists()


def test_an_unknown_format_is_refused(dataset, run, tmp_path):
    with pytest.raises(OptionError, match=r'--to, must be one of csv, .*, found "pdf"'):
        export_run(dataset, run, "pdf", tmp_path / "out")


def test_what_is_too_large_for_a_sheet_is_refused(dataset, run, tmp_path, monkeypatch):
    monkeypatch.setattr(export, "MOST_COLUMNS", 7)
    dataset = dataset.isel(pair=slice(0, 0))
    with pytest.raises(OptionError, match="found 49 rows and 8 columns of line_flow"):
        export_run(dataset, run, "xlsx", tmp_path / "out")
    assert list(tmp_path.iterdir()) == []


def test_sheets_of_long_and_like_names_stay_apart(dataset, run, tmp_path):
    long = "a variable with a name that is too long for a sheet"
    dataset = dataset.assign({long: dataset["window"], f"{long} 2": dataset["window"] + 1,
                              "Price": dataset["window"], "a:b*?": dataset["window"]})  # fmt: skip
    export_run(dataset, run, "xlsx", tmp_path / "out")
    names = openpyxl.load_workbook(tmp_path / "out" / "results.xlsx", read_only=True).sheetnames
    assert {long[:31], f"{long[:29]} 2", "price", "Price 2", "a b"} <= set(names)
