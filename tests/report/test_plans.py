"""What the page, the summary and the comparison say of starts, reasons, make-whole amounts and gaps."""

import json
from io import StringIO

import numpy as np
import pytest
from rich.console import Console

from simulator.reasons import REASONS
from simulator.report import comparison, plans
from simulator.report.figures import on_off
from simulator.report.page import page_html
from simulator.report.summary import print_summary
from simulator.report.tables import units
from simulator.report.view import View
from tests.report.conftest import MEANINGS, record, results
from tests.report.document import read

TOTALS = ("cost", "unserved_mwh", "served_mwh", "curtailed_mwh", "surplus_mwh", "emissions_t")


def texts(table) -> list[list[str]]:
    return [[cell.text for cell in row] for row in table.rows]


def test_the_chart_has_a_letter_a_step_and_a_row_a_unit(dataset, run):
    figure = on_off(View(dataset, run), [2, 0])
    code = dataset["unit_reason"].to_numpy()[:, [2, 0]]
    assert figure["reasons"] == ["".join(chr(97 + each) for each in row) for row in code.T]
    assert figure["phrases"][:2] == ["off", "in the money"]
    assert figure["held"] == "de"  # kept on, other
    assert [trace["name"] for trace in figure["traces"][1:]] == [plans.PAYS, plans.HELD, "start"]


def test_a_step_of_many_hours_has_the_reason_of_most_hours_on():
    dataset = results(24 * 70)
    dataset["unit_reason"][:24, 1] = [0] * 13 + [2] * 5 + [3] * 6
    found = plans.reason_rows(View(dataset, {}), [1])["reasons"][0]
    assert len(found) == 71 or len(found) == 70  # the last day may be cut
    assert found[0] == "d"


def test_hours_by_reason_add_up_to_the_hours_on(dataset, run):
    table = plans.hours_by_reason(View(dataset, run), [0, 1, 2])
    assert [column.title for column in table.columns[1:]] == [
        "In the money", "Kept on to save a start", "Out of the money, no rule holds it",
    ]  # fmt: skip
    for row in table.rows:
        unit = row[0].text
        on = float(dataset["unit_on"].sel(unit=unit).sum())
        assert sum(float(cell.sort) for cell in row[1:]) == on


def test_make_whole_amounts_stand_by_unit_and_by_day(dataset, run):
    view = View(dataset, run)
    amounts = dataset["make_whole"].to_numpy()
    assert (amounts > 0).any()
    table = plans.make_whole_days(view)
    assert [column.title for column in table.columns] == [
        "Unit", "Sat 30 Oct", "Sun 31 Oct", "All days, EUR",
    ]  # fmt: skip
    assert float(table.total[-1].sort) == pytest.approx(amounts.sum())
    assert len(table.rows) == (amounts.sum(axis=0) > 0).sum()
    place = [column.title for column in units(view).columns].index("Make-whole EUR")
    shown = sum(float(row[place].sort) for row in units(view).rows)
    assert shown == pytest.approx(amounts.sum())
    assert f"Make-whole {amounts.sum():,.0f} EUR" in read(page_html(dataset, run)).text


def test_a_long_run_lists_the_largest_amounts_first():
    dataset = results(24 * 12)
    table = plans.make_whole_days(View(dataset, {}))
    values = [float(row[2].sort) for row in table.rows]
    assert values == sorted(values, reverse=True)
    assert sum(values) == pytest.approx(float(dataset["make_whole"].sum()))


def test_windows_and_the_largest_gap_are_told(dataset, run):
    assert plans.largest_gap(run) == (0.0123, 1, 1)
    rows = texts(plans.windows(run))
    assert rows[1][:3] == ["1", "2027-10-31 00:00", "120.00"]
    assert rows[1][3].split() == ["1.230", "%"]
    assert [row[4] for row in rows] == ["", "reached"]
    text = " ".join(read(page_html(dataset, run)).text.split())
    assert "Gap at most 1.230 %, in window 1; time ran out in 1 window" in text


@pytest.mark.parametrize("found", [None, [], [{"window": 0, "from": "2027-10-30", "gap": None}]])
def test_a_record_without_gaps_says_nothing_of_them(dataset, run, found):
    run["windows"] = found
    assert plans.largest_gap(run) is None
    assert "Gap at most" not in " ".join(read(page_html(dataset, run)).text.split())


def test_an_old_dataset_without_reasons_and_amounts_still_has_its_page(dataset, run):
    bare = dataset.drop_vars(["unit_reason", "make_whole", "day"])
    document = read(page_html(bare, run))
    figure = json.loads(document.data())["figures"]["fleet"]
    assert "reasons" not in figure
    assert "Make-whole EUR" not in document.text
    assert plans.make_whole_days(View(bare, run)) is None
    found = comparison.compare(bare, bare, records=(run, run))
    assert np.isnan(found.totals.loc["make_whole", "change"])


def summary(dataset, run, **totals: float) -> str:
    run["totals"] = dict.fromkeys(TOTALS, 1.0) | totals
    run["counts"] |= {"lp_solves": 1, "line_rows": 1, "rebuilds": 0}
    out = StringIO()
    print_summary(dataset, run, Console(file=out, width=120))
    return out.getvalue()


def test_the_summary_says_starts_make_whole_and_gap(dataset, run):
    said = summary(dataset, run, starts=7.0, make_whole=1234.5)
    assert (
        "starts 7, make-whole 1,234 EUR, largest gap 1.230% in window 1; time ran out in 1" in said
    )
    assert "Starts and make-whole amounts" in said
    del run["windows"]
    assert "starts 7, make-whole 1,234 EUR\n" in summary(dataset, run, starts=7, make_whole=1234.5)


def test_the_summary_says_where_prices_are_of_the_relaxation(dataset, run):
    amounts = {"starts": 7.0, "make_whole": 1.0}
    assert "of the relaxation" not in summary(dataset.assign_attrs(pricing="fixed"), run, **amounts)
    assert "prices of the relaxation" in summary(
        dataset.assign_attrs(pricing="relaxed"), run, **amounts
    )


def test_a_comparison_holds_starts_and_make_whole_amounts(dataset):
    other = dataset.copy(deep=True)
    other["make_whole"][0, 0] += 50.0
    other["unit_start"][5, 1] += 1.0
    found = comparison.compare(dataset, other, records=(record(), record()))
    assert found.totals.loc["make_whole", "change"] == pytest.approx(50)
    assert found.totals.loc["starts", "change"] == 1


def test_the_letters_suffice_and_every_reason_has_a_phrase():
    assert list(plans.PHRASES) == list(REASONS)
    assert set(MEANINGS.split()) <= set(REASONS)
