"""Rules between tables, each broken alone."""

import pytest

from simulator.case import read_case
from tests.support import case_texts, problems_of, write_case

UNITS, OFFERS, HEAT_RATES = "fleet/units.csv", "fleet/offers.csv", "fleet/heat_rates.csv"
FUELS, OUTAGES, BUSES = "fleet/fuels.csv", "calendar/outages.csv", "network/buses.csv"
RESERVES = "fleet/reserves.csv"


def only(folder, files=None, cells=None):
    (problem,) = problems_of(write_case(folder, files, cells))
    return problem


def test_an_offer_of_a_unit_that_does_not_exist(tmp_path):
    problem = only(tmp_path, {OFFERS: case_texts()[OFFERS] + "gas 9,10,50\n"})
    assert (problem.path, problem.row, problem.column) == (OFFERS, 6, "unit")
    assert problem.remedy.startswith("did you mean")


def test_a_unit_in_both_tables_of_cost(tmp_path):
    problem = only(tmp_path, {HEAT_RATES: case_texts()[HEAT_RATES] + "gas 1,80,7\n"})
    assert (problem.path, problem.row, problem.column) == (HEAT_RATES, 4, "unit")
    assert (problem.subject, problem.found) == (
        'unit "gas 1"',
        "it in row 2 of fleet/offers.csv too",
    )


def test_a_unit_in_neither_table_of_cost(tmp_path):
    problem = only(tmp_path, {OFFERS: case_texts()[OFFERS].replace("gas 2,40,95\n", "")})
    assert (problem.path, problem.row, problem.column) == (UNITS, 4, "unit")
    assert (problem.subject, problem.found) == ('unit "gas 2"', "it in neither")


def test_a_unit_without_output_needs_no_cost(tmp_path):
    without = case_texts()[OFFERS].replace("gas 2,40,95\n", "")
    case = read_case(write_case(tmp_path, {OFFERS: without}, {(UNITS, 4, "max_output_mw"): "0"}))
    assert "gas 2" not in set(case.blocks["unit"])


def test_a_cost_file_that_cannot_be_read_leaves_no_unit_in_neither(tmp_path):
    assert only(tmp_path, {OFFERS: ""}).path == OFFERS


def test_a_table_of_buses_that_cannot_be_read_leaves_no_reference_dangling(tmp_path):
    assert only(tmp_path, {BUSES: "bus;zone\nNorthfen;north\n"}).path == BUSES


def test_an_hourly_file_that_cannot_be_read_leaves_no_profile_dangling(tmp_path):
    assert only(tmp_path, {"hourly/weather.csv": b"\xff"}).path == "hourly/weather.csv"


def test_heat_rates_without_any_table_of_fuels(tmp_path):
    problem = only(tmp_path, {FUELS: None})
    assert (problem.path, problem.row) == (FUELS, 1)
    assert problem.found == "no fuel for 1 such units"


def test_offers_alone_need_no_table_of_fuels(tmp_path):
    offers = case_texts()[OFFERS] + "peat 1,100,40\n"
    case = read_case(write_case(tmp_path, {FUELS: None, HEAT_RATES: None, OFFERS: offers}))
    assert case.units.at["gas 1", "fuel"] == "gas"
    assert case.fuels.empty


def test_breaks_may_stand_apart_but_not_fall(tmp_path):
    rows = [
        "unit,up_to_mw,cost_per_mwh",
        "gas 1,20,60",
        "gas 2,40,95",
        "gas 1,50,52",
        "gas 1,80,58.5",
    ]
    case = read_case(write_case(tmp_path / "a", {OFFERS: "\n".join(rows) + "\n"}))
    assert list(case.blocks["unit"]) == ["peat 1"] * 2 + ["gas 1"] * 3 + ["gas 2"]
    problem = only(tmp_path / "b", {OFFERS: "\n".join([*rows[:3], "gas 1,19,52", rows[4]]) + "\n"})
    assert (problem.row, problem.column, problem.found) == (4, "up_to_mw", "19 after 20")


@pytest.mark.parametrize(
    ("minimum", "sound"), [("49.9", False), ("50", True), ("60", True), ("0", False)]
)
def test_costs_may_fall_only_up_to_minimum_output(tmp_path, minimum, sound):
    cells = {(OFFERS, 2, "cost_per_mwh"): "50", (OFFERS, 4, "cost_per_mwh"): "30"}
    problems = problems_of(
        write_case(tmp_path, cells={**cells, (UNITS, 3, "min_output_mw"): minimum})
    )
    assert [(p.path, p.row, p.column, p.found) for p in problems] == (
        [] if sound else [(OFFERS, 4, "cost_per_mwh", "30 after 52")]
    )


def test_heat_rates_may_not_fall_either(tmp_path):
    text = "unit,up_to_mw,heat_rate_gj_per_mwh\npeat 1,60,11\npeat 1,100,9.5\n"
    problem = only(tmp_path, {HEAT_RATES: text})
    assert (problem.row, problem.column) == (3, "heat_rate_gj_per_mwh")


KINDS = [
    ("unit", "peat 1"), ("renewable", "ridge wind"), ("storage", "cells"), ("line", "M-S"),
    ("dc_tie", "cable"),
]  # fmt: skip


@pytest.mark.parametrize(("kind", "name"), KINDS)
def test_an_outage_names_an_element_of_its_kind(tmp_path, kind, name):
    text = "kind,name,from,until\n{},{},2027-01-11,2027-01-12\n"
    assert problems_of(write_case(tmp_path / "a", {OUTAGES: text.format(kind, name)})) == ()
    problem = only(tmp_path / "b", {OUTAGES: text.format(kind, f"{name}x")})
    assert (problem.path, problem.row, problem.column) == (OUTAGES, 2, "name")
    assert problem.remedy == f'did you mean "{name}"?'


def test_a_zone_called_all_leaves_it_open_what_all_means(tmp_path):
    cells = {(BUSES, 2, "zone"): "all"}
    problem = only(tmp_path / "a", cells=cells)
    assert (problem.path, problem.row, problem.column) == (RESERVES, 2, "zone")
    assert "as it means every bus" in problem.rule
    assert problems_of(write_case(tmp_path / "b", {RESERVES: None}, cells)) == ()


def autumn_outage(folder, start, until):
    text = f"kind,name,from,until\nunit,gas 2,{start},{until}\n"
    return write_case(folder, {OUTAGES: text}, start="2026-10-24T00:00", hours=72)


@pytest.mark.parametrize(
    ("start", "until", "utc"),
    [
        ("2026-10-24T06:00", "2026-10-26T06:00", ("2026-10-24T05:00", "2026-10-26T06:00")),
        (
            "2026-10-25T01:30+01:00",
            "2026-10-25T01:30+00:00",
            ("2026-10-25T00:30", "2026-10-25T01:30"),
        ),
        ("2026-10-25", "2026-10-26", ("2026-10-24T23:00", "2026-10-26T00:00")),
    ],
)
def test_outages_are_local_or_have_an_offset(tmp_path, start, until, utc):
    row = read_case(autumn_outage(tmp_path, start, until)).outages.iloc[0]
    assert tuple(row[column].strftime("%Y-%m-%dT%H:%M") for column in ("from", "until")) == utc


def test_an_outage_at_a_repeated_local_time_asks_for_an_offset(tmp_path):
    (problem,) = problems_of(autumn_outage(tmp_path, "2026-10-25T01:30", "2026-10-25T09:00"))
    assert (problem.path, problem.row, problem.column) == (OUTAGES, 2, "from")
    assert "add an offset" in problem.remedy


def test_a_doubtful_time_is_not_called_backward_as_well(tmp_path):
    (problem,) = problems_of(autumn_outage(tmp_path, "2026-10-25T01:30", "2026-10-25T00:30+00:00"))
    assert problem.column == "from"


def test_an_outage_at_a_skipped_local_time_is_told(tmp_path):
    text = "kind,name,from,until\nunit,gas 2,2027-03-28T00:00,2027-03-28T01:30\n"
    problem = only(tmp_path, {OUTAGES: text})
    assert (problem.row, problem.column, problem.rule) == (
        2,
        "until",
        "must exist in Europe/Dublin",
    )


def test_periods_of_the_horizon_are_whole(tmp_path):
    text = case_texts()["case.toml"].replace("keep_hours = 24", "keep_hours = 24.25")
    assert problems_of(write_case(tmp_path / "a", {"case.toml": text}, step=15)) == ()
    (problem,) = problems_of(write_case(tmp_path / "b", {"case.toml": text}, step=30))
    assert (problem.column, problem.found) == ("horizon.keep_hours", "24.25")


# --- odd but allowed ------------------------------------------------------------------------------


def warnings_of(folder, files=None, cells=None):
    return read_case(write_case(folder, files, cells)).warnings


def test_the_small_case_has_no_warning(tmp_path):
    assert warnings_of(tmp_path) == ()


def test_negative_reactance_is_odd(tmp_path):
    (warning,) = warnings_of(tmp_path, cells={("network/lines.csv", 3, "reactance_pu"): "-0.05"})
    assert (warning.path, warning.row, warning.column) == ("network/lines.csv", 3, "reactance_pu")
    assert (warning.subject, warning.found) == ('line "M-S"', "-0.05")


def test_a_bus_without_line_and_tie_is_odd(tmp_path):
    buses = case_texts()[BUSES] + "Eastfen,,,,\nWestfen,,,,\n"
    loads = case_texts()["demand/loads.csv"] + "farm,Eastfen,demand,1,\nmill,Eastfen,demand,1,\n"
    (warning,) = warnings_of(tmp_path, {BUSES: buses, "demand/loads.csv": loads})
    assert (warning.path, warning.row, warning.subject) == (BUSES, 5, 'bus "Eastfen"')
    assert "an island of its own" in warning.rule
    assert warning.found == "2 elements there"


def test_operation_cost_beside_offers_is_odd(tmp_path):
    (warning,) = warnings_of(tmp_path, cells={(UNITS, 3, "variable_om_per_mwh"): "3"})
    assert (warning.path, warning.row, warning.column) == (UNITS, 3, "variable_om_per_mwh")
    assert "offers are complete costs" in warning.rule


def test_a_reserve_that_asks_for_nothing_is_odd(tmp_path):
    (warning,) = warnings_of(tmp_path, cells={(RESERVES, 3, "requirement_mw"): "0"})
    assert (warning.path, warning.row, warning.column) == (RESERVES, 3, "requirement_mw")
    assert "asks for nothing" in warning.rule


def test_a_reserve_in_a_zone_without_units_is_odd(tmp_path):
    buses = case_texts()[BUSES] + "Eastfen,east,,,\n"
    warnings = warnings_of(tmp_path, {BUSES: buses}, {(RESERVES, 3, "zone"): "east"})
    assert [(w.path, w.row, w.column) for w in warnings] == [(RESERVES, 3, "zone")]
    assert "has no unit" in warnings[0].rule


@pytest.mark.parametrize(
    ("start", "until"), [("2027-01-01", "2027-01-11"), ("2027-01-13", "2027-02-01")]
)
def test_an_outage_beyond_the_hourly_data_is_odd(tmp_path, start, until):
    cells = {(OUTAGES, 2, "from"): start, (OUTAGES, 2, "until"): until}
    (warning,) = warnings_of(tmp_path, cells=cells)
    assert (warning.path, warning.row) == (OUTAGES, 2)
    assert "wholly outside the hourly data" in warning.rule


def test_outages_beyond_the_hourly_data_share_one_warning(tmp_path):
    header, row, *_ = case_texts()[OUTAGES].splitlines()
    kind, name, *rest = row.split(",")
    rows = [
        ",".join([kind, name, f"{year}-01-01", f"{year}-01-02", *rest[2:]])
        for year in (2020, 2021, 2022)
    ]
    (warning,) = warnings_of(tmp_path, {OUTAGES: "\n".join([header, *rows]) + "\n"})
    assert warning.row == 2
    assert "2 more like it" in warning.found
