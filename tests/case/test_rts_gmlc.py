"""A real-size case: RTS-GMLC, when its folder stands beside the checkout."""

import csv
from pathlib import Path

import numpy as np
import pytest

from simulator.case import read_case

FOLDER = Path(__file__).parents[2].parent / "shared" / "data" / "rts-gmlc"

pytestmark = pytest.mark.skipif(not FOLDER.is_dir(), reason="the RTS-GMLC case is not here")


@pytest.fixture(scope="module")
def case():
    return read_case(FOLDER)


def records(path):
    with (FOLDER / path).open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


TABLES = {
    "buses": "network/buses.csv", "lines": "network/lines.csv", "dc_ties": "network/dc_ties.csv",
    "units": "fleet/units.csv", "blocks": "fleet/heat_rates.csv", "fuels": "fleet/fuels.csv",
    "renewables": "fleet/renewables.csv", "storage": "fleet/storage.csv", "loads": "demand/loads.csv",
}  # fmt: skip


@pytest.mark.parametrize("table", TABLES)
def test_counts_match_the_files(case, table):
    assert len(getattr(case, table)) == len(records(TABLES[table]))


NUMBERS = [
    ("lines", "line", "reactance_pu"), ("lines", "line", "rating_mw"), ("units", "unit", "max_output_mw"),
    ("units", "unit", "ramp_up_mw_per_h"), ("renewables", "plant", "capacity_mw"),
    ("loads", "load", "scale_mw"),
]  # fmt: skip


@pytest.mark.parametrize(("table", "name", "column"), NUMBERS)
def test_numbers_match_the_files(case, table, name, column):
    frame = getattr(case, table)
    assert frame[column].to_dict() == {
        row[name]: float(row[column]) for row in records(TABLES[table])
    }


def test_profiles_match_the_files(case):
    columns = {}
    for path in sorted((FOLDER / "hourly").glob("*.csv")):
        rows = records(path.relative_to(FOLDER))
        columns |= {name: [float(row[name]) for row in rows] for name in rows[0] if name != "time"}
    assert list(case.profiles.columns) == list(columns)
    np.testing.assert_array_equal(case.profiles.to_numpy(), np.column_stack(list(columns.values())))
    assert len(case.time) == 8784


def test_there_is_nothing_to_warn_of(case):
    assert case.warnings == ()
