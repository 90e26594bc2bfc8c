"""The network with its results as GeoJSON (RFC 7946): buses as points, lines and ties between them.

Public names: `LAYERS`, `feature_collections`.
"""

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from simulator.case.wording import listed, quoted
from simulator.errors import OptionError
from simulator.report.view import View

__all__ = ["LAYERS", "feature_collections"]

Floats = NDArray[np.float64]
Position = tuple[float, float]
Collection = dict[str, Any]

LAYERS = ("buses", "lines", "ties")
HALF_TURN = 180.0
"""Degrees of longitude; a line longer than this goes the other way, over the antimeridian."""


def feature_collections(view: View, caution: str) -> dict[str, Collection]:
    """Return a feature collection a layer; positions are longitude, latitude in degrees (WGS 84)."""
    places = _places(view)
    about = {
        "case": view.case_name,
        "from": view.clock.edges[0].isoformat(timespec="minutes"),
        "until": view.clock.edges[-1].isoformat(timespec="minutes"),
        "currency": view.currency,
        "caution": caution,
    }
    features = {
        "buses": _buses(view, places),
        "lines": _between(view, "line", places, _line_results(view)),
        "ties": _between(view, "tie", places, _tie_results(view)),
    }
    return {
        name: {"type": "FeatureCollection", "about": about, "features": features[name]}
        for name in LAYERS
    }


def _places(view: View) -> dict[str, Position]:
    """Return where each bus is; refuse a case in which one has no position."""
    east, north = (view.numbers(f"bus_{name}", "bus") for name in ("longitude", "latitude"))
    names, known = view.names("bus"), np.isfinite(east) & np.isfinite(north)
    missing = [quoted(name) for name, found in zip(names, known, strict=True) if not found]
    if missing:
        raise OptionError(
            "--to geojson, must have a latitude and a longitude for every bus, found none for "
            f"{listed(missing)}, give them in network/buses.csv and run the case again, or choose "
            "another format"
        )
    return dict(zip(names, zip(east.tolist(), north.tolist(), strict=True), strict=True))


def _buses(view: View, places: Mapping[str, Position]) -> list[dict[str, Any]]:
    price, currency = view.values("price"), view.currency
    columns = {
        "bus": view.names("bus"),
        "zone": view.labels("bus_zone", "bus"),
        "voltage_kv": view.numbers("bus_voltage_kv", "bus"),
        "mean_price_per_mwh": price.mean(axis=0),
        "lowest_price_per_mwh": price.min(axis=0),
        "highest_price_per_mwh": price.max(axis=0),
        "currency": [currency] * view.size("bus"),
    }
    points = [{"type": "Point", "coordinates": list(place)} for place in places.values()]
    return _features(columns, points)


def _line_results(view: View) -> dict[str, Any]:
    """Return a line's results; its loading is |flow| as a share of the rating where it has one."""
    share = 100 * view.loading
    limited = np.isfinite(share)
    total = np.where(limited, share, 0.0).sum(axis=0)
    with_rating = limited.sum(axis=0)
    mean = np.divide(total, with_rating, out=np.full(len(total), np.nan), where=with_rating > 0)
    highest = np.where(limited, share, -1.0).max(axis=0)
    return {
        "rating_mw": view.values("line_rating").max(axis=0),
        "mean_loading_percent": mean,
        "highest_loading_percent": np.where(with_rating > 0, highest, np.nan),
        "congestion_hours": view.values("congestion_hours"),
        "hours_at_limit": view.values("hours_at_limit"),
        "congestion_rent": view.values("congestion_rent").sum(axis=0),
        "currency": [view.currency] * view.size("line"),
    }


def _tie_results(view: View) -> dict[str, Any]:
    flow = view.values("tie_flow")
    return {
        "sent_forward_mwh": np.maximum(flow, 0.0).sum(axis=0) * view.period_hours,
        "sent_back_mwh": np.maximum(-flow, 0.0).sum(axis=0) * view.period_hours,
        "mean_flow_mw": flow.mean(axis=0),
        "highest_flow_mw": np.abs(flow).max(axis=0),
    }


def _between(
    view: View, kind: str, places: Mapping[str, Position], results: Mapping[str, Any]
) -> list[dict[str, Any]]:
    """Return a feature a line or tie, from one bus to the other."""
    starts, ends = (view.labels(f"{kind}_{end}_bus", kind) for end in ("from", "to"))
    columns = {kind: view.names(kind), "from_bus": starts, "to_bus": ends, **results}
    paths = [_path(places[one], places[other]) for one, other in zip(starts, ends, strict=True)]
    return _features(columns, paths)


def _path(start: Position, end: Position) -> dict[str, Any]:
    """Return a straight line between two places, cut in two at the antimeridian (RFC 7946, 3.1.9).

    >>> _path((-8.0, 53.0), (-7.0, 54.0))["coordinates"]
    [[-8.0, 53.0], [-7.0, 54.0]]
    >>> _path((178.0, -40.0), (-178.0, -44.0))["coordinates"]
    [[[178.0, -40.0], [180.0, -42.0]], [[-180.0, -42.0], [-178.0, -44.0]]]
    """
    (east, north), (far_east, far_north) = start, end
    if abs(far_east - east) <= HALF_TURN:
        return {"type": "LineString", "coordinates": [list(start), list(end)]}
    edge = math.copysign(HALF_TURN, east)
    share = (edge - east) / (far_east + 2 * edge - east)
    crossing = north + share * (far_north - north)
    parts = [[list(start), [edge, crossing]], [[-edge, crossing], list(end)]]
    return {"type": "MultiLineString", "coordinates": parts}


def _features(
    columns: Mapping[str, Any], geometries: Sequence[Mapping[str, Any]]
) -> list[dict[str, Any]]:
    """Return features; the first column names them, numbers that are not finite become null."""
    names = list(columns)
    rows = zip(*columns.values(), strict=True)
    return [
        {
            "type": "Feature",
            "id": row[0],
            "geometry": dict(geometry),
            "properties": dict(zip(names, map(_plain, row), strict=True)),
        }
        for row, geometry in zip(rows, geometries, strict=True)
    ]


def _plain(value: Any) -> Any:
    if isinstance(value, str):
        return value
    return float(value) + 0.0 if np.isfinite(value) else None
