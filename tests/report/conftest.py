"""A small results dataset that keeps the contract of results-format.md: five buses, invented names.

`results()` builds it; a clock change lies within its hours, one bus has a hostile name and one load
goes short in one evening. Flows follow from the injections, so every balance holds.
"""

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from simulator.results import VARIABLES

HOSTILE = "<script>alert(1)</script>"
BUSES = ["Ostrel", "Vinna & Sound", HOSTILE, "Karsholm", "Tarn"]
LINES = [(0, 1), (0, 2), (1, 2), (1, 3), (2, 4), (3, 4)]
REACTANCE = np.array([0.1, 0.2, 0.1, 0.2, 0.15, 0.1])
LOAD_BUS = [1, 2, 3, 4]
UNIT_BUS, UNIT_MAX, UNIT_COST = (
    [0, 0, 3],
    np.array([260.0, 120.0, 90.0]),
    np.array([18.0, 41.0, 88.0]),
)
PLANT_BUS, STORE_BUS, TIE = [2, 4], [4], (0, 4)
COMPONENTS = [
    "unit_running", "unit_start", "renewable", "storage", "unserved", "surplus", "reserve_shortage",
]  # fmt: skip
SHORT_HOUR = 19


def at_buses(buses: Sequence[int], values: np.ndarray) -> np.ndarray:
    """Add up values (hour, element) at the buses the elements are at, array (hour, bus)."""
    found = np.zeros((len(values), len(BUSES)))
    np.add.at(found, (slice(None), list(buses)), values)
    return found


def powers(hours: int) -> dict[str, np.ndarray]:
    """Return a plausible dispatch: wind and sun first, then a store's cycle, then units by cost."""
    hour = np.arange(hours)
    shape = 0.75 + 0.2 * np.sin((hour - 8) * np.pi / 12) + 0.05 * np.sin(hour * np.pi / 6)
    demand = np.outer(shape, [120.0, 90.0, 60.0, 110.0])
    wind = 70 * (0.5 + 0.5 * np.cos(hour * np.pi / 17))
    sun = 110 * np.clip(np.sin((hour % 24 - 6) * np.pi / 12), 0, None)
    available = np.column_stack([wind, sun])
    lost = np.column_stack([np.where(hour % 24 == 3, 0.4 * wind, 0.0), np.zeros(hours)])
    charge = np.where((hour % 24 >= 11) & (hour % 24 < 15), 20.0, 0.0)[:, None]
    discharge = np.where((hour % 24 >= 17) & (hour % 24 < 20), 22.0, 0.0)[:, None]
    unserved = np.zeros_like(demand)
    unserved[hour == SHORT_HOUR, 2] = 12.5
    stored = 10 + np.cumsum(charge * 0.9 - discharge / 0.9, axis=0)
    rest = (demand - unserved).sum(axis=1) - (available - lost).sum(axis=1)
    rest = rest + (charge - discharge)[:, 0]
    below = np.cumsum(UNIT_MAX) - UNIT_MAX
    output = np.clip(rest[:, None] - below, 0, UNIT_MAX)
    return {
        "load_demand": demand, "load_unserved": unserved, "renewable_available": available,
        "renewable_output": available - lost, "curtailment": lost, "storage_charge": charge,
        "storage_discharge": discharge, "stored_energy": stored - stored.min() + 2,
        "unit_output": output, "tie_flow": (15 * np.sin(hour / 5))[:, None],
        "unit_available": np.tile(UNIT_MAX, (hours, 1)), "surplus": np.zeros((hours, len(BUSES))),
    }  # fmt: skip


def flows(found: dict[str, np.ndarray]) -> np.ndarray:
    """Return the flows that the injections cause, array (hour, line), MW (formulation.md 2.6)."""
    injection = (
        at_buses(UNIT_BUS, found["unit_output"])
        + at_buses(PLANT_BUS, found["renewable_output"])
        + at_buses(STORE_BUS, found["storage_discharge"] - found["storage_charge"])
        - at_buses(LOAD_BUS, found["load_demand"] - found["load_unserved"])
        + at_buses(TIE, found["tie_flow"] * [-1.0, 1.0])
    )
    assert np.allclose(injection.sum(axis=1), 0)
    incidence = np.zeros((len(LINES), len(BUSES)))
    for line, (one, other) in enumerate(LINES):
        incidence[line, [one, other]] = 1.0, -1.0
    weighted = incidence / REACTANCE[:, None]
    return injection @ np.linalg.pinv(incidence.T @ weighted) @ weighted.T


def network(found: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Return flows, ratings that two lines meet in some hours, shadow prices and bus prices."""
    flow = flows(found)
    rating = np.tile(np.abs(flow).max(axis=0) * 1.6 + 10, (len(flow), 1))
    for line in (1, 3):
        rating[:, line] = np.maximum(
            np.quantile(np.abs(flow[:, line]), 0.85), np.abs(flow[:, line])
        )
    rating[:, 5] = np.inf
    at_limit = np.abs(flow) >= rating - 1e-4
    shadow = np.where(at_limit, [0, 14.0, 0, 6.5, 0, 0], 0.0)
    marginal = np.maximum((found["unit_output"] > 0) * UNIT_COST, UNIT_COST[0]).max(axis=1)
    energy = (
        np.tile(marginal[:, None], len(BUSES))
        - 30.0 * (found["curtailment"].sum(axis=1) > 0)[:, None]
    )
    effect = np.zeros((len(LINES), len(BUSES)))
    effect[1], effect[3] = [-0.3, 0.1, 0.9, 0.2, 0.4], [-0.1, -0.2, 0.1, 0.5, 0.3]
    congestion = shadow @ effect
    energy = energy + 5000.0 * (found["load_unserved"].sum(axis=1) > 0)[:, None]
    return {
        "line_flow": flow, "line_rating": rating, "line_shadow_price": shadow,
        "congestion_rent": shadow * np.abs(flow), "price_energy": energy, "price_congestion": congestion,
        "price_loss": np.zeros_like(energy), "price": energy + congestion,
        "line_loss": 2e-4 * flow**2, **limits_beyond_lines(flow, congestion),
        "congestion_hours": (shadow > 1e-6).sum(axis=0).astype(float),
        "hours_at_limit": at_limit.sum(axis=0).astype(float),
    }  # fmt: skip


PAIRS = [(1, "L3 d", 9), (1, "L3 d", 10), (5, "storm <i>", 20)]
"""Line, contingency and hour of what is priced after a loss."""


def line_name(line: int) -> str:
    return f"L{line} {'abcdef'[line]}"


def limits_beyond_lines(flow: np.ndarray, congestion: np.ndarray) -> dict[str, np.ndarray]:
    """Return a corridor of two lines, a few pairs, and which limit most of a price is of."""
    total = flow[:, 0] + flow[:, 1]
    limit = np.full((len(flow), 1), np.quantile(np.abs(total), 0.9))
    shadow = np.where(np.abs(total)[:, None] >= limit, 3.5, 0.0)
    there = [hour < len(flow) for _, _, hour in PAIRS]
    rating = np.array([80.0, 80.0, 120.0])[there]
    price = np.array([12.0, 7.0, 2.5])[there]
    side = np.array([1.0, 1.0, -1.0])[there]
    cause = np.where(np.abs(congestion) > 1e-6, 0, -1)
    cause[20:21] = 1
    return {
        "corridor_flow": total[:, None], "corridor_forward_limit": limit, "corridor_reverse_limit": limit,
        "corridor_shadow_price": shadow, "corridor_limit_side": np.sign(total)[:, None] * (shadow > 0),
        "corridor_rent": shadow * np.abs(total)[:, None],
        "corridor_congestion_hours": (shadow > 0).sum(axis=0).astype(float),
        "corridor_hours_at_limit": (shadow > 0).sum(axis=0).astype(float),
        "pair_flow": rating * side, "pair_rating": rating,
        "pair_shadow_price": price, "pair_limit_side": side,
        "pair_rent": rating * price,
        "security_hours": np.bincount(np.array([1, 1, 5])[there], minlength=len(LINES)).astype(float),
        "main_cause": cause, "main_cause_part": np.where(cause >= 0, congestion, 0.0),
    }  # fmt: skip


def costs(found: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Return on/off, starts, costs and emissions of the units, and cost by component."""
    on = (found["unit_output"] > 0).astype(float)
    start = np.diff(on, axis=0, prepend=on[:1]).clip(0)
    running, starting = found["unit_output"] * UNIT_COST, start * [4000.0, 900.0, 150.0]
    cost = np.zeros((len(on), len(COMPONENTS)))
    cost[:, 0], cost[:, 1] = running.sum(axis=1), starting.sum(axis=1)
    cost[:, 2] = -3.0 * found["renewable_output"][:, 0]
    cost[:, 4] = 5000.0 * found["load_unserved"].sum(axis=1)
    return {
        "unit_on": on, "unit_start": start, "unit_cost": running, "unit_start_cost": starting,
        "emissions": found["unit_output"] * [0.9, 0.4, 0.6], "cost": cost,
        "ramp_limited_hours": np.array([0.0, 5.0, 2.0]),
        "reserve_price": np.zeros((len(on), 0)), "reserve_shortage": np.zeros((len(on), 0)),
        "unit_reason": reasons(on), "reserve_requirement": np.zeros((len(on), 0)),
        "unit_reserve": np.zeros((len(on), 3, 0)),
        "window": np.arange(len(on)) // 24,
    }  # fmt: skip


MEANINGS = "off in_the_money line kept_on other"


def reasons(on: np.ndarray) -> np.ndarray:
    """Return why each unit is on: the first pays in most hours, the second is kept on."""
    code = on * [1, 3, 1]
    code[2::5, 0] *= 4
    return code.astype(np.int8)


def make_whole(found: dict[str, np.ndarray], days: np.ndarray) -> np.ndarray:
    """Return what each day falls short of at the price of the unit's bus, array (day, unit)."""
    price = found["price"][:, UNIT_BUS]
    short = found["unit_cost"] + found["unit_start_cost"] - price * found["unit_output"]
    return np.stack([short[days == day].sum(axis=0).clip(0) for day in np.unique(days)])


def coordinates(start: str, hours: int, period_hours: float) -> dict[str, Any]:
    """Return the coordinates of the contract."""
    step = pd.Timedelta(hours=period_hours)
    text, pairs = np.array, [pair for pair in PAIRS if pair[2] < hours]
    return {
        "time": ("time", pd.date_range(start, periods=hours, freq=step)),
        "bus": ("bus", text(BUSES)), "bus_zone": ("bus", text(["north", "north", "", "south", "south"])),
        "bus_latitude": ("bus", [54.1, 53.6, 53.7, 52.9, 52.7]),
        "bus_longitude": ("bus", [-8.4, -7.2, -8.9, -7.6, -8.6]),
        "line": ("line", text([f"L{number} {name}" for number, name in enumerate("abcdef")])),
        "line_from_bus": ("line", text([BUSES[one] for one, _ in LINES])),
        "line_to_bus": ("line", text([BUSES[other] for _, other in LINES])),
        "unit": ("unit", text(["Peatworks 1", "Gasholt 1", "Quayside <i>1</i>"])),
        "unit_bus": ("unit", text([BUSES[bus] for bus in UNIT_BUS])),
        "unit_technology": ("unit", text(["steam", "combined cycle", "engine"])),
        "unit_fuel": ("unit", text(["peat", "gas", "oil"])), "unit_max_output_mw": ("unit", UNIT_MAX),
        "plant": ("plant", text(["Ridge", "Meadow"])), "plant_technology": ("plant", text(["wind", "sun"])),
        "plant_bus": ("plant", text([BUSES[bus] for bus in PLANT_BUS])),
        "plant_capacity_mw": ("plant", [70.0, 110.0]), "store": ("store", text(["Quarry cells"])),
        "store_bus": ("store", text([BUSES[4]])), "store_energy_mwh": ("store", [80.0]),
        "corridor": ("corridor", text(["north <b>edge</b>"])),
        "pair": ("pair", text([f"{line_name(line)} after loss of {lost}" for line, lost, _ in pairs], str)),
        "pair_line": ("pair", text([line_name(line) for line, _, _ in pairs], str)),
        "pair_contingency": ("pair", text([lost for _, lost, _ in pairs], str)),
        "pair_time": ("pair", pd.date_range(start, periods=hours, freq=step)[[at for _, _, at in pairs]]),
        "cause": ("cause", text(["L1 b", "L5 f after loss of storm <i>"])),
        "tie": ("tie", text(["Sound cable"])), "tie_from_bus": ("tie", text([BUSES[TIE[0]]])),
        "tie_to_bus": ("tie", text([BUSES[TIE[1]]])),
        "load": ("load", text(["Vinna town", "Mill <b>& weir</b>", "Karsholm town", "Tarn works"])),
        "load_bus": ("load", text([BUSES[bus] for bus in LOAD_BUS])),
        "product": ("product", text([], dtype=str)), "component": ("component", text(COMPONENTS)),
    }  # fmt: skip


def results(
    hours: int = 48,
    *,
    start: str = "2027-10-29T23:00",
    period_hours: float = 1.0,
    **attributes: Any,
) -> xr.Dataset:
    """Return the dataset; the first hour is local midnight of the day before summer time ends."""
    found = powers(hours)
    found |= network(found) | costs(found)
    local = pd.date_range(start, periods=hours, freq=pd.Timedelta(hours=period_hours), tz="UTC")
    days = local.tz_convert("Europe/Dublin").strftime("%Y-%m-%d").to_numpy(dtype=str)
    found["make_whole"] = make_whole(found, days)
    variables = {
        name: (dims, found[name], {"units": unit, "long_name": label})
        for name, (dims, unit, label) in VARIABLES.items()
    }
    described = {
        "Conventions": "CF-1.11", "format": 1, "case_name": "Five lochs", "currency": "EUR",
        "time_zone": "Europe/Dublin", "period_hours": period_hours, "commitment": "optimal",
        "limits": "lines", "base_mva": 100.0,
    }  # fmt: skip
    made = xr.Dataset(variables, coordinates(start, hours, period_hours), described | attributes)
    made["unit_reason"].attrs |= {
        "flag_meanings": MEANINGS, "flag_values": np.arange(5, dtype=np.int8)
    }  # fmt: skip
    return made.assign_coords(day=("day", np.unique(days), {"long_name": "local date"}))


def record(*, passed: bool = True) -> dict[str, Any]:
    """Return what run.json would hold."""
    checks = [
        {"name": "balance", "worst": 2e-9, "where": "island 1, 2027-10-30T04:00Z", "tolerance": 1e-5,
         "passed": True},
        {"name": "flows", "worst": 3e-9 if passed else 0.42, "where": "L1 b", "tolerance": 1e-5,
         "passed": passed},
    ]  # fmt: skip
    return {
        "format": 1, "case": "Five lochs", "from": "2027-10-30T00:00:00+01:00",
        "until": "2027-10-31T23:00:00+00:00",
        "settings": {
            "commitment": {"mode": "optimal"}, "network": {"limits": "lines", "losses": False},
            "horizon": {"window_hours": 48.0, "keep_hours": 24.0},
        },
        "windows": [
            {"window": 0, "from": "2027-10-30T00:00:00+01:00", "seconds": 1.25, "gap": 0.0004,
             "time_limit": False},
            {"window": 1, "from": "2027-10-31T00:00:00+01:00", "seconds": 120.0, "gap": 0.0123,
             "time_limit": True},
        ],
        "counts": {"windows": 2}, "versions": {"rampline": "0.1.0", "xarray": "2026.1"},
        "audit": {"passed": passed, "checks": checks},
    }  # fmt: skip


@pytest.fixture
def dataset() -> xr.Dataset:
    """Two days with every kind of element."""
    return results()


@pytest.fixture
def run() -> dict[str, Any]:
    """The record of a run whose audit passed."""
    return record()
