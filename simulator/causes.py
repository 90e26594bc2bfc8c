"""Which limit makes a price what it is: lines, corridors, and lines after contingencies (formulation.md 5.1).

Public names: `Causes`, `main_causes`, `price_cause`.

A limit's share of a price is its dual × what one more MW injected at the bus adds to the limited flow, less
what arrives of that MW at the load-weighted reference times the same there. Shares of an hour sum to the
congestion part of the price.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from simulator import prices
from simulator.case import Case, series
from simulator.errors import OptionError
from simulator.grid import Contingencies, LineLosses, Network, TopologySchedule

__all__ = ["Causes", "main_causes", "price_cause"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Cause:
    """One limit in the periods in which it is priced.

    period : array (row,), positions in the dataset; dual : signed, currency/MWh
    weight : array (row, line), what each line's flow counts in the limited flow
    """

    name: str
    period: Integers
    dual: Floats
    weight: Floats


class Causes:
    """The priced limits of a dataset over consecutive periods, and the network they act through."""

    def __init__(self, case: Case, dataset: xr.Dataset) -> None:
        self.case, self.dataset = case, dataset
        times = dataset.indexes["time"].tz_localize("UTC")
        first = int(case.time.periods.get_indexer(times)[0])
        span = slice(first, first + len(times))
        self.network = Network.of(case)
        self.schedule = self.network.schedule(series.in_service(case, span))
        losses = LineLosses.of(case, self.network) if case.settings.network.losses else None
        self._losses, self._flow = losses, dataset["line_flow"].to_numpy()
        self._weights, self._share = self._reference()

    def _reference(self) -> tuple[Floats, Floats]:
        """Return weights of the reference, and what arrives there of one more MW, both (period, bus)."""
        loads, data = self.dataset.indexes["bus"], self.dataset
        owner = loads.get_indexer(pd.Index(data["load_bus"].to_numpy()))
        demand = series.sum_by(data["load_demand"].to_numpy(), owner, len(loads))
        weights = prices.reference_weights(demand, self._island)
        kept = np.ones_like(weights)
        if self._losses is not None:
            slope = self._losses.slope(self._flow)
            kept = 1.0 - self._losses.factors(self.schedule, slope, slope)
        return weights, kept / prices.island_sums(weights * kept, self._island)

    @property
    def _island(self) -> Integers:
        return np.stack([one.island for one in self.schedule.topologies])[self.schedule.index]

    def __iter__(self) -> Iterator[Cause]:
        data, lines = self.dataset, len(self.case.lines)
        shadow = data["line_shadow_price"].to_numpy()
        side = data["line_limit_side"] if "line_limit_side" in data else np.sign(data["line_flow"])
        yield from self._dense(np.eye(lines), self.case.lines.index, -np.asarray(side) * shadow)
        members = self.case.corridor_lines
        weights = np.zeros((len(self.case.corridors), lines))
        place = (
            self.case.corridors.index.get_indexer(pd.Index(members["corridor"])),
            self.case.lines.index.get_indexer(pd.Index(members["line"])),
        )
        weights[place] = members["weight"].to_numpy(float)
        dual = -(data["corridor_limit_side"] * data["corridor_shadow_price"]).to_numpy()
        names = [f"corridor {name}" for name in self.case.corridors.index]
        yield from self._dense(weights, pd.Index(names), dual)
        yield from self._after_contingencies()

    def _dense(self, weights: Floats, names: pd.Index, dual: Floats) -> Iterator[Cause]:
        priced = np.abs(dual) > prices.PRICED
        for element in np.flatnonzero(priced.any(axis=0)).tolist():
            period = np.flatnonzero(priced[:, element])
            weight = np.tile(weights[element], (len(period), 1))
            yield Cause(str(names[element]), period, dual[period, element], weight)

    def _after_contingencies(self) -> Iterator[Cause]:
        data = self.dataset
        period = data.indexes["time"].get_indexer(pd.DatetimeIndex(data["pair_time"].to_numpy()))
        dual = -(data["pair_limit_side"] * data["pair_shadow_price"]).to_numpy()
        names = data["pair"].to_numpy().astype(str)
        here = (period >= 0) & (np.abs(dual) > prices.PRICED)
        held = Contingencies.of(self.case, self.network) if here.any() else Contingencies.none()
        for name in np.unique(names[here]).tolist():
            rows = np.flatnonzero(here & (names == name))
            lost = held.names.get_indexer(pd.Index(data["pair_contingency"].to_numpy()[rows]))
            line = self.case.lines.index.get_indexer(pd.Index(data["pair_line"].to_numpy()[rows]))
            weight = np.zeros((len(rows), len(self.case.lines)))
            topology = self.schedule.index[period[rows]]
            for number in np.unique(topology):
                of = topology == number
                after = held.after(self.schedule.topologies[number])
                weight[of] = after.weights(lost[of], line[of]).toarray()
            yield Cause(name, period[rows], dual[rows], weight)

    def factors(self, cause: Cause) -> Floats:
        """Return what one more MW, delivered at the reference, adds to a limited flow, (row, bus)."""
        rows = TopologySchedule(self.schedule.topologies, self.schedule.index[cause.period])
        if self._losses is None:
            added = rows.collected(cause.weight)
        else:
            slope = self._losses.slope(self._flow[cause.period])
            added = self._losses.factors(rows, slope, cause.weight)
        weighted = self._weights[cause.period] * added
        at_reference = prices.island_sums(weighted, self._island[cause.period])
        return added - self._share[cause.period] * at_reference


def main_causes(case: Case, dataset: xr.Dataset) -> tuple[list[str], Integers, Floats]:
    """Return names of causes, the cause of most of each congestion part, and that much of it.

    Arrays (period, bus): positions among the names, -1 where there is none, and currency/MWh.
    """
    shape = dataset["price"].transpose("time", "bus").shape
    names: list[str] = []
    which, most = np.full(shape, -1), np.zeros(shape)
    causes = Causes(case, dataset)
    for cause in causes:
        share = cause.dual[:, None] * causes.factors(cause)
        best, larger = most[cause.period], np.abs(share) > np.abs(most[cause.period])
        most[cause.period] = np.where(larger, share, best)
        which[cause.period] = np.where(larger, len(names), which[cause.period])
        names.append(cause.name)
    return names, which, most


def price_cause(
    case: Case, dataset: xr.Dataset, bus: str, hours: slice | str | None = None
) -> pd.DataFrame:
    """Say which limit causes how much of a bus's congestion part, hour by hour (5.1).

    hours : what `dataset.sel(time=…)` takes, UTC; by default the whole run
    Frame indexed by (time, cause), one row a priced limit and hour: `factor` (what one more MW injected
    at the bus and taken at the load-weighted reference adds to the limited flow), `shadow_price` and
    `contribution` (currency/MWh). The contributions of an hour sum to `price_congestion` at the bus.
    Raises `OptionError` for an unknown bus.
    """
    if bus not in dataset.indexes["bus"]:
        raise OptionError(
            f'the bus, must be one of the run, found "{bus}", choose one of its {dataset.sizes["bus"]} buses'
        )
    chosen = dataset if hours is None else dataset.sel(time=hours)
    if "time" not in chosen.dims:
        chosen = dataset.sel(time=[chosen["time"].to_numpy()])
    chosen = chosen.transpose("time", ...)
    place, times = dataset.indexes["bus"].get_loc(bus), chosen.indexes["time"]
    causes = Causes(case, chosen)
    found = [
        pd.DataFrame({
            "time": times[cause.period], "cause": cause.name, "factor": factor,
            "shadow_price": np.abs(cause.dual), "contribution": cause.dual * factor,
        })
        for cause in causes
        for factor in [causes.factors(cause)[:, place]]
    ]  # fmt: skip
    numbers = ["factor", "shadow_price", "contribution"]
    none = pd.DataFrame({"time": times[:0], "cause": [], **{name: [] for name in numbers}})
    table = pd.concat(found) if found else none.astype(dict.fromkeys(numbers, float))
    return table.set_index(["time", "cause"]).sort_index(level="time", sort_remaining=False)
