"""What the audit looks at: the dataset and the case as arrays on the same periods and elements.

Public names: `DIMENSIONS`, `Evidence`, `Pairs`, `gather`, `summed`.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from simulator.case import Case, series
from simulator.errors import AuditError

__all__ = ["DIMENSIONS", "Evidence", "Pairs", "gather", "summed"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]

DIMENSIONS: Mapping[str, tuple[str, ...]] = {
    **dict.fromkeys(
        ("unit_output", "unit_available", "unit_on", "unit_start", "unit_cost", "unit_start_cost",
         "emissions"), ("time", "unit")),
    **dict.fromkeys(("renewable_available", "renewable_output", "curtailment"), ("time", "plant")),
    **dict.fromkeys(("storage_charge", "storage_discharge", "stored_energy"), ("time", "store")),
    **dict.fromkeys(("load_demand", "load_unserved"), ("time", "load")),
    **dict.fromkeys(
        ("surplus", "price", "price_energy", "price_congestion", "price_loss"), ("time", "bus")),
    "tie_flow": ("time", "tie"),
    **dict.fromkeys(
        ("line_flow", "line_loss", "line_rating", "line_shadow_price", "congestion_rent"),
        ("time", "line")),
    **dict.fromkeys(("congestion_hours", "hours_at_limit", "security_hours"), ("line",)),
    **dict.fromkeys(
        ("corridor_flow", "corridor_forward_limit", "corridor_reverse_limit", "corridor_shadow_price",
         "corridor_limit_side", "corridor_rent"), ("time", "corridor")),
    **dict.fromkeys(("corridor_congestion_hours", "corridor_hours_at_limit"), ("corridor",)),
    **dict.fromkeys(
        ("pair_flow", "pair_rating", "pair_shadow_price", "pair_limit_side", "pair_rent"), ("pair",)),
    **dict.fromkeys(
        ("reserve_price", "reserve_shortage", "reserve_requirement"), ("time", "product")),
    "unit_reserve": ("time", "unit", "product"),
    "cost": ("time", "component"),
    "make_whole": ("day", "unit"),
    "window": ("time",),
}  # fmt: skip
"""The variables that are audited, and their dimensions (results-format.md)."""

OF_DECISIONS: Mapping[str, tuple[str, ...]] = {
    **dict.fromkeys(("price_fixed", "price_relaxed"), ("time", "bus")),
    **dict.fromkeys(("reserve_price_fixed", "reserve_price_relaxed"), ("time", "product")),
    "line_limit_side": ("time", "line"),
}
"""What a run in mode `optimal` has besides."""

CODES: Mapping[str, tuple[str, ...]] = {"unit_reason": ("time", "unit")}
"""The audited variables that are codes and so always have a number."""

COMPONENTS = (
    "unit_running", "unit_start", "renewable", "storage", "unserved", "surplus", "reserve_shortage",
)  # fmt: skip
MODES = ("given", "relaxed", "optimal")
LIMITS = ("none", "lines", "secure")
ENDLESS = {"line_rating", "corridor_forward_limit", "corridor_reverse_limit"}
"""Variables in which infinity means that there is no limit."""
PRICING = ("fixed", "relaxed")


@dataclass(frozen=True, eq=False)
class Pairs:
    """Lines priced after a contingency, arrays (pair,).

    lost : name of the contingency; line, period : positions
    """

    lost: NDArray[np.str_]
    line: Integers
    period: Integers


@dataclass(frozen=True, eq=False)
class Evidence:
    """A run and its case, side by side.

    names : dimension → labels in the order of the case's table
    span : the run's periods on the case's time axis; hours : their local starts
    length : Δ, h; mode, limits, pricing : what the run was asked for
    reasons : what the codes of `unit_reason` mean
    values : variable → array with the dimensions of `DIMENSIONS`; NaN for what is endless and no limit
    pairs : what is priced after a contingency
    """

    case: Case
    names: Mapping[str, pd.Index]
    span: slice
    length: float
    mode: str
    limits: str
    pricing: str
    reasons: tuple[str, ...]
    values: Mapping[str, Floats] = field(repr=False)
    pairs: "Pairs" = field(repr=False)

    def __getitem__(self, variable: str) -> Floats:
        return self.values[variable]

    @property
    def price_of_plan(self) -> Floats:
        """Return prices of the linear program whose optimum the amounts are, array (period, bus)."""
        return self["price_fixed" if self.mode == "optimal" else "price"]

    @property
    def reserve_price_of_plan(self) -> Floats:
        """Return reserve prices of that linear program, array (period, product)."""
        return self["reserve_price_fixed" if self.mode == "optimal" else "reserve_price"]

    @cached_property
    def limit_side(self) -> Floats:
        """Which limit of a line is priced: 1 at +F, −1 at −F, array (period, line).

        Told by the dataset where decisions are made, since a relaxation's limits are not the plan's;
        elsewhere by the flow, and 0 where there is none.
        """
        if self.mode == "optimal":
            return self["line_limit_side"]
        side: Floats = np.sign(self["line_flow"])
        return side

    @property
    def hours(self) -> pd.DatetimeIndex:
        """Local starts of the periods."""
        return self.case.time.local[self.span]

    @property
    def periods(self) -> int:
        """Number of periods."""
        return self.span.stop - self.span.start

    @cached_property
    def elapsed(self) -> Floats:
        """Hours from the start of the run to that of each period, array (period, 1)."""
        hours: Floats = np.arange(float(self.periods))[:, None] * self.length
        return hours

    @cached_property
    def window_ends(self) -> Booleans:
        """Whether what the solver saw next is not kept: the last kept period of each window (period,)."""
        ends: Booleans = np.append(np.diff(self["window"]) != 0, [True])
        return ends

    def bus(self, table: pd.DataFrame, column: str = "bus") -> Integers:
        """Return the positions of the buses some elements are at."""
        return self.names["bus"].get_indexer(pd.Index(table[column]))

    @cached_property
    def tie_share(self) -> Floats:
        """What planned outages leave of each tie, array (period, tie), 0 to 1."""
        return series.available_share(self.case, "dc_tie", self.names["tie"], self.span)

    @cached_property
    def store_share(self) -> Floats:
        """What planned outages leave of the power of each store, array (period, store), 0 to 1."""
        return series.available_share(self.case, "storage", self.names["store"], self.span)

    @cached_property
    def demand_at_bus(self) -> Floats:
        """Demand of the case, array (period, bus), MW."""
        demand = series.load_demand(self.case, self.span)
        return summed(demand, self.bus(self.case.loads), len(self.names["bus"]))

    @cached_property
    def tie_delivered(self) -> Floats:
        """Share of what enters a tie that arrives, array (tie,)."""
        delivered: Floats = 1 - self.case.dc_ties["loss_percent"].to_numpy(float) / 100
        return delivered

    @cached_property
    def injection(self) -> Floats:
        """Net injection at each bus, from the dataset, array (period, bus), MW (1.2)."""
        case, buses = self.case, len(self.names["bus"])
        stored = self["storage_discharge"] - self["storage_charge"]
        served = self["load_demand"] - self["load_unserved"]
        sent, back = np.maximum(self["tie_flow"], 0.0), np.maximum(-self["tie_flow"], 0.0)
        arrives = self.tie_delivered
        return (
            summed(self["unit_output"], self.bus(case.units), buses)
            + summed(self["renewable_output"], self.bus(case.renewables), buses)
            + summed(stored, self.bus(case.storage), buses)
            - summed(served, self.bus(case.loads), buses)
            + summed(arrives * back - sent, self.bus(case.dc_ties, "from_bus"), buses)
            + summed(arrives * sent - back, self.bus(case.dc_ties, "to_bus"), buses)
            - self["surplus"]
        )

    @property
    def lossy(self) -> bool:
        """Whether lines lose power."""
        return self.case.settings.network.losses

    @cached_property
    def loss_rate(self) -> Floats:
        """What a line loses over its flow squared, array (line,), 1/MW: r/base_mva, or nothing."""
        rate: Floats = (
            self.case.lines["resistance_pu"].to_numpy(float) / self.case.settings.base_mva
        )
        return rate * self.lossy

    @cached_property
    def net_injection(self) -> Floats:
        """Net injection less half of what each line loses at either end, array (period, bus), MW."""
        half = self.loss_rate * self["line_flow"] ** 2 / 2
        ends = (self.bus(self.case.lines, end) for end in ("from_bus", "to_bus"))
        return self.injection - sum(summed(half, end, len(self.names["bus"])) for end in ends)


def summed(values: Floats, place: Integers, places: int) -> Floats:
    """Sum values (period, element) at the places of the elements, array (period, place).

    >>> summed(np.array([[1.0, 2.0, 4.0]]), np.array([1, 0, 1]), 3)
    array([[2., 5., 0.]])
    """
    total = np.zeros((len(values), places))
    np.add.at(total.T, place, values.T)
    return total


def gather(case: Case, dataset: xr.Dataset) -> Evidence:
    """Lay dataset and case side by side; raise `AuditError` where they do not belong together."""
    names = {
        "bus": case.buses.index, "line": case.lines.index, "unit": case.units.index,
        "plant": case.renewables.index, "store": case.storage.index, "tie": case.dc_ties.index,
        "load": case.loads.index, "product": case.reserves.index, "component": pd.Index(COMPONENTS),
        "corridor": case.corridors.index,
    }  # fmt: skip
    for dimension, expected in names.items():
        _same_elements(dataset, dimension, expected)
    mode, span = _choice(dataset, "commitment", MODES), _span(case, dataset)
    names["day"] = pd.Index(case.time.local[span].strftime("%Y-%m-%d").unique())
    _same_elements(dataset, "day", names["day"])
    wanted = {**DIMENSIONS, **CODES, **(OF_DECISIONS if mode == "optimal" else {})}
    pairs = _pairs(case, dataset, span)
    names["pair"] = pd.Index([str(name) for name in dataset["pair"].to_numpy()])
    return Evidence(
        case=case, names=names, span=span, pairs=pairs, length=_length(case, dataset), mode=mode,
        limits=_choice(dataset, "limits", LIMITS), pricing=_choice(dataset, "pricing", PRICING),
        reasons=_reasons(dataset),
        values={name: _values(dataset, name, dims) for name, dims in wanted.items()},
    )  # fmt: skip


def _unfit(subject: str, rule: str, found: object, remedy: str) -> AuditError:
    return AuditError(f"{subject}, {rule}, found {found}, {remedy}")


_RERUN = "run the case again"


def _same_elements(dataset: xr.Dataset, dimension: str, expected: pd.Index) -> None:
    subject, rule = f"dimension {dimension} of the dataset", "must name the elements of the case"
    if dimension not in dataset.coords:
        raise _unfit(subject, rule, "none", _RERUN)
    found = [str(name) for name in dataset[dimension].to_numpy()]
    if found != [str(name) for name in expected]:
        other = [name for name in found if name not in expected][:5] or "another order or number"
        raise _unfit(subject, rule, other, _RERUN)


def _length(case: Case, dataset: xr.Dataset) -> float:
    length = dataset.attrs.get("period_hours")
    if length != case.time.period_hours:
        rule = f"must be the {case.time.period_hours:g} h of the case"
        raise _unfit("attribute period_hours of the dataset", rule, length, _RERUN)
    return float(length)


def _choice(dataset: xr.Dataset, attribute: str, known: tuple[str, ...]) -> str:
    value = dataset.attrs.get(attribute)
    if value not in known:
        rule = f"must be one of {', '.join(known)}"
        raise _unfit(f"attribute {attribute} of the dataset", rule, value, _RERUN)
    return str(value)


def _reasons(dataset: xr.Dataset) -> tuple[str, ...]:
    """Return what the codes of `unit_reason` mean, as the dataset says itself."""
    subject, rule = "unit_reason of the dataset", "must say what its codes from 0 mean"
    described = dataset["unit_reason"].attrs if "unit_reason" in dataset else {}
    meanings = tuple(str(described.get("flag_meanings", "")).split())
    values = np.asarray(described.get("flag_values", []))
    if not {"off", "at_no_cost"} <= set(meanings) or not np.array_equal(
        values, np.arange(len(meanings))
    ):
        raise _unfit(subject, rule, f"{meanings} for {values}", _RERUN)
    return meanings


def _span(case: Case, dataset: xr.Dataset) -> slice:
    """Find the run's periods on the case's time axis."""
    subject, rule = "dimension time of the dataset", "must be periods of the case, without gap"
    times = dataset.indexes.get("time")
    if not isinstance(times, pd.DatetimeIndex) or not len(times):
        raise _unfit(subject, rule, "no times", _RERUN)
    places = case.time.periods.get_indexer(times.tz_localize("UTC"))
    first = int(places[0])
    if first < 0 or not np.array_equal(places, np.arange(first, first + len(places))):
        raise _unfit(subject, rule, f"{times[0]} to {times[-1]}", _RERUN)
    return slice(first, first + len(places))


def _pairs(case: Case, dataset: xr.Dataset, span: slice) -> Pairs:
    """Find the lines and periods of what is priced after a contingency."""
    subject = "dimension pair of the dataset"
    for name in ("pair", "pair_contingency", "pair_line", "pair_time"):
        if name not in dataset.coords:
            raise _unfit(subject, f"must have the coordinate {name}", "none", _RERUN)
    times = pd.DatetimeIndex(dataset["pair_time"].to_numpy()).tz_localize("UTC")
    period = case.time.periods[span].get_indexer(times)
    line = case.lines.index.get_indexer(pd.Index(dataset["pair_line"].to_numpy()))
    if (period < 0).any() or (line < 0).any():
        found = [str(name) for name in dataset["pair"].to_numpy()[(period < 0) | (line < 0)][:5]]
        raise _unfit(subject, "must be of lines and periods of the run", found, _RERUN)
    return Pairs(dataset["pair_contingency"].to_numpy().astype(str), line, period)


def _values(dataset: xr.Dataset, name: str, dimensions: tuple[str, ...]) -> Floats:
    subject, rule = f"variable {name} of the dataset", f"must be there over {', '.join(dimensions)}"
    if name not in dataset:
        raise _unfit(subject, rule, "none", _RERUN)
    variable = dataset[name]
    if set(variable.dims) != set(dimensions):
        raise _unfit(subject, rule, f"it over {', '.join(map(str, variable.dims))}", _RERUN)
    values = variable.transpose(*dimensions).to_numpy().astype(float)
    endless = np.isinf(values) & ((values < 0) | (name not in ENDLESS))
    return np.where(endless, np.nan, values)
