"""The page's tables: what each holds, in which order, as text ready to show.

Public names: `Cell`, `Column`, `Table` and one function for each table.

Numbers are sums, means, extremes and orders of the dataset's variables.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from simulator.report.view import View
from simulator.report.wording import number, percent

__all__ = [
    "Cell",
    "Column",
    "Table",
    "audit_checks",
    "bus_prices",
    "congested_lines",
    "cost_by_component",
    "daily_prices",
    "duration_of_loading",
    "energy_by_technology",
    "line_loading",
    "on_off",
    "ramp_limited",
    "reserve_providers",
    "reserves",
    "spread_by_bus",
    "stores",
    "ties",
    "units",
    "unserved_spans",
]

Floats = NDArray[np.float64]

NEGLIGIBLE = 1e-4
"""MW, MWh, h or currency below which an amount counts as none."""
HALF = 0.5
"""A unit or a start is shown as one if this share of it is on or starts."""
MONEY_WHOLE = 1000.0
"""A column of money that reaches this shows no hundredths."""
MOST_ROWS = 500
MOST_DAYS = 14
LEVELS = (0, 1, 5, 10, 25, 50, 75, 100)
"""Shares of the run's hours, %, for which a duration curve is put into figures."""


@dataclass(frozen=True)
class Column:
    """A column: its heading, and whether it holds numbers."""

    title: str
    numeric: bool = True


@dataclass(frozen=True)
class Cell:
    """A cell: its text, what it is sorted by, and the length of a bar behind it, 0 to 100."""

    text: str
    sort: float | str = ""
    bar: float | None = None


@dataclass(frozen=True)
class Table:
    """A table; its first column names the row."""

    caption: str
    columns: tuple[Column, ...]
    rows: Sequence[Sequence[Cell]]
    total: Sequence[Cell] = ()
    sortable: bool = False
    note: str = ""


def word(text: str) -> Cell:
    """Return a cell of text."""
    return Cell(text, text.casefold())


def figure(value: float, decimals: int = 0, bar: float | None = None) -> Cell:
    """Return a cell of a number."""
    return Cell(number(value, decimals), float(value) if np.isfinite(value) else "", bar)


def cash(value: float, column: Floats | None = None, bar: float | None = None) -> Cell:
    """Return a cell of an amount of money, with hundredths if no amount of its column is large."""
    small = column is not None and float(np.abs(column).max(initial=0.0)) < MONEY_WHOLE
    return figure(value, 2 if small else 0, bar)


def words(*titles: str) -> tuple[Column, ...]:
    """Return columns of text."""
    return tuple(Column(title, numeric=False) for title in titles)


def numbers(*titles: str) -> tuple[Column, ...]:
    """Return columns of numbers."""
    return tuple(Column(title) for title in titles)


def ranked(values: Floats, *then: Floats) -> list[int]:
    """Return positions from the largest value to the smallest; equal ones by `then`, then in order."""
    keys = [np.arange(len(values)), *(-each for each in reversed(then)), -values]
    return [int(place) for place in np.lexsort(keys)]


def bar_lengths(values: Floats) -> Floats:
    """Return each value as a share of the largest, %."""
    lengths = np.nan_to_num(np.maximum(values, 0.0), posinf=0.0)
    return np.round(100 * lengths / (float(lengths.max(initial=0.0)) or 1.0), 1)


def unserved_spans(view: View) -> Table:
    """Every stretch of hours in which a load is not wholly served."""
    short, names, buses = (
        view.values("load_unserved"),
        view.names("load"),
        view.labels("load_bus", "load"),
    )
    rows = []
    for load in ranked(short.sum(axis=0)):
        for first, last in view.clock.spans(np.flatnonzero(short[:, load] > NEGLIGIBLE)):
            part = short[first : last + 1, load]
            missing = figure(part.sum() * view.period_hours, 2)
            when = Cell(view.clock.span(first, last), first)
            rows.append(
                [word(names[load]), word(buses[load]), when, missing, figure(part.max(), 2)]
            )
    columns = words("Load", "Bus", "When") + numbers("MWh", "Most MW")
    return shortened(Table("Unserved load, each stretch of hours", columns, rows, sortable=True))


def shortened(table: Table) -> Table:
    """Keep the first rows of a very long table and say so."""
    if len(table.rows) <= MOST_ROWS:
        return table
    note = f"The first {MOST_ROWS:,} of {len(table.rows):,} rows; results.nc holds all."
    return Table(
        table.caption, table.columns, table.rows[:MOST_ROWS], table.total, table.sortable, note
    )


def audit_checks(checks: Iterable[Mapping[str, Any]], caption: str) -> Table:
    """Return checks of the audit as the run recorded them."""
    columns = words("Check", "Where and when", "Result") + numbers("Worst residual", "Tolerance")
    rows = [
        [
            word(str(check.get("name", ""))),
            word(_place(check.get("where"))),
            word("passed" if check.get("passed") else "failed"),
            _residual(check.get("worst")),
            _residual(check.get("tolerance")),
        ]
        for check in checks
    ]
    return Table(caption, columns, rows)


def _place(where: Any) -> str:
    if where is None:
        return ""
    if isinstance(where, Mapping):
        return ", ".join(f"{name} {value}" for name, value in where.items())
    return str(where)


def _residual(value: Any) -> Cell:
    known = isinstance(value, (int, float)) and not np.isnan(value)
    return Cell(f"{value:.3g}", float(value)) if known else Cell("no number")


def cost_by_component(view: View) -> Table:
    """Cost of each component over the run."""
    cost, names = view.values("cost").sum(axis=0), view.names("component")
    total = float(cost.sum())
    lengths = bar_lengths(cost)
    rows = [
        [
            word(names[place].replace("_", " ").capitalize()),
            cash(cost[place], cost, float(lengths[place])),
            Cell(percent(cost[place] / total, 1) if total else "–"),
        ]
        for place in ranked(cost)
    ]
    columns = (*words("Component"), *numbers(view.currency, "Share"))
    return Table("Cost by component", columns, rows, (word("Total"), cash(total, cost), Cell("")))


def energy_by_technology(
    view: View, groups: Mapping[str, Floats], lost: Mapping[str, Floats]
) -> Table:
    """Energy of each technology, from its power (period,); `lost` is what was curtailed of it."""
    energy = {name: float(power.sum()) * view.period_hours for name, power in groups.items()}
    supply = sum(energy.values())
    rows = [
        [
            word(name),
            figure(energy[name]),
            Cell(percent(energy[name] / supply, 1) if supply else "–"),
            figure(float(groups[name].max())),
            figure(float(lost[name].sum()) * view.period_hours) if name in lost else Cell(""),
        ]
        for name in sorted(energy, key=lambda name: -energy[name])
    ]
    columns = words("Technology") + numbers("MWh", "Share of supply", "Highest MW", "Curtailed MWh")
    return Table("Energy by technology", columns, rows)


def bus_prices(view: View) -> Table:
    """Mean, lowest and highest price of each bus, the dearest first."""
    price, names, zones = view.values("price"), view.names("bus"), view.labels("bus_zone", "bus")
    low, high = price.argmin(axis=0), price.argmax(axis=0)
    negative = (price < -NEGLIGIBLE).sum(axis=0) * view.period_hours
    rows = [
        [
            word(names[bus]), word(zones[bus]), figure(price[:, bus].mean(), 2),
            figure(price[low[bus], bus], 2), Cell(view.clock.label(int(low[bus])), int(low[bus])),
            figure(price[high[bus], bus], 2), Cell(view.clock.label(int(high[bus])), int(high[bus])),
            figure(negative[bus], _hour_decimals(view)),
        ]
        for bus in ranked(price.mean(axis=0))
    ]  # fmt: skip
    columns = (
        *words("Bus", "Zone"), *numbers("Mean", "Lowest"), *words("first in"), *numbers("Highest"),
        *words("first in"), *numbers("Hours below zero"),
    )  # fmt: skip
    return Table(f"Prices by bus, {view.price_unit}", columns, rows, sortable=True)


def _hour_decimals(view: View) -> int:
    return 0 if view.period_hours == 1 else 2


def daily_prices(view: View) -> Table:
    """Mean price of each bus on each local day, or in each month of a long run."""
    price, names = view.values("price"), view.names("bus")
    titles, of_period = _columns_of_time(view)
    means = np.stack([price[of_period == part].mean(axis=0) for part in range(len(titles))])
    rows = [
        [word(names[bus]), *(figure(mean, 2) for mean in means[:, bus])]
        for bus in ranked(price.mean(axis=0))
    ]
    period = "day" if len(view.clock.days[1]) <= MOST_DAYS else "month"
    caption = f"Mean price by bus and {period}, {view.price_unit}"
    return Table(caption, words("Bus") + numbers(*titles), rows, sortable=True)


def _columns_of_time(view: View) -> tuple[list[str], NDArray[np.int64]]:
    """Return local days, or months if those are too many, and which one each period is in."""
    day, firsts = view.clock.days
    if len(firsts) <= MOST_DAYS:
        return [view.clock.date(first) for first in firsts], day
    starts = view.clock.edges[:-1]
    month = np.asarray(starts.year * 12 + starts.month)
    found = np.unique(month)
    titles = [f"{(each - 1) // 12}-{(each - 1) % 12 + 1:02d}" for each in found.tolist()]
    return titles, np.searchsorted(found, month)


def line_loading(view: View) -> Table:
    """Highest and mean loading of each line, the most loaded first."""
    flow, rating, share = view.values("line_flow"), view.values("line_rating"), view.loading
    names, ends = view.names("line"), line_ends(view)
    peak = np.where(np.isnan(share), -1.0, share).max(axis=0)
    rows = [
        [
            word(names[line]), word(ends[line]), _rating(rating[:, line].max()),
            figure(np.abs(flow[:, line]).max(), 1),
            Cell(percent(peak[line]) if peak[line] >= 0 else "–", float(peak[line])),
            Cell(percent(share[:, line].mean()), float(np.nan_to_num(share[:, line].mean()))),
        ]
        for line in ranked(peak)
    ]  # fmt: skip
    columns = words("Line", "From – to") + numbers(
        "Rating MW", "Most MW", "Peak loading", "Mean loading"
    )
    return Table("Loading of lines", columns, rows, sortable=True)


def line_ends(view: View, kind: str = "line") -> list[str]:
    """Return "from – to" of each line or tie."""
    ends = view.labels(f"{kind}_from_bus", kind), view.labels(f"{kind}_to_bus", kind)
    return [f"{one} – {other}" for one, other in zip(*ends, strict=True)]


def _rating(value: float) -> Cell:
    return figure(value) if np.isfinite(value) else Cell("unlimited", 1e300)


def congestion_order(view: View) -> list[int]:
    """Return the lines that were priced or at their limit, by hours and then by rent."""
    priced, rent = view.values("congestion_hours"), view.values("congestion_rent").sum(axis=0)
    at_limit = view.values("hours_at_limit")
    return [
        line for line in ranked(priced, rent, at_limit) if priced[line] > 0 or at_limit[line] > 0
    ]


def congested_lines(view: View) -> Table:
    """Lines that were congested, by hours and then by rent."""
    names, ends = view.names("line"), line_ends(view)
    priced, at_limit = view.values("congestion_hours"), view.values("hours_at_limit")
    rent, rating = (
        view.values("congestion_rent").sum(axis=0),
        view.values("line_rating").max(axis=0),
    )
    shadow = view.values("line_shadow_price").max(axis=0)
    lengths, digits = bar_lengths(priced), _hour_decimals(view)
    rows = [
        [
            word(names[line]), word(ends[line]), _rating(rating[line]),
            figure(priced[line], digits, float(lengths[line])), figure(at_limit[line], digits),
            cash(rent[line], rent), figure(shadow[line], 2),
        ]
        for line in congestion_order(view)
    ]  # fmt: skip
    columns = words("Line", "From – to") + numbers(
        "Rating MW", "Hours priced", "Hours at limit", f"Rent {view.currency}",
        f"Highest shadow price {view.price_unit}",
    )  # fmt: skip
    return Table("Congested lines", columns, rows, sortable=True)


def duration_of_loading(view: View, lines: Sequence[int]) -> Table:
    """Return the loading that the given lines reach or exceed in given shares of the hours."""
    names = view.names("line")
    rows = []
    for line in lines:
        highest_first = np.sort(view.loading[:, line])[::-1]
        places = np.round(np.array(LEVELS) / 100 * (len(highest_first) - 1)).astype(int)
        cells = [Cell(percent(highest_first[place])) for place in places]
        rows.append([word(names[line]), *cells])
    columns = words("Line") + numbers(*(f"{level} % of hours" for level in LEVELS))
    return Table("Loading reached or exceeded", columns, rows)


def spread_by_bus(view: View, spread: Floats) -> Table:
    """Mean, least and greatest daily price spread (day, bus) of each bus."""
    names, mean = view.names("bus"), spread.mean(axis=0)
    rows = [
        [word(names[bus]), *(figure(each, 2) for each in (mean[bus], low, high))]
        for bus in ranked(mean)
        for low, high in [(spread[:, bus].min(), spread[:, bus].max())]
    ]
    columns = words("Bus") + numbers("Mean over days", "Least", "Greatest")
    return Table(f"Daily price spread, {view.price_unit}", columns, rows, sortable=True)


def stores(view: View) -> Table:
    """Energy taken in and given back by each store."""
    names, buses = view.names("store"), view.labels("store_bus", "store")
    size, stored = view.numbers("store_energy_mwh", "store"), view.values("stored_energy")
    charged, discharged = view.energy("storage_charge"), view.energy("storage_discharge")
    rows = [
        [
            word(names[store]), word(buses[store]), figure(size[store], 1),
            figure(charged[store], 1), figure(discharged[store], 1),
            figure(stored[:, store].min(), 1), figure(stored[:, store].max(), 1),
            figure(stored[-1, store], 1),
        ]
        for store in range(len(names))
    ]  # fmt: skip
    columns = words("Store", "Bus") + numbers(
        "Size MWh", "Charged MWh", "Discharged MWh", "Least stored MWh", "Most stored MWh",
        "Stored at the end MWh",
    )  # fmt: skip
    return Table("Stores", columns, rows, sortable=True)


def ties(view: View) -> Table:
    """Energy sent each way through each tie."""
    names, ends, flow = view.names("tie"), line_ends(view, "tie"), view.values("tie_flow")
    forward, back = np.maximum(flow, 0.0).sum(axis=0), np.maximum(-flow, 0.0).sum(axis=0)
    rows = [
        [
            word(names[tie]), word(ends[tie]), figure(forward[tie] * view.period_hours, 1),
            figure(back[tie] * view.period_hours, 1), figure(np.abs(flow[:, tie]).max(), 1),
        ]
        for tie in range(len(names))
    ]  # fmt: skip
    columns = words("Tie", "From – to") + numbers("Sent forward MWh", "Sent back MWh", "Most MW")
    return Table("Ties", columns, rows)


def reserves(view: View) -> Table:
    """Price and shortage of each reserve product."""
    names, price = view.names("product"), view.values("reserve_price")
    short = view.values("reserve_shortage")
    hours = (short > NEGLIGIBLE).sum(axis=0) * view.period_hours
    rows = [
        [
            word(names[place]), figure(price[:, place].mean(), 2), figure(price[:, place].max(), 2),
            figure(hours[place], _hour_decimals(view)),
            figure(short[:, place].sum() * view.period_hours, 1),
        ]
        for place in range(len(names))
    ]  # fmt: skip
    unit = view.price_unit
    columns = words("Product") + numbers(
        f"Mean price {unit}", f"Highest price {unit}", "Hours short", "Shortage MWh"
    )
    return Table("Reserves", columns, rows)


def reserve_providers(view: View) -> Table:
    """Who provides each reserve product, the most first."""
    provided = view.values("unit_reserve")
    units, products = view.names("unit"), view.names("product")
    mean, most = provided.mean(axis=0), provided.max(axis=0, initial=0.0)
    hours = (provided > NEGLIGIBLE).sum(axis=0) * view.period_hours
    share = 100 * mean / np.maximum(mean.sum(axis=0), NEGLIGIBLE)
    rows = [
        [
            word(products[product]), word(units[unit]), figure(mean[unit, product], 1),
            figure(most[unit, product], 1), figure(hours[unit, product], _hour_decimals(view)),
            figure(share[unit, product], 1, share[unit, product]),
        ]
        for product in range(len(products))
        for unit in ranked(mean[:, product])
        if most[unit, product] > NEGLIGIBLE
    ]  # fmt: skip
    columns = words("Product", "Unit") + numbers("Mean MW", "Most MW", "Hours", "Share %")
    return Table("Who provides reserve", columns, rows, sortable=True)


def ramp_limited(view: View) -> Table:
    """Units that moved as fast as they can, the most hours first."""
    hours, names = view.values("ramp_limited_hours"), view.names("unit")
    technology, buses = view.labels("unit_technology", "unit"), view.labels("unit_bus", "unit")
    lengths, digits = bar_lengths(hours), _hour_decimals(view)
    rows = [
        [
            word(names[unit]), word(technology[unit]), word(buses[unit]),
            figure(hours[unit], digits, float(lengths[unit])),
        ]
        for unit in ranked(hours)
        if hours[unit] > NEGLIGIBLE
    ]  # fmt: skip
    columns = words("Unit", "Technology", "Bus") + numbers("Ramp-limited hours")
    return Table("Ramp-limited hours", columns, rows, sortable=True)


def units(view: View) -> Table:
    """Energy, hours on, starts, cost and emissions of each unit, the most energy first."""
    names, energy = view.names("unit"), view.energy("unit_output")
    labels = [view.labels(f"unit_{name}", "unit") for name in ("technology", "fuel", "bus")]
    on = view.values("unit_on").sum(axis=0) * view.period_hours
    starts = view.values("unit_start").sum(axis=0)
    running, starting = (view.values(name).sum(axis=0) for name in ("unit_cost", "unit_start_cost"))
    emitted = view.values("emissions").sum(axis=0)
    paid = _make_whole(view)
    digits = 0 if _whole(on) and _whole(starts) else 2
    rows = [
        [
            word(names[unit]), *(word(label[unit]) for label in labels), figure(energy[unit]),
            figure(on[unit], digits), figure(starts[unit], digits), cash(running[unit], running),
            cash(starting[unit], starting), *(cash(each[unit], each) for each in paid),
            figure(emitted[unit]),
        ]
        for unit in ranked(energy, on)
    ]  # fmt: skip
    columns = words("Unit", "Technology", "Fuel", "Bus") + numbers(
        "MWh", "Hours on", "Starts", f"Running cost {view.currency}", f"Start cost {view.currency}",
        *(f"Make-whole {view.currency}" for _ in paid), "t CO\N{SUBSCRIPT TWO}",
    )  # fmt: skip
    return Table("Units", columns, rows, sortable=True)


def _make_whole(view: View) -> list[Floats]:
    """Return make-whole amounts by unit, as a list of one array, or of none if they are not known."""
    return [view.values("make_whole").sum(axis=0)] if view.has("make_whole") else []


def _whole(values: Floats) -> bool:
    return bool(np.allclose(values, np.round(values), atol=NEGLIGIBLE))


def on_off(view: View, order: Sequence[int]) -> Table:
    """When each unit was on, in words."""
    names, on = view.names("unit"), view.values("unit_on") > HALF
    rows = [[word(names[unit]), word(_when_on(view, on[:, unit]))] for unit in order]
    return Table("When units were on", words("Unit", "On"), rows)


def _when_on(view: View, on: NDArray[np.bool_]) -> str:
    if on.all():
        return "all hours"
    spans = view.clock.spans(np.flatnonzero(on))
    shown = [view.clock.span(first, last) for first, last in spans[:MOST_DAYS]]
    more = [f"{len(spans) - MOST_DAYS} more stretches"] if len(spans) > MOST_DAYS else []
    return "; ".join(shown + more) or "no hour"
