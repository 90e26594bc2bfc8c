"""The charts of studies as plain figures, drawn by the same script as those of a run.

Public names: `bars`, `by_bus_and_size`, `choices_of`, `maps_of`, `moving_ranks`, `trade_off`.

Values that are not known are NaN and leave gaps. Names pass through `plotly_text` before they get here.
"""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from plotly.colors import sequential

from simulator.report.figures import DASHES, HUES, Figure
from simulator.report.layout import place_buses
from simulator.report.tables import ranked
from simulator.report.view import plotly_text, rounded

__all__ = ["bars", "by_bus_and_size", "choices_of", "maps_of", "moving_ranks", "trade_off"]

Floats = NDArray[np.float64]

MOST_BARS = 25
MOST_RANKS = 10
MARK = "/"
"""Pattern of a bar that is no more than the gaps of a search allow."""


def choices_of(named: Mapping[str, Figure]) -> Figure:
    """Return figures of one kind as one from which the reader chooses."""
    first = next(iter(named.values()))
    choices = [
        {"name": name, "traces": figure["traces"], "layout": figure["layout"]}
        for name, figure in named.items()
    ]
    height = max(figure["height"] for figure in named.values())
    return {"height": height, "layout": first["layout"], "choices": choices, "traces": []}


def bars(
    names: Sequence[str], series: Mapping[str, Floats], order: Sequence[int], title: str,
    marked: NDArray[np.bool_] | None = None,
) -> Figure:  # fmt: skip
    """Ranked horizontal bars, a colour a series; the first of `order` on top."""
    shown = list(order[:MOST_BARS])
    labels = [plotly_text(names[place]) for place in shown]
    pattern = [MARK if marked is not None and marked[place] else "" for place in shown]
    traces = [
        {
            "type": "bar", "orientation": "h", "name": plotly_text(name), "y": labels,
            "x": rounded(values[shown], 2),
            "marker": {"color": f"var(--hue-{place % HUES + 1})", "pattern": {"shape": pattern}},
            "hovertemplate": "%{y}: %{x:,.2f}<extra>" + plotly_text(name) + "</extra>",
        }
        for place, (name, values) in enumerate(series.items())
    ]  # fmt: skip
    layout = {
        "xaxis": {"title": {"text": plotly_text(title)}, "rangemode": "tozero", "zeroline": True},
        "yaxis": {"type": "category", "categoryorder": "array", "categoryarray": labels,
                  "autorange": "reversed", "automargin": True, "showgrid": False},
        "barmode": "group", "hovermode": "closest", "showlegend": len(traces) > 1,
    }  # fmt: skip
    return {"height": 110 + (14 + 9 * len(traces)) * len(shown), "traces": traces, "layout": layout}


def by_bus_and_size(
    names: Sequence[str], sizes: Floats, values: Floats, order: Sequence[int], unit: str
) -> Figure:
    """Return a picture of buses by sizes; values : array (bus, size)."""
    shown = list(order)
    picture = {
        "type": "heatmap", "y": [plotly_text(names[place]) for place in shown],
        "x": [f"{size:g} MW" for size in sizes], "z": rounded(values[shown], 2),
        "colorscale": _scale(), "colorbar": {"title": {"text": plotly_text(unit)}, "thickness": 14},
        "xgap": 1, "ygap": 1, "hovertemplate": "%{y}, %{x}: %{z:,.2f}<extra></extra>",
    }  # fmt: skip
    layout = {
        "xaxis": {"type": "category", "title": {"text": "size of the load"}},
        "yaxis": {"type": "category", "autorange": "reversed", "automargin": True, "showgrid": False},
        "hovermode": "closest",
    }  # fmt: skip
    height = int(np.clip(120 + 16 * len(shown), 200, 1500))
    return {"height": height, "traces": [picture], "layout": layout}


def _scale() -> list[tuple[float, str]]:
    colours = sequential.Cividis
    return [(round(place / (len(colours) - 1), 4), each) for place, each in enumerate(colours)]


def trade_off(
    names: Sequence[str], across: Floats, up: Floats, titles: tuple[str, str], best: int | None = None
) -> Figure:  # fmt: skip
    """Return one measure against another, a dot a bus; few dots carry their names."""
    known = np.flatnonzero(np.isfinite(across) & np.isfinite(up)).tolist()
    few = len(known) <= MOST_BARS
    labels = [plotly_text(names[place]) for place in known]
    colour = ["var(--alarm-mark)" if place == best else "var(--accent)" for place in known]
    trace = {
        "type": "scatter", "mode": "markers+text" if few else "markers", "text": labels,
        "textposition": "top center", "textfont": {"size": 11}, "cliponaxis": False,
        "x": rounded(across[known], 3), "y": rounded(up[known], 3),
        "marker": {"size": 10, "color": colour, "line": {"width": 1, "color": "var(--paper)"}},
        "hovertemplate": "%{text}<br>%{x:,.2f}<br>%{y:,.2f}<extra></extra>",
    }  # fmt: skip
    layout = {
        "xaxis": {"title": {"text": plotly_text(titles[0])}},
        "yaxis": {"title": {"text": plotly_text(titles[1])}},
        "hovermode": "closest", "margin": {"t": 24, "r": 70},
    }  # fmt: skip
    return {"height": 440, "traces": [trace], "layout": layout}


def moving_ranks(names: Sequence[str], columns: Sequence[str], ranks: Floats) -> Figure:
    """Return how places of buses move from column to column; ranks : array (bus, column), 1 is best."""
    shown = [place for place in ranked(-ranks.min(axis=1)) if ranks[place].min() <= MOST_RANKS]
    traces: list[Any] = [
        {
            "type": "scatter", "mode": "lines+markers", "name": plotly_text(names[place]),
            "x": list(columns), "y": rounded(ranks[place], 0),
            "line": {"width": 2, "color": f"var(--stroke-{order % HUES + 1})",
                     "dash": DASHES[order // HUES % len(DASHES)]},
            "hovertemplate": "%{fullData.name}, %{x}: place %{y}<extra></extra>",
        }
        for order, place in enumerate(shown)
    ]  # fmt: skip
    layout = {
        "xaxis": {"type": "category", "title": {"text": "duration"}},
        "yaxis": {"title": {"text": "place, 1 is best"}, "autorange": "reversed"},
        "hovermode": "closest", "showlegend": True,
    }  # fmt: skip
    return {"height": 420, "traces": traces, "layout": layout}


def maps_of(dataset: xr.Dataset, measures: Mapping[str, tuple[Floats, str]]) -> Figure | None:
    """Return maps of measures to choose from, name → (array (bus,), unit); None without positions."""
    names = [str(name) for name in dataset["bus"].to_numpy()]
    latitude, longitude = (
        np.asarray(dataset[f"bus_{axis}"].to_numpy(), dtype=float)
        for axis in ("latitude", "longitude")
    )
    if len(names) < 2 or not (np.isfinite(latitude) & np.isfinite(longitude)).all():  # noqa: PLR2004
        return None
    place = {name: bus for bus, name in enumerate(names)}
    ends = [
        (place[str(one)], place[str(other)])
        for one, other in zip(
            dataset["line_from_bus"].to_numpy(), dataset["line_to_bus"].to_numpy(), strict=True
        )
        if str(one) in place and str(other) in place
    ]
    return choices_of({
        name: _site_map(names, latitude, longitude, ends, values, unit)
        for name, (values, unit) in measures.items()
    })  # fmt: skip


def _site_map(
    names: Sequence[str], latitude: Floats, longitude: Floats, lines: Sequence[tuple[int, int]],
    values: Floats, unit: str,
) -> Figure:  # fmt: skip
    """Return buses on a map, coloured by a value; hollow where it is not known."""
    at = place_buses(latitude, longitude, lines)
    known = np.isfinite(values)
    labels = [plotly_text(name) for name in names]
    few = len(labels) <= MOST_BARS
    ends = {axis: [each for one, other in lines for each in (place[one], place[other], None)]
            for axis, place in (("x", at.x.tolist()), ("y", at.y.tolist()))}  # fmt: skip
    traces: list[Any] = [
        {"type": "scatter", "mode": "lines", "hoverinfo": "skip",
         "x": ends["x"] or [None], "y": ends["y"] or [None],
         "line": {"width": 1.4, "color": "var(--line-low)"}},
        _dots(at.x, at.y, labels, ~known, few, {"color": "var(--paper)"}, "not run"),
        _dots(at.x, at.y, labels, known, few, {
            "color": rounded(values[known], 2), "colorscale": _scale(), "showscale": True,
            "colorbar": {"title": {"text": plotly_text(unit)}, "thickness": 14},
        }, "%{marker.color:,.2f}"),
    ]  # fmt: skip
    bare = {"visible": False, "showgrid": False, "zeroline": False}
    layout = {
        "xaxis": bare, "yaxis": {**bare, "scaleanchor": "x", "scaleratio": 1},
        "hovermode": "closest", "showlegend": False, "margin": {"l": 40, "r": 40, "t": 24, "b": 12},
    }  # fmt: skip
    return {"height": 560, "traces": traces, "layout": layout}


def _dots(
    x: Floats, y: Floats, labels: Sequence[str], here: NDArray[np.bool_], few: bool,  # noqa: FBT001
    colour: Mapping[str, Any], said: str,
) -> Figure:  # fmt: skip
    places = np.flatnonzero(here).tolist()
    return {
        "type": "scatter", "mode": "markers+text" if few else "markers", "cliponaxis": False,
        "x": x[places].tolist() or [None], "y": y[places].tolist() or [None],
        "text": [labels[place] for place in places], "textposition": "top center",
        "textfont": {"size": 11},
        "marker": {"size": 13, "line": {"width": 1.2, "color": "var(--ink)"}, **colour},
        "hovertemplate": "%{text}: " + said + "<extra></extra>",
    }  # fmt: skip
