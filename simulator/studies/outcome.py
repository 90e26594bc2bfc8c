"""What a run comes to, as a study counts it, from its dataset alone.

Public names: `Outcome`, `PENALTIES`, `local_days`, `outcome_of`, `own_prices`, `payments`.
"""

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from simulator.results import PRICED

__all__ = ["PENALTIES", "Outcome", "local_days", "outcome_of", "own_prices", "payments"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

PENALTIES = ("unserved", "surplus", "reserve_shortage")
"""Components of cost that are prices of what should not happen; all others are production."""


@dataclass(frozen=True, eq=False)
class Outcome:
    """Sums over a run.

    production_cost, penalty_cost, congestion_rent : currency; their split is that of `PENALTIES`
    unserved, curtailed, surplus : MWh; emissions : t; congestion_hours : h, summed over lines
    """

    production_cost: float
    penalty_cost: float
    congestion_rent: float
    unserved: float
    curtailed: float
    surplus: float
    emissions: float
    congestion_hours: float

    @property
    def total_cost(self) -> float:
        """What the run minimises, currency."""
        return self.production_cost + self.penalty_cost


def outcome_of(dataset: xr.Dataset) -> Outcome:
    """Return the sums of a run's dataset."""
    length = float(dataset.attrs["period_hours"])
    penalty = np.isin(dataset["component"].to_numpy(), PENALTIES)
    cost = dataset["cost"].sum("time").to_numpy()

    def energy(name: str) -> float:
        return float(dataset[name].sum()) * length

    return Outcome(
        production_cost=float(cost[~penalty].sum()),
        penalty_cost=float(cost[penalty].sum()),
        congestion_rent=float(dataset["congestion_rent"].sum()),
        unserved=energy("load_unserved"),
        curtailed=energy("curtailment"),
        surplus=energy("surplus"),
        emissions=float(dataset["emissions"].sum()),
        congestion_hours=float((dataset["line_shadow_price"] > PRICED).sum()) * length,
    )


def payments(dataset: xr.Dataset) -> Floats:
    """Return what each load pays at its own price for what it is served, array (load,), currency.

    A load that feeds in is no load here: it pays nothing.
    """
    bus = dataset.indexes["bus"].get_indexer(dataset["load_bus"].to_numpy())
    served = (
        np.maximum(dataset["load_demand"].to_numpy(), 0.0) - dataset["load_unserved"].to_numpy()
    )
    price = dataset["price"].to_numpy()[:, bus]
    paid: Floats = (price * served).sum(axis=0) * float(dataset.attrs["period_hours"])
    return paid


def own_prices(dataset: xr.Dataset, bus: str, weight: Floats) -> float:
    """Return the mean price at a bus, currency/MWh, hours weighted by `weight`, array (period,)."""
    price = dataset["price"].sel(bus=bus).to_numpy()
    total = float(weight.sum())
    return float((price * weight).sum() / total) if total > 0 else float(price.mean())


def local_days(dataset: xr.Dataset) -> Integers:
    """Return the number of the local day of each period, array (period,)."""
    local = dataset.indexes["time"].tz_localize("UTC").tz_convert(dataset.attrs["time_zone"])
    days: Integers = np.unique(local.date, return_inverse=True)[1]
    return days
