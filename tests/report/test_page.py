"""The page as a document: what it says, that it is whole, escaped and the same each time."""

import base64
import copy
import hashlib
import html as entities
import json
import re
from typing import Any

import numpy as np
import plotly.graph_objects as go
import pytest
import xarray as xr

from simulator.report.page import CAUTION, page_html, write_page
from simulator.report.wording import amount
from tests.report.conftest import BUSES, HOSTILE, record, results
from tests.report.document import Document, read


def page(dataset: xr.Dataset, run: dict[str, Any]) -> Document:
    return read(page_html(dataset, run))


@pytest.fixture
def document(dataset, run):
    return page(dataset, run)


def headings(document: Document) -> list[str]:
    return [found["id"] for tag, found in document.elements if tag == "section"]


def test_sections_come_in_their_order(document):
    assert headings(document) == [
        "unserved", "run", "totals", "cost", "dispatch", "ties", "map", "prices", "congestion", "losses",
        "spread", "stores", "ramps", "units", "fleet", "terms",
    ]  # fmt: skip


def test_limits_beyond_lines_and_losses_are_told(dataset, document):
    """The fixture has a corridor, a line priced twice after one loss and another once."""
    text = document.text
    assert "2 lines had to make room for a contingency, most often L1 b after loss of L3 d." in text
    assert "north <b>edge</b>" in text
    assert "Lines priced after a contingency" in [
        each.get("aria-label") for _, each in document.elements
    ]
    lost = float(dataset["line_loss"].sum())
    assert f"Lines lost {amount(lost)} MWh" in text
    causes = json.loads(document.data())["figures"]["prices"]["causes"]
    assert causes["names"] == ["L1 b", "L5 f after loss of storm &lt;i&gt;"]
    assert causes["which"] == dataset["main_cause"].to_numpy().T.tolist()
    assert np.allclose(causes["part"], dataset["main_cause_part"].to_numpy().T, atol=0.005)


def test_unserved_load_comes_first_in_words(document):
    text = document.text
    said = "12.5 MWh of load is not served, of 13,680 MWh asked for: 1 load in 1 hour."
    assert said in text
    assert "Karsholm town at Karsholm: 12.5 MWh, at most 12.5 MW; Sat 30 Oct 19:00–20:00." in text
    assert text.index(said) < text.index("Five lochs", text.index(said))
    assert "All load is served." not in text


def test_a_run_that_serves_all_load_says_so(dataset, run):
    dataset["load_unserved"] = dataset["load_unserved"] * 0
    document = page(dataset, run)
    assert "unserved" not in headings(document)
    assert "All load is served." in document.text


def test_many_unserved_loads_are_named_up_to_five(dataset, run):
    dataset["load_unserved"][:] = 0.0
    wide = dataset.isel(load=[0, 1, 2, 3, 0, 1, 2])
    wide = wide.assign_coords(load=[f"load {number}" for number in range(7)])
    wide["load_unserved"][5:7] = np.arange(1.0, 8.0)
    text = page(wide, run).text
    assert "56.0 MWh of load is not served" in text
    assert "load 6 at Karsholm: 14.0 MWh, at most 7.00 MW; Sat 30 Oct 05:00–07:00." in text
    assert "2 more loads: 6.00 MWh." in text


def test_what_the_run_was(document):
    text = document.text
    assert (
        "Sat 30 Oct 2027 00:00 to Sun 31 Oct 2027 23:00, Europe/Dublin; 48 periods of 1 hour"
        in text
    )
    assert "2 windows; each sees 48 hours, of which 24 hours are kept" in text
    assert "passed, 2 checks" in text
    assert "5 buses, 6 lines, 1 tie" in text
    assert CAUTION in text


def test_failing_checks_stand_open_as_a_table(dataset):
    document = page(dataset, record(passed=False))
    assert "The audit of this run failed: 1 of 2 checks." in document.text
    captions = [found.get("aria-label", "") for _, found in document.elements]
    assert "Failing checks of the audit" in captions
    assert "L1 b failed 0.42 1e-05" in document.text


@pytest.mark.parametrize("run", [{}, {"audit": None}, {"settings": None, "counts": None}])
def test_a_bare_record_is_enough(dataset, run):
    text = page(dataset, run).text
    assert "not audited" in text
    assert "optimised, each unit on or off" in text


@pytest.mark.parametrize(
    ("pricing", "words"),
    [("fixed", "of the plan, with on and off fixed"), ("relaxed", "of the relaxation")],
)
def test_the_page_says_which_prices_it_shows(dataset, pricing, words):
    text = page(dataset.assign_attrs(pricing=pricing), record()).text
    assert f"Prices {words}" in text


def test_a_run_with_one_kind_of_price_does_not_name_it(dataset):
    found = record()
    found["settings"]["commitment"]["mode"] = "given"
    assert "with on and off fixed" not in page(dataset.assign_attrs(pricing="fixed"), found).text


def test_totals_are_sums_of_the_dataset(dataset, document):
    cost = float(dataset["cost"].sum())
    limits = ("congestion_rent", "corridor_rent", "pair_rent")
    rent = sum(float(dataset[name].sum()) for name in limits)
    assert f"Cost {cost:,.0f} EUR" in document.text
    assert f"Congestion rent {rent:,.0f} EUR" in document.text
    assert f"Total {cost:,.0f}" in document.text


def test_names_of_a_case_are_text(dataset, run):
    dataset.attrs.update(case_name="<img src=x onerror=alert(2)>", currency="<b>&EUR")
    html = page_html(dataset, run)
    assert "<script>alert" not in html
    assert "<img" not in html
    assert "<b>" not in html
    assert entities.escape(HOSTILE, quote=False) in html
    assert HOSTILE in read(html).text


def test_names_in_the_data_can_neither_end_the_script_nor_style_a_chart(dataset, run):
    dataset = dataset.assign_coords(bus=[*BUSES[:4], "a\u2028b</script>"])
    dataset["tie_to_bus"] = ("tie", ["a\u2028b</script>"])
    dataset["line_to_bus"] = ("line", [BUSES[place] for place in (1, 2, 2, 3, 3, 3)])
    raw = page(dataset, run).data()
    assert not set(raw) & set("<>&\u2028\u2029")
    names = json.loads(raw)["figures"]["prices"]["buses"]
    assert names[2] == "&lt;script&gt;alert(1)&lt;/script&gt;"
    assert names[4] == "a\u2028b&lt;/script&gt;"
    assert names[1] == "Vinna &amp; Sound"


def test_same_run_same_bytes(dataset, run, tmp_path):
    for name in "ab":
        write_page(copy.deepcopy(dataset), copy.deepcopy(run), tmp_path / name)
    assert (tmp_path / "a").read_bytes() == (tmp_path / "b").read_bytes()


def test_nothing_is_loaded_from_anywhere(document):
    for tag, found in document.elements:
        assert tag not in ("link", "iframe", "object", "embed", "base"), tag
        assert "src" not in found
        assert found.get("href", "#").startswith("#")
        assert not [name for name in found if name.startswith("on")]
    for style in document.styles():
        assert "url(" not in style
        assert "@import" not in style
    own = [script for script in document.scripts() if len(script) < 100_000]
    assert len(own) == 2
    assert not [script for script in own if re.search(r"https?:|fetch|XMLHttp|import\(", script)]


def test_only_the_pages_own_scripts_may_run(document):
    policy = next(
        found["content"]
        for tag, found in document.elements
        if "http-equiv" in found and tag == "meta"
    )
    assert "default-src 'none'" in policy
    assert "script-src 'sha256-" in policy
    for script in document.scripts():
        digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
        assert f"'sha256-{digest}'" in policy


def test_every_chart_has_words_and_a_table(document):
    plots = [found for _, found in document.elements if found.get("class") == "plot"]
    assert {found["data-chart"] for found in plots} == set(json.loads(document.data())["figures"])
    assert all(found["role"] == "img" and found["aria-label"] for found in plots)
    assert document.text.count("As a table:") == len(plots) + 2  # the map and the fleet have two


def test_identifiers_are_unique_and_links_lead_somewhere(document):
    marks = [found["id"] for _, found in document.elements if "id" in found]
    assert len(marks) == len(set(marks))
    for tag, found in document.elements:
        if tag == "a":
            assert found["href"][1:] in marks


def test_figures_are_valid_plotly(document):
    figures = json.loads(document.data())["figures"]
    for name in set(figures) - {"map", "prices"}:
        figure = figures[name]
        for traces in [figure["traces"], *(each["traces"] for each in figure.get("choices", []))]:
            plain = [
                {key: value for key, value in trace.items() if key != "at"} for trace in traces
            ]
            go.Figure(data=plain, layout=figure["layout"])


def test_stack_and_charging_meet_the_load(dataset, document):
    traces = json.loads(document.data())["figures"]["dispatch"]["traces"]
    stack = np.sum([trace["y"] for trace in traces if "stackgroup" in trace], axis=0)
    load = next(trace["y"] for trace in traces if trace["name"] == "load")
    assert stack == pytest.approx(np.array(load), abs=0.5)
    lost = next(trace for trace in traces if "curtailed" in trace["name"])
    upwards = np.sum([trace["y"] for trace in traces if trace.get("stackgroup") == "up"], axis=0)
    assert np.subtract(lost["y"], lost["customdata"]) == pytest.approx(upwards, abs=0.5)
    assert lost["customdata"] == pytest.approx(
        dataset["curtailment"].sum("plant").to_numpy(), abs=0.05
    )


def test_price_parts_are_kept_once_where_all_buses_share_them(document):
    parts = json.loads(document.data())["figures"]["prices"]["parts"]
    assert sorted(parts) == ["congestion", "energy", "loss"]
    assert set(parts["energy"]) == {"every"}
    assert len(parts["congestion"]["rows"]) == 5


def test_a_dataset_without_price_parts_shows_prices(dataset, run):
    bare = dataset.drop_vars(["price_energy", "price_congestion", "price_loss"])
    document = page(bare, run)
    assert "does not hold the parts of prices" in document.text
    assert json.loads(document.data())["figures"]["prices"]["parts"] == {}


def test_a_dataset_without_ramp_limited_hours_has_no_such_section(dataset, run):
    assert "ramps" not in headings(page(dataset.drop_vars("ramp_limited_hours"), run))


@pytest.mark.parametrize("dimension", ["unit", "plant", "store", "tie", "load", "line", "product"])
def test_a_dimension_may_be_empty(dataset, run, dimension):
    document = page(dataset.isel({dimension: slice(0)}), run)
    shown = headings(document)
    left_out = {"tie": "ties", "line": "congestion", "unit": "fleet", "load": "unserved"}
    assert left_out.get(dimension) not in shown
    if dimension == "store":
        assert "The case has no stores." in document.text
    if dimension == "unit":
        assert "The case has no dispatchable units." in document.text


def test_one_bus_and_nothing_else_in_one_hour(run):
    dataset = results(1).isel(
        bus=[1],
        line=slice(0),
        tie=slice(0),
        store=slice(0),
        plant=slice(0),
        unit=slice(0),
        load=[0],
    )
    text = page(dataset, run).text
    assert "1 bus, 0 lines, 0 ties" in text
    assert "which holds no whole local day" in text


def test_a_line_without_rating_has_no_loading(document):
    figure = json.loads(document.data())["figures"]["map"]
    assert set(figure["loading"][5]) == {None}
    assert set(figure["loading"][0]) != {None}
    assert "unlimited" in document.text


def test_congested_lines_are_ranked_by_hours_then_rent(document):
    lines = re.findall(
        r"L\d [a-f] .*? – ", document.text[document.text.index("Highest shadow price") :]
    )
    assert [line[:4] for line in lines[:2]] == ["L1 b", "L3 d"]


def test_a_run_without_congestion_shows_the_most_loaded_lines(dataset, run):
    for name in ("congestion_hours", "hours_at_limit", "congestion_rent", "line_shadow_price"):
        dataset[name] = dataset[name] * 0
    document = page(dataset, run)
    assert "No line was at its limit or priced in any hour." in document.text
    assert len(json.loads(document.data())["figures"]["duration"]["traces"]) == 5


def test_repeated_hours_carry_their_offset(document):
    times = json.loads(document.data())["steps"]["time"]
    assert times[25:28] == ["01:00 (+01:00)", "01:00 (+00:00)", "02:00"]


def test_a_long_run_is_drawn_in_means_of_local_days(run):
    document = page(results(70 * 24), run)
    steps = json.loads(document.data())["steps"]
    assert steps["unit"] == "day"
    assert len(steps["day"]) == 70
    assert "this one shows means by local day" in document.text


def test_places_without_coordinates_are_said_to_mean_nothing(dataset, run):
    dataset["bus_latitude"][2] = np.nan
    document = page(dataset, run)
    assert "drawn from the lines between them and mean nothing else" in document.text
    assert not json.loads(document.data())["figures"]["map"]["geographic"]


def test_a_week_of_a_large_system_stays_small(run):
    dataset = results(168)
    many = {"bus": 73, "line": 120, "unit": 73, "plant": 80, "load": 51}
    for dimension, size in many.items():
        places = np.arange(size) % dataset.sizes[dimension]
        kept = dataset[dimension].to_numpy().tolist()
        dataset = dataset.isel({dimension: places}).assign_coords(
            {dimension: kept + [f"{dimension} {place}" for place in range(len(kept), size)]}
        )
    assert len(page_html(dataset, run).encode()) < 8_000_000


def test_missing_numbers_leave_gaps_and_not_a_broken_page(dataset, run):
    for name in dataset.data_vars:
        if dataset[name].dtype == float and dataset[name].size:
            dataset[name][(0,) * dataset[name].ndim] = np.nan
    run["audit"] = {"passed": False, "checks": [{"name": "balance", "worst": float("nan")}]}
    document = page(dataset, run)
    assert "balance failed no number no number" in document.text
    assert json.loads(document.data())["figures"]["prices"]["price"][0][0] is None
    assert "nan" not in document.text
