"""What a `Case` holds: every default filled in, frames that behave as copies."""

import numpy as np
import pandas as pd
import pytest

from simulator.case import model, read_case
from tests.support import NETWORK_LIMITS, case_texts, small_case, write_case

BARE = {
    "case.toml": 'format = 1\nname = "bare"\npenalties.unserved = 7000\nemissions.carbon_price_per_t = 20\n',
    "network/buses.csv": "bus\na\nb\n",
    "network/lines.csv": "line,from_bus,to_bus,reactance_pu\nl,a,b,0.1\n",
    "network/dc_ties.csv": "tie,from_bus,to_bus,forward_mw\nt,a,b,30\n",
    "fleet/units.csv": "unit,bus,fuel,max_output_mw,variable_om_per_mwh\nu,a,f,100,1.5\nv,b,,50,\n",
    "fleet/heat_rates.csv": "unit,up_to_mw,heat_rate_gj_per_mwh\nu,40,8\nu,100,9\n",
    "fleet/offers.csv": "unit,up_to_mw,cost_per_mwh\nv,50,33\n",
    "fleet/fuels.csv": "fuel,price_per_gj,co2_t_per_gj\nf,4,0.05\n",
    "fleet/renewables.csv": "plant,bus,capacity_mw,profile\np,a,10,wind\n",
    "fleet/storage.csv": "store,bus,charge_mw,energy_mwh\ns,a,10,40\n",
    "fleet/reserves.csv": "product,direction\nr,up\n",
    "demand/loads.csv": "load,bus,profile\nd,b,demand\n",
    "calendar/outages.csv": "kind,name,from,until\nline,l,2027-01-11,2027-01-12\n",
}


@pytest.fixture
def bare(tmp_path):
    return read_case(write_case(tmp_path, BARE))


EXPECTED = {
    "buses": {"zone": "", "voltage_kv": np.nan, "latitude": np.nan, "longitude": np.nan},
    "lines": {
        "from_bus": "a", "to_bus": "b", "reactance_pu": 0.1, "resistance_pu": 0.0, "charging_pu": 0.0,
        "rating_mw": np.inf, "emergency_rating_mw": np.inf, "tap_ratio": 1.0, "phase_shift_deg": 0.0,
        "rating_profile": "",
    },
    "dc_ties": {"from_bus": "a", "to_bus": "b", "forward_mw": 30.0, "reverse_mw": 30.0, "loss_percent": 0.0},
    "units": {
        "bus": "a", "technology": "", "fuel": "f", "min_output_mw": 0.0, "max_output_mw": 100.0,
        "ramp_up_mw_per_h": np.inf, "ramp_down_mw_per_h": np.inf, "start_ramp_mw": np.inf,
        "stop_ramp_mw": np.inf, "no_load_cost_per_h": 0.0, "variable_om_per_mwh": 1.5, "start_cost": 0.0,
        "cold_start_cost": 0.0, "cold_after_h": 0.0, "min_up_h": 0.0, "min_down_h": 0.0, "must_run": False,
        "initial_output_mw": np.nan, "initial_hours": np.nan, "on_profile": "",
    },
    "fuels": {"price_per_gj": 4.0, "co2_t_per_gj": 0.05, "price_profile": ""},
    "renewables": {
        "bus": "a", "technology": "", "capacity_mw": 10.0, "profile": "wind", "offer_per_mwh": 0.0,
    },
    "storage": {
        "bus": "a", "charge_mw": 10.0, "discharge_mw": 10.0, "energy_mwh": 40.0, "charge_efficiency": 1.0,
        "discharge_efficiency": 1.0, "loss_percent_per_h": 0.0, "initial_mwh": 20.0, "final_mwh": 20.0,
        "throughput_cost_per_mwh": 0.0, "end_value_per_mwh": 0.0,
    },
    "reserves": {
        "direction": "up", "zone": "all", "requirement_mw": 0.0, "requirement_profile": "",
        "percent_of_load": 0.0, "response_minutes": np.inf, "shortage_per_mwh": 3500.0,
    },
    "loads": {"bus": "b", "profile": "demand", "scale_mw": 1.0, "unserved_per_mwh": 7000.0},
}  # fmt: skip


@pytest.mark.parametrize("table", EXPECTED)
def test_left_out_columns_have_the_defaults_of_the_format(bare, table):
    frame = getattr(bare, table)
    assert list(frame.columns) == list(EXPECTED[table])
    row = pd.Series(frame.iloc[0].to_dict(), dtype=object)
    pd.testing.assert_series_equal(row, pd.Series(EXPECTED[table], dtype=object))


def test_tables_are_indexed_by_name(bare):
    names = {
        name: frame.index.name for name, frame in ((n, getattr(bare, n)) for n in model.TABLES)
    }
    assert names == {
        "buses": "bus", "lines": "line", "dc_ties": "tie", "corridors": "corridor",
        "corridor_lines": None, "contingencies": None, "units": "unit", "blocks": None, "fuels": "fuel",
        "renewables": "plant", "storage": "store", "reserves": "product", "loads": "load",
        "outages": None,
    }  # fmt: skip


def test_defaults_that_follow_other_cells(tmp_path):
    case = small_case(tmp_path)
    units, lines = case.units, case.lines
    assert units["ramp_down_mw_per_h"].tolist() == [50.0, np.inf, 30.0]
    assert units["start_ramp_mw"].tolist() == [60.0, np.inf, 30.0]
    assert units["stop_ramp_mw"].tolist() == [50.0, np.inf, 30.0]
    assert units["cold_start_cost"].tolist() == [1500.0, 300.0, 50.0]
    assert lines["emergency_rating_mw"].tolist() == [100.0, np.inf, 60.0]
    assert case.storage.at["cells", "discharge_mw"] == 15.0
    assert case.storage.at["cells", "final_mwh"] == 30.0
    assert case.loads["unserved_per_mwh"].tolist() == [5000.0, 8000.0]
    assert case.reserves["shortage_per_mwh"].tolist() == [2500.0, 400.0]


def test_a_slow_unit_starts_at_its_minimum(tmp_path):
    case = small_case(tmp_path, cells={("fleet/units.csv", 3, "ramp_up_mw_per_h"): "5"})
    assert case.units.loc["gas 1", ["start_ramp_mw", "stop_ramp_mw"]].tolist() == [20.0, 20.0]


def test_final_energy_follows_initial_energy(tmp_path):
    case = small_case(tmp_path, cells={("fleet/storage.csv", 2, "initial_mwh"): "12"})
    assert case.storage.at["cells", "final_mwh"] == 12.0


def test_blocks_carry_all_cost_that_follows_no_fuel_price(bare):
    expected = pd.DataFrame({
        "unit": ["u", "u", "v"],
        "from_mw": [0.0, 40.0, 0.0],
        "up_to_mw": [40.0, 100.0, 50.0],
        "cost_per_mwh": [1.5 + 8 * 0.05 * 20, 1.5 + 9 * 0.05 * 20, 33.0],
        "heat_rate_gj_per_mwh": [8.0, 9.0, 0.0],
        "fuel": ["f", "f", ""],
    })  # fmt: skip
    pd.testing.assert_frame_equal(bare.blocks, expected, check_dtype=False)
    assert bare.blocks.dtypes["cost_per_mwh"] == "float64"


def test_the_last_block_ends_exactly_at_maximum_output(tmp_path):
    case = small_case(tmp_path, cells={("fleet/offers.csv", 4, "up_to_mw"): "79.9999999"})
    assert case.blocks.loc[case.blocks["unit"] == "gas 1", "up_to_mw"].iloc[-1] == 80.0


def test_outages_are_instants_in_utc(bare):
    row = bare.outages.iloc[0]
    assert row["from"] == pd.Timestamp("2027-01-11", tz="UTC")
    assert row["available_percent"] == 0.0


def test_profiles_stand_on_the_time_axis(tmp_path):
    case = small_case(tmp_path)
    assert (case.profiles.index == case.time.periods).all()
    assert set(case.profiles) == {"demand", "wind", "warmth", "watch", "gas 2 on", "gas price"}
    assert (case.profiles.dtypes == "float64").all()
    text = case_texts()["hourly/demand.csv"].splitlines()[17]
    assert case.profiles["demand"].iloc[16] == float(text.split(",")[1])


def test_changing_a_frame_never_changes_the_case(tmp_path):
    case = small_case(tmp_path, NETWORK_LIMITS)
    for name in model.TABLES:
        frame, before = getattr(case, name), getattr(case, name).copy(deep=True)
        frame.iloc[0, 0] = "changed" if isinstance(frame.iloc[0, 0], str) else 99
        frame["new"] = 1
        pd.testing.assert_frame_equal(getattr(case, name), before)


def test_changing_the_profiles_never_changes_the_case(tmp_path):
    case = small_case(tmp_path)
    profiles, before = case.profiles, case.profiles.copy(deep=True)
    profiles.loc[:, "demand"] = 7.0
    profiles.iloc[0, 1] = 9.0
    pd.testing.assert_frame_equal(case.profiles, before)


def test_a_case_is_frozen(tmp_path):
    case = small_case(tmp_path)
    with pytest.raises(AttributeError):
        case.settings = None


def test_a_case_prints_what_it_holds(tmp_path):
    text = str(small_case(tmp_path))
    assert text.splitlines()[0] == "Three fens"
    assert "48 periods of 1 h" in text
    assert "2027-01-11 00:00 to 2027-01-13 00:00 Europe/Dublin" in text
    assert "3 buses, 3 lines, 1 DC ties" in text
    assert "3, 220 MW: steam 100 MW, combined cycle 80 MW, engine 40 MW" in text
    assert "1, 90 MW: wind 90 MW" in text
    assert "1, 15 MW, 60 MWh" in text
    assert "2, peak 150 MW at 2027-01-11 14:00" in text
