"""Comparing two runs: changes worked out by hand, what cannot be compared, and the page."""

import base64
import hashlib
import html as entities
import io
import json
import re

import numpy as np
import pytest
import xarray as xr
from rich.console import Console

from simulator.errors import OptionError
from simulator.report.comparison import (
    Comparison,
    compare,
    comparison_record,
    differing_settings,
)
from simulator.report.comparison_page import (
    comparison_html,
    print_comparison,
    write_comparison,
)
from simulator.report.page import CAUTION
from tests.report.conftest import HOSTILE, record, results
from tests.report.document import Document, read

FRAMES = ("totals", "cost", "energy", "price", "curtailment", "unserved", "lines")


@pytest.fixture
def other() -> xr.Dataset:
    """The second run, to be changed."""
    return results()


def compared(first: xr.Dataset, second: xr.Dataset) -> Comparison:
    return compare(first, second, ("runs/one", "runs/two"), (record(), record()))


def page(comparison: Comparison) -> Document:
    return read(comparison_html(comparison))


def printed(comparison: Comparison, width: int = 100) -> str:
    console = Console(file=io.StringIO(), width=width)
    print_comparison(comparison, console)
    return console.file.getvalue()


def test_a_run_compared_with_itself_changes_nothing(dataset):
    found = compared(dataset, dataset)
    for name in FRAMES:
        frame = getattr(found, name)
        assert (frame["change"] == 0).all(), name
        assert (frame["first"] == frame["second"]).all(), name
    assert set(found.lines["status"]) == {"as many hours"}
    assert found.only_in == ({}, {})
    assert differing_settings(found) == []
    assert "The mean price is the same at every bus of both runs." in page(found).text
    assert "No line is congested in more or in fewer hours." in page(found).text


def test_totals_are_sums_of_the_datasets(dataset, other):
    other["cost"] = other["cost"] + 2.0
    other["load_unserved"][0, 1] = 7.5
    other["emissions"] = 2 * other["emissions"]
    other["surplus"][3, 2] = 4.0
    totals = compared(dataset, other).totals
    assert totals.loc["cost", "change"] == pytest.approx(2.0 * other["cost"].size)
    assert totals.loc["unserved_mwh", ["first", "second"]].tolist() == [12.5, 20.0]
    assert totals.loc["served_mwh", "change"] == pytest.approx(-7.5)
    assert totals.loc["emissions_t", "change"] == pytest.approx(float(dataset["emissions"].sum()))
    assert totals.loc["surplus_mwh", "change"] == 4.0
    limits = ("congestion_rent", "corridor_rent", "pair_rent")
    rent = sum(float(dataset[name].sum()) for name in limits)
    assert totals.loc["congestion_rent", "first"] == pytest.approx(rent)
    assert totals.loc["cost", "unit"] == "EUR"
    assert totals.loc["mean_price_per_mwh", "unit"] == "EUR/MWh"


def test_energy_is_power_times_the_length_of_a_period():
    half = results(period_hours=0.5)
    totals = compared(half, half).totals
    assert totals.loc["unserved_mwh", "first"] == pytest.approx(6.25)
    assert totals.loc["curtailed_mwh", "first"] == pytest.approx(
        0.5 * float(half["curtailment"].sum())
    )


def test_the_mean_price_is_weighted_by_load_and_no_load_counts_below_zero(dataset, other):
    other["load_demand"][:, 0] = -50.0
    found = compared(dataset, other).totals.loc["mean_price_per_mwh"]
    paid = taken = 0.0
    for load in range(1, 4):
        price = other["price"].sel(bus=str(other["load_bus"].to_numpy()[load])).to_numpy()
        paid += float((price * other["load_demand"].to_numpy()[:, load]).sum())
        taken += float(other["load_demand"].to_numpy()[:, load].sum())
    assert found["second"] == pytest.approx(paid / taken)
    assert found["first"] != pytest.approx(found["second"])


def test_cost_by_component_and_energy_by_technology(dataset, other):
    other["cost"].loc[{"component": "unit_start"}] += 3.0
    other["renewable_output"].loc[{"plant": "Ridge"}] += 1.0
    found = compared(dataset, other)
    assert found.cost.loc["unit_start", "change"] == pytest.approx(3.0 * 48)
    assert found.cost.drop("unit_start")["change"].tolist() == [0.0] * 6
    assert found.energy.loc["wind", "change"] == pytest.approx(48.0)
    assert found.energy.drop("wind")["change"].abs().max() == 0.0
    assert set(found.energy.index) == {
        "steam", "combined cycle", "engine", "wind", "sun", "storage discharge",
    }  # fmt: skip


def test_a_technology_of_one_run_counts_as_nothing_in_the_other(dataset, other):
    kinds = ["fuel cell", "combined cycle", "engine"]
    found = compared(dataset, other.assign_coords(unit_technology=("unit", kinds))).energy
    assert found.loc["steam", "second"] == 0.0
    assert found.loc["fuel cell", "first"] == 0.0
    assert found.loc["fuel cell", "second"] == found.loc["steam", "first"] > 0


def test_corridors_and_lines_after_losses_are_compared_like_lines(dataset, other):
    """A pair is in a dataset only where it is priced: in a run without it, its hours are none."""
    other["corridor_congestion_hours"][:] += 3.0
    found = compared(dataset, other.isel(pair=slice(1, None))).lines
    assert found.loc["corridor north <b>edge</b>", "change"] == 3.0
    twice, once = "L1 b after loss of L3 d", "L5 f after loss of storm <i>"
    assert found.loc[twice, ["first", "second", "status"]].tolist() == [2.0, 1.0, "fewer hours"]
    assert found.loc[once, "status"] == "as many hours"
    gone = compared(dataset, other.isel(pair=slice(0, 0))).lines
    assert gone.loc[twice, ["second", "status"]].tolist() == [0.0, "no longer congested"]


def test_prices_by_bus_show_the_largest_rises_and_falls(dataset, other):
    other["price"][:] = dataset["price"] + np.array([5.0, -3.0, 0.0, 1.5, 0.001])
    found = compared(dataset, other)
    assert found.price["change"].to_numpy() == pytest.approx([5.0, -3.0, 0.0, 1.5, 0.001])
    text = page(found).text
    assert "Of 5 buses in both runs, the mean price rises at 2 and falls at 1." in text
    rises = text[text.index("largest rises") :]
    assert rises.index("Ostrel") < rises.index("Karsholm") < rises.index("Vinna & Sound")


def test_lines_are_told_by_how_their_hours_change(dataset, other):
    hours = {"first": [0, 9, 4, 4, 3, 0], "second": [2, 0, 6, 1, 3, 0]}
    for run, name in ((dataset, "first"), (other, "second")):
        run["congestion_hours"] = ("line", np.array(hours[name], dtype=float))
    found = compared(dataset, other)
    own = found.lines.loc[dataset["line"].values]
    assert own["status"].tolist() == [
        "newly congested", "no longer congested", "more hours", "fewer hours", "as many hours",
        "as many hours",
    ]  # fmt: skip
    assert own["change"].tolist() == [2.0, -9.0, 2.0, -3.0, 0.0, 0.0]
    document = page(found)
    captions = [found.get("aria-label", "") for _, found in document.elements]
    for caption in ("Newly congested", "No longer congested", "Congested in more hours",
                    "Congested in fewer hours"):  # fmt: skip
        assert f"{caption}, hours priced" in captions
    counts = (
        "1 newly congested, 1 no longer congested, 1 congested in more hours, "
        "1 congested in fewer hours."
    )
    assert counts in document.text
    assert "L1 b 9 0 −9" in document.text


def test_elements_of_only_one_run_are_named_and_have_no_change(dataset, other):
    second = other.isel(line=[0, 1, 2, 3, 4]).assign_coords(
        bus=[*other["bus"].to_numpy()[:4], "New & bus"],
        line_to_bus=("line", ["Vinna & Sound", HOSTILE, HOSTILE, "Karsholm", "New & bus"]),
        load_bus=("load", ["Vinna & Sound", HOSTILE, "Karsholm", "New & bus"]),
    )
    found = compared(dataset, second)
    assert found.only_in == ({"bus": ["Tarn"], "line": ["L5 f"]}, {"bus": ["New & bus"]})
    assert np.isnan(found.price.loc["Tarn", "change"])
    assert np.isnan(found.price.loc["New & bus", "first"])
    assert found.lines.loc["L5 f", "status"] == "only in the first run"
    text = page(found).text
    assert "Only in the first run 1 bus: Tarn; 1 line: L5 f" in text
    assert "Only in the second run 1 bus: New & bus" in text
    assert "1 bus: Tarn" in printed(found)
    document = json.loads(json.dumps(comparison_record(found), allow_nan=False))
    assert document["first"]["only_here"] == {"bus": ["Tarn"], "line": ["L5 f"]}
    assert document["mean_price_per_mwh"]["Tarn"]["change"] is None


def test_a_congested_line_of_one_run_is_shown(dataset, other):
    found = compared(dataset, other.isel(line=[0, 2, 3, 4, 5]))
    assert "Only in the first run, and congested there" in page(found).text


def test_settings_that_differ_are_listed(dataset, other):
    changed = record()
    changed["settings"]["network"]["limits"] = "none"
    other.attrs["limits"] = "none"
    found = compare(dataset, other, records=(record(), changed))
    assert differing_settings(found) == [("network.limits", "lines", "none")]
    text = page(found).text
    assert "network.limits lines none" in text
    assert "No flow was limited in the second run" in text


def test_runs_over_other_hours_are_refused_with_both_spans(dataset):
    later = results(start="2027-10-30T23:00")
    with pytest.raises(OptionError) as refused:
        compare(dataset, later, ("runs/one", "runs/two"))
    message = str(refused.value)
    assert (
        "2027-10-30T00:00+01:00 to 2027-10-31T23:00+00:00 in periods of 1 h in runs/one" in message
    )
    assert (
        "2027-10-31T00:00+01:00 to 2027-11-01T23:00+00:00 in periods of 1 h in runs/two" in message
    )
    with pytest.raises(OptionError, match=r"periods of 0\.5 h"):
        compare(dataset, results(96, period_hours=0.5))


def test_runs_in_two_currencies_are_refused(dataset, other):
    other.attrs["currency"] = "GBP"
    with pytest.raises(OptionError, match='"EUR" and "GBP"'):
        compare(dataset, other)


def test_the_same_hours_in_another_time_zone_are_the_same_hours(dataset, other):
    other.attrs["time_zone"] = "UTC"
    assert compare(dataset, other).totals["change"].abs().max() == 0


def test_what_a_reader_must_know_comes_first(dataset, other):
    found = compare(dataset, other, records=(record(), record(passed=False)))
    text = page(found).text
    assert text.index("The audit of the second run failed") < text.index("The two runs")
    assert "Load is not served: 12.5 MWh in the first run and 12.5 MWh in the second run." in text
    assert "The audit of the second run failed" in printed(found)
    assert comparison_record(found)["second"]["audit_passed"] is False


def test_names_of_a_case_are_text(dataset, other):
    dataset.attrs["case_name"] = "<img src=x onerror=alert(2)> [bold]"
    found = compare(dataset, other, ("<b>one</b>", "[red]two"))
    html = comparison_html(found)
    assert "<script>alert" not in html
    assert "<img" not in html
    assert "<b>" not in html
    assert entities.escape(HOSTILE, quote=False) in html
    said = printed(found)
    assert "[bold]" in said
    assert "[red]two" in said
    assert HOSTILE in printed(compared(other, shifted(other)), width=200)


def shifted(dataset: xr.Dataset) -> xr.Dataset:
    """The same run with every price and curtailment a little higher."""
    return dataset.assign(price=dataset["price"] + 1, curtailment=dataset["curtailment"] + 1)


def test_the_page_loads_nothing_and_runs_only_its_own_script(dataset, other):
    document = page(compared(dataset, shifted(other)))
    for tag, found in document.elements:
        assert tag not in ("link", "iframe", "object", "embed", "base", "img"), tag
        assert "src" not in found
        assert found.get("href", "#").startswith("#")
        assert not [name for name in found if name.startswith("on")]
    for style in document.styles():
        assert not re.search(r"url\(|@import", style)
    policy = next(found["content"] for _, found in document.elements if "http-equiv" in found)
    assert "default-src 'none'" in policy
    (script,) = document.scripts()
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    assert f"script-src 'sha256-{digest}'" in policy
    assert CAUTION in document.text


def test_identifiers_are_unique_and_links_lead_somewhere(dataset, other):
    document = page(compared(dataset, shifted(other)))
    marks = [found["id"] for _, found in document.elements if "id" in found]
    assert len(marks) == len(set(marks))
    assert "hours" in marks
    for tag, found in document.elements:
        if tag == "a":
            assert found["href"][1:] in marks


def test_same_runs_same_bytes(tmp_path):
    for name in "ab":
        write_comparison(compared(results(), shifted(results())), tmp_path / name)
    assert (tmp_path / "a").read_bytes() == (tmp_path / "b").read_bytes()


def test_a_page_that_cannot_be_written_is_refused(dataset, other, tmp_path):
    with pytest.raises(OptionError, match="--page, must be a file that can be written"):
        write_comparison(compared(dataset, other), tmp_path)
    assert list(tmp_path.iterdir()) == []


def heights(path: str) -> list[float]:
    """The heights of a step line drawn as an SVG path."""
    return [float(number) for number in re.findall(r"(?:V|M\S+ )([\d.]+)H", path)]


def test_price_curves_show_both_runs_on_one_scale(dataset, other):
    other["price"] = dataset["price"] + 100.0
    document = page(compared(dataset, other))
    first, second = (found["d"] for tag, found in document.elements if tag == "path")
    assert len(heights(first)) == len(heights(second)) == 48
    rise = np.array(heights(first)) - np.array(heights(second))
    assert rise == pytest.approx(np.full(48, rise[0]), abs=0.11)
    assert rise[0] > 0


def test_price_curves_leave_gaps_where_there_is_no_load(dataset, other):
    for run in (dataset, other):
        run["load_demand"][10:20] = 0.0
    document = page(compared(dataset, other))
    first = next(found["d"] for tag, found in document.elements if tag == "path")
    assert first.count("M") == 2
    assert len(heights(first)) == 38


@pytest.mark.parametrize("dimension", ["unit", "plant", "store", "tie", "load", "line", "product"])
def test_a_dimension_may_be_empty(dataset, other, dimension):
    kept = {dimension: slice(0)}
    found = compared(dataset.isel(kept), other.isel(kept))
    assert "nan" not in page(found).text
    json.dumps(comparison_record(found), allow_nan=False)


def test_a_long_comparison_draws_local_days():
    long = results(70 * 24)
    document = page(compared(long, long))
    first = next(found["d"] for tag, found in document.elements if tag == "path")
    assert len(heights(first)) == 70
    assert "Price by the day" in document.text


def test_the_terminal_says_the_same(dataset, other):
    said = printed(compared(dataset, shifted(other)))
    assert "First run: runs/one; case Five lochs; audit passed" in said
    assert "the mean price rises at 5 and falls at 0" in said
    assert "Curtailment by plant" in said


def test_a_change_is_no_share_of_what_shows_as_nothing(dataset, other):
    dataset["unit_start"] = dataset["unit_start"] * 0 + 1e-15
    other["unit_start"] = other["unit_start"] * 0 + 0.05
    (row,) = (line for line in printed(compared(dataset, other)).splitlines() if "Starts" in line)
    assert "+" in row
    assert "%" not in row


def test_the_document_is_plain_and_finite(dataset, other):
    text = json.dumps(comparison_record(compared(dataset, shifted(other))), allow_nan=False)
    document = json.loads(text)
    assert document["totals"]["mean_price_per_mwh"]["change"] == pytest.approx(1.0)
    assert document["curtailed_mwh"]["Ridge"]["change"] == pytest.approx(48.0)
    assert document["congestion_hours"]["L1 b"]["status"] == "as many hours"
