"""The terminal summary of a run: what a planner asks first.

Public names: `print_summary`.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from rich.console import Console
from rich.markup import escape
from rich.table import Table

from simulator.prices import PRICED
from simulator.report.plans import largest_gap

__all__ = ["print_summary"]

SHOWN = 5
NEGLIGIBLE = 1e-3
"""MWh or currency that a summary does not mention."""


def print_summary(dataset: xr.Dataset, record: Mapping[str, Any], console: Console) -> None:
    """Print cost, energy, starts, prices, congestion, curtailment and unserved load of a run."""
    _heading(dataset, record, console)
    for table in (
        _cost(dataset),
        _energy(dataset),
        _starts(dataset),
        _buses(dataset),
        _hours(dataset),
        _lines(dataset),
        _corridors(dataset),
        _after_losses(dataset),
        _curtailment(dataset),
        _reserves(dataset),
    ):
        if table.row_count:
            console.print(table)


def _local(dataset: xr.Dataset) -> pd.DatetimeIndex:
    return dataset.indexes["time"].tz_localize("UTC").tz_convert(dataset.attrs["time_zone"])


def _heading(dataset: xr.Dataset, record: Mapping[str, Any], console: Console) -> None:
    totals, counts = record["totals"], record["counts"]
    console.print(f"[bold]{escape(record['case'])}[/bold]  {record['from']} to {record['until']}")
    unserved = totals["unserved_mwh"]
    style = "bold red" if unserved > NEGLIGIBLE else "green"
    console.print(
        f"[{style}]unserved load {unserved:,.1f} MWh[/{style}], {_where_unserved(dataset)}"
    )
    console.print(
        f"cost {totals['cost']:,.0f} {escape(dataset.attrs['currency'])}, served "
        f"{totals['served_mwh']:,.0f} MWh, curtailed {totals['curtailed_mwh']:,.0f} MWh, spilled "
        f"{totals['surplus_mwh']:,.1f} MWh, emitted {totals['emissions_t']:,.0f} t"
    )
    lost = totals.get("lost_mwh", 0.0)
    if lost > NEGLIGIBLE:
        console.print(f"lost in lines {lost:,.0f} MWh")
    if "congestion_cost" in totals:
        console.print(
            f"congestion cost {totals['congestion_cost']:,.0f} {escape(dataset.attrs['currency'])}: "
            "total cost less that of the same run without line limits"
        )
    if "make_whole" in totals:
        console.print(
            f"starts {round(totals['starts'], 3) + 0.0:,.4g}, make-whole {totals['make_whole']:,.0f} "
            f"{escape(dataset.attrs['currency'])}{_left_open(record)}{_priced(dataset)}"
        )
    console.print(
        f"{counts['windows']} windows, {counts['lp_solves']} solves, {counts['line_rows']} line rows, "
        f"{counts['rebuilds']} rebuilds, {_audited(record)}"
    )


def _left_open(record: Mapping[str, Any]) -> str:
    """Say the largest gap to the best plan there may be, where on and off were searched for."""
    if not (found := largest_gap(record)):
        return ""
    gap, window, late = found
    ended = f"; [bold]time ran out in {late} of them[/bold]" if late else ""
    return f", largest gap {gap:.3%} in window {window}{ended}"


def _priced(dataset: xr.Dataset) -> str:
    """Say so where prices are not those of the plan, as all that is worked out of them follows."""
    return ", prices of the relaxation" if dataset.attrs.get("pricing") == "relaxed" else ""


def _audited(record: Mapping[str, Any]) -> str:
    if "audit" not in record:
        return "not audited"
    checks = record["audit"]["checks"]
    failed = sum(not check["passed"] for check in checks)
    return (
        f"[bold red]{failed} checks failed[/bold red]"
        if failed
        else f"all {len(checks)} checks passed"
    )


def _where_unserved(dataset: xr.Dataset) -> str:
    amount = dataset["load_unserved"].sum("time") * dataset.attrs["period_hours"]
    short = amount.to_series().sort_values(ascending=False)
    short = short[short > NEGLIGIBLE]
    if short.empty:
        return "every load is served"
    names = ", ".join(f"{escape(str(name))} {value:,.1f}" for name, value in short[:SHOWN].items())
    return f"at {names}" + (f" and {len(short) - SHOWN} more" if len(short) > SHOWN else "")


def _table(title: str, *columns: str) -> Table:
    table = Table(title=title, title_justify="left", title_style="bold", box=None, pad_edge=False)
    for position, column in enumerate(columns):
        table.add_column(column, justify="right" if position else "left", overflow="fold")
    return table


def _cost(dataset: xr.Dataset) -> Table:
    table = _table("Cost by component", "component", dataset.attrs["currency"], "share")
    total = float(dataset["cost"].sum())
    for name, value in dataset["cost"].sum("time").to_series().items():
        if abs(value) > NEGLIGIBLE:
            share = f"{value / total:.1%}" if total else "–"
            table.add_row(str(name).replace("_", " "), f"{value:,.0f}", share)
    return table


def _energy(dataset: xr.Dataset) -> Table:
    """Energy by technology; stores and ties by what they deliver."""
    table = _table("Energy by technology", "technology", "MWh", "share of supply")
    length = dataset.attrs["period_hours"]
    sums = pd.concat([
        _by_technology(dataset["unit_output"], "unit_technology"),
        _by_technology(dataset["renewable_output"], "plant_technology"),
        pd.Series({"storage discharge": float(dataset["storage_discharge"].sum())}),
    ])  # fmt: skip
    sums = sums.groupby(level=0).sum().sort_values(ascending=False) * length
    for name, value in sums[sums > 0].items():
        table.add_row(escape(str(name)) or "(none)", f"{value:,.0f}", f"{value / sums.sum():.1%}")
    return table


def _starts(dataset: xr.Dataset) -> Table:
    """Units with the largest make-whole amounts, then with the most starts."""
    currency = dataset.attrs["currency"]
    table = _table("Starts and make-whole amounts", "unit", "hours on", "starts", f"start {currency}",
                   f"make-whole {currency}")  # fmt: skip
    if "make_whole" not in dataset:
        return table
    frame = pd.DataFrame({
        "hours": dataset["unit_on"].sum("time").to_series() * dataset.attrs["period_hours"],
        "starts": dataset["unit_start"].sum("time").to_series(),
        "cost": dataset["unit_start_cost"].sum("time").to_series(),
        "short": dataset["make_whole"].sum("day").to_series(),
    })  # fmt: skip
    some = frame[(frame["starts"] > NEGLIGIBLE) | (frame["short"] > NEGLIGIBLE)]
    for unit in some.sort_values(["short", "starts"], ascending=False)[: 2 * SHOWN].itertuples():
        table.add_row(
            escape(str(unit.Index)), f"{unit.hours:,.4g}", f"{unit.starts:.3g}", f"{unit.cost:,.0f}",
            f"{unit.short:,.0f}",
        )  # fmt: skip
    return table


def _by_technology(output: xr.DataArray, coordinate: str) -> pd.Series:
    return (
        pd.Series(output.sum("time").to_numpy(), output[coordinate].to_numpy())
        .groupby(level=0)
        .sum()
    )


def _ends(values: pd.Series) -> pd.Series:
    """Return the dearest and the cheapest few, without saying any twice."""
    ranked = values.sort_values(ascending=False)
    return ranked if len(ranked) <= 2 * SHOWN else pd.concat([ranked[:SHOWN], ranked[-SHOWN:]])


def _buses(dataset: xr.Dataset) -> Table:
    unit = f"{dataset.attrs['currency']}/MWh"
    table = _table("Dearest and cheapest buses", "bus", f"mean {unit}", "least", "most")
    price = dataset["price"]
    for name, value in _ends(price.mean("time").to_series()).items():
        at = price.sel(bus=name)
        table.add_row(
            escape(str(name)), f"{value:,.2f}", f"{float(at.min()):,.2f}", f"{float(at.max()):,.2f}"
        )
    return table


def _hours(dataset: xr.Dataset) -> Table:
    unit = f"{dataset.attrs['currency']}/MWh"
    table = _table("Dearest and cheapest hours", "hour", f"load-weighted {unit}", "load MW")
    at_bus = dataset["price"].sel(bus=dataset["load_bus"])
    demand = dataset["load_demand"].to_numpy()
    total = demand.sum(axis=1)
    mean = (at_bus.to_numpy() * demand).sum(axis=1) / np.where(total > 0, total, 1.0)
    for position, value in _ends(pd.Series(mean[total > 0], np.flatnonzero(total > 0))).items():
        hour = _local(dataset)[int(str(position))].strftime("%a %Y-%m-%d %H:%M %z")
        table.add_row(hour, f"{value:,.2f}", f"{total[int(str(position))]:,.0f}")
    return table


def _lines(dataset: xr.Dataset) -> Table:
    currency = dataset.attrs["currency"]
    table = _table(
        "Congested lines", "line", "hours", "hours at limit", f"{currency}/MWh when priced",
        f"rent {currency}",
    )  # fmt: skip
    frame = pd.DataFrame({
        "hours": dataset["congestion_hours"].to_series(),
        "limit": dataset["hours_at_limit"].to_series(),
        "shadow": dataset["line_shadow_price"].sum("time").to_series() * dataset.attrs["period_hours"],
        "rent": dataset["congestion_rent"].sum("time").to_series(),
    })  # fmt: skip
    congested = frame[frame["hours"] > 0].sort_values(["hours", "rent"], ascending=False)
    for line in congested[: 2 * SHOWN].itertuples():
        mean = line.shadow / line.hours
        table.add_row(
            escape(str(line.Index)),
            f"{line.hours:g}",
            f"{line.limit:g}",
            f"{mean:,.2f}",
            f"{line.rent:,.0f}",
        )
    return table


def _corridors(dataset: xr.Dataset) -> Table:
    currency = dataset.attrs["currency"]
    table = _table("Congested corridors", "corridor", "hours", "hours at limit", f"rent {currency}")
    hours, limit = (
        dataset[f"corridor_{name}"].to_series() for name in ("congestion_hours", "hours_at_limit")
    )
    rent = dataset["corridor_rent"].sum("time").to_series()
    for name in hours[hours > 0].sort_values(ascending=False)[: 2 * SHOWN].index:
        table.add_row(
            escape(str(name)), f"{hours[name]:g}", f"{limit[name]:g}", f"{rent[name]:,.0f}"
        )
    return table


def _after_losses(dataset: xr.Dataset) -> Table:
    currency, length = dataset.attrs["currency"], dataset.attrs["period_hours"]
    table = _table(
        "Congested after a contingency", "line after loss of", "hours", f"rent {currency}"
    )
    frame = pd.DataFrame({
        "pair": dataset["pair"].to_numpy().astype(str), "rent": dataset["pair_rent"].to_numpy(),
        "hours": length * (dataset["pair_shadow_price"].to_numpy() > PRICED),
    })  # fmt: skip
    totals = frame.groupby("pair").sum().sort_values(["hours", "rent"], ascending=False)
    for row in totals[: 2 * SHOWN].itertuples():
        table.add_row(escape(str(row.Index)), f"{row.hours:g}", f"{row.rent:,.0f}")
    return table


def _curtailment(dataset: xr.Dataset) -> Table:
    table = _table("Curtailment", "plant", "MWh", "of available")
    length = dataset.attrs["period_hours"]
    lost = dataset["curtailment"].sum("time").to_series() * length
    could = dataset["renewable_available"].sum("time").to_series() * length
    for name, value in lost[lost > NEGLIGIBLE].sort_values(ascending=False)[: 2 * SHOWN].items():
        table.add_row(escape(str(name)), f"{value:,.0f}", f"{value / could[name]:.1%}")
    return table


def _reserves(dataset: xr.Dataset) -> Table:
    currency, length = dataset.attrs["currency"], dataset.attrs["period_hours"]
    table = _table(
        "Reserves", "product", f"mean {currency}/MWh", "most", "hours short", "MWh short"
    )
    for name in dataset["product"].to_numpy():
        price, short = (
            dataset[variable].sel(product=name).to_numpy()
            for variable in ("reserve_price", "reserve_shortage")
        )
        table.add_row(
            escape(str(name)),
            f"{price.mean():,.2f}",
            f"{price.max():,.2f}",
            f"{(short > NEGLIGIBLE).sum() * length:g}",
            f"{short.sum() * length:,.1f}",
        )
    return table
