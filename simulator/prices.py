"""Prices taken apart and congestion accounted for (formulation.md 5): pure functions.

Public names: `congestion_rent`, `delivered_share`, `energy_and_congestion`, `island_sums`, `lines_priced`,
`local_days`, `make_whole`, `pair_name`, `reference_weights`, `reserve_revenue`, `total_hours`, `total_rent`.

Arrays have periods first; prices are currency/MWh, powers MW, Δ is the length of a period in h.
"""

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

__all__ = [
    "PRICED", "congestion_rent", "delivered_share", "energy_and_congestion", "island_sums", "lines_priced",
    "local_days", "make_whole", "pair_name", "reference_weights", "reserve_revenue", "total_hours",
    "total_rent",
]  # fmt: skip

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

PRICED = 1e-6
"""A shadow price above this, currency/MWh, makes an hour a congestion hour (5.3)."""
_NO_LOAD = 1e-9
_NO_PRICE = 0.1  # currency/MWh; of less, rounding would make the proportion


def reference_weights(demand: Floats, island: Integers) -> Floats:
    """Return each bus's weight in the reference of its island, array (period, bus), summing to one.

    demand : array (period, bus), MW; negative counts as none
    island : array (period, bus), island number
    Weights follow demand; an island without any gives all its buses the same weight.
    """
    positive = np.maximum(demand, 0.0)
    total = island_sums(positive, island)
    size = island_sums(np.ones_like(positive), island)
    return np.where(total > _NO_LOAD, positive / np.where(total > _NO_LOAD, total, 1.0), 1.0 / size)


def island_sums(values: Floats, island: Integers) -> Floats:
    """Sum values over the island each bus is in, array (period, bus)."""
    key = island + (np.arange(len(island)) * (island.max(initial=0) + 1))[:, None]
    return np.bincount(key.ravel(), weights=values.ravel())[key]


def energy_and_congestion(
    price: Floats, weights: Floats, island: Integers
) -> tuple[Floats, Floats]:
    """Split prices into the energy part, one per island, and the congestion part (5.1).

    Energy is the price of the load-weighted reference, Σ_n weight_n·price_n; the rest is
    Σ_l PTDF_ln·μ_l with the PTDF of that reference (Schweppe, Caramanis, Tabors & Bohn, Spot Pricing
    of Electricity, 1988). The parts depend on the reference, their sum does not.

    >>> price, one = np.array([[20.0, 40.0]]), np.array([[0, 0]])
    >>> energy_and_congestion(price, np.array([[0.25, 0.75]]), one)
    (array([[35., 35.]]), array([[-15.,   5.]]))
    """
    energy = island_sums(weights * price, island)
    return energy, price - energy


def delivered_share(own: Floats, factor: Floats, weights: Floats, island: Integers) -> Floats:
    """Return what arrives at the reference of one more MW injected at each bus, array (period, bus).

    own : array (period, bus), prices without their congestion part, in proportion to that share with
        respect to some reference
    factor : array (period, bus), what one more MW injected adds to losses; it serves where power has no
        price and so no proportion
    With that share the loss part of a price is energy·(share − 1): minus the energy price times the loss
    factor with respect to the load-weighted reference (5.1).
    """
    at_reference = island_sums(weights * own, island)
    by_flows = (1.0 - factor) / island_sums(weights * (1.0 - factor), island)
    priced = np.abs(at_reference) > _NO_PRICE
    return np.where(priced, own / np.where(priced, at_reference, 1.0), by_flows)


def congestion_rent(line_dual: Floats, flow: Floats, period_hours: float) -> Floats:
    """Return the rent of each line, array (period, line), currency (5.2).

    Shadow price × flow × Δ, the flow counted in the direction of the limit: |flow| where it is met.
    """
    return np.where(flow == 0, 0.0, -line_dual * flow) * period_hours


def total_rent(dataset: xr.Dataset) -> float:
    """Return the rent of all limits: lines, corridors, lines after contingencies, currency (5.2)."""
    names = ("congestion_rent", "corridor_rent", "pair_rent")
    return float(sum(float(dataset[name].sum()) for name in names))


def total_hours(dataset: xr.Dataset) -> float:
    """Return the hours in which limits are priced, summed over all of them (5.3)."""
    after = int((dataset["pair_shadow_price"].to_numpy() > PRICED).sum())
    plain = sum(
        float(dataset[name].sum()) for name in ("congestion_hours", "corridor_congestion_hours")
    )
    return plain + after * float(dataset.attrs["period_hours"])


def lines_priced(dataset: xr.Dataset) -> NDArray[np.bool_]:
    """Tell where a line is priced, as things are or after a contingency, array (period, line)."""
    priced: NDArray[np.bool_] = dataset["line_shadow_price"].to_numpy() > PRICED
    pair = dataset["pair_shadow_price"].to_numpy() > PRICED
    period = dataset.indexes["time"].get_indexer(pd.DatetimeIndex(dataset["pair_time"].to_numpy()))
    line = dataset.indexes["line"].get_indexer(pd.Index(dataset["pair_line"].to_numpy()))
    priced = priced.copy()
    priced[period[pair], line[pair]] = True
    return priced


def pair_name(line: str, contingency: str) -> str:
    """Name a limit that holds after a contingency.

    >>> pair_name("Ostrel-Vane", "Ostrel-Quill")
    'Ostrel-Vane after loss of Ostrel-Quill'
    """
    return f"{line} after loss of {contingency}"


def make_whole(dataset: xr.Dataset) -> Floats:
    """Return what each unit's revenue of a day falls short of its cost, (day, unit), currency (5.5).

    max(0, Σ (running cost + start cost) − Σ (price at its bus × output × Δ + reserve revenue)), the
    sums over the periods of the day that the run has; a day cut by an end of the run counts as it is,
    so a start may stand on one day and what it was for on another.
    """
    bus = dataset.indexes["bus"].get_indexer(pd.Index(dataset["unit_bus"].to_numpy()))
    earned = dataset["price"].to_numpy()[:, bus] * dataset["unit_output"].to_numpy()
    revenue = earned * float(dataset.attrs["period_hours"]) + reserve_revenue(dataset)
    cost = dataset["unit_cost"].to_numpy() + dataset["unit_start_cost"].to_numpy()
    _, first = np.unique(local_days(dataset), return_index=True)
    short: Floats = np.add.reduceat(cost - revenue, first, axis=0)
    return np.maximum(short, 0.0)


def local_days(dataset: xr.Dataset) -> NDArray[np.str_]:
    """Return the local date of each period, array (period,), ISO 8601 text."""
    times = dataset.indexes["time"].tz_localize("UTC").tz_convert(dataset.attrs["time_zone"])
    return times.strftime("%Y-%m-%d").to_numpy(dtype=str)


def reserve_revenue(dataset: xr.Dataset) -> Floats:
    """Return what the reserve a unit holds earns, Σ_product price × MW × Δ, array (period, unit)."""
    if "unit_reserve" not in dataset:
        return np.zeros(dataset["unit_output"].shape)
    worth = (dataset["unit_reserve"] * dataset["reserve_price"]).sum("product")
    return worth.transpose("time", "unit").to_numpy() * float(dataset.attrs["period_hours"])
