"""The page's charts as plain plotly figures: traces and layouts without theme or time labels.

Public names: `Figure`, `daily_spread`, `dispatch`, `duration_curves`, `energy_groups`, `line_strokes`,
`lost_groups`, `network_map`, `on_off`, `price_picture`, `reserve_prices`, `spread_by_day`, `stored_energy`,
`tie_flows`, `unit_order`.

The page's script completes them. It puts the labels of the steps on the time axis of a figure with
`"steps": True`, turns the step numbers of a trace's `at` into labels, and resolves `var(--name)` to the
colour of the theme. Names of elements pass through `plotly_text` before they get here.
"""

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from plotly.colors import sequential

from simulator.report.layout import place_buses
from simulator.report.plans import HELD, PAYS, reason_rows
from simulator.report.tables import HALF, NEGLIGIBLE, ranked
from simulator.report.view import View, plotly_text, rounded

__all__ = [
    "Figure",
    "daily_spread",
    "dispatch",
    "duration_curves",
    "energy_groups",
    "line_strokes",
    "lost_groups",
    "network_map",
    "on_off",
    "price_picture",
    "reserve_prices",
    "spread_by_day",
    "stored_energy",
    "tie_flows",
    "unit_order",
]

Figure = dict[str, Any]
Floats = NDArray[np.float64]
Groups = dict[str, Floats]

HUES = 6
PATTERNS = ("", "/", ".")
MOST_GROUPS = HUES * len(PATTERNS)
OTHERS = "all other technologies"
DISCHARGE, UNSERVED = "storage discharge", "unserved"
MOST_CURVES = 6
MOST_BARS = 25
CURVE_POINTS = 400
DASHES = ("solid", "dash", "dot")
NO_TECHNOLOGY = {"unit": "units without technology", "plant": "renewables without technology"}
CLASSES = (
    {"name": "no rating", "below": -1, "colour": "var(--line-free)", "width": 1.4, "dash": "dot"},
    {"name": "under 50 %", "below": 50, "colour": "var(--line-low)", "width": 1.6},
    {"name": "50 to 80 %", "below": 80, "colour": "var(--line-mid)", "width": 2.6},
    {"name": "80 to 100 %", "below": 99.95, "colour": "var(--line-high)", "width": 3.8},
    {"name": "at its limit", "below": 1e9, "colour": "var(--alarm-mark)", "width": 5.5},
)
"""Loading of lines, %, on the map; each class reaches up to `below`."""


def energy_groups(view: View) -> Groups:
    """Power by technology, array (period,) each: units, then renewables, then storage discharge."""
    groups = _by_technology(view, "unit", "unit_output")
    for name, power in _by_technology(view, "plant", "renewable_output").items():
        groups[name] = groups[name] + power if name in groups else power
    if view.size("store"):
        discharge = view.values("storage_discharge").sum(axis=1)
        groups[DISCHARGE] = groups.get(DISCHARGE, 0.0) + discharge
    return groups


def lost_groups(view: View) -> Groups:
    """Curtailed power by technology, array (period,) each."""
    return _by_technology(view, "plant", "curtailment")


def _by_technology(view: View, dimension: str, variable: str) -> Groups:
    values = view.values(variable)
    labels = view.labels(f"{dimension}_technology", dimension)
    named = np.array([label or NO_TECHNOLOGY[dimension] for label in labels], dtype=object)
    return {str(name): values[:, named == name].sum(axis=1) for name in sorted(set(named))}


def dispatch(view: View, groups: Mapping[str, Floats]) -> Figure:
    """Supply stacked by technology above zero, charging below, load and curtailment as lines."""
    shown = _fewer({name: power for name, power in groups.items() if np.abs(power).max() > 0})
    colours = _fills(_by_capacity(view, shown.keys() - {DISCHARGE}))
    supply = sum(groups.values(), np.zeros(len(view.clock)))
    unserved = view.values("load_unserved").sum(axis=1)
    traces = [
        _area(view, name, shown[name], colours.get(name, STORE_FILL)) for name in _order(shown)
    ]
    if unserved.max(initial=0.0) > 0:
        traces.append(_area(view, UNSERVED, unserved, ("var(--alarm-mark)", "x")))
    traces += _below_zero(view) + _outlines(view, supply + unserved)
    layout = {"yaxis": {"title": {"text": "MW"}, "rangemode": "tozero"}, "hovermode": "x unified"}
    return {"steps": True, "height": 460, "traces": traces, "layout": layout}


STORE_FILL = ("var(--store)", "")


def _fewer(groups: Groups) -> Groups:
    """Join the technologies with the least energy if there are more than fills to tell them apart."""
    names = sorted(groups, key=lambda name: -float(groups[name].sum()))
    if len(names) <= MOST_GROUPS:
        return groups
    kept = {name: groups[name] for name in names[: MOST_GROUPS - 1]}
    rest = sum((groups[name] for name in names[MOST_GROUPS - 1 :]), np.zeros(1))
    return {**kept, OTHERS: rest}


def _by_capacity(view: View, names: Iterable[str]) -> list[str]:
    """Order technologies by what is installed, the same from run to run of a case."""
    installed: dict[str, float] = {}
    for dimension, size in (("unit", "unit_max_output_mw"), ("plant", "plant_capacity_mw")):
        technology = view.labels(f"{dimension}_technology", dimension)
        capacity = np.nan_to_num(view.numbers(size, dimension)).tolist()
        for name, each in zip(technology, capacity, strict=True):
            label = name or NO_TECHNOLOGY[dimension]
            installed[label] = installed.get(label, 0.0) + each
    return sorted(names, key=lambda name: (-installed.get(name, 0.0), name.casefold(), name))


def _fills(names: Sequence[str]) -> dict[str, tuple[str, str]]:
    """Give each technology a colour and a pattern."""
    return {
        name: (f"var(--hue-{place % HUES + 1})", PATTERNS[place // HUES])
        for place, name in enumerate(names)
    }


def _order(groups: Mapping[str, Floats]) -> list[str]:
    """Put the steadiest supply at the bottom and what stores give back on top."""

    def unsteadiness(name: str) -> tuple[bool, float]:
        power = groups[name]
        return name == DISCHARGE, float(power.std() / (abs(power.mean()) or 1.0))

    return sorted(groups, key=unsteadiness)


def _area(view: View, name: str, power: Floats, fill: tuple[str, str], stack: str = "up") -> Figure:
    colour, pattern = fill
    trace: Figure = {
        "type": "scatter", "stackgroup": stack, "name": plotly_text(name), "mode": "lines",
        "line": {"shape": "hvh", "width": 0.5, "color": "var(--paper)"}, "fillcolor": colour,
        "y": rounded(view.steps.mean(power)), "hovertemplate": "%{y:,.1f} MW",
    }  # fmt: skip
    if pattern:
        trace["fillpattern"] = {
            "shape": pattern, "bgcolor": colour, "fgcolor": "var(--paper)", "size": 6, "solidity": 0.2,
            "fgopacity": 0.7,
        }  # fmt: skip
    return trace


def _below_zero(view: View) -> list[Figure]:
    charge = view.values("storage_charge").sum(axis=1)
    if not charge.max(initial=0.0) > 0:
        return []
    return [_area(view, "storage charging", -charge, ("var(--store)", "/"), "down")]


def _outlines(view: View, supply: Floats) -> list[Figure]:
    """Load as a line, and what could have been supplied but was curtailed as a dashed one."""
    load, lost = view.values("load_demand").sum(axis=1), view.values("curtailment").sum(axis=1)
    lines = [_outline(view, "load", load, {"width": 2, "color": "var(--ink)"})]
    if lost.max(initial=0.0) > 0:
        dashed = {"width": 1.5, "dash": "dash", "color": "var(--ink)"}
        line = _outline(view, "with what was curtailed", supply + lost, dashed)
        line["customdata"] = rounded(view.steps.mean(lost))
        line["hovertemplate"] = "%{y:,.1f} MW, %{customdata:,.1f} MW curtailed"
        lines.append(line)
    return lines


def _outline(view: View, name: str, power: Floats, line: Figure) -> Figure:
    return {
        "type": "scatter", "mode": "lines", "name": plotly_text(name), "line": {"shape": "hvh", **line},
        "y": rounded(view.steps.mean(power)), "hovertemplate": "%{y:,.1f} MW",
    }  # fmt: skip


def tie_flows(view: View) -> Figure:
    """Flow of the ties that carry the most, positive from their first bus to their second."""
    flow, names = view.values("tie_flow"), view.names("tie")
    chosen = ranked(np.abs(flow).sum(axis=0))[:MOST_CURVES]
    traces = [
        _outline(view, names[tie], flow[:, tie], _stroke(place)) for place, tie in enumerate(chosen)
    ]
    layout = {"yaxis": {"title": {"text": "MW"}}, "hovermode": "x unified", "showlegend": True}
    return {"steps": True, "height": 280, "traces": traces, "layout": layout}


def _stroke(place: int) -> Figure:
    return {
        "width": 2,
        "color": f"var(--stroke-{place % HUES + 1})",
        "dash": DASHES[place % len(DASHES)],
    }


def network_map(view: View) -> Figure:
    """Everything the script needs to draw the network at any step."""
    bus = {name: place for place, name in enumerate(view.names("bus"))}
    ends = {kind: _ends(view, kind, bus) for kind in ("line", "tie")}
    places = place_buses(
        view.numbers("bus_latitude", "bus"),
        view.numbers("bus_longitude", "bus"),
        ends["line"] + ends["tie"],
    )
    mean = view.steps.mean
    return {
        "x": rounded(places.x, 4), "y": rounded(places.y, 4), "geographic": places.geographic,
        "lines": [plotly_text(name) for name in view.names("line")], "line_ends": ends["line"],
        "ties": [plotly_text(name) for name in view.names("tie")], "tie_ends": ends["tie"],
        "flow": rounded(mean(view.values("line_flow")).T),
        "loading": rounded(100 * mean(view.loading).T, 1),
        "tie_flow": rounded(mean(view.values("tie_flow")).T), "classes": list(CLASSES),
        "start": int(np.nan_to_num(np.ptp(mean(view.values("price")), axis=1)).round(2).argmax()),
    }  # fmt: skip


def line_strokes(view: View) -> list[Figure]:
    """Return the kinds of line on the map, for its key."""
    free = bool(np.isnan(view.loading).any())
    kinds = list(CLASSES[0 if free else 1 :]) if view.size("line") else []
    if view.size("tie"):
        kinds.append({"name": "tie", "colour": "var(--tie)", "width": 2.2, "dash": "dash"})
    return kinds


def _ends(view: View, kind: str, bus: Mapping[str, int]) -> list[tuple[int, int]]:
    one, other = (view.labels(f"{kind}_{end}_bus", kind) for end in ("from", "to"))
    return [(bus[start], bus[end]) for start, end in zip(one, other, strict=True)]


def price_picture(view: View) -> Figure:
    """Prices and their parts at every bus and step, the buses ordered by mean price, dearest first."""
    price = view.values("price")
    parts = {
        part: _compact(view.steps.mean(view.values(f"price_{part}")))
        for part in ("energy", "congestion", "loss")
        if view.has(f"price_{part}")
    }
    return {
        "buses": [plotly_text(name) for name in view.names("bus")],
        "zones": [plotly_text(name) for name in view.labels("bus_zone", "bus")],
        "price": rounded(view.steps.mean(price).T, 2), "parts": parts, "causes": _causes(view),
        "order": ranked(price.mean(axis=0)), "scale": _scale(view.steps.mean(price)),
        "unit": plotly_text(view.price_unit),
    }  # fmt: skip


def _causes(view: View) -> Figure | None:
    """Return which limit most of each congestion part is of, and how much of it; nothing for means."""
    if view.steps.averaged or not view.size("cause"):
        return None
    return {
        "names": [plotly_text(name) for name in view.names("cause")],
        "which": view.values("main_cause").astype(int).T.tolist(),
        "part": rounded(view.values("main_cause_part").T, 2),
    }


def _compact(values: Floats) -> Figure:
    """Return values (step, bus) by bus, or once for all buses if they share them."""
    rows = np.round(values.T, 2)
    if len(rows) and (rows == rows[0]).all():
        return {"every": rounded(rows[0], 2)}
    return {"rows": rounded(rows, 2)}


def _scale(price: Floats) -> Figure:
    """Return the ends of the colour scale: a few extreme prices must not flatten all others."""
    known = price[np.isfinite(price)].round(2)
    known = known if len(known) else np.zeros(1)
    least, most = float(known.min()), float(known.max())
    usual_low, usual_high = (float(end) for end in np.quantile(known, (0.05, 0.95)))
    reach = usual_high - usual_low or most - least or 1.0
    low, high = max(least, usual_low - reach), min(most, usual_high + reach)
    if least < 0:
        low = min(low, max(least, -reach))
    if low == high:
        low, high = low - 0.5, high + 0.5
    return {
        "low": round(low, 2), "high": round(high, 2), "least": round(least, 2), "most": round(most, 2),
        "stops": _stops(low, high) if least < 0 else _even(sequential.Cividis),
    }  # fmt: skip


def _stops(low: float, high: float) -> list[tuple[float, str]]:
    """Return blues below zero and oranges above, a pale or dark neutral at zero."""
    zero = round(float(np.clip(-low / (high - low), 0.0, 1.0)), 4)
    below = ["var(--below-2)", "var(--below-1)", "var(--zero)"]
    above = ["var(--zero)", "var(--above-1)", "var(--above-2)", "var(--above-3)"]
    stops = [(round(zero * at, 4), colour) for at, colour in _even(below) if zero > 0]
    stops += [(round(zero + (1 - zero) * at, 4), colour) for at, colour in _even(above) if zero < 1]
    return stops


def _even(colours: Sequence[str]) -> list[tuple[float, str]]:
    last = len(colours) - 1
    return [(round(place / last, 4), colour) for place, colour in enumerate(colours)]


def duration_curves(view: View, lines: Sequence[int]) -> Figure:
    """Return the loading of lines from their most loaded hour to their least."""
    names = view.names("line")
    periods = len(view.clock)
    places = np.unique(np.linspace(0, periods - 1, min(periods, CURVE_POINTS)).round().astype(int))
    traces = [
        {
            "type": "scatter", "mode": "lines+markers" if periods == 1 else "lines",
            "name": plotly_text(names[line]), "line": _stroke(place),
            "x": rounded(100 * (places + 0.5) / periods, 2),
            "y": rounded(100 * np.sort(view.loading[:, line])[::-1][places], 1),
            "hovertemplate": "%{y:.1f} % or more in %{x:.1f} % of hours",
        }
        for place, line in enumerate(lines)
    ]  # fmt: skip
    peak = 100 * float(np.nan_to_num(view.loading[:, lines]).max())
    layout = {
        "xaxis": {"title": {"text": "share of the hours, %"}, "range": [0, 100]},
        "yaxis": {"title": {"text": "loading, %"}, "range": [0, 1.05 * max(100.0, peak)]},
        "showlegend": True,
        "shapes": [
            {"type": "line", "xref": "paper", "x0": 0, "x1": 1, "y0": 100, "y1": 100,
             "line": {"color": "var(--muted)", "width": 1, "dash": "dot"}}
        ],
    }  # fmt: skip
    return {"height": 340, "traces": traces, "layout": layout}


def spread_by_day(view: View) -> tuple[Floats, bool]:
    """Return highest less lowest price, array (day, bus), and whether only whole days are in it."""
    price = view.values("price")
    day, firsts = view.clock.days
    chosen = view.clock.whole_days
    days = chosen or range(len(firsts))
    spread = np.stack([np.ptp(price[day == number], axis=0) for number in days])
    return spread, bool(chosen)


def daily_spread(view: View, spread: Floats) -> Figure:
    """Mean daily spread of the buses where it is greatest, with its range over the days."""
    mean, names = spread.mean(axis=0), view.names("bus")
    chosen = ranked(mean)[:MOST_BARS]
    labels = [plotly_text(names[bus]) for bus in chosen]
    low, high = spread.min(axis=0)[chosen], spread.max(axis=0)[chosen]
    traces = [
        {
            "type": "scatter", "mode": "markers", "x": rounded(mean[chosen], 2), "y": labels,
            "marker": {"size": 9, "color": "var(--accent)"}, "cliponaxis": False,
            "customdata": rounded(np.c_[low, high], 2),
            "error_x": {
                "type": "data", "symmetric": False, "array": rounded(high - mean[chosen], 2),
                "arrayminus": rounded(mean[chosen] - low, 2), "color": "var(--line-mid)",
                "thickness": 1.2, "width": 0,
            },
            "hovertemplate": "%{y}: %{x:,.2f}, from %{customdata[0]:,.2f} to %{customdata[1]:,.2f}"
                             "<extra></extra>",
        }
    ]  # fmt: skip
    unit = plotly_text(view.price_unit)
    layout = {
        "xaxis": {"title": {"text": f"daily spread, {unit}"}, "rangemode": "tozero"},
        "yaxis": _rows_axis(labels),
        "hovermode": "closest",
    }
    return {"height": 110 + 21 * len(chosen), "traces": traces, "layout": layout}


def _rows_axis(labels: Sequence[str]) -> Figure:
    return {"type": "category", "categoryorder": "array", "categoryarray": list(labels),
            "autorange": "reversed", "automargin": True, "showgrid": False}  # fmt: skip


def stored_energy(view: View) -> Figure:
    """Energy in store, charging and discharging: one set of traces for each store, and their sum."""
    names = view.names("store")
    choices = [{"name": name, "traces": _store(view, [place])} for place, name in enumerate(names)]
    if len(names) > 1:
        choices.insert(0, {"name": "All stores", "traces": _store(view, list(range(len(names))))})
    layout = {
        "xaxis": {"anchor": "y2"},
        "yaxis": {"title": {"text": "MWh"}, "domain": [0.47, 1], "rangemode": "tozero"},
        "yaxis2": {"title": {"text": "MW"}, "domain": [0, 0.38], "anchor": "x", "zeroline": True},
        "barmode": "relative", "bargap": 0, "hovermode": "x unified", "showlegend": True,
    }  # fmt: skip
    return {"steps": True, "height": 400, "choices": choices, "layout": layout, "traces": []}


def _store(view: View, places: list[int]) -> list[Figure]:
    def power(name: str) -> Floats:
        return view.steps.mean(view.values(name)[:, places].sum(axis=1))

    stored = view.steps.last(view.values("stored_energy")[:, places].sum(axis=1))
    energy = {
        "type": "scatter", "mode": "lines", "name": "stored energy", "fill": "tozeroy",
        "line": {"width": 2, "color": "var(--store-line)"}, "fillcolor": "var(--store-wash)",
        "y": rounded(stored), "hovertemplate": "%{y:,.1f} MWh",
    }  # fmt: skip
    return [
        energy,
        _bars("discharge", power("storage_discharge"), "var(--hue-2)"),
        _bars("charge", -power("storage_charge"), "var(--hue-1)"),
    ]


def _bars(name: str, power: Floats, colour: str) -> Figure:
    return {"type": "bar", "name": name, "y": rounded(power), "yaxis": "y2", "marker":
            {"color": colour, "line": {"width": 0}}, "hovertemplate": "%{y:,.1f} MW"}  # fmt: skip


def reserve_prices(view: View) -> Figure:
    """Price of each reserve product, and below it what is short of it."""
    price, short, names = (
        view.values("reserve_price"), view.values("reserve_shortage"), view.names("product")
    )  # fmt: skip
    unit = plotly_text(view.price_unit)
    lines = [
        _outline(view, name, price[:, place], _stroke(place)) for place, name in enumerate(names)
    ]
    for line in lines:
        line["hovertemplate"] = f"%{{y:,.2f}} {unit}"
    bars = [
        _bars(
            f"{plotly_text(name)}, short", view.steps.mean(short[:, place]), _stroke(place)["color"]
        )
        for place, name in enumerate(names)
        if short[:, place].max(initial=0.0) > NEGLIGIBLE
    ]
    layout: Figure = {
        "yaxis": {"title": {"text": unit}, "rangemode": "tozero", "domain": [0.4 if bars else 0, 1]},
        "hovermode": "x unified", "showlegend": True,
    }  # fmt: skip
    if bars:
        layout |= {
            "xaxis": {"anchor": "y2"}, "barmode": "stack", "bargap": 0,
            "yaxis2": {"title": {"text": "MW short"}, "domain": [0, 0.3], "anchor": "x",
                       "rangemode": "tozero"},
        }  # fmt: skip
    return {"steps": True, "height": 380 if bars else 280, "traces": lines + bars, "layout": layout}


def unit_order(view: View) -> list[int]:
    """Order units by technology, the one with the most energy first, then by hours on."""
    on, energy = view.values("unit_on").sum(axis=0), view.energy("unit_output")
    technology = np.array(view.labels("unit_technology", "unit"), dtype=object)
    totals = {name: float(energy[technology == name].sum()) for name in set(technology)}
    return sorted(
        range(len(on)),
        key=lambda unit: (-totals[technology[unit]], technology[unit], -on[unit], unit),
    )


def on_off(view: View, order: Sequence[int]) -> Figure:
    """When each unit was on, as a picture of units by steps, with its starts and why it was on.

    The script lifts what is on though it does not pay from 0..1 to 2..3, where it has its own colour.
    """
    names = [plotly_text(view.names("unit")[unit]) for unit in order]
    on = view.steps.mean(view.values("unit_on"))[:, order]
    output = view.steps.mean(view.values("unit_output"))[:, order]
    picture = {
        "type": "heatmap", "y": names, "z": rounded(on.T, 2), "customdata": rounded(output.T),
        "zmin": 0, "zmax": 3, "colorscale": ON_OFF, "showscale": False,
        "hovertemplate": "%{y}<br>%{x}<br>on %{z:.0%}, %{customdata:,.1f} MW<extra></extra>",
        "ygap": 1,
    }  # fmt: skip
    layout = {"yaxis": _rows_axis(names), "hovermode": "closest", "showlegend": True}
    height = int(np.clip(120 + 15 * len(names), 180, 1500))
    why = reason_rows(view, order)
    key = [_square(PAYS, "var(--on)"), _square(HELD, "var(--held)")] if why else []
    traces = [picture, *key, _starts(view, names, order)]
    return {"steps": True, "height": height, "traces": traces, "layout": layout, **why}


ON_OFF = [
    [0, "var(--off)"], [0.3333, "var(--on)"], [0.6667, "var(--off)"], [1, "var(--held)"],
]  # fmt: skip


def _square(name: str, colour: str) -> Figure:
    """Return an entry of the key without a point."""
    marker = {"symbol": "square", "size": 11, "color": colour}
    return {"type": "scatter", "mode": "markers", "name": name, "at": [0], "y": [None],
            "marker": marker, "hoverinfo": "skip"}  # fmt: skip


def _starts(view: View, names: Sequence[str], order: Sequence[int]) -> Figure:
    starts = view.steps.total(view.values("unit_start"))[:, order]
    row, step = np.nonzero(starts.T > HALF)
    return {
        "type": "scatter", "mode": "markers", "name": "start", "at": step.tolist(),
        "y": [names[place] for place in row.tolist()],
        "marker": {"symbol": "triangle-right", "size": 8, "color": "var(--alarm-mark)",
                   "line": {"width": 1, "color": "var(--paper)"}},
        "hovertemplate": "%{y}<br>%{x}<br>start<extra></extra>",
    }  # fmt: skip
