"""The largest load a bus can take, by bisection on full runs (formulation.md 6.1).

Public names: `Largest`, `Probe`, `headroom`, `largest_sizes`, `steps`.
"""

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from simulator.case import Case

__all__ = ["Largest", "Probe", "headroom", "largest_sizes", "steps"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Probe:
    """What a run with a load of some size says: whether it is too large, and what then stops it."""

    too_large: bool
    kind: str = ""
    name: str = ""
    hour: str = ""


@dataclass(frozen=True)
class Largest:
    """The largest size of a bus, MW, and the smallest one tried that is too large, with its probe."""

    size: float
    refused: float
    stop: Probe


Try = Callable[[Sequence[tuple[str, float]]], Sequence[Probe]]


def headroom(case: Case, dataset: xr.Dataset, bus: str, profile: Floats, *, limited: bool) -> float:
    """Return a size beyond which some load surely goes unserved that the base run serves, MW.

    dataset : the base run; profile : array (period,), what the size is multiplied by
    In each hour the new load can get no more than all supply less what other loads are served, and,
    where lines are limited, no more than is at its bus and its lines and ties can bring.
    """
    asked = profile > 0
    if not asked.any():
        return 0.0
    left = _supply(case, dataset, case.buses.index) - _served(dataset)
    if limited:
        left = np.minimum(
            left, _supply(case, dataset, pd.Index([bus])) + _brought(case, dataset, bus)
        )
    return float(np.maximum(left[asked] / profile[asked], 0.0).min())


def _supply(case: Case, dataset: xr.Dataset, buses: pd.Index) -> Floats:
    """Return the most that can be fed in at some buses, array (period,), MW."""

    def at(dimension: str) -> NDArray[np.bool_]:
        return np.isin(dataset[f"{dimension}_bus"].to_numpy(), buses)

    stores = float(case.storage["discharge_mw"][case.storage["bus"].isin(buses)].sum())
    fed_in = np.maximum(-dataset["load_demand"].to_numpy()[:, at("load")], 0.0).sum(axis=1)
    total: Floats = (
        dataset["unit_available"].to_numpy()[:, at("unit")].sum(axis=1)
        + dataset["renewable_available"].to_numpy()[:, at("plant")].sum(axis=1)
        + stores + fed_in
    )  # fmt: skip
    return total


def _served(dataset: xr.Dataset) -> Floats:
    demand = np.maximum(dataset["load_demand"].to_numpy(), 0.0)
    served: Floats = (demand - dataset["load_unserved"].to_numpy()).sum(axis=1)
    return served


def _brought(case: Case, dataset: xr.Dataset, bus: str) -> Floats:
    """Return the most that lines and ties can bring to a bus, array (period,), MW."""
    ends = [dataset[f"line_{end}_bus"].to_numpy() == bus for end in ("from", "to")]
    ties = case.dc_ties
    by_tie = ties["forward_mw"][ties["to_bus"] == bus].sum()
    by_tie += ties["reverse_mw"][ties["from_bus"] == bus].sum()
    brought: Floats = dataset["line_rating"].to_numpy()[:, ends[0] | ends[1]].sum(axis=1) + by_tie
    return brought


def steps(most: float, within: float) -> int:
    """Return how many runs a bisection takes at most.

    >>> steps(100.0, 1.0)
    8
    """
    return math.ceil(math.log2(max(math.ceil(most / within), 1) + 1)) + 1


def largest_sizes(
    most: Mapping[str, float], known: Mapping[str, Mapping[float, Probe]], within: float, try_all: Try
) -> dict[str, Largest]:  # fmt: skip
    """Bisect all buses side by side: each round tries one size a bus.

    most : a size beyond which load surely goes unserved, MW, by bus
    known : sizes tried already, by bus
    within : sizes are multiples of this, MW; so the same are tried whatever was known or is repeated
    """
    brackets = {bus: _bracket(known.get(bus, {}), limit, within) for bus, limit in most.items()}
    probes: dict[tuple[str, int], Probe] = {}
    while True:
        wanted = [
            (bus, place) for bus in most if (place := _next(brackets[bus], bus, probes)) is not None
        ]
        if not wanted:
            break
        found = try_all([(bus, place * within) for bus, place in wanted])
        for (bus, place), probe in zip(wanted, found, strict=True):
            probes[bus, place] = probe
            low, high = brackets[bus]
            brackets[bus] = (low, min(place, high)) if probe.too_large else (max(place, low), high)
            if not probe.too_large and place == high:
                brackets[bus] = (high, high + 1)
    return {
        bus: Largest(low * within, high * within, probes[bus, high])
        for bus, (low, high) in brackets.items()
    }


def _bracket(known: Mapping[float, Probe], most: float, within: float) -> tuple[int, int]:
    """Return multiples of `within` between which the largest size lies."""
    low, high = 0, math.floor(most / within) + 1
    for size, probe in known.items():
        if probe.too_large:
            high = min(high, max(math.ceil(size / within), 1))
        else:
            low = max(low, math.floor(size / within))
    return min(low, high - 1), high


def _next(
    bracket: tuple[int, int], bus: str, probes: Mapping[tuple[str, int], Probe]
) -> int | None:
    """Return the multiple to try next: the middle, at last the upper end for what stops there."""
    low, high = bracket
    if high - low > 1:
        return (low + high) // 2
    return None if (bus, high) in probes else high
