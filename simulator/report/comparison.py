"""What changes from one run to another over the same hours: two datasets in, tables of changes out.

Public names: `Comparison`, `Hourly`, `compare`, `comparison_record`, `differing_settings`.

A change is the second run less the first. What only one run has counts as nothing in sums, and as
unknown where nothing would be wrong: the price at a bus, the hours of a line.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from simulator.case.wording import number, quoted
from simulator.errors import OptionError
from simulator.prices import total_hours, total_rent
from simulator.report.figures import energy_groups
from simulator.report.limits import pair_totals
from simulator.report.moments import Clock
from simulator.report.view import View

__all__ = ["Comparison", "Hourly", "compare", "comparison_record", "differing_settings"]

Floats = NDArray[np.float64]

NEGLIGIBLE_HOURS = 1e-6
NEW, GONE, MORE, FEWER = "newly congested", "no longer congested", "more hours", "fewer hours"
SAME, ONLY_FIRST, ONLY_SECOND = "as many hours", "only in the first run", "only in the second run"
TOTALS = {
    "cost": ("Cost", "currency"),
    "served_mwh": ("Load served", "MWh"),
    "unserved_mwh": ("Load unserved", "MWh"),
    "curtailed_mwh": ("Curtailed", "MWh"),
    "surplus_mwh": ("Spilled at buses", "MWh"),
    "emissions_t": ("Emissions", "t CO\N{SUBSCRIPT TWO}"),
    "congestion_rent": ("Congestion rent", "currency"),
    "congestion_hours": ("Hours priced, all limits", "h"),
    "starts": ("Starts", "1"),
    "make_whole": ("Make-whole amounts", "currency"),
    "mean_price_per_mwh": ("Mean price, weighted by load", "currency/MWh"),
}
"""Label and unit of each measure of a whole run, named as in run.json where that has it."""
DIMENSIONS = ("bus", "line", "unit", "plant", "store", "tie", "load", "product")


@dataclass(frozen=True, eq=False)
class Hourly:
    """What load pays and takes in each period of a run; their quotient is the load-weighted price.

    payment : array (period,), currency/h
    demand : array (period,), MW; a load that feeds in counts as none
    """

    payment: Floats
    demand: Floats

    def mean(self) -> float:
        """Return the mean price over all periods, weighted by load; NaN without load."""
        total = float(self.demand.sum())
        return float(self.payment.sum()) / total if total > 0 else float("nan")


@dataclass(frozen=True, eq=False)
class Comparison:
    """What changes from the first run to the second.

    The frames have the columns `first`, `second` and `change`, and one row for each
    totals : measure, by its name in run.json; the columns `label` and `unit` besides
    cost : component, currency
    energy : technology, MWh
    price : bus, mean over the hours, currency/MWh
    curtailment : plant, MWh
    unserved : load, MWh
    lines : line, hours priced (formulation.md 5.3); `first_limit` and `second_limit`, hours at limit;
    `first_rent` and `second_rent`, currency; `status`, which of the kinds of change it is
    """

    names: tuple[str, str]
    views: tuple[View, View]
    totals: pd.DataFrame
    cost: pd.DataFrame
    energy: pd.DataFrame
    price: pd.DataFrame
    curtailment: pd.DataFrame
    unserved: pd.DataFrame
    lines: pd.DataFrame
    hourly: tuple[Hourly, Hourly]
    only_in: tuple[Mapping[str, list[str]], Mapping[str, list[str]]]

    @property
    def clock(self) -> Clock:
        """The hours both runs cover, in the time zone of the first."""
        return self.views[0].clock

    @property
    def currency(self) -> str:
        """The label of the currency of both."""
        return self.views[0].currency


def compare(
    first: xr.Dataset,
    second: xr.Dataset,
    names: tuple[str, str] = ("the first run", "the second run"),
    records: tuple[Mapping[str, Any], Mapping[str, Any]] = ({}, {}),
) -> Comparison:
    """Compare two runs over the same hours; `names` is what to call them, `records` their run.json."""
    views = View(first, records[0]), View(second, records[1])
    _refuse_other_hours(views, names)
    hourly = _hourly(views[0]), _hourly(views[1])
    return Comparison(
        names, views, _totals(views, hourly), _cost(views), _energy(views),
        _of_elements(views, "bus", _mean_price), _of_elements(views, "plant", _curtailed, absent=0.0),
        _of_elements(views, "load", _unserved, absent=0.0), _lines(views), hourly,
        (_only_in(*views), _only_in(*views[::-1])),
    )  # fmt: skip


def _refuse_other_hours(views: tuple[View, View], names: tuple[str, str]) -> None:
    one, other = (view.clock for view in views)
    if one.period_hours != other.period_hours or not one.edges.equals(
        other.edges.tz_convert(one.edges.tz)
    ):
        found = ", and ".join(
            f"{_span(view.clock)} in {name}" for view, name in zip(views, names, strict=True)
        )
        raise OptionError(
            f"the two runs, must cover the same hours, found {found}, run both cases over the same "
            "hours"
        )
    if views[0].currency != views[1].currency:
        found = " and ".join(quoted(view.currency) for view in views)
        raise OptionError(
            f"the two runs, must be in one currency, found {found}, compare runs of one currency"
        )


def _span(clock: Clock) -> str:
    start, end = (clock.edges[place].isoformat(timespec="minutes") for place in (0, -1))
    return f"{start} to {end} in periods of {number(clock.period_hours)} h"


def _hourly(view: View) -> Hourly:
    bus = pd.Index(view.names("bus")).get_indexer(view.labels("load_bus", "load"))
    demand = np.maximum(view.values("load_demand"), 0.0)
    payment = (view.values("price")[:, bus] * demand).sum(axis=1)
    return Hourly(payment, demand.sum(axis=1))


def _changes(first: pd.Series, second: pd.Series, absent: float = np.nan) -> pd.DataFrame:
    """Put two series side by side in the order of the first, then of the second."""
    every = [*first.index, *(name for name in second.index if name not in first.index)]
    frame = pd.DataFrame({
        "first": first.reindex(every, fill_value=absent).astype(float),
        "second": second.reindex(every, fill_value=absent).astype(float),
    })  # fmt: skip
    return frame.assign(change=frame["second"] - frame["first"])


def _totals(views: tuple[View, View], hourly: tuple[Hourly, Hourly]) -> pd.DataFrame:
    columns = [pd.Series(_sums(view, each)) for view, each in zip(views, hourly, strict=True)]
    frame = _changes(columns[0], columns[1])
    units = [unit.replace("currency", views[0].currency) for _, unit in TOTALS.values()]
    return frame.assign(label=[label for label, _ in TOTALS.values()], unit=units)


def _sums(view: View, hourly: Hourly) -> dict[str, float]:
    demand, unserved, curtailed, surplus = (
        float(view.energy(name).sum())
        for name in ("load_demand", "load_unserved", "curtailment", "surplus")
    )
    return {
        "cost": float(view.values("cost").sum()),
        "served_mwh": demand - unserved,
        "unserved_mwh": unserved,
        "curtailed_mwh": curtailed,
        "surplus_mwh": surplus,
        "emissions_t": float(view.values("emissions").sum()),
        "congestion_rent": total_rent(view.dataset),
        "congestion_hours": total_hours(view.dataset),
        "starts": float(view.values("unit_start").sum()),
        "make_whole": float(view.values("make_whole").sum()) if view.has("make_whole") else np.nan,
        "mean_price_per_mwh": hourly.mean(),
    }


def _cost(views: tuple[View, View]) -> pd.DataFrame:
    columns = [
        pd.Series(view.values("cost").sum(axis=0), view.names("component")) for view in views
    ]
    return _changes(columns[0], columns[1], absent=0.0)


def _energy(views: tuple[View, View]) -> pd.DataFrame:
    """Energy by technology, of which what stores give back is one."""
    columns = [
        pd.Series({
            name: float(power.sum()) * view.period_hours
            for name, power in energy_groups(view).items()
        }, dtype=float)
        for view in views
    ]  # fmt: skip
    return _changes(columns[0], columns[1], absent=0.0)


def _of_elements(
    views: tuple[View, View], dimension: str, measure: Any, absent: float = np.nan
) -> pd.DataFrame:
    first, second = (pd.Series(measure(view), view.names(dimension)) for view in views)
    return _changes(first, second, absent)


def _mean_price(view: View) -> Floats:
    return np.asarray(view.values("price").mean(axis=0))


def _curtailed(view: View) -> Floats:
    return view.energy("curtailment")


def _unserved(view: View) -> Floats:
    return view.energy("load_unserved")


def _lines(views: tuple[View, View]) -> pd.DataFrame:
    first, second = (_limits(view) for view in views)
    after = {*first.index, *second.index} - {
        name for view in views for kind in ("line", "corridor") for name in _limit_names(view, kind)
    }
    # A line after a contingency is in the dataset only where it is priced: elsewhere its hours are none.
    first, second = (
        each.reindex([*each.index, *(name for name in sorted(after) if name not in each.index)])
        for each in (first, second)
    )
    for each in (first, second):
        each.loc[sorted(after)] = each.loc[sorted(after)].fillna(0.0)
    frame = _changes(first["hours"], second["hours"])
    for name in ("limit", "rent"):
        frame[f"first_{name}"] = first[name].reindex(frame.index)
        frame[f"second_{name}"] = second[name].reindex(frame.index)
    return frame.assign(
        status=[_status(*pair) for pair in zip(frame["first"], frame["second"], strict=True)]
    )


def _limit_names(view: View, kind: str) -> list[str]:
    return [name if kind == "line" else f"corridor {name}" for name in view.names(kind)]


def _limits(view: View) -> pd.DataFrame:
    """Return hours and rent of lines, corridors and lines after contingencies, by name."""
    parts = [
        pd.DataFrame({
            "hours": view.values(f"{prefix}congestion_hours"),
            "limit": view.values(f"{prefix}hours_at_limit"),
            "rent": view.values(rent).sum(axis=0),
        }, index=_limit_names(view, kind))
        for kind, prefix, rent in (
            ("line", "", "congestion_rent"), ("corridor", "corridor_", "corridor_rent"),
        )
    ]  # fmt: skip
    pairs = pair_totals(view)
    if len(pairs):
        parts.append(pairs[["hours", "rent"]].assign(limit=pairs["hours"]))
    return pd.concat([part for part in parts if len(part)] or parts[:1]).astype(float)


def _status(before: float, after: float) -> str:
    """Say what kind of change the hours of a line are; NaN is a line that a run does not have."""
    if np.isnan(before) or np.isnan(after):
        return ONLY_SECOND if np.isnan(before) else ONLY_FIRST
    if abs(after - before) <= NEGLIGIBLE_HOURS:
        return SAME
    if before == 0 or after == 0:
        return NEW if after > before else GONE
    return MORE if after > before else FEWER


def _only_in(one: View, other: View) -> dict[str, list[str]]:
    """Name the elements that one run has and the other does not, by dimension."""
    found = {}
    for dimension in DIMENSIONS:
        known = set(other.names(dimension))
        found[dimension] = [name for name in one.names(dimension) if name not in known]
    return {dimension: names for dimension, names in found.items() if names}


def differing_settings(comparison: Comparison) -> list[tuple[str, Any, Any]]:
    """Return the settings that differ: name, in the first run, in the second; None if not recorded."""
    first, second = (_settings(view) for view in comparison.views)
    return [
        (name, first.get(name), second.get(name))
        for name in sorted(first | second)
        if first.get(name) != second.get(name)
    ]


def _settings(view: View) -> dict[str, Any]:
    """Return a run's settings with their names joined by dots, and what its dataset says of them."""
    found = {
        "commitment.mode": str(view.dataset.attrs.get("commitment", "")),
        "network.limits": str(view.dataset.attrs.get("limits", "")),
    }
    recorded = view.run.get("settings")
    return found | (pd.json_normalize(recorded).to_dict("records")[0] if recorded else {})


def comparison_record(comparison: Comparison) -> dict[str, Any]:
    """Return all that a comparison holds as a plain dictionary for JSON; unknown numbers are None."""
    edges = comparison.clock.edges
    return {
        "first": _side(comparison, 0),
        "second": _side(comparison, 1),
        "from": edges[0].isoformat(),
        "until": edges[-1].isoformat(),
        "currency": comparison.currency,
        "settings": {
            name: {"first": one, "second": other}
            for name, one, other in differing_settings(comparison)
        },
        "totals": _rows(comparison.totals.drop(columns=["label", "unit"])),
        "cost": _rows(comparison.cost),
        "energy_mwh": _rows(comparison.energy),
        "mean_price_per_mwh": _rows(comparison.price),
        "curtailed_mwh": _rows(comparison.curtailment),
        "unserved_mwh": _rows(comparison.unserved),
        "congestion_hours": _rows(comparison.lines),
    }


def _side(comparison: Comparison, place: int) -> dict[str, Any]:
    view = comparison.views[place]
    audit = view.run.get("audit")
    return {
        "run": comparison.names[place],
        "case": view.case_name,
        "audit_passed": bool(audit.get("passed")) if audit else None,
        "only_here": dict(comparison.only_in[place]),
    }


def _rows(frame: pd.DataFrame) -> dict[str, dict[str, Any]]:
    rows = frame.to_dict("index")
    return {
        str(name): {key: _known(value) for key, value in row.items()} for name, row in rows.items()
    }


def _known(value: Any) -> Any:
    return None if isinstance(value, float) and not np.isfinite(value) else value
