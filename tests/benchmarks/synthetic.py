"""Synthetic cases of any size, drawn from a seed: nothing in them stands for a real place.

Public names: `HOURS`, `synthetic_tables`, `write_synthetic`.

Buses are random points. Lines are the shortest tree through them and, up to 1.5 lines a bus, random
edges of their Gabriel graph (Gabriel & Sokal, Systematic Zoology 18(3), 1969), so the map looks planar.
Units sit at a fifth of the buses, wind and sun at a tenth, loads at most. Ratings come from the flows of
a merit-order dispatch without limits: every line has its own headroom over its highest flow, and one
factor for all is set so that a share `NEAR` of line-hours is at 98 % of its rating or beyond. Sizes,
costs, ramps and minimum times are of the usual order (common practice, no source).
"""

from collections.abc import Mapping
from pathlib import Path

import networkx as nx
import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse import csgraph
from scipy.sparse.linalg import splu
from scipy.spatial import Delaunay

__all__ = ["HOURS", "synthetic_tables", "write_synthetic"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Random = np.random.Generator

HOURS = 168
"""Six windows of 48 h rolled by 24 h see this much."""

NEAR, CLOSE = 0.03, 0.98
LINES_A_BUS, SPACING_KM = 1.5, 25.0

KINDS = pd.DataFrame(
    {
        "technology": ["steam", "combined cycle", "engine"],
        "share": [0.25, 0.45, 0.30],
        "size_mw": [420.0, 260.0, 70.0],
        "least": [0.45, 0.40, 0.15],
        "ramp": [0.12, 0.35, 1.00],
        "cost": [24.0, 48.0, 95.0],
        "no_load": [2.5, 4.0, 2.0],
        "start": [70.0, 45.0, 12.0],
        "cold": [1.8, 1.5, 1.0],
        "hours": [8, 4, 1],
    }
)

SETTINGS = """\
format = 1
name = "Synthetic, {buses} buses, seed {seed}"

[horizon]
window_hours = 48
keep_hours = 24

[commitment]
mode = "relaxed"
"""


def write_synthetic(folder: Path, buses: int, seed: int = 1) -> Path:
    """Write a synthetic case folder and return it."""
    for path, table in synthetic_tables(buses, seed).items():
        target = folder / path
        target.parent.mkdir(parents=True, exist_ok=True)
        table.to_csv(target, index=False)
    (folder / "case.toml").write_text(SETTINGS.format(buses=buses, seed=seed), encoding="utf-8")
    return folder


def synthetic_tables(buses: int, seed: int = 1) -> Mapping[str, pd.DataFrame]:
    """Return the tables of a case by path; the same for the same size and seed."""
    random = np.random.default_rng([seed, buses])
    points = random.random((buses, 2)) * np.sqrt(buses) * SPACING_KM
    ends, lengths = _edges(random, points)
    loads, load_profiles = _loads(random, points)
    plants, plant_profiles = _plants(random, points, loads, load_profiles)
    demand = load_profiles[loads["profile"]].to_numpy() * loads["scale_mw"].to_numpy()
    available = plant_profiles[plants["profile"]].to_numpy() * plants["capacity_mw"].to_numpy()
    units, offers = _units(random, buses, (demand.sum(axis=1) - available.sum(axis=1)).max())
    output = _merit_order(units, offers, demand.sum(axis=1) - available.sum(axis=1))
    injection = (
        _at_bus(output, units["bus"], buses)
        + _at_bus(available, plants["bus"], buses)
        - _at_bus(demand, loads["bus"], buses)
    )
    reactance = 0.0004 * lengths  # per unit on 100 MVA
    flow = _flows(ends, reactance, injection)
    return {
        "network/buses.csv": _buses(points),
        "network/lines.csv": _lines(ends, reactance, _ratings(random, ends, flow)),
        "fleet/units.csv": units, "fleet/offers.csv": offers, "fleet/renewables.csv": plants,
        "demand/loads.csv": loads, "hourly/load.csv": _hourly(load_profiles),
        "hourly/weather.csv": _hourly(plant_profiles),
    }  # fmt: skip


def _names(kind: str, count: int) -> list[str]:
    return [f"{kind}{number:05d}" for number in range(count)]


def _buses(points: Floats) -> pd.DataFrame:
    """Place the buses on a map, in open sea."""
    degrees = points / 111.0
    return pd.DataFrame({
        "bus": _names("b", len(points)),
        "latitude": (-45.0 + degrees[:, 1]).round(5), "longitude": (-130.0 + degrees[:, 0]).round(5),
    })  # fmt: skip


def _edges(random: Random, points: Floats) -> tuple[Integers, Floats]:
    """Return ends, array (line, 2), and lengths in km of a connected planar graph."""
    corners = Delaunay(points).simplices
    pairs = np.sort(np.concatenate([corners[:, [0, 1]], corners[:, [1, 2]], corners[:, [0, 2]]]))
    pairs = np.unique(pairs, axis=0)
    kept = pairs[_gabriel(points, corners, pairs)]
    length = np.linalg.norm(points[kept[:, 0]] - points[kept[:, 1]], axis=1)
    graph = sparse.coo_array((length, kept.T), shape=(len(points),) * 2)
    tree = csgraph.minimum_spanning_tree(graph.tocsr()).tocoo()
    in_tree = np.isin(_key(kept, len(points)), _key(np.stack([tree.row, tree.col], 1), len(points)))
    others = np.flatnonzero(~in_tree)
    more = min(len(others), round(LINES_A_BUS * len(points)) - int(in_tree.sum()))
    chosen = np.sort(
        np.concatenate([np.flatnonzero(in_tree), random.choice(others, more, replace=False)])
    )
    return kept[chosen], length[chosen]


def _key(pairs: NDArray[np.integer], buses: int) -> Integers:
    ordered = np.sort(pairs.astype(np.int64), axis=1)
    return ordered[:, 0] * buses + ordered[:, 1]


def _gabriel(points: Floats, corners: NDArray[np.integer], pairs: Integers) -> NDArray[np.bool_]:
    """Tell which Delaunay edges have no other point in the circle over them.

    It is enough to look at the points across from the edge in the triangles it borders.
    """
    spoiled = []
    for one, other, across in ((0, 1, 2), (1, 2, 0), (0, 2, 1)):
        edge = corners[:, [one, other]]
        middle = points[edge].mean(axis=1)
        radius = np.linalg.norm(points[edge[:, 0]] - middle, axis=1)
        inside = np.linalg.norm(points[corners[:, across]] - middle, axis=1) < radius
        spoiled.append(_key(edge[inside], len(points)))
    return ~np.isin(_key(pairs, len(points)), np.concatenate(spoiled))


def _loads(random: Random, points: Floats) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return loads at 17 of 20 buses, and eight regional profiles."""
    buses, regions = len(points), 8
    at = np.sort(random.choice(buses, round(0.85 * buses), replace=False))
    hour = np.arange(HOURS)
    late = random.uniform(-1.0, 1.0, regions)
    profiles = {}
    for region in range(regions):
        day = 0.78 - 0.16 * np.cos((hour - 4 - late[region]) * np.pi / 12)
        day += 0.07 * np.cos((hour - 19 - late[region]) * np.pi / 6)
        weekend = np.where(hour // 24 % 7 >= 5, 0.9, 1.0)
        profiles[f"region{region}"] = day * weekend * (1 + 0.01 * random.standard_normal(HOURS))
    region = (points[at, 0] / points[:, 0].max() * 7.999).astype(int)
    table = pd.DataFrame({
        "load": _names("d", len(at)), "bus": np.array(_names("b", buses))[at],
        "profile": [f"region{number}" for number in region],
        "scale_mw": (35.0 * random.lognormal(0.0, 0.7, len(at))).round(2),
    })  # fmt: skip
    return table, pd.DataFrame(profiles).round(4)


def _plants(
    random: Random, points: Floats, loads: pd.DataFrame, load_profiles: pd.DataFrame
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return wind and sun, half each, at a tenth of the buses; together a quarter of the energy."""
    buses, count = len(points), max(2, len(points) // 10)
    at = np.sort(random.choice(buses, count, replace=False))
    wind = np.arange(count) % 2 == 0
    profiles = np.where(wind, _wind(random, points[at]), _sun(random, count)).round(4)
    names = _names("p", count)
    energy = (load_profiles[loads["profile"]].to_numpy() * loads["scale_mw"].to_numpy()).sum()
    size = random.lognormal(0.0, 0.5, count)
    size *= 0.25 * energy / (profiles.sum(axis=0) * size).sum()
    table = pd.DataFrame({
        "plant": names, "bus": np.array(_names("b", buses))[at],
        "technology": np.where(wind, "wind", "sun"), "capacity_mw": size.round(1), "profile": names,
    })  # fmt: skip
    return table, pd.DataFrame(profiles, columns=names)


def _wind(random: Random, points: Floats) -> Floats:
    """Return weather that drifts across the map, and gusts of each site's own, array (hour, plant)."""
    hour = np.arange(HOURS)[:, None]
    field = np.zeros((HOURS, len(points)))
    for _ in range(6):
        wave = random.normal(0.0, 1.0, 2) * 2 * np.pi / 600.0
        field += np.sin(points @ wave + hour * random.uniform(0.05, 0.25) + random.uniform(0, 6.3))
    gusts = random.standard_normal((HOURS, len(points)))
    for period in range(1, HOURS):
        gusts[period] = 0.9 * gusts[period - 1] + 0.43 * gusts[period]
    return 1 / (1 + np.exp(-(0.8 * field + 0.5 * gusts - 0.6)))


def _sun(random: Random, count: int) -> Floats:
    """Return clear days dimmed by clouds, array (hour, plant)."""
    height = np.clip(np.sin((np.arange(HOURS) % 24 - 6) * np.pi / 12), 0.0, None)[:, None]
    day = random.uniform(0.3, 1.0, (HOURS // 24, count)).repeat(24, axis=0)
    return height * day


def _units(random: Random, buses: int, peak: float) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return units at a fifth of the buses, 1.3 × the highest net demand, and three blocks each."""
    count = max(2, buses // 5)
    at = np.sort(random.choice(buses, count, replace=False))
    kind = KINDS.iloc[random.choice(len(KINDS), count, p=KINDS["share"])].reset_index(drop=True)
    size = kind["size_mw"].to_numpy() * random.uniform(0.6, 1.4, count)
    size = (size * 1.3 * peak / size.sum()).round(1)
    names = _names("u", count)
    units = pd.DataFrame({
        "unit": names, "bus": np.array(_names("b", buses))[at], "technology": kind["technology"],
        "min_output_mw": (kind["least"] * size).round(1), "max_output_mw": size,
        "ramp_up_mw_per_h": (kind["ramp"] * size).round(1),
        "no_load_cost_per_h": (kind["no_load"] * size).round(1),
        "start_cost": (kind["start"] * size).round(0),
        "cold_start_cost": (kind["start"] * size).round(0) * kind["cold"],
        "cold_after_h": kind["hours"], "min_up_h": kind["hours"], "min_down_h": kind["hours"],
    })  # fmt: skip
    base = kind["cost"].to_numpy() * random.uniform(0.85, 1.15, count)
    least = units["min_output_mw"].to_numpy()
    breaks = [(least + part * (size - least)).round(2) for part in (0.4, 0.75)] + [size]
    offers = pd.concat([
        pd.DataFrame({"unit": names, "up_to_mw": top, "cost_per_mwh": (base * steeper).round(3)})
        for top, steeper in zip(breaks, (1.0, 1.07, 1.18), strict=True)
    ])  # fmt: skip
    return units, offers.sort_values(["unit", "up_to_mw"]).reset_index(drop=True)


def _merit_order(units: pd.DataFrame, offers: pd.DataFrame, needed: Floats) -> Floats:
    """Return output, array (hour, unit), MW, with blocks taken in the order of their cost."""
    top = offers["up_to_mw"].to_numpy()
    width = np.diff(top.reshape(-1, 3), axis=1, prepend=0.0).ravel()
    order = np.argsort(offers["cost_per_mwh"].to_numpy(), kind="stable")
    before = np.cumsum(width[order]) - width[order]
    taken = np.zeros((len(needed), len(width)))
    taken[:, order] = np.clip(needed[:, None] - before, 0.0, width[order])
    return taken.reshape(len(needed), len(units), 3).sum(axis=2)


def _at_bus(values: Floats, bus: pd.Series, buses: int) -> Floats:
    place = bus.str[1:].astype(int).to_numpy()
    at = sparse.coo_array((np.ones(len(place)), (np.arange(len(place)), place)))
    at.resize(len(place), buses)
    total: Floats = values @ at.tocsr()
    return total


def _flows(ends: Integers, reactance: Floats, injection: Floats) -> Floats:
    """Return DC flows without limits, array (hour, line), MW."""
    lines, buses = len(ends), injection.shape[1]
    place = (np.tile(np.arange(lines), 2), ends.T.ravel())
    incidence = sparse.csr_array((np.repeat([1.0, -1.0], lines), place), shape=(lines, buses))
    weighted = sparse.diags_array(100.0 / reactance) @ incidence
    laplacian = sparse.csc_matrix((incidence.T @ weighted)[1:, 1:])
    angle = np.zeros((buses, len(injection)))
    angle[1:] = splu(laplacian).solve(np.ascontiguousarray(injection.T[1:]))
    flow: Floats = (weighted @ angle).T
    return flow


def _ratings(random: Random, ends: Integers, flow: Floats) -> Floats:
    """Return ratings, array (line,), MW; lines whose loss splits the network carry their peak."""
    size = np.abs(flow)
    highest = np.maximum(size.max(axis=0), 5.0)
    headroom = random.uniform(0.7, 2.2, len(ends))
    sole = _bridges(ends)

    def ratings(factor: float) -> Floats:
        return highest * np.where(sole, 1.5, np.maximum(factor * headroom, 0.5))

    low, high = 0.1, 4.0
    for _ in range(40):
        factor = (low + high) / 2
        near = (size >= CLOSE * ratings(factor)).mean()
        low, high = (factor, high) if near > NEAR else (low, factor)
    return ratings(high).round(1)


def _bridges(ends: Integers) -> NDArray[np.bool_]:
    """Tell which lines lie on no loop, array (line,)."""
    found = {frozenset(pair) for pair in nx.bridges(nx.Graph(ends.tolist()))}
    return np.array([frozenset(pair) in found for pair in ends.tolist()])


def _lines(ends: Integers, reactance: Floats, rating: Floats) -> pd.DataFrame:
    bus = np.array(_names("b", int(ends.max()) + 1))
    return pd.DataFrame({
        "line": _names("l", len(ends)), "from_bus": bus[ends[:, 0]], "to_bus": bus[ends[:, 1]],
        "reactance_pu": reactance.round(7), "rating_mw": rating,
    })  # fmt: skip


def _hourly(profiles: pd.DataFrame) -> pd.DataFrame:
    times = pd.date_range("2027-03-01", periods=HOURS, freq="h").strftime("%Y-%m-%dT%H:%M")
    return pd.concat([pd.Series(times, name="time"), profiles], axis=1)
