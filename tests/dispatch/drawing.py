"""Random small cases full of corners: `drawn`, `lossless` and `secured` give the arguments of `case_of`.

Data are consistent most of the time, not always: what contradicts itself must be refused as well.
"""

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

from tests.dispatch.building import START, Row


@dataclass
class Draw:
    """The random numbers of one case, and the case as far as it is drawn."""

    seed: int
    profiles: dict[str, list[float]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.random = np.random.default_rng(self.seed)
        self.minutes = int(self.random.choice([15, 30, 60]))
        self.length = self.minutes / 60
        self.periods = int(self.random.integers(4, 10))
        self.buses = [f"bus {number}" for number in range(self.random.integers(2, 8))]

    def chance(self, share: float) -> bool:
        return bool(self.random.random() < share)

    def between(self, low: float, high: float) -> float:
        return round(float(self.random.uniform(low, high)), 3)

    def some_bus(self) -> str:
        return str(self.random.choice(self.buses))

    def maybe(self, share: float, low: float, high: float) -> float | None:
        return self.between(low, high) if self.chance(share) else None

    def hours(self, periods: int) -> float:
        """A duration of up to that many periods."""
        return float(self.random.integers(0, periods + 1)) * self.length

    def profile(self, name: str, low: float, high: float) -> str:
        values = self.random.uniform(low, high, self.periods)
        self.profiles[name] = values.round(4).tolist()
        return name


def drawn(seed: int) -> dict[str, Any]:
    """Draw a case."""
    draw = Draw(seed)
    lines = _lines(draw)
    units = [_unit(draw, f"unit {number}") for number in range(draw.random.integers(2, 6))]
    curves = [_curve(draw, unit) for unit in units]
    capacity = sum(unit["max_output_mw"] for unit in units)
    elements = {
        "lines": lines,
        "dc_ties": [_tie(draw, f"tie {n}") for n in range(draw.random.integers(0, 3))],
        "renewables": [_plant(draw, f"plant {n}") for n in range(draw.random.integers(0, 3))],
        "storage": [_store(draw, f"store {n}") for n in range(draw.random.integers(0, 3))],
    }
    loads = _loads(draw, capacity)
    outages = _outages(draw, units, elements)
    reserves = [_reserve(draw, f"product {n}", capacity) for n in range(draw.random.integers(0, 4))]
    return {
        "settings": {
            "penalties": {"unserved": draw.between(500, 10000), "surplus": draw.between(50, 1000)},
            "emissions": {"carbon_price_per_t": draw.between(0, 60)},
        },
        "minutes": draw.minutes,
        "periods": draw.periods,
        "buses": [
            {"bus": bus, "zone": "odd" if place % 2 else "even"}
            for place, bus in enumerate(draw.buses)
        ],
        "units": units,
        "offers": [row for _, rows in curves for row in rows if "cost_per_mwh" in row],
        "heat_rates": [row for _, rows in curves for row in rows if "cost_per_mwh" not in row],
        "fuels": [
            {"fuel": "gas", "price_per_gj": 6.0, "co2_t_per_gj": 0.056,
             "price_profile": draw.profile("gas price", 0.7, 1.4)},
            {"fuel": "coal", "price_per_gj": 2.5, "co2_t_per_gj": 0.094},
        ],
        "loads": loads,
        "reserves": reserves,
        "outages": outages,
        "profiles": draw.profiles,
        **elements,
    }  # fmt: skip


def lossless(seed: int) -> dict[str, Any]:
    """The same case with ties that lose nothing on the way."""
    system = drawn(seed)
    ties = [row | {"loss_percent": None} for row in system["dc_ties"]]
    return system | {"dc_ties": ties}


def secured(seed: int) -> dict[str, Any]:
    """The same case with corridors, with emergency ratings and, often, with contingencies of its own.

    Some corridors are in the way, some losses would split the network, some are of two lines or of lines
    that are out at times.
    """
    system, draw = lossless(seed), Draw(seed + 10_000)
    draw.periods = system["periods"]
    names = [row["line"] for row in system["lines"]]
    lines = [row | {"emergency_rating_mw": draw.maybe(0.7, 20, 110)} for row in system["lines"]]
    corridors, members = [], []
    for number in range(draw.random.integers(0, 3) if names else 0):
        corridor = f"corridor {number}"
        profile = draw.profile(f"{corridor} shape", 0.5, 1.1) if draw.chance(0.4) else None
        corridors.append({
            "corridor": corridor, "forward_mw": draw.maybe(0.7, 0, 60),
            "reverse_mw": draw.maybe(0.7, 0, 60), "limit_profile": profile,
        })  # fmt: skip
        for line in draw.random.permutation(names)[: int(draw.random.integers(1, 4))].tolist():
            weight = draw.between(-1, 1.5) if draw.chance(0.3) else None
            members.append({"corridor": corridor, "line": line, "weight": weight})
    contingencies = []
    for number in range(draw.random.integers(0, 5) if names else 0):
        lost = draw.random.permutation(names)[: int(draw.random.integers(1, 3))].tolist()
        contingencies += [{"contingency": f"loss {number}", "line": line} for line in lost]
    return system | {
        "lines": lines, "corridors": corridors, "corridor_lines": members,
        "contingencies": contingencies, "profiles": system["profiles"] | draw.profiles,
    }  # fmt: skip


def _lines(draw: Draw) -> list[Row]:
    """A tree with a gap here and there, some more lines, some beside each other."""
    ends = [
        (draw.buses[number], draw.buses[draw.random.integers(0, number)])
        for number in range(1, len(draw.buses))
        if draw.chance(0.9)
    ]
    for _ in range(draw.random.integers(0, len(draw.buses))):
        start, end = draw.random.choice(draw.buses, 2, replace=False)
        ends.append((str(start), str(end)))
    if ends and draw.chance(0.4):
        ends.append(ends[0])
    return [_line(draw, f"line {number}", *pair) for number, pair in enumerate(ends)]


def _line(draw: Draw, name: str, start: str, end: str) -> Row:
    sign = -1 if draw.chance(0.05) else 1
    return {
        "line": name, "from_bus": start, "to_bus": end,
        "reactance_pu": sign * draw.between(0.02, 0.4),
        "rating_mw": draw.maybe(0.7, 15, 90),
        "tap_ratio": draw.maybe(0.2, 0.9, 1.1),
        "phase_shift_deg": draw.maybe(0.15, -4, 4),
        "rating_profile": draw.profile(f"{name} rating", 0.7, 1.2) if draw.chance(0.2) else None,
    }  # fmt: skip


def _unit(draw: Draw, name: str) -> Row:
    most = draw.between(20, 150)
    least = round(most * draw.between(0.2, 0.5), 3) if draw.chance(0.7) else 0.0
    hot = draw.between(0, 1500)
    limited = draw.chance(0.7)
    return {
        "unit": name, "bus": draw.some_bus(), "fuel": str(draw.random.choice(["gas", "coal"])),
        "min_output_mw": least, "max_output_mw": most,
        "ramp_up_mw_per_h": draw.between(0.15, 0.9) * most / draw.length if limited else None,
        "ramp_down_mw_per_h": draw.between(0.15, 0.9) * most / draw.length if limited else None,
        "start_ramp_mw": draw.maybe(0.4, least, most), "stop_ramp_mw": draw.maybe(0.4, least, most),
        "no_load_cost_per_h": draw.between(0, 300), "variable_om_per_mwh": None,
        "start_cost": hot, "cold_start_cost": hot + draw.between(0, 900) if draw.chance(0.5) else None,
        "cold_after_h": draw.hours(4), "min_up_h": draw.hours(4), "min_down_h": draw.hours(4),
        "must_run": draw.chance(0.15),
        "on_profile": _schedule(draw, name),
        **_before(draw, least, most),
    }  # fmt: skip


def _before(draw: Draw, least: float, most: float) -> Row:
    """How the unit stood before: unknown, on or off, with hours, output or both."""
    kind = draw.random.choice(["free", "on", "on for", "off", "off for"])
    periods = float(draw.random.integers(1, 5)) * draw.length
    output = draw.between(max(least, 0.1), least + 0.5 * (most - least))
    return {
        "free": {},
        "on": {"initial_output_mw": output},
        "on for": {"initial_hours": periods, "initial_output_mw": output},
        "off": {"initial_output_mw": 0.0 if least > 0 else None},
        "off for": {"initial_hours": -periods},
    }[kind]


def _schedule(draw: Draw, name: str) -> str | None:
    """A 0/1 column that changes seldom, or none."""
    if draw.chance(0.5):
        return None
    changes = draw.random.random(draw.periods) < 0.25
    on = (np.cumsum(changes) + draw.random.integers(0, 2)) % 2
    draw.profiles[f"{name} on"] = on.astype(float).tolist()
    return f"{name} on"


def _curve(draw: Draw, unit: Row) -> tuple[str, list[Row]]:
    """One to three rising blocks; the first may be dear where the unit has no choice."""
    least, most = unit["min_output_mw"], unit["max_output_mw"]
    breaks = sorted({least, *(draw.between(least, most) for _ in range(2)), most} - {0.0})
    level = np.sort(draw.random.uniform(2, 14, len(breaks))).round(3)
    if least > 0 and draw.chance(0.3):
        level[0] = 16.0
    if draw.chance(0.5):
        costs = [{"cost_per_mwh": 6.0 * value - 20.0} for value in level.tolist()]
    else:
        unit["variable_om_per_mwh"] = draw.between(0, 5)
        costs = [{"heat_rate_gj_per_mwh": value} for value in level.tolist()]
    rows = [
        {"unit": unit["unit"], "up_to_mw": end, **cost}
        for end, cost in zip(breaks, costs, strict=True)
    ]
    return unit["unit"], rows


def _tie(draw: Draw, name: str) -> Row:
    start, end = (str(bus) for bus in draw.random.choice(draw.buses, 2, replace=False))
    return {
        "tie": name, "from_bus": start, "to_bus": end, "forward_mw": draw.between(5, 60),
        "reverse_mw": draw.maybe(0.5, 0, 60), "loss_percent": draw.maybe(0.6, 0.5, 8),
    }  # fmt: skip


def _plant(draw: Draw, name: str) -> Row:
    return {
        "plant": name, "bus": draw.some_bus(), "capacity_mw": draw.between(10, 120),
        "profile": draw.profile(f"{name} wind", 0, 1), "offer_per_mwh": draw.maybe(0.6, -30, 10),
    }  # fmt: skip


def _store(draw: Draw, name: str) -> Row:
    power, energy = draw.between(5, 60), draw.between(10, 200)
    initial = draw.maybe(0.7, 0, energy)
    return {
        "store": name, "bus": draw.some_bus(), "charge_mw": power,
        "discharge_mw": draw.maybe(0.3, 5, 60), "energy_mwh": energy,
        "charge_efficiency": draw.maybe(0.7, 0.7, 1), "discharge_efficiency": draw.maybe(0.7, 0.7, 1),
        "loss_percent_per_h": draw.maybe(0.4, 0, 2), "initial_mwh": initial,
        "final_mwh": draw.maybe(0.6, 0, (energy / 2 if initial is None else initial)),
        "throughput_cost_per_mwh": draw.maybe(0.4, 0, 10), "end_value_per_mwh": 25.0,
    }  # fmt: skip


def _loads(draw: Draw, capacity: float) -> list[Row]:
    """A few loads that take a third to more than all of the capacity, sometimes one that gives."""
    count = int(draw.random.integers(1, 5))
    total = capacity * draw.between(0.3, 1.2)
    rows = [
        {
            "load": f"load {n}", "bus": draw.some_bus(), "scale_mw": round(total / count, 3),
            "profile": draw.profile(f"load {n} shape", 0.4, 1.1),
            "unserved_per_mwh": draw.maybe(0.5, 400, 9000),
        }
        for n in range(count)
    ]  # fmt: skip
    if draw.chance(0.2):
        profile = draw.profile("given shape", 0, 1)
        rows.append({"load": "given", "bus": draw.some_bus(), "scale_mw": -15, "profile": profile})
    return rows


def _reserve(draw: Draw, name: str, capacity: float) -> Row:
    """A product that asks for up to a fifth of all capacity and a little of the load."""
    return {
        "product": name, "direction": str(draw.random.choice(["up", "down"])),
        "zone": str(draw.random.choice(["all", "odd", "even"])),
        "requirement_mw": draw.maybe(0.7, 0, capacity / 5),
        "requirement_profile": draw.profile(f"{name} times", 0, 1.5) if draw.chance(0.5) else None,
        "percent_of_load": draw.maybe(0.6, 0, 15), "response_minutes": draw.maybe(0.6, 5, 60),
        "shortage_per_mwh": draw.maybe(0.7, 5, 2000),
    }  # fmt: skip


def _outages(draw: Draw, units: list[Row], elements: dict[str, list[Row]]) -> list[Row]:
    found = [
        _outage(draw, "unit", unit["unit"], _derate(draw, unit))
        for unit in units
        if draw.chance(0.35)
    ]
    kinds = {"line": "lines", "dc_tie": "dc_ties", "renewable": "renewables", "storage": "storage"}
    for kind, table in kinds.items():
        for row in elements[table]:
            if draw.chance(0.25):
                name = next(iter(row.values()))
                percent = 0.0 if kind == "line" or draw.chance(0.5) else draw.between(10, 90)
                found.append(_outage(draw, kind, name, percent))
    return found


def _derate(draw: Draw, unit: Row) -> float:
    """Full, or partial. A slow unit stays above its minimum: how it returns has a test of its own."""
    if draw.chance(0.5):
        return 0.0
    slow = unit["ramp_up_mw_per_h"] is not None
    least = 100 * unit["min_output_mw"] / unit["max_output_mw"] if slow else 0.0
    return draw.between(min(least + 1, 90), 95)


def _outage(draw: Draw, kind: str, name: str, percent: float) -> Row:
    first = int(draw.random.integers(0, draw.periods))
    length = int(draw.random.integers(1, 4))
    step = pd.Timedelta(minutes=draw.minutes)
    start = pd.Timestamp(START) + first * step
    return {
        "kind": kind, "name": name, "from": f"{start:%Y-%m-%dT%H:%M}",
        "until": f"{start + length * step:%Y-%m-%dT%H:%M}", "available_percent": percent,
    }  # fmt: skip
