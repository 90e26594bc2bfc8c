"""The case whose good runs faults are planted in: two islands that a tie joins, a day of hours.

`town_case(folder, changes)` writes it, with cells changed: {("units", "peaker", "min_up_h"): 4}, and with
reserves if asked. So a good dataset can also be audited against a case that asks for something else.
"""

from collections.abc import Mapping
from copy import deepcopy
from pathlib import Path
from typing import Any

import numpy as np

from simulator.case import Case
from tests.dispatch.building import case_of

Changes = Mapping[tuple[str, str, str], object]

HOURS = 24
OUT = "2027-03-01T10:00", "2027-03-01T13:00"

KEYS = {
    "corridors": "corridor",
    "lines": "line", "dc_ties": "tie", "units": "unit", "renewables": "plant", "storage": "store",
    "reserves": "product", "loads": "load", "outages": "name",
}  # fmt: skip

TABLES: dict[str, list[dict[str, Any]]] = {
    "buses": [{"bus": bus, "zone": "port" if bus == "Port" else "west"}
              for bus in ("Hill", "Mill", "Town", "Port")],
    "lines": [
        {"line": "H-M", "from_bus": "Hill", "to_bus": "Mill", "reactance_pu": 0.1, "rating_mw": 55},
        {"line": "H-T", "from_bus": "Hill", "to_bus": "Town", "reactance_pu": 0.2, "rating_mw": 200,
         "phase_shift_deg": 2.0},
        {"line": "M-T", "from_bus": "Mill", "to_bus": "Town", "reactance_pu": 0.1, "tap_ratio": 0.98},
        {"line": "old", "from_bus": "Mill", "to_bus": "Town", "reactance_pu": 0.3, "rating_mw": 90},
    ],
    "dc_ties": [
        {"tie": "cable", "from_bus": "Town", "to_bus": "Port", "forward_mw": 30, "loss_percent": 3},
    ],
    "units": [
        {"unit": "coal", "bus": "Hill", "fuel": "coal", "min_output_mw": 30, "max_output_mw": 120,
         "ramp_up_mw_per_h": 12, "ramp_down_mw_per_h": 15, "initial_output_mw": 70,
         "initial_hours": 30, "min_up_h": 5, "no_load_cost_per_h": 100, "variable_om_per_mwh": 2,
         "start_cost": 2000, "on_profile": "coal on"},
        {"unit": "gas", "bus": "Mill", "fuel": "gas", "max_output_mw": 90},
        {"unit": "gas twin", "bus": "Mill", "fuel": "gas", "max_output_mw": 15},
        {"unit": "peaker", "bus": "Town", "max_output_mw": 40, "min_output_mw": 10,
         "initial_hours": -6, "min_down_h": 2, "no_load_cost_per_h": 30, "start_cost": 150,
         "cold_start_cost": 400, "cold_after_h": 3, "on_profile": "peaker on"},
        {"unit": "spare", "bus": "Town", "max_output_mw": 10, "initial_hours": -8},
        {"unit": "engine", "bus": "Port", "max_output_mw": 35},
    ],
    "offers": [
        {"unit": "peaker", "up_to_mw": 40, "cost_per_mwh": 95},
        {"unit": "spare", "up_to_mw": 10, "cost_per_mwh": 400},
        {"unit": "engine", "up_to_mw": 20, "cost_per_mwh": 61},
        {"unit": "engine", "up_to_mw": 35, "cost_per_mwh": 83},
    ],
    "heat_rates": [
        {"unit": "coal", "up_to_mw": 80, "heat_rate_gj_per_mwh": 9.1},
        {"unit": "coal", "up_to_mw": 120, "heat_rate_gj_per_mwh": 9.8},
        {"unit": "gas", "up_to_mw": 50, "heat_rate_gj_per_mwh": 7.3},
        {"unit": "gas", "up_to_mw": 90, "heat_rate_gj_per_mwh": 8.4},
        {"unit": "gas twin", "up_to_mw": 15, "heat_rate_gj_per_mwh": 7.3},
    ],
    "fuels": [
        {"fuel": "coal", "price_per_gj": 3, "co2_t_per_gj": 0.094},
        {"fuel": "gas", "price_per_gj": 7, "co2_t_per_gj": 0.056, "price_profile": "gas price"},
    ],
    "renewables": [
        {"plant": "ridge", "bus": "Hill", "capacity_mw": 90, "profile": "wind", "offer_per_mwh": 1},
        {"plant": "crest", "bus": "Hill", "capacity_mw": 60, "profile": "wind", "offer_per_mwh": 1},
    ],
    "storage": [
        {"store": "cells", "bus": "Town", "charge_mw": 12, "energy_mwh": 40, "initial_mwh": 20,
         "charge_efficiency": 0.95, "discharge_efficiency": 0.93, "loss_percent_per_h": 0.2,
         "throughput_cost_per_mwh": 0.5},
    ],
    "loads": [
        {"load": "homes", "bus": "Town", "profile": "demand", "scale_mw": 95},
        {"load": "works", "bus": "Town", "profile": "demand", "scale_mw": 60},
        {"load": "docks", "bus": "Port", "profile": "port", "scale_mw": 70},
    ],
    "outages": [
        {"kind": "unit", "name": "spare", "from": OUT[0], "until": OUT[1], "available_percent": 0},
        {"kind": "line", "name": "old", "from": OUT[0], "until": OUT[1], "available_percent": 0},
        {"kind": "dc_tie", "name": "cable", "from": OUT[0], "until": OUT[1], "available_percent": 80},
    ],
}  # fmt: skip


RESERVES: list[dict[str, Any]] = [
    {"product": "spinning", "direction": "up", "zone": "west", "percent_of_load": 12,
     "response_minutes": 30, "shortage_per_mwh": 60},
    {"product": "lowering", "direction": "down", "requirement_mw": 14,
     "requirement_profile": "demand", "response_minutes": 15},
]  # fmt: skip
"""Products that are short at noon, when the spare is out, and cost something in the hours before."""


GUARDED: dict[str, list[dict[str, Any]]] = {
    "corridors": [{"corridor": "to town", "forward_mw": 118, "reverse_mw": 200, "limit_profile": "room"}],
    "corridor_lines": [
        {"corridor": "to town", "line": line} for line in ("H-T", "M-T", "old")
    ],
    "contingencies": [
        {"contingency": "storm", "line": "M-T"}, {"contingency": "storm", "line": "old"},
        {"contingency": "old", "line": "old"}, {"contingency": "H-M", "line": "H-M"},
    ],
}  # fmt: skip
"""A corridor and contingencies that cost something in some hours; `old` is out in others."""


def profiles() -> dict[str, list[float]]:
    hour = np.arange(HOURS)
    found = {
        "demand": 1 + 0.35 * np.sin((hour - 9) * np.pi / 12),
        "port": 0.6 + 0.4 * np.sin((hour - 10) * np.pi / 12),
        "wind": 0.45 + 0.4 * np.cos((hour - 3) * np.pi / 9),
        "gas price": 1 + 0.02 * np.cos(hour),
        "room": 1 + 0.4 * np.cos((hour - 6) * np.pi / 12),
        "coal on": np.ones(HOURS),
        "peaker on": ((hour > 12) & (hour < 19)) | (hour > 20),
    }
    return {name: np.asarray(values, float).round(4).tolist() for name, values in found.items()}


def town_case(
    folder: Path, changes: Changes | None = None, *, reserves: bool = False, guarded: bool = False
) -> Case:
    """Write the case with some cells changed, and read it.

    reserves : with reserve products; guarded : with a corridor, contingencies and losses
    """
    tables = deepcopy(TABLES | ({"reserves": RESERVES} if reserves else {}))
    if guarded:
        tables |= deepcopy(GUARDED)
        for row in tables["lines"]:
            row |= {"resistance_pu": row["reactance_pu"] / 10, "emergency_rating_mw": 110}
    for (table, name, column), value in (changes or {}).items():
        row = next(row for row in tables[table] if row[KEYS[table]] == name)
        row[column] = value
    settings = {"penalties": {"unserved": 900.0, "surplus": 200.0}, "time_zone": "Europe/Dublin",
                "network": {"losses": guarded}, "emissions": {"carbon_price_per_t": 20.0}}  # fmt: skip
    return case_of(folder, settings, periods=HOURS, profiles=profiles(), **tables)
