"""The sections of a study of a new load (formulation.md 6.1).

Public names: `sections`.
"""

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from simulator.report.figures import Figure
from simulator.report.sections import Chart, Section
from simulator.report.study_figures import bars, by_bus_and_size, choices_of, maps_of, trade_off
from simulator.report.tables import Cell, Table, figure, numbers, ranked, shortened, word, words
from simulator.report.wording import amount, money, number

__all__ = ["sections"]

Floats = NDArray[np.float64]

UNSERVED = 1e-3
"""MWh beyond which load goes unserved."""
DEFINITIONS = [
    (
        "Extra production cost",
        (
            "Cost of running and starting units, of renewable offers and of stores, with the load "
            "less without it: two full runs. Penalties for load not served or power spilled are kept "
            "apart. Where reserves follow load, it includes what more reserve costs."
        ),
    ),
    (
        "Congestion cost caused",
        (
            "Congestion cost is the total cost of a run less that of the same run without line "
            "limits, on and off decided in each; caused is that with the load less that without. "
            "Negative where the load relieves a line."
        ),
    ),
    (
        "Own payment",
        ("What the load pays for what it is served, hour by hour at the price of its bus."),
    ),
    (
        "Others pay more",
        ("What all other loads pay for what they are served, with the load less without."),
    ),
    (
        "Newly congested",
        (
            "Hours in which one more MW of a line's rating would save money with the load and not "
            "without it; relieved the other way round."
        ),
    ),
    (
        "Largest size",
        (
            "The largest size at which no more load goes unserved than without it, by bisection on "
            "full runs; the limit is what is met in the worst hour of the smallest size that fails."
        ),
    ),
    (
        "Within the gap",
        (
            "Where on and off are decided, each run is known to within the gap of its search. A "
            "difference no larger than the gaps of its runs allow is marked ≈ and says nothing about "
            "its sign."
        ),
    ),
]


def sections(dataset: xr.Dataset) -> list[Section]:
    """Return the sections of the study's page, those without a subject left out."""
    made = [_costs(dataset), _pictures(dataset), _trade(dataset), _largest(dataset), _map(dataset),
            _lines(dataset), Section("definitions", "What the figures mean", facts=DEFINITIONS)]  # fmt: skip
    return [section for section in made if section is not None]


def _names(dataset: xr.Dataset) -> list[str]:
    return [str(name) for name in dataset["bus"].to_numpy()]


def _sizes(dataset: xr.Dataset) -> Floats:
    return np.asarray(dataset["size"].to_numpy(), dtype=float)


def _title(size: float) -> str:
    return f"{size:g} MW"


def _order(dataset: xr.Dataset, place: int) -> list[int]:
    """Order buses by extra production cost, those that leave load unserved last."""
    cost = dataset["extra_production_cost"].to_numpy()[:, place]
    short = dataset["extra_unserved"].to_numpy()[:, place] > UNSERVED
    return ranked(np.where(short, 0.0, 1.0), -cost)


def _marked(value: float, within: bool, decimals: int = 0) -> Cell:  # noqa: FBT001
    """Return a cell of a difference, marked where the gaps of its runs allow it."""
    cell = figure(value, decimals)
    return Cell(f"≈ {cell.text}", cell.sort) if within else cell


def _costs(dataset: xr.Dataset) -> Section:
    currency = dataset.attrs["currency"]
    tables = [
        shortened(
            _cost_table(
                dataset, place, f"{_title(size)} of new load, cost and congestion, {currency}"
            )
        )
        for place, size in enumerate(_sizes(dataset))
    ]
    more = [
        shortened(
            _energy_table(
                dataset, place, f"{_title(size)} of new load, energy, prices and emissions"
            )
        )
        for place, size in enumerate(_sizes(dataset))
    ]
    without, congestion = (
        money(float(dataset[f"base_{name}_cost"])) for name in ("production", "congestion")
    )
    text = [
        f"Without the load, production costs {without} {currency}, congestion {congestion} {currency}.",
        "Cheapest first; where load goes unserved last.",
    ]
    return Section("costs", "What it costs, by bus", text, tables=tables, folded=more)


def _cost_table(dataset: xr.Dataset, place: int, caption: str) -> Table:
    at = dataset.isel(size=place)
    names = _names(dataset)
    rows = []
    for bus in _order(dataset, place):
        one = at.isel(bus=bus)
        value = {str(name): one[name].item() for name in one.data_vars if not one[name].dims}
        rows.append([
            word(names[bus]),
            _marked(value["extra_production_cost"], value["cost_within_gap"]),
            _marked(value["extra_cost_per_mwh"], value["cost_within_gap"], 2),
            _marked(value["congestion_cost_caused"], value["congestion_within_gap"]),
            figure(value["own_payment"]), figure(value["others_payment"]),
            figure(value["extra_penalty_cost"]), figure(value["hours_congested"]),
            figure(value["hours_relieved"]), figure(value["lines_congested"]),
        ])  # fmt: skip
    columns = words("Bus") + numbers(
        "Extra production cost", "a MWh", "Congestion cost caused", "Own payment", "Others pay more",
        "Penalties", "Line hours newly congested", "relieved", "Lines new",
    )  # fmt: skip
    return Table(caption, columns, rows, sortable=True)


def _energy_table(dataset: xr.Dataset, place: int, caption: str) -> Table:
    at, names = dataset.isel(size=place), _names(dataset)
    rows = []
    for bus in _order(dataset, place):
        one = at.isel(bus=bus)
        rows.append([
            word(names[bus]),
            *(figure(float(one[name]), 2) for name in ("price_without", "price_with")),
            *(figure(float(one[name]), 0) for name in (
                "own_energy", "own_unserved", "extra_unserved", "extra_curtailed", "extra_surplus",
                "extra_emissions")),
        ])  # fmt: skip
    unit = f"{dataset.attrs['currency']}/MWh"
    columns = words("Bus") + numbers(
        f"Price without, {unit}", "with", "Served MWh", "Own unserved MWh", "Extra unserved MWh",
        "Extra curtailed MWh", "Extra spilled MWh", "Extra t CO\N{SUBSCRIPT TWO}",
    )  # fmt: skip
    return Table(caption, columns, rows, sortable=True)


def _chosen(figures: dict[str, Figure]) -> tuple[Figure, str]:
    """Return one figure, or several to choose from, and the control that needs."""
    if len(figures) == 1:
        return next(iter(figures.values())), ""
    return choices_of(figures), "choice"


def _pictures(dataset: xr.Dataset) -> Section | None:
    """Ranked bars, and buses by sizes where there are several of both."""
    if dataset.sizes["bus"] < 2:  # noqa: PLR2004
        return None
    unit = f"{dataset.attrs['currency']}/MWh"
    each = _served_cost(dataset)
    marked = dataset["cost_within_gap"].to_numpy()
    ranked_bars = {
        _title(size): bars(
            _names(dataset), {"extra production cost": each[:, place]}, _order(dataset, place),
            f"extra production cost, {unit}", marked[:, place],
        )
        for place, size in enumerate(_sizes(dataset))
    }  # fmt: skip
    drawn, control = _chosen(ranked_bars)
    charts = [
        Chart("ranked", f"Buses by extra production cost a MWh, {unit}", drawn, control=control)
    ]
    if dataset.sizes["size"] > 1:
        last = dataset.sizes["size"] - 1
        picture = by_bus_and_size(
            _names(dataset), _sizes(dataset), each, _order(dataset, last), unit
        )
        charts.append(
            Chart("grid", f"Extra production cost a MWh by bus and size, {unit}", picture)
        )
    return Section(
        "ranked",
        "Buses ranked",
        ["Hatched bars are within the gap; where load goes unserved there is none."],
        charts=charts,
    )


def _trade(dataset: xr.Dataset) -> Section | None:
    if dataset.sizes["bus"] < 2:  # noqa: PLR2004
        return None
    currency, last = dataset.attrs["currency"], dataset.sizes["size"] - 1
    at = dataset.isel(size=last)
    cost = _served_cost(dataset)[:, last]
    best = _order(dataset, last)[0]
    if "largest_size" in dataset:
        up, title = at["largest_size"].to_numpy(), "largest size, MW"
    else:
        up, title = at["others_payment"].to_numpy(), f"all other loads pay more, {currency}"
    picture = trade_off(
        _names(dataset), cost, up, (f"extra production cost, {currency}/MWh", title), best
    )
    size = _title(float(_sizes(dataset)[last]))
    chart = Chart("trade", f"Extra production cost a MWh of {size} against {title}", picture)
    return Section("trade", "What one gives for the other", charts=[chart])


def _largest(dataset: xr.Dataset) -> Section | None:
    if "largest_size" not in dataset:
        return None
    largest, refused = (dataset[name].to_numpy() for name in ("largest_size", "smallest_refused"))
    text = {
        name: dataset[name].to_numpy() for name in ("stopped_by", "stopped_by_name", "stopped_at")
    }
    names = _names(dataset)
    rows = [
        [
            word(names[bus]), figure(largest[bus], 1), figure(refused[bus], 1),
            *(word(str(values[bus])) for values in text.values()),
        ]
        for bus in ranked(largest)
    ]  # fmt: skip
    columns = (
        *words("Bus"), *numbers("Largest MW", "Too large, MW"), *words("Limit", "which", "met at")
    )  # fmt: skip
    rise = float(dataset.attrs["most_price_rise"])
    limit = (
        f" or the mean price at the bus rises by more than {number(rise, 2)}"
        if np.isfinite(rise)
        else ""
    )
    note = [f"The largest size before more load goes unserved{limit}."]
    table = Table("Largest size by bus", columns, rows, sortable=True)
    return Section("largest", "How much a bus can take", note, tables=[shortened(table)])


def _map(dataset: xr.Dataset) -> Section | None:
    currency, at = dataset.attrs["currency"], dataset.isel(size=-1)
    price = f"{currency}/MWh"
    measures = {
        f"extra production cost, {price}": (_served_cost(dataset)[:, -1], price),
        f"congestion cost caused, {currency}": (at["congestion_cost_caused"].to_numpy(), currency),
    }
    if "largest_size" in dataset:
        measures["largest size, MW"] = (at["largest_size"].to_numpy(), "MW")
    drawn = maps_of(dataset, measures)
    if drawn is None:
        return None
    size = _title(float(_sizes(dataset)[-1]))
    chart = Chart("sites", f"Answers on the map, {size} of new load", drawn, control="choice")
    text = [
        "Buses stand at their coordinates; hollow ones cannot take the load with all load served."
    ]
    return Section("sites", "On the map", text, charts=[chart])


def _served_cost(dataset: xr.Dataset) -> Floats:
    """Return extra production cost a MWh, array (bus, size); NaN where load goes unserved."""
    cost = dataset["extra_cost_per_mwh"].to_numpy()
    return np.where(dataset["extra_unserved"].to_numpy() > UNSERVED, np.nan, cost)


def _lines(dataset: xr.Dataset) -> Section:
    """Lines newly congested, by bus, at the largest size asked for."""
    at = dataset.isel(size=-1)
    added, relieved = (
        at[name].to_numpy() for name in ("line_hours_congested", "line_hours_relieved")
    )
    size = _title(float(_sizes(dataset)[-1]))
    names, lines = _names(dataset), [str(name) for name in dataset["line"].to_numpy()]
    bus, line = np.nonzero((added > 0) | (relieved > 0))
    order = np.lexsort((line, bus, -added[bus, line]))
    rows = [
        [
            word(names[bus[each]]), word(lines[line[each]]),
            figure(added[bus[each], line[each]], 0), figure(relieved[bus[each], line[each]], 0),
        ]
        for each in order
    ]  # fmt: skip
    if not rows:
        return Section("lines", "Lines", [f"{size} of new load changes no line's congested hours."])
    columns = words("Load at", "Line") + numbers("Hours newly congested", "Hours relieved")
    table = Table(f"Lines and hours, {size} of new load", columns, rows, sortable=True)
    total = amount(float(added.sum()))
    text = [f"In all {total} line hours over {len(names)} buses."]
    return Section("lines", "Lines newly congested", text, tables=[shortened(table)])
