"""The page's sections in their order: which there are for a run, their words, charts and tables.

Public names: `Chart`, `Section`, `sections`, `unserved_notice`.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from simulator.prices import total_rent
from simulator.report import figures, limits, plans, tables
from simulator.report.figures import Figure
from simulator.report.tables import NEGLIGIBLE, Table
from simulator.report.view import View
from simulator.report.wording import (
    amount,
    count,
    listed,
    money,
    number,
    percent,
    span_of_hours,
)

__all__ = ["Chart", "Section", "sections", "unserved_notice"]

COMMITMENT = {
    "given": "taken from the schedule in the case",
    "relaxed": "relaxed: a unit may be partly on",
    "optimal": "optimised, each unit on or off",
}
LIMITS = {
    "none": "none: flows are shown but not limited",
    "lines": "the rating of every line, and corridors",
    "secure": "the rating of every line, also after each contingency, and corridors",
}

PRICING = {
    "fixed": "of the plan, with on and off fixed",
    "relaxed": "of the relaxation, in which a unit may be partly on; output, flows and costs are the plan's",
}
"""Which prices a run in mode `optimal` shows; other modes have one kind."""

FLEET = "The fleet, on and off"


@dataclass(frozen=True)
class Chart:
    """A chart: its name, what it shows in a sentence, its figure, and the same as tables.

    control : what moves it, "slider" or "choice"
    scale, strokes : the colours of prices and the kinds of line that its key explains
    """

    name: str
    label: str
    figure: Figure
    alternatives: Sequence[Table] = ()
    control: str = ""
    scale: Mapping[str, Any] | None = None
    strokes: Sequence[Figure] = ()


@dataclass(frozen=True)
class Section:
    """A section: headline, sentences, facts as term and value, charts, tables."""

    name: str
    title: str
    text: Sequence[str] = ()
    facts: Sequence[tuple[str, str]] = ()
    figures: Sequence[tuple[str, str, str]] = ()
    charts: Sequence[Chart] = ()
    tables: Sequence[Table] = ()
    warning: str = ""
    folded: Sequence[Table] = field(default=())


def sections(view: View) -> list[Section]:
    """Return the sections of a run's page, in their order; those without a subject are left out."""
    made = [
        _about(view), _totals(view), _cost(view), _dispatch(view), _ties(view), _map(view),
        _prices(view), _congestion(view), _losses(view), _spread(view), _stores(view), _reserves(view),
        _ramps(view), _units(view), _fleet(view),
    ]  # fmt: skip
    return [section for section in made if section is not None]


def unserved_notice(view: View) -> tuple[str, list[str]] | None:
    """Say how much load is not served, where and when; None if all is served."""
    short = view.values("load_unserved")
    missing = short > NEGLIGIBLE
    if not missing.any():
        return None
    total, asked = (float(view.energy(name).sum()) for name in ("load_unserved", "load_demand"))
    loads = [load for load in tables.ranked(short.sum(axis=0)) if missing[:, load].any()]
    hours = span_of_hours(float(missing.any(axis=1).sum()) * view.period_hours)
    headline = (
        f"{amount(total)} MWh of load is not served, of {amount(asked)} MWh asked for: "
        f"{count(len(loads), 'load')} in {hours}."
    )
    lines = [_unserved_line(view, short, load) for load in loads[:5]]
    if len(loads) > len(lines):
        rest = float(short[:, loads[5:]].sum()) * view.period_hours
        lines.append(f"{count(len(loads) - 5, 'more load')}: {amount(rest)} MWh.")
    return headline, lines


def _unserved_line(view: View, short: np.ndarray[Any, Any], load: int) -> str:
    name, bus = view.names("load")[load], view.labels("load_bus", "load")[load]
    spans = view.clock.spans(np.flatnonzero(short[:, load] > NEGLIGIBLE))
    when = listed([view.clock.span(first, last) for first, last in spans], "stretches")
    energy = float(short[:, load].sum()) * view.period_hours
    at_bus = f" at {bus}" if bus else ""
    return (
        f"{name}{at_bus}: {amount(energy)} MWh, at most {amount(short[:, load].max())} MW; {when}."
    )


def _about(view: View) -> Section:
    verdict, failing, checks = _audit(view.run.get("audit"))
    return Section(
        "run",
        "The run",
        facts=[*_hours(view), *_settings(view), *_sizes(view), ("Audit", verdict)],
        warning=verdict if failing else "",
        tables=[failing] if failing else [],
        folded=[table for table in (checks, plans.windows(view.run)) if table],
    )


def _audit(audit: Mapping[str, Any] | None) -> tuple[str, Table | None, Table | None]:
    """Return the verdict in words, the failing checks and all checks."""
    if not audit:
        return "not audited", None, None
    checks = list(audit.get("checks") or ())
    failed = [check for check in checks if not check.get("passed")]
    every = tables.audit_checks(checks, "All checks of the audit") if checks else None
    if audit.get("passed") and not failed:
        return f"passed, {count(len(checks), 'check')}", None, every
    verdict = f"failed: {len(failed)} of {count(len(checks), 'check')}"
    return verdict, tables.audit_checks(failed, "Failing checks of the audit"), every


def _hours(view: View) -> list[tuple[str, str]]:
    clock = view.clock
    start, end = (clock.label(edge, with_year=True) for edge in (0, len(clock)))
    zone = str(view.dataset.attrs.get("time_zone", "UTC"))
    periods = f"{count(len(clock), 'period')} of {span_of_hours(clock.period_hours)}"
    return [("Hours", f"{start} to {end}, {zone}; {periods}")]


def _settings(view: View) -> list[tuple[str, str]]:
    settings = view.run.get("settings") or {}
    horizon, network = settings.get("horizon") or {}, settings.get("network") or {}
    mode = str(_setting(view, "commitment", "mode"))
    held = str(_setting(view, "network", "limits", attribute="limits"))
    facts = [
        ("On and off", COMMITMENT.get(mode, mode)),
        ("Network limits", LIMITS.get(held, held)),
    ]
    facts += _contingencies(view)
    if mode == "optimal" and (pricing := view.dataset.attrs.get("pricing")):
        facts.insert(1, ("Prices", PRICING.get(pricing, pricing)))
    if "losses" in network:
        facts.append(("Losses", "modelled" if network["losses"] else "not modelled"))
    if {"window_hours", "keep_hours"} <= set(horizon):
        facts.append(("Windows", _windows(view, horizon)))
    if gap := plans.largest_gap(view.run):
        facts.append(("Gap", _gap(*gap)))
    carbon = (settings.get("emissions") or {}).get("carbon_price_per_t")
    if carbon:
        facts.append(("Carbon price", f"{money(float(carbon))} {view.currency}/t"))
    return facts


def _gap(gap: float, window: int, late: int) -> str:
    ended = f"; time ran out in {count(late, 'window')}" if late else ""
    return f"at most {percent(gap, 3)}, in window {window}{ended}"


def _contingencies(view: View) -> list[tuple[str, str]]:
    """Say how many contingencies the run holds, and which it left out."""
    held = view.run.get("network") or {}
    if not held.get("contingencies"):
        return []
    text = f"{held['contingencies']:,}"
    left_out = [
        f"{each['contingency']} in {span_of_hours(each['hours'])}, {each['reason']}"
        for each in held.get("left_out", ())
    ]
    return [("Contingencies", f"{text}; left out: {listed(left_out)}" if left_out else text)]


def _setting(view: View, section: str, name: str, attribute: str = "") -> Any:
    """Return a setting from the run's record, or else from the dataset's attributes."""
    settings = (view.run.get("settings") or {}).get(section) or {}
    return settings.get(name, view.dataset.attrs.get(attribute or section, "not recorded"))


def _windows(view: View, horizon: Mapping[str, Any]) -> str:
    window, keep = float(horizon["window_hours"]), float(horizon["keep_hours"])
    text = f"each sees {span_of_hours(window)}, of which {span_of_hours(keep)} are kept"
    number_of = (view.run.get("counts") or {}).get("windows")
    return f"{count(int(number_of), 'window')}; {text}" if number_of else text


def _sizes(view: View) -> list[tuple[str, str]]:
    kinds = {
        "Network": [("bus", "bus", "buses"), ("line", "line", ""), ("tie", "tie", "")],
        "Fleet": [("unit", "unit", ""), ("plant", "renewable plant", ""), ("store", "store", "")],
        "Demand": [("load", "load", "")],
    }
    return [
        (title, ", ".join(count(view.size(dim), one, many) for dim, one, many in dims))
        for title, dims in kinds.items()
    ]


def _totals(view: View) -> Section:
    demand, unserved, lost, spilled = (
        float(view.energy(name).sum())
        for name in ("load_demand", "load_unserved", "curtailment", "surplus")
    )
    available = float(view.energy("renewable_available").sum())
    share = f"{number(100 * lost / available, 1)} % of available" if available else ""
    emitted = float(view.values("emissions").sum())
    rent = total_rent(view.dataset)
    shown = [
        ("Cost", money(float(view.values("cost").sum())), view.currency),
        ("Served", amount(demand - unserved), "MWh"),
        ("Unserved", amount(unserved) if unserved > NEGLIGIBLE else "0", "MWh"),
        (
            "Curtailed",
            amount(lost) if lost > NEGLIGIBLE else "0",
            ", ".join(filter(None, ["MWh", share])),
        ),
        ("Emissions", amount(emitted), "t CO\N{SUBSCRIPT TWO}"),
        ("Congestion rent", money(rent), view.currency),
    ]
    if view.has("make_whole"):
        shown.append(("Make-whole", money(float(view.values("make_whole").sum())), view.currency))
    avoidable = view.run.get("totals", {}).get("congestion_cost")
    if avoidable is not None:
        shown.append(("Congestion cost", money(avoidable), f"{view.currency} against no limits"))
    if spilled > NEGLIGIBLE:
        shown.append(("Spilled at buses", amount(spilled), "MWh"))
    return Section("totals", "Totals", figures=shown)


def _cost(view: View) -> Section:
    return Section("cost", "Cost by component", tables=[tables.cost_by_component(view)])


def _dispatch(view: View) -> Section:
    groups = figures.energy_groups(view)
    energy = tables.energy_by_technology(view, groups, figures.lost_groups(view))
    text = [
        "Supply is stacked by technology, the steadiest at the bottom; storage charging is below zero.",
        "The dashed line is what supply could have been without curtailment.",
        *_thinned(view),
    ]
    if view.size("tie"):
        text.append(
            "Ties carry power from one bus of the case to another and add nothing to the stack; "
            "what they lose on the way is the difference between supply and load with charging."
        )
    label = f"Supply by technology, load, charging and curtailment, MW by {view.steps.unit}"
    chart = Chart("dispatch", label, figures.dispatch(view, groups), [energy])
    return Section("dispatch", "Dispatch by technology", text, charts=[chart])


def _thinned(view: View) -> list[str]:
    """Say so where a picture shows means of several periods."""
    if not view.steps.averaged:
        return []
    each = count(len(view.clock), "period")
    unit = "local day" if view.steps.unit == "day" else view.steps.unit
    return [f"The run has {each}, too many for a legible picture: this one shows means by {unit}."]


def _ties(view: View) -> Section | None:
    if not view.size("tie"):
        return None
    text = ["Flow at the sending end; positive from the first bus to the second."]
    if view.size("tie") > figures.MOST_CURVES:
        text.append(f"The chart has the {figures.MOST_CURVES} ties that carry most.")
    label = f"Flow of each tie, MW by {view.steps.unit}"
    chart = Chart("ties", label, figures.tie_flows(view), [tables.ties(view)])
    return Section("ties", "Flows of the ties", text + _thinned(view), charts=[chart])


def _map(view: View) -> Section | None:
    if not view.size("bus"):
        return None
    figure = figures.network_map(view)
    places = (
        "Buses stand at their coordinates."
        if figure["geographic"]
        else "The case has no coordinates for all buses, so their places are drawn from the lines "
        "between them and mean nothing else."
    )
    text = [
        f"Dots are buses, coloured by price; lines by loading, with arrows along the flow. {places}",
        f"It opens at the {view.steps.unit} in which prices differ most between buses.",
        *_thinned(view),
    ]
    chart = Chart(
        "map",
        "Map of the network: prices at buses, loading and direction of flow on lines",
        figure,
        [tables.bus_prices(view), *([tables.line_loading(view)] if view.size("line") else [])],
        control="slider",
        scale=figures.price_picture(view)["scale"],
        strokes=figures.line_strokes(view),
    )
    return Section("map", f"The network by the {view.steps.unit}", text, charts=[chart])


def _prices(view: View) -> Section | None:
    if not view.size("bus"):
        return None
    figure = figures.price_picture(view)
    text = [
        "Each row is a bus, the dearest on average on top.",
        "Drag over a part of the picture to enlarge it; a double click shows all again.",
        _parts_in_words(figure["parts"]),
        *_clipped(figure["scale"], view.price_unit),
        *_thinned(view),
    ]
    label = f"Price at every bus in every {view.steps.unit}, {view.price_unit}"
    chart = Chart("prices", label, figure, [tables.daily_prices(view)], scale=figure["scale"])
    return Section("prices", f"Prices by bus and {view.steps.unit}", text, charts=[chart])


def _parts_in_words(parts: Mapping[str, Any]) -> str:
    if parts:
        return (
            f"Point at a cell to see its price, its parts ({listed(list(parts))}) and the limit that most of "
            "the congestion part is of."
        )
    return "This run does not hold the parts of prices, only the prices."


def _clipped(scale: Mapping[str, Any], unit: str) -> list[str]:
    """Say where prices go beyond the ends of the colour scale."""
    said = []
    if scale["least"] < scale["low"]:
        said.append(
            f"start at {number(scale['low'], 2)}, the lowest price shown is {number(scale['least'], 2)}"
        )
    if scale["most"] > scale["high"]:
        said.append(
            f"end at {number(scale['high'], 2)}, the highest price shown is {number(scale['most'], 2)}"
        )
    return [f"Colours {'; they '.join(said)} {unit}."] if said else []


def _congestion(view: View) -> Section | None:
    if not view.size("line"):
        return None
    congested = tables.congestion_order(view)
    lines = congested or _most_loaded(view)
    shown = [line for line in lines if np.isfinite(view.loading[:, line]).all()]
    shown = shown[: figures.MOST_CURVES]
    text = [_congestion_in_words(view, len(congested))]
    charts = []
    if shown:
        figure = figures.duration_curves(view, shown)
        which = "The first of these" if congested else "The most loaded"
        label = f"{which} lines from their most to their least loaded hour, % of rating"
        charts = [Chart("duration", label, figure, [tables.duration_of_loading(view, shown)])]
    ranking = [tables.congested_lines(view)] if congested else []
    if view.size("pair"):
        text.append(_after_losses_in_words(view))
        ranking.append(limits.after_losses(view))
    if view.size("corridor"):
        ranking.append(limits.corridors(view))
    return Section("congestion", "Congested lines", text, tables=ranking, charts=charts)


def _after_losses_in_words(view: View) -> str:
    totals = limits.pair_totals(view)
    lines = count(totals["line"].nunique(), "line")
    worst = totals.index[0]
    return f"{lines} had to make room for a contingency, most often {worst}."


def _losses(view: View) -> Section | None:
    lost = float(view.energy("line_loss").sum())
    if lost <= NEGLIGIBLE:
        return None
    demand = float(view.energy("load_demand").sum())
    share = f", {number(100 * lost / demand, 1)} % of what loads asked for" if demand else ""
    accuracy = (view.run.get("network") or {}).get("loss_accuracy_mw")
    text = [f"Lines lost {amount(lost)} MWh{share}; half of it is drawn at either end of a line."]
    if accuracy is not None:
        text.append(f"Losses are those of the flows to within {float(accuracy):.0e} MW an hour.")
    return Section("losses", "Losses", text, tables=[limits.line_losses(view)])


def _most_loaded(view: View) -> list[int]:
    peak = np.where(np.isnan(view.loading), -1.0, view.loading).max(axis=0)
    return [line for line in tables.ranked(peak) if peak[line] > 0]


def _congestion_in_words(view: View, congested: int) -> str:
    if not congested:
        return "No line was at its limit or priced in any hour."
    lines = f"{congested} of {count(view.size('line'), 'line')}"
    return f"{lines} reached {'its' if congested == 1 else 'their'} limit, ranked by hours priced and rent."


def _spread(view: View) -> Section | None:
    if not view.size("bus"):
        return None
    spread, whole = figures.spread_by_day(view)
    which = (
        f"over {count(len(spread), 'whole local day')}"
        if whole
        else "over the hours of the run, which holds no whole local day"
    )
    text = [
        f"Highest less lowest price of a day at one bus: mean {which}; the thin line is the range."
    ]
    if view.size("bus") > figures.MOST_BARS:
        text.append(f"The chart has the {figures.MOST_BARS} buses with the greatest mean.")
    label = f"Mean daily price spread by bus, {view.price_unit}"
    table = tables.spread_by_bus(view, spread)
    chart = Chart("spread", label, figures.daily_spread(view, spread), [table])
    return Section("spread", "Daily price spread", text, charts=[chart])


def _stores(view: View) -> Section:
    if not view.size("store"):
        return Section("stores", "Stores", ["The case has no stores."])
    text = [
        f"Stored energy is that at the end of each {view.steps.unit}; discharge is upwards, charge downwards."
    ]
    figure = figures.stored_energy(view)
    control = "choice" if len(figure["choices"]) > 1 else ""
    label = f"Stored energy, charge and discharge by {view.steps.unit}"
    chart = Chart("stores", label, figure, [tables.stores(view)], control)
    return Section("stores", "Stores", [*text, *_thinned(view)], charts=[chart])


def _reserves(view: View) -> Section | None:
    if not view.size("product"):
        return None
    text = [
        "Price of a product: what one more MW asked for would cost in an hour.",
        "A unit that provides some gives up output for it, or runs above its minimum.",
        "Reserve is not checked against line limits.",
    ]
    label = f"Price of each product by {view.steps.unit}, {view.price_unit}, and what is short, MW"
    chart = Chart("reserves", label, figures.reserve_prices(view), [tables.reserves(view)])
    providers = tables.reserve_providers(view)
    return Section("reserves", "Reserves", text, charts=[chart], folded=[providers])


def _ramps(view: View) -> Section | None:
    if not view.has("ramp_limited_hours") or not view.size("unit"):
        return None
    table = tables.ramp_limited(view)
    title = "Ramp-limited hours"
    if not table.rows:
        return Section("ramps", title, ["No unit moved as fast as it can in any hour."])
    text = [
        "Hours in which the output of a unit that stays on moved as fast as its ramp rate allows."
    ]
    return Section("ramps", title, text, tables=[table])


def _units(view: View) -> Section:
    if not view.size("unit"):
        return Section("units", "Units", ["The case has no dispatchable units."])
    by_day = plans.make_whole_days(view)
    text = [
        "A make-whole amount is what a unit earns less in a day than it spends, running and starting."
    ]  # fmt: skip
    return Section(
        "units", "Units", text if by_day else (), tables=[tables.units(view)],
        folded=[by_day] if by_day else [],
    )  # fmt: skip


def _fleet(view: View) -> Section | None:
    if not view.size("unit"):
        return None
    order = figures.unit_order(view)
    running = [unit for unit in order if view.values("unit_on")[:, unit].max() > NEGLIGIBLE]
    text = ["Units are grouped by technology, the one with the most energy on top."]
    if len(running) < len(order):
        idle = len(order) - len(running)
        were = "was" if idle == 1 else "were"
        text.append(f"{count(idle, 'unit')} {were} never on and left out of the picture.")
    if _partly_on(view):
        part = f"on for part of the {view.steps.unit}" if view.steps.averaged else "partly on"
        text.append(f"A lighter shade is a unit {part}.")
    if not running:
        return Section("fleet", FLEET, ["No unit was on in any hour."])
    label = f"Which units were on in every {view.steps.unit}, with their starts"
    found = [plans.hours_by_reason(view, order), tables.on_off(view, order)]
    if found[0]:
        text.append(
            "The colours tell hours that pay at the unit's bus from those in which something else "
            "holds it on; point at an hour to read what."
        )
    shown = [table for table in found if table]
    chart = Chart("fleet", label, figures.on_off(view, running), shown)
    return Section("fleet", FLEET, [*text, *_thinned(view)], charts=[chart])


def _partly_on(view: View) -> bool:
    on = view.steps.mean(view.values("unit_on"))
    return bool(((on > NEGLIGIBLE) & (on < 1 - NEGLIGIBLE)).any())
