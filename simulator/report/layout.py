"""Where the buses of a network stand on its map.

Public names: `Positions`, `place_buses`.

Coordinates are used if every bus has them; otherwise places are made up from who is joined to whom,
the same ones for the same network.
"""

from collections.abc import Hashable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["Positions", "place_buses"]

Floats = NDArray[np.float64]
Edge = tuple[int, int]

EXACT_UP_TO = 250
"""Buses of one island up to which distances on the page follow distances in the network."""
SEED = 7
GAP = 0.6
"""Free margin around an island, in the units of its radius, the square root of its buses."""
APART = 0.016
"""Share of the map's extent by which buses of one place are moved apart."""


@dataclass(frozen=True, eq=False)
class Positions:
    """Places on a plane whose two axes have one scale.

    x, y : array (bus,); y grows to the north
    geographic : whether they come from latitude and longitude
    """

    x: Floats
    y: Floats
    geographic: bool


def place_buses(latitude: Floats, longitude: Floats, edges: Sequence[Edge]) -> Positions:
    """Place buses by their coordinates, degrees, or by the lines and ties between them.

    >>> line = place_buses(np.full(3, np.nan), np.full(3, np.nan), [(0, 1), (1, 2)])
    >>> bool(abs(line.x[0] - line.x[2]) + abs(line.y[0] - line.y[2]) > 1), line.geographic
    (True, False)
    """
    if len(latitude) and np.isfinite(latitude).all() and np.isfinite(longitude).all():
        return _projected(latitude, longitude)
    return _drawn(len(latitude), edges)


def _projected(latitude: Floats, longitude: Floats) -> Positions:
    """Shrink longitudes by the cosine of the mean latitude, so that both axes have one scale."""
    centre = _middle(longitude)
    east = (longitude - centre + 180.0) % 360.0 - 180.0
    places = np.column_stack([east * np.cos(np.radians(latitude.mean())), latitude])
    places = _apart(places)
    return Positions(places[:, 0], places[:, 1], geographic=True)


def _apart(places: Floats) -> Floats:
    """Move buses of one place, a substation as a rule, onto a small circle around it."""
    extent = float(np.ptp(places, axis=0).max()) or 1.0
    _, place, size = np.unique(places, axis=0, return_inverse=True, return_counts=True)
    moved = places.copy()
    for shared in np.flatnonzero(size > 1):
        buses = np.flatnonzero(place == shared)
        turn = 2 * np.pi * np.arange(len(buses)) / len(buses)
        moved[buses] += np.column_stack([np.cos(turn), np.sin(turn)]) * extent * APART
    return moved


def _middle(longitude: Floats) -> float:
    """Return the mean direction of longitudes, which may lie on both sides of 180 degrees."""
    angle = np.radians(longitude)
    return float(np.degrees(np.arctan2(np.sin(angle).mean(), np.cos(angle).mean())))


def _drawn(buses: int, edges: Iterable[Edge]) -> Positions:
    import networkx as nx

    graph = nx.Graph()
    graph.add_nodes_from(range(buses))
    graph.add_edges_from((one, other) for one, other in edges if one != other)
    islands = sorted((sorted(part) for part in nx.connected_components(graph)), key=_size_and_first)
    places = np.zeros((buses, 2))
    for island, corner in zip(islands, _corners([len(part) for part in islands]), strict=True):
        places[island] = _one_island(graph.subgraph(island), island) + corner
    return Positions(places[:, 0], places[:, 1], geographic=False)


def _size_and_first(island: list[int]) -> tuple[int, int]:
    return -len(island), island[0]


def _one_island(graph: Any, buses: list[int]) -> Floats:
    """Place the buses of one island within a circle that grows with their number."""
    import networkx as nx

    if len(buses) == 1:
        return np.zeros((1, 2))
    ordered = nx.Graph()
    ordered.add_nodes_from(buses)
    ordered.add_edges_from(sorted(tuple(sorted(edge)) for edge in graph.edges))
    found: Mapping[Hashable, Floats]
    if len(buses) <= EXACT_UP_TO:
        found = nx.kamada_kawai_layout(ordered)
    else:
        found = nx.spring_layout(ordered, seed=SEED)
    places = np.array([found[bus] for bus in buses])
    return places / np.abs(places).max() * _radius(len(buses))


def _radius(buses: int) -> float:
    return float(np.sqrt(buses)) if buses > 1 else 0.0


def _corners(sizes: list[int]) -> list[Floats]:
    """Return the centre of each island: rows from left to right, as wide as about a square."""
    reach = [_radius(size) + GAP for size in sizes]
    width = max(
        [2 * each for each in reach] + [float(np.sqrt(sum(4 * r * r for r in reach))) * 1.3]
    )
    centres, left, top, row = [], 0.0, 0.0, 0.0
    for each in reach:
        if left and left + 2 * each > width:
            left, top, row = 0.0, top - row, 0.0
        centres.append(np.array([left + each, top - each]))
        left, row = left + 2 * each, max(row, 2 * each)
    return centres
