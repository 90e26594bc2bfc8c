"""The model of formulation.md sections 1 and 2 written out once more, plainly, as one linear program.

One window over the whole run, in any mode. Every bus angle is a variable and every bus has its own
balance row, whose dual is the price there. It shares nothing with the project
but the tables of a case that `read_case` returns. Section numbers are those of formulation.md.

Where that page is silent, this is what is taken:
- before the first hour nothing is out;
- with a free initial state nothing starts or stops in the first period, and no ramp holds there;
- a ramp wider than the unit's maximum output is as wide as that (it matters only where a unit is on in
  part, in mode `relaxed`);
- minimum up and down times are rounded up to whole periods and are at least one;
- a stop that a full outage forces asks for no minimum down time;
- an outage that touches a period counts for the whole of it.
"""

from dataclasses import dataclass, field
from math import ceil, floor, inf, isnan, nan
from typing import Any

import numpy as np
import pandas as pd

from simulator.case import Case
from tests.dispatch.program import Program

WHOLE = 1e-9


Row = dict[str, Any]
"""One row of a table of the case."""


@dataclass
class Model:
    """A case, and the program that grows from it.

    injected : (bus, period) → terms of what enters there, withdrawals negative
    holders : (unit, period, direction) → reserve that it provides
    """

    case: Case
    mode: str
    limits: bool
    program: Program = field(default_factory=Program)
    injected: dict[tuple[str, int], list] = field(default_factory=dict)
    holders: dict[tuple[str, int, str], list] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.length = self.case.time.period_hours
        self.periods = range(len(self.case.time))
        self.profiles = self.case.profiles.to_dict("list")
        self.outages = self.case.outages.to_dict("records")
        self.injected = {(bus, t): [] for bus in self.case.buses.index for t in self.periods}

    def profile(self, name: str) -> list[float]:
        return self.profiles[name] if name else [1.0] * len(self.periods)

    def share(self, kind: str, name: str) -> np.ndarray:
        """What outages leave of an element in each period, 0 to 1; of overlapping ones the least."""
        left = np.ones(len(self.periods))
        for outage in self.outages:
            if (outage["kind"], outage["name"]) != (kind, name):
                continue
            for t, start in enumerate(self.case.time.periods):
                end = start + pd.Timedelta(hours=self.length)
                if outage["from"] < end and outage["until"] > start:
                    left[t] = min(left[t], outage["available_percent"] / 100)
        return left


def _rows(table: pd.DataFrame) -> list[tuple[str, Row]]:
    """Name and row of each element."""
    return list(table.to_dict("index").items())


def written_out(
    case: Case, mode: str, *, limits: bool = True, one_way: bool = False, secure: bool = False
) -> Program:
    """Return the program of a case; its optimum is what a run of one window must cost."""
    model = Model(case, mode, limits)
    for name, unit in _rows(case.units):
        _unit(model, name, unit)
    _renewables(model)
    for name, store in _rows(case.storage):
        _store(model, name, store)
    _ties(model)
    if one_way:
        _ways(model)
    _loads_and_surplus(model)
    for name, product in _rows(case.reserves):
        _reserve(model, name, product)
    _rooms(model)
    _lines(model)
    if case.settings.network.losses:
        _losses(model)
    _corridors(model)
    if secure:
        _after_losses(model)
    _balances(model)
    return model.program


# 2.1 to 2.3: units


def _unit(model: Model, g: str, unit: Row) -> None:
    share = model.share("unit", g)
    on_before, output_before = _before(unit)
    _on_start_stop(model, g, unit, share, on_before)
    _output(model, g, unit, share)
    _ramps(model, g, unit, share, on_before, output_before)
    _hot_starts(model, g, unit)
    if model.mode != "given":
        _minimum_times(model, g, unit, share)


def _before(unit: Row) -> tuple[float, float]:
    """On/off and output in the period before the run, NaN where free."""
    hours, output = unit["initial_hours"], unit["initial_output_mw"]
    if hours < 0 or (isnan(hours) and output == 0 and unit["min_output_mw"] > 0):
        return 0.0, 0.0
    if hours > 0 or output > 0:
        return 1.0, output
    return nan, nan


def _on_start_stop(model: Model, g: str, unit: Row, share: np.ndarray, on_before: float) -> None:
    """2.3: on_t − on_{t−1} = start_t − stop_t; `given`: on is the schedule less outages;

    `relaxed`: on may be anything from 0 to 1; `optimal`: on is 0 or 1.
    """
    schedule = model.profile(unit["on_profile"])
    before = on_before
    for t in model.periods:
        may = 1.0 if share[t] > 0 else 0.0
        least, most = (may if unit["must_run"] else 0.0), may
        least_start = least_stop = 0.0
        most_start = most_stop = 1.0
        if model.mode == "given":
            least = most = may * schedule[t]
            change = 0.0 if isnan(before) else most - before
            least_start = most_start = max(change, 0.0)
            least_stop = most_stop = max(-change, 0.0)
            before = most
        if t == 0 and isnan(on_before):
            most_start = most_stop = 0.0
        cost = unit["no_load_cost_per_h"] * model.length
        model.program.column(("on", g, t), least, most, cost)
        if model.mode == "optimal":
            model.program.whole.add(("on", g, t))
        model.program.column(("start", g, t), least_start, most_start, unit["cold_start_cost"])
        model.program.column(("stop", g, t), least_stop, most_stop)
        terms = [(1, ("on", g, t)), (-1, ("start", g, t)), (1, ("stop", g, t))]
        if t > 0:
            model.program.row(("switch", g, t), [*terms, (-1, ("on", g, t - 1))], "=", 0)
        elif not isnan(on_before):
            model.program.row(("switch", g, t), terms, "=", on_before)


def _output(model: Model, g: str, unit: Row, share: np.ndarray) -> None:
    """2.1: output = Σ blocks; on·minimum ≤ output ≤ on·maximum·available.

    Up to the minimum the blocks are filled in their order, whatever they cost.
    """
    blocks = [row for _, row in _rows(model.case.blocks) if row["unit"] == g]
    costs = [_block_costs(model, block) for block in blocks]
    for t in model.periods:
        available = unit["max_output_mw"] * share[t]
        minimum = min(unit["min_output_mw"], available)
        model.program.column(("output", g, t))
        model.injected[unit["bus"], t].append((1, ("output", g, t)))
        terms = [(1, ("output", g, t))]
        for k, block in enumerate(blocks):
            width = block["up_to_mw"] - block["from_mw"]
            least, most = (
                np.clip(reach - block["from_mw"], 0, width) for reach in (minimum, available)
            )
            name = ("block", g, k, t)
            model.program.column(name, cost=costs[k][t] * model.length)
            model.program.row(("least", g, k, t), [(least, ("on", g, t)), (-1, name)], "<=", 0)
            model.program.row(("most", g, k, t), [(1, name), (-most, ("on", g, t))], "<=", 0)
            terms.append((-1, name))
        model.program.row(("sum of blocks", g, t), terms, "=", 0)


def _block_costs(model: Model, block: Row) -> np.ndarray:
    """Cost of a block in each period: its own, and heat rate × fuel price."""
    cost = np.full(len(model.periods), block["cost_per_mwh"])
    if not block["fuel"]:
        return cost
    fuel = model.case.fuels.loc[block["fuel"]]
    price = fuel["price_per_gj"] * np.array(model.profile(fuel["price_profile"]))
    return cost + block["heat_rate_gj_per_mwh"] * price


def _ramps(
    model: Model,
    g: str,
    unit: Row,
    share: np.ndarray,
    on_before: float,
    output_before: float,
) -> None:
    """2.2: output_t − output_{t−1} ≤ ramp_up·Δ·on_{t−1} + start_ramp·start_t, and downward

    output_{t−1} − output_t ≤ ramp_down·Δ·on_t + stop_ramp·stop_t, save where availability falls.
    """
    most = unit["max_output_mw"]
    up = min(unit["ramp_up_mw_per_h"] * model.length, most)
    down = min(unit["ramp_down_mw_per_h"] * model.length, most)
    start_ramp, stop_ramp = min(unit["start_ramp_mw"], most), min(unit["stop_ramp_mw"], most)
    for t in model.periods:
        now, on = ("output", g, t), ("on", g, t)
        before, on_earlier = ("output", g, t - 1), ("on", g, t - 1)
        rise = [(1, now), (-start_ramp, ("start", g, t))]
        fall = [(-1, now), (-down, on), (-stop_ramp, ("stop", g, t))]
        falls = share[t] < (share[t - 1] if t else 1.0)
        if t > 0:
            model.program.row(("rise", g, t), [*rise, (-1, before), (-up, on_earlier)], "<=", 0)
            if not falls:
                model.program.row(("fall", g, t), [*fall, (1, before)], "<=", 0)
        elif not isnan(output_before):
            model.program.row(("rise", g, t), rise, "<=", output_before + up * on_before)
            if not falls:
                model.program.row(("fall", g, t), fall, "<=", -output_before)


def _minimum_times(model: Model, g: str, unit: Row, share: np.ndarray) -> None:
    """2.3: the starts of the last min_up ≤ on; the stops of the last min_down ≤ 1 − on.

    An outage ends what is left of a minimum up time.
    """
    up, down = (
        max(1, ceil(unit[name] / model.length - WHOLE)) for name in ("min_up_h", "min_down_h")
    )
    hours = 0.0 if isnan(unit["initial_hours"]) else unit["initial_hours"]
    since = floor(abs(hours) / model.length + WHOLE)
    for t in model.periods:
        started = [
            (1, ("start", g, s))
            for s in range(max(0, t - up + 1), t + 1)
            if (share[s + 1 : t + 1] > 0).all()
        ]
        still_up = hours > 0 and since + t < up and (share[: t + 1] > 0).all()
        model.program.row(("up", g, t), [*started, (-1, ("on", g, t))], "<=", -float(still_up))
        stopped = [(1, ("stop", g, s)) for s in range(max(0, t - down + 1), t + 1) if share[s] > 0]
        still_down = hours < 0 and since + t < down
        right = 1 - float(still_down)
        model.program.row(("down", g, t), [*stopped, (1, ("on", g, t))], "<=", right)


def _hot_starts(model: Model, g: str, unit: Row) -> None:
    """2.3: a start costs less by cold − hot where the unit has been off for at most

    min_down_h + cold_after_h; hot_t ≤ start_t, hot_t ≤ the stops of that time.
    """
    saved = unit["cold_start_cost"] - unit["start_cost"]
    warm = floor((unit["min_down_h"] + unit["cold_after_h"]) / model.length + WHOLE)
    off = -unit["initial_hours"] / model.length
    for t in model.periods:
        hot = ("hot start", g, t)
        if saved == 0:
            continue
        model.program.column(hot, cost=-saved)
        model.program.row(("hot", g, t), [(1, hot), (-1, ("start", g, t))], "<=", 0)
        stops = [(-1, ("stop", g, s)) for s in range(max(0, t - warm), t)]
        stopped_before = off > 0 and off + t <= warm + WHOLE
        model.program.row(("warm", g, t), [(1, hot), *stops], "<=", float(stopped_before))


# The rest of the fleet, and the buses


def _renewables(model: Model) -> None:
    for name, plant in _rows(model.case.renewables):
        share = model.share("renewable", name)
        available = plant["capacity_mw"] * share * model.profile(plant["profile"])
        for t in model.periods:
            column = ("renewable", name, t)
            cost = plant["offer_per_mwh"] * model.length
            model.program.column(column, 0, available[t], cost)
            model.injected[plant["bus"], t].append((1, column))


def _store(model: Model, s: str, store: Row) -> None:
    """2.4: E_t = (1 − loss)^Δ·E_{t−1} + η_c·charge·Δ − discharge·Δ/η_d; E at the end ≥ final."""
    share, length = model.share("storage", s), model.length
    kept = (1 - store["loss_percent_per_h"] / 100) ** length
    for t in model.periods:
        stored, charge, discharge = ("stored", s, t), ("charge", s, t), ("discharge", s, t)
        least = store["final_mwh"] if t == model.periods[-1] else 0.0
        model.program.column(stored, least, store["energy_mwh"])
        model.program.column(charge, 0, store["charge_mw"] * share[t])
        model.program.column(
            discharge, 0, store["discharge_mw"] * share[t], store["throughput_cost_per_mwh"] * length
        )  # fmt: skip
        terms = [
            (1, stored),
            (-store["charge_efficiency"] * length, charge),
            (length / store["discharge_efficiency"], discharge),
        ]
        if t > 0:
            model.program.row(("energy", s, t), [*terms, (-kept, ("stored", s, t - 1))], "=", 0)
        else:
            model.program.row(("energy", s, t), terms, "=", kept * store["initial_mwh"])
        model.injected[store["bus"], t] += [(-1, charge), (1, discharge)]


def _ties(model: Model) -> None:
    """What enters a tie at one end leaves it at the other, less its loss."""
    for e, tie in _rows(model.case.dc_ties):
        share, arrives = model.share("dc_tie", e), 1 - tie["loss_percent"] / 100
        ends = tie["from_bus"], tie["to_bus"]
        for t in model.periods:
            for way, limit, (sending, receiving) in (
                ("forward", tie["forward_mw"], ends),
                ("reverse", tie["reverse_mw"], ends[::-1]),
            ):
                model.program.column((way, e, t), 0, limit * share[t])
                model.injected[sending, t].append((-1, (way, e, t)))
                model.injected[receiving, t].append((arrives, (way, e, t)))


def _ways(model: Model) -> None:
    """A tie runs forward or in reverse, not both at once."""
    for e, tie in _rows(model.case.dc_ties):
        for t in model.periods:
            way = ("way", e, t)
            model.program.column(way, 0, 1)
            model.program.whole.add(way)
            sent = [(1, ("forward", e, t)), (-tie["forward_mw"], way)]
            model.program.row(("ahead", e, t), sent, "<=", 0)
            sent = [(1, ("reverse", e, t)), (tie["reverse_mw"], way)]
            model.program.row(("back", e, t), sent, "<=", tie["reverse_mw"])


def _loads_and_surplus(model: Model) -> None:
    """1.5: unserved load, at most the load, and surplus at every bus."""
    for d, load in _rows(model.case.loads):
        demand = load["scale_mw"] * np.array(model.profile(load["profile"]))
        for t in model.periods:
            cost = load["unserved_per_mwh"] * model.length
            model.program.column(("unserved", d, t), 0, max(demand[t], 0), cost)
            model.injected[load["bus"], t].append((1, ("unserved", d, t)))
    penalty = model.case.settings.penalties.surplus * model.length
    for bus, t in model.injected:
        model.program.column(("surplus", bus, t), cost=penalty)
        model.injected[bus, t].append((-1, ("surplus", bus, t)))


# 2.7: reserves


def _providers(model: Model, product: Row) -> list[tuple[str, float]]:
    """The units that may provide a product, and the most each may: ramp × response time."""
    zone = model.case.buses["zone"]
    ramp = f"ramp_{product['direction']}_mw_per_h"
    return [
        (g, unit[ramp] * product["response_minutes"] / 60 if unit[ramp] > 0 else 0.0)
        for g, unit in _rows(model.case.units)
        if product["zone"] in ("all", zone[unit["bus"]])
    ]


def _reserve(model: Model, p: str, product: Row) -> None:
    """2.7: Σ reserve + shortage − surplus of reserve = requirement; reserve ≤ ramp × response time × on.

    The requirement is requirement_mw × profile and a share of the loads of the zone that are loads.
    """
    asked = product["requirement_mw"] * np.array(model.profile(product["requirement_profile"]))
    for _, load in _rows(model.case.loads):
        if product["zone"] in ("all", model.case.buses["zone"][load["bus"]]):
            demand = load["scale_mw"] * np.array(model.profile(load["profile"]))
            asked = asked + product["percent_of_load"] / 100 * np.maximum(demand, 0)
    for t in model.periods:
        short, beyond = ("reserve short", p, t), ("reserve beyond", p, t)
        model.program.column(short, cost=product["shortage_per_mwh"] * model.length)
        model.program.column(beyond)
        terms = [(1, short), (-1, beyond)]
        for g, most in _providers(model, product):
            held = ("reserve", g, p, t)
            model.program.column(held, 0, most)
            if most < inf:
                model.program.row(("respond", g, p, t), [(1, held), (-most, ("on", g, t))], "<=", 0)
            terms.append((1, held))
            model.holders.setdefault((g, t, product["direction"]), []).append(held)
        model.program.row(("reserves", p, t), terms, "=", asked[t])


def _rooms(model: Model) -> None:
    """2.7: output + Σ up ≤ on·maximum·available; output − Σ down ≥ on·minimum."""
    for (g, t, direction), held in model.holders.items():
        unit, now, on = model.case.units.loc[g], ("output", g, t), ("on", g, t)
        available = unit["max_output_mw"] * model.share("unit", g)[t]
        minimum = min(unit["min_output_mw"], available)
        if direction == "up":
            terms = [(1, now), (-available, on), *((1, name) for name in held)]
        else:
            terms = [(-1, now), (minimum, on), *((1, name) for name in held)]
        model.program.row(("room", g, t, direction), terms, "<=", 0)


def _lines(model: Model) -> None:
    """2.6: flow = base_mva·(θ_from − θ_to − shift)/(reactance·tap), at most the rating both ways."""
    for bus, t in model.injected:
        model.program.column(("angle", bus, t), -inf)
    for name, line in _rows(model.case.lines):
        share, shift = model.share("line", name), np.radians(line["phase_shift_deg"])
        times = model.profile(line["rating_profile"])
        per_rad = model.case.settings.base_mva / (line["reactance_pu"] * line["tap_ratio"])
        rating = line["rating_mw"] if model.limits else inf
        for t in model.periods:
            if share[t] == 0:
                continue
            flow = ("flow", name, t)
            limit = rating * times[t]
            model.program.column(flow, -limit, limit)
            start, end = ("angle", line["from_bus"], t), ("angle", line["to_bus"], t)
            terms = [(1, flow), (-per_rad, start), (per_rad, end)]
            model.program.row(("angles", name, t), terms, "=", -per_rad * shift)
            model.injected[line["from_bus"], t].append((-1, flow))
            model.injected[line["to_bus"], t].append((1, flow))


def loss_columns(model_case: Case, program: Program) -> dict[tuple[str, int], float]:
    """Return r/base of each line that loses something, by line and period in which it has a flow."""
    rates = model_case.lines["resistance_pu"] / model_case.settings.base_mva
    return {
        (name, t): rate
        for name, rate in rates.items() if rate > 0
        for t in range(len(model_case.time)) if ("flow", name, t) in program
    }  # fmt: skip


def _losses(model: Model) -> None:
    """A column for what each line loses, half of it drawn at either end; tangents come from outside."""
    for name, t in loss_columns(model.case, model.program):
        model.program.column(("loss", name, t))
        for end in ("from_bus", "to_bus"):
            bus = model.case.lines.at[name, end]
            model.injected[bus, t].append((-0.5, ("loss", name, t)))


def add_tangent(program: Program, name: str, t: int, rate: float, at: float) -> None:
    """Losses are at least those of the tangent at a flow: loss ≥ rate·(2·at·flow − at²)."""
    terms = [(-1, ("loss", name, t)), (2 * rate * at, ("flow", name, t))]
    program.row(("tangent", name, t, at), terms, "<=", rate * at**2)


def _corridors(model: Model) -> None:
    """−reverse ≤ Σ weight·flow ≤ forward, each times its profile; lines out carry nothing."""
    members = model.case.corridor_lines.to_dict("records")
    for name, corridor in _rows(model.case.corridors):
        times = model.profile(corridor["limit_profile"])
        own = [row for row in members if row["corridor"] == name]
        for t in model.periods:
            flows = [
                (row["weight"], ("flow", row["line"], t))
                for row in own if model.share("line", row["line"])[t] > 0
            ]  # fmt: skip
            for way, sign in (("forward", 1), ("reverse", -1)):
                if not model.limits or corridor[f"{way}_mw"] == inf:
                    continue
                terms = [(sign * weight, flow) for weight, flow in flows]
                limit = corridor[f"{way}_mw"] * times[t]
                model.program.row((way, name, t), terms, "<=", limit)


def _after_losses(model: Model) -> None:
    """Each contingency with angles and flows of its own, within emergency ratings, and at each bus

    as much carried away as before it. One that splits the network, or finds its lines out, is left out.
    """
    lines = dict(_rows(model.case.lines))
    groups = model.case.contingencies.groupby("contingency")["line"].agg(set).to_dict()
    if not groups:
        whole = _islands(model.case, set(lines))
        groups = {
            name: {name} for name in lines if _islands(model.case, set(lines) - {name}) == whole
        }
    for name, lost in groups.items():
        for t in model.periods:
            used = {line for line in lines if model.share("line", line)[t] > 0}
            if used & lost and _islands(model.case, used) == _islands(model.case, used - lost):
                _after_one(model, name, t, used, used - lost)


def _after_one(model: Model, c: str, t: int, used: set[str], left: set[str]) -> None:
    lines = dict(_rows(model.case.lines))
    carried: dict[str, list] = {bus: [] for bus in model.case.buses.index}
    for bus in carried:
        model.program.column(("angle after", c, bus, t), -inf)
    for name in sorted(used):
        line = lines[name]
        ends = line["from_bus"], line["to_bus"]
        for sign, bus in zip((1, -1), ends, strict=True):
            carried[bus].append((-sign, ("flow", name, t)))
        if name not in left:
            continue
        per_rad = model.case.settings.base_mva / (line["reactance_pu"] * line["tap_ratio"])
        limit = line["emergency_rating_mw"] * model.profile(line["rating_profile"])[t]
        flow = ("flow after", c, name, t)
        model.program.column(flow, -limit, limit)
        start, end = (("angle after", c, bus, t) for bus in ends)
        right = -per_rad * np.radians(line["phase_shift_deg"])
        terms = [(1, flow), (-per_rad, start), (per_rad, end)]
        model.program.row(("angles after", c, name, t), terms, "=", right)
        for sign, bus in zip((1, -1), ends, strict=True):
            carried[bus].append((sign, flow))
    for bus, terms in carried.items():
        if terms:
            model.program.row(("carried after", c, bus, t), terms, "=", 0)


def _islands(case: Case, used: set[str]) -> int:
    """How many islands some lines leave."""
    group = {bus: bus for bus in case.buses.index}
    for name in used:
        one, other = (group[case.lines.at[name, end]] for end in ("from_bus", "to_bus"))
        group = {bus: (one if of == other else of) for bus, of in group.items()}
    return len(set(group.values()))


def _balances(model: Model) -> None:
    """2.5, bus by bus: what enters, less what lines carry away, is the load. Its dual is the price."""
    demand = dict.fromkeys(model.injected, 0.0)
    for _, load in _rows(model.case.loads):
        for t, value in enumerate(model.profile(load["profile"])):
            demand[load["bus"], t] += load["scale_mw"] * value
    for (bus, t), terms in model.injected.items():
        model.program.row(("balance", bus, t), terms, "=", demand[bus, t])
