"""Reserves on the page, in the summary and in exports; nothing of them where there are none."""

import io
import json

import numpy as np
import pandas as pd
import pytest
from rich.console import Console

from simulator.report.export import export_run
from simulator.report.page import page_html
from simulator.report.summary import print_summary
from tests.report.conftest import record, results
from tests.report.document import read

PRODUCTS = ["spinning", "<b>lowering</b>"]
SHORT_HOUR = 19


@pytest.fixture
def ready():
    """The dataset with two products; in one hour some of the first is short, at 400."""
    bare = results().drop_dims("product")
    hours, units = bare.sizes["time"], bare.sizes["unit"]
    asked = np.full((hours, 2), 30.0)
    short, price = np.zeros((hours, 2)), np.zeros((hours, 2))
    short[SHORT_HOUR, 0], price[SHORT_HOUR, 0], price[5, 1] = 12.0, 400.0, 7.5
    provided = np.zeros((hours, units, 2))
    provided[:, 1, 0], provided[:, 2, 0] = 24 - short[:, 0], 6.0
    provided[:, 0, 1] = 30.0
    return bare.assign(
        reserve_price=(("time", "product"), price, {"units": "currency/MWh"}),
        reserve_shortage=(("time", "product"), short, {"units": "MW"}),
        reserve_requirement=(("time", "product"), asked, {"units": "MW"}),
        unit_reserve=(
            ("time", "unit", "product"),
            provided,
            {"units": "MW", "long_name": "reserve"},
        ),
    ).assign_coords(product=PRODUCTS, product_direction=("product", ["up", "down"]))


def test_the_page_shows_prices_what_is_short_and_who_provides(ready):
    document = read(page_html(ready, record()))
    assert "reserves" in [found["id"] for tag, found in document.elements if tag == "section"]
    figure = json.loads(document.data())["figures"]["reserves"]
    lines = [trace for trace in figure["traces"] if trace["type"] == "scatter"]
    assert [trace["name"] for trace in lines] == ["spinning", "&lt;b&gt;lowering&lt;/b&gt;"]
    assert (lines[0]["y"][SHORT_HOUR], lines[1]["y"][5]) == (400, 7.5)
    (bar,) = [trace for trace in figure["traces"] if trace["type"] == "bar"]
    assert (bar["name"], max(bar["y"]), sum(bar["y"])) == ("spinning, short", 12, 12)
    text = document.text
    who = text[text.index("Who provides reserve") :]
    assert "spinning Gasholt 1 23.8 24.0 48 79.8" in who
    assert "spinning Quayside <i>1</i> 6.0 6.0 48 20.2" in who
    assert "<b>lowering</b> Peatworks 1 30.0 30.0 48 100.0" in who


def test_without_shortage_the_chart_has_no_bars(ready):
    ready["reserve_shortage"] = ready["reserve_shortage"] * 0
    figure = json.loads(read(page_html(ready, record())).data())["figures"]["reserves"]
    assert {trace["type"] for trace in figure["traces"]} == {"scatter"}


def summary_of(dataset):
    console = Console(file=io.StringIO(), width=120)
    totals = dict.fromkeys(
        ["cost", "served_mwh", "unserved_mwh", "curtailed_mwh", "surplus_mwh", "emissions_t"], 0.0
    )
    counts = dict.fromkeys(["windows", "lp_solves", "line_rows", "rebuilds"], 1)
    print_summary(dataset, record() | {"totals": totals, "counts": counts}, console)
    return " ".join(console.file.getvalue().split())


def test_the_summary_has_a_line_a_product_where_there_are_any(ready):
    assert "spinning 8.33 400.00 1 12.0" in summary_of(ready)
    assert "Reserves" not in summary_of(results())


def test_an_export_has_a_column_for_each_unit_and_product(ready, tmp_path):
    export_run(ready, record(), "csv", tmp_path / "csv")
    frame = pd.read_csv(tmp_path / "csv" / "unit_reserve.csv")
    assert list(frame.columns)[1:3] == [
        "Peatworks 1, spinning [MW]",
        f"Peatworks 1, {PRODUCTS[1]} [MW]",
    ]
    values = ready["unit_reserve"].to_numpy().reshape(len(frame), -1)
    np.testing.assert_allclose(frame.iloc[:, 1:], values)
    assert (tmp_path / "csv" / "product.csv").read_text().splitlines()[0] == "product,direction"
    export_run(ready, record(), "xlsx", tmp_path / "xlsx")
    assert [path.name for path in (tmp_path / "xlsx").iterdir()] == ["results.xlsx"]
