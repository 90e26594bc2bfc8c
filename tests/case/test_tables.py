"""Each rule of a table on its own: one cell is broken, one problem is told."""

import pytest

from simulator.case.schema import TABLES
from tests.support import NETWORK_LIMITS, case_texts, problems_of, write_case

BUSES, LINES, TIES = "network/buses.csv", "network/lines.csv", "network/dc_ties.csv"
UNITS, OFFERS, HEAT_RATES = "fleet/units.csv", "fleet/offers.csv", "fleet/heat_rates.csv"
FUELS, PLANTS, STORES = "fleet/fuels.csv", "fleet/renewables.csv", "fleet/storage.csv"
CORRIDORS, MEMBERS = "network/corridors.csv", "network/corridor_lines.csv"
CONTINGENCIES = "network/contingencies.csv"
RESERVES, LOADS, OUTAGES = "fleet/reserves.csv", "demand/loads.csv", "calendar/outages.csv"

NUMBER = "must be a number"
SIGN = "must be at least 0"

VALUES = [
    (BUSES, 2, "zone", " north", 'bus "Northfen"', "no blank at either end"),
    (BUSES, 3, "zone", "a\x07b", 'bus "Midfen"', "no control character"),
    (BUSES, 4, "voltage_kv", "0", 'bus "Southfen"', "must be greater than 0"),
    (BUSES, 2, "voltage_kv", "220kV", 'bus "Northfen"', NUMBER),
    (BUSES, 2, "latitude", "90.5", 'bus "Northfen"', "from -90 to 90"),
    (BUSES, 2, "longitude", "-181", 'bus "Northfen"', "from -180 to 180"),
    (BUSES, 3, "latitude", "", 'bus "Midfen"', "must be given, since longitude is"),
    (BUSES, 3, "longitude", "", 'bus "Midfen"', "must be given, since latitude is"),
    (LINES, 2, "line", "", "the line in this row", "must be filled in"),
    (LINES, 2, "line", "N" * 65, "NNN", "at most 64 characters"),
    (LINES, 3, "from_bus", "", 'line "M-S"', "must be filled in"),
    (LINES, 3, "from_bus", "Midfenn", 'line "M-S"', 'did you mean "Midfen"?'),
    (LINES, 4, "to_bus", "midfen ", 'line "N-S"', 'did you mean "Midfen"?'),
    (LINES, 3, "to_bus", "Midfen", 'line "M-S"', "must not be its from_bus"),
    (LINES, 3, "reactance_pu", "0", 'line "M-S"', "must not be 0"),
    (LINES, 3, "reactance_pu", "", 'line "M-S"', "must be filled in"),
    (LINES, 3, "reactance_pu", "0,2", 'line "M-S"', NUMBER),
    (LINES, 3, "resistance_pu", "nan", 'line "M-S"', NUMBER),
    (LINES, 3, "charging_pu", "1e13", 'line "M-S"', NUMBER),
    (LINES, 2, "rating_mw", "-1", 'line "N-M"', SIGN),
    (LINES, 2, "rating_mw", "inf", 'line "N-M"', NUMBER),
    (LINES, 2, "emergency_rating_mw", "-0.5", 'line "N-M"', SIGN),
    (LINES, 3, "tap_ratio", "0", 'line "M-S"', "must be greater than 0"),
    (LINES, 3, "phase_shift_deg", "x", 'line "M-S"', NUMBER),
    (LINES, 2, "rating_profile", "warmht", 'line "N-M"', 'did you mean "warmth"?'),
    (TIES, 2, "from_bus", "Nowhere at all", 'tie "cable"', "must name a bus of network/buses.csv"),
    (TIES, 2, "to_bus", "Northfen", 'tie "cable"', "must not be its from_bus"),
    (TIES, 2, "forward_mw", "-20", 'tie "cable"', SIGN),
    (TIES, 2, "reverse_mw", "-1", 'tie "cable"', SIGN),
    (TIES, 2, "loss_percent", "100", 'tie "cable"', "less than 100"),
    (CORRIDORS, 2, "forward_mw", "-1", 'corridor "south"', SIGN),
    (CORRIDORS, 3, "reverse_mw", "-1", 'corridor "ring"', SIGN),
    (CORRIDORS, 2, "limit_profile", "warmht", 'corridor "south"', 'did you mean "warmth"?'),
    (MEMBERS, 2, "corridor", "", "the corridor in this row", "must be filled in"),
    (MEMBERS, 3, "line", "N-X", 'corridor "south"', 'did you mean'),
    (MEMBERS, 3, "line", "N-M", 'corridor "south"', "must be in its corridor once"),
    (MEMBERS, 5, "corridor", "rang", 'corridor "rang"', 'did you mean "ring"?'),
    (MEMBERS, 2, "weight", "0", 'corridor "south"', "must not be 0"),
    (CONTINGENCIES, 4, "contingency", " N-S", 'contingency " N-S"', "no blank at either end"),
    (CONTINGENCIES, 4, "line", "", 'contingency "N-S"', "must be filled in"),
    (CONTINGENCIES, 2, "line", "M-M", 'contingency "gale"', 'did you mean'),
    (CONTINGENCIES, 3, "line", "N-M", 'contingency "gale"', "must be in its contingency once"),
    (UNITS, 2, "bus", "Norhtfen", 'unit "peat 1"', 'did you mean "Northfen"?'),
    (UNITS, 3, "fuel", "gass", 'unit "gas 1"', 'did you mean "gas"?'),
    (UNITS, 3, "technology", "ccgt ", 'unit "gas 1"', "no blank at either end"),
    (UNITS, 2, "fuel", "", 'unit "peat 1"', "since the unit is in fleet/heat_rates.csv"),
    (UNITS, 4, "min_output_mw", "-1", 'unit "gas 2"', SIGN),
    (UNITS, 4, "min_output_mw", "40.5", 'unit "gas 2"', "must be at most max_output_mw"),
    (UNITS, 3, "max_output_mw", "", 'unit "gas 1"', "must be filled in"),
    (UNITS, 2, "ramp_up_mw_per_h", "-1", 'unit "peat 1"', SIGN),
    (UNITS, 2, "ramp_down_mw_per_h", "-1", 'unit "peat 1"', SIGN),
    (UNITS, 2, "start_ramp_mw", "29", 'unit "peat 1"', "must be at least min_output_mw"),
    (UNITS, 2, "stop_ramp_mw", "29", 'unit "peat 1"', "must be at least min_output_mw"),
    (UNITS, 2, "start_cost", "-1", 'unit "peat 1"', SIGN),
    (UNITS, 2, "cold_start_cost", "899", 'unit "peat 1"', "must be at least start_cost"),
    (UNITS, 2, "cold_after_h", "-1", 'unit "peat 1"', SIGN),
    (UNITS, 2, "min_up_h", "-1", 'unit "peat 1"', SIGN),
    (UNITS, 2, "min_down_h", "-1", 'unit "peat 1"', SIGN),
    (UNITS, 2, "must_run", "yes", 'unit "peat 1"', "must be true or false"),
    (UNITS, 2, "initial_output_mw", "-1", 'unit "peat 1"', SIGN),
    (UNITS, 2, "initial_output_mw", "101", 'unit "peat 1"', "must be at most max_output_mw"),
    (UNITS, 2, "initial_hours", "0", 'unit "peat 1"', "must not be 0"),
    (UNITS, 4, "initial_output_mw", "5", 'unit "gas 2"', "must be 0, since initial_hours"),
    (UNITS, 4, "on_profile", "gas2 on", 'unit "gas 2"', 'did you mean "gas 2 on"?'),
    (OFFERS, 2, "up_to_mw", "0", 'unit "gas 1"', "must be greater than 0"),
    (OFFERS, 2, "cost_per_mwh", "", 'unit "gas 1"', "must be filled in"),
    (OFFERS, 3, "up_to_mw", "20", 'unit "gas 1"', "must be above the break before it"),
    (OFFERS, 4, "up_to_mw", "79", 'unit "gas 1"', "must end at max_output_mw"),
    (OFFERS, 4, "cost_per_mwh", "51", 'unit "gas 1"', "must not fall above min_output_mw"),
    (HEAT_RATES, 3, "heat_rate_gj_per_mwh", "-9", 'unit "peat 1"', SIGN),
    (HEAT_RATES, 3, "up_to_mw", "100.1", 'unit "peat 1"', "must end at max_output_mw"),
    (FUELS, 2, "price_per_gj", "-3", 'fuel "peat"', SIGN),
    (FUELS, 2, "co2_t_per_gj", "-0.1", 'fuel "peat"', SIGN),
    (FUELS, 3, "price_profile", "gas prise", 'fuel "gas"', 'did you mean "gas price"?'),
    (PLANTS, 2, "bus", "Nothfen", 'plant "ridge wind"', 'did you mean "Northfen"?'),
    (PLANTS, 2, "technology", "\u2028", 'plant "ridge wind"', "no control character"),
    (PLANTS, 2, "capacity_mw", "-90", 'plant "ridge wind"', SIGN),
    (PLANTS, 2, "profile", "", 'plant "ridge wind"', "must be filled in"),
    (PLANTS, 2, "profile", "Wind", 'plant "ridge wind"', 'did you mean "wind"?'),
    (PLANTS, 2, "offer_per_mwh", "free", 'plant "ridge wind"', NUMBER),
    (STORES, 2, "bus", "Midden", 'store "cells"', 'did you mean "Midfen"?'),
    (STORES, 2, "charge_mw", "-15", 'store "cells"', SIGN),
    (STORES, 2, "discharge_mw", "-15", 'store "cells"', SIGN),
    (STORES, 2, "energy_mwh", "-1", 'store "cells"', SIGN),
    (STORES, 2, "charge_efficiency", "0", 'store "cells"', "must be greater than 0 and at most 1"),
    (STORES, 2, "discharge_efficiency", "93", 'store "cells"', "at most 1"),
    (STORES, 2, "loss_percent_per_h", "100", 'store "cells"', "less than 100"),
    (STORES, 2, "initial_mwh", "61", 'store "cells"', "must be at most energy_mwh"),
    (STORES, 2, "initial_mwh", "-1", 'store "cells"', SIGN),
    (STORES, 2, "final_mwh", "60.5", 'store "cells"', "must be at most energy_mwh"),
    (STORES, 2, "throughput_cost_per_mwh", "-1", 'store "cells"', SIGN),
    (RESERVES, 2, "direction", "upward", 'product "spinning"', "must be up or down"),
    (RESERVES, 3, "direction", "", 'product "lowering"', "must be filled in"),
    (RESERVES, 3, "zone", "sought", 'product "lowering"', 'did you mean "south"?'),
    (RESERVES, 3, "zone", "Midfen", 'product "lowering"', "must be all, or name a zone"),
    (RESERVES, 2, "requirement_mw", "-1", 'product "spinning"', SIGN),
    (RESERVES, 2, "requirement_profile", "wacht", 'product "spinning"', 'did you mean "watch"?'),
    (RESERVES, 2, "percent_of_load", "-3", 'product "spinning"', "must be from 0 to 100"),
    (RESERVES, 2, "percent_of_load", "101", 'product "spinning"', "must be from 0 to 100"),
    (RESERVES, 2, "response_minutes", "0", 'product "spinning"', "must be greater than 0"),
    (RESERVES, 3, "shortage_per_mwh", "-1", 'product "lowering"', SIGN),
    (LOADS, 3, "bus", "Southfens", 'load "works"', 'did you mean "Southfen"?'),
    (LOADS, 3, "profile", "demnd", 'load "works"', 'did you mean "demand"?'),
    (LOADS, 3, "unserved_per_mwh", "-1", 'load "works"', SIGN),
    (OUTAGES, 2, "kind", "units", 'outage of "gas 2"', "must be one of unit, renewable"),
    (OUTAGES, 2, "name", "gas 3", 'outage of "gas 3"', "must name a unit of fleet/units.csv"),
    (OUTAGES, 2, "from", "11/01/2027", 'outage of "gas 2"', "must be an ISO 8601 time"),
    (OUTAGES, 2, "until", "2027-01-11T06:00", 'outage of "gas 2"', "must be after from"),
    (OUTAGES, 2, "available_percent", "100.5", 'outage of "gas 2"', "must be from 0 to 100"),
    (OUTAGES, 3, "available_percent", "50", 'outage of "N-S"', "must be 0 for a line"),
]  # fmt: skip


@pytest.mark.parametrize(("path", "row", "column", "value", "subject", "words"), VALUES)
def test_one_broken_cell_is_one_problem(tmp_path, path, row, column, value, subject, words):
    files = NETWORK_LIMITS if path in NETWORK_LIMITS else {}
    problems = problems_of(write_case(tmp_path, files, {(path, row, column): value}))
    assert [(p.path, p.row, p.column) for p in problems] == [(path, row, column)]
    assert subject in problems[0].subject
    assert words in str(problems[0])


KEYS = [
    (CORRIDORS, "corridor"),
    (BUSES, "bus"), (LINES, "line"), (TIES, "tie"), (UNITS, "unit"), (FUELS, "fuel"),
    (PLANTS, "plant"), (STORES, "store"), (RESERVES, "product"), (LOADS, "load"),
]  # fmt: skip


@pytest.mark.parametrize(("path", "column"), KEYS)
def test_a_name_that_breaks_the_rules_of_names_is_told(tmp_path, path, column):
    files = case_texts() | NETWORK_LIMITS
    text = files[path]
    rows = len(text.splitlines())
    last = text.splitlines()[-1].split(",")
    last[0] = f"{last[0]} "
    problems = problems_of(write_case(tmp_path, files | {path: f"{text}{','.join(last)}\n"}))
    told = [p for p in problems if "no blank at either end" in p.rule]
    assert [(p.path, p.row, p.column) for p in told] == [(path, rows + 1, column)]


ALLOWED = [
    (LINES, 2, "rating_mw", "0"),
    (LINES, 3, "rating_mw", " 75 "),
    (LINES, 2, "note on route", "over the hill"),
    (UNITS, 2, "must_run", "True"),
    (UNITS, 2, "must_run", "1"),
    (UNITS, 3, "no_load_cost_per_h", "+1.5e2"),
    (OFFERS, 3, "cost_per_mwh", "-10"),  # falls at the break at minimum output
    (LOADS, 3, "scale_mw", "-60"),
    (STORES, 2, "final_mwh", "60"),
    (STORES, 2, "initial_mwh", "0"),
    (PLANTS, 2, "offer_per_mwh", "12"),
    (TIES, 2, "reverse_mw", "0"),
    (RESERVES, 2, "zone", "all"),
    (RESERVES, 2, "requirement_profile", "gas 2 on"),
]


@pytest.mark.parametrize(("path", "row", "column", "value"), ALLOWED)
def test_what_the_format_allows_is_read(tmp_path, path, row, column, value):
    assert problems_of(write_case(tmp_path, cells={(path, row, column): value})) == ()


@pytest.mark.parametrize(
    "path", [BUSES, LINES, TIES, CORRIDORS, UNITS, FUELS, PLANTS, STORES, RESERVES, LOADS]
)
def test_a_repeated_name_names_both_rows(tmp_path, path):
    files = case_texts() | NETWORK_LIMITS
    text = files[path]
    first, last = text.splitlines()[1], len(text.splitlines()) + 1
    (problem,) = problems_of(write_case(tmp_path, files | {path: f"{text}{first}\n"}))
    assert (problem.path, problem.row) == (path, last)
    assert "must be the only" in problem.rule
    assert problem.found == f"row 2, row {last}"


@pytest.mark.parametrize(
    ("path", "column"),
    [
        (BUSES, "bus"),
        (LINES, "reactance_pu"),
        (UNITS, "max_output_mw"),
        (OFFERS, "unit"),
        (LOADS, "profile"),
    ],
)
def test_a_missing_column_is_named(tmp_path, path, column):
    text = case_texts()[path].replace(column, f"note {column}", 1)
    problems = problems_of(write_case(tmp_path, {path: text}))
    assert [(p.path, p.row, p.column, p.rule) for p in problems] == [
        (path, 1, column, "must be there")
    ]


def test_a_missing_optional_column_means_its_default(tmp_path):
    text = case_texts()[LINES].replace("tap_ratio", "note tap")
    assert problems_of(write_case(tmp_path, {LINES: text})) == ()


def test_an_unknown_column_gets_a_suggestion(tmp_path):
    text = case_texts()[UNITS].replace("min_up_h", "min_uptime_h")
    (problem,) = problems_of(write_case(tmp_path, {UNITS: text}))
    assert (problem.path, problem.row, problem.column) == (UNITS, 1, "min_uptime_h")
    assert problem.remedy == 'did you mean "min_up_h"?'


def test_every_column_with_a_rule_is_broken_above():
    ruled = {(t.path, f.name) for t in TABLES for f in t.fields if f.rules}
    broken = {(path, column) for path, _, column, *_ in VALUES}
    names = {(path, column) for path, column in KEYS}
    untested = ruled - broken - names
    assert untested == set()
