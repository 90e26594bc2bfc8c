"""What keeps a bus from taking more load: a line, a ramp, a unit that is off, or plain shortage.

Public names: `Stop`, `stopping_limit`.
"""

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from simulator.case import Case
from simulator.prices import price_cause

__all__ = ["Stop", "stopping_limit"]

Floats = NDArray[np.float64]

LINE, RAMP, OFF, SHORTAGE, PRICE = "line", "ramp", "unit off", "shortage", "price"
_SHARE = 0.01
"""Part of a price by which prices within an island have to differ for lines to be what stops."""
_POWER = 1e-3
"""MW below which nothing is left."""


@dataclass(frozen=True)
class Stop:
    """The limit met first.

    kind : one of "line", "ramp", "unit off", "shortage", "price"; name : of the line or unit, or ""
    hour : the local hour in which most goes unserved, or in which the price rises most
    """

    kind: str
    name: str
    hour: str


def stopping_limit(
    case: Case, dataset: xr.Dataset, base: xr.Dataset, bus: str, *, by_price: bool
) -> Stop:
    """Name what stops a bus in a run in which load goes unserved, or its price rises too far.

    Judged in the worst hour. Where the short bus is dearer than another of its island, power that it
    could use is there, so it is the line that adds most to that difference (5.1). Else it is a unit
    that climbs as fast as it can and has output left, else the largest that is off, else all supply
    there is is used.
    """
    if by_price:
        rise = (dataset["price"] - base["price"]).sel(bus=bus).to_numpy()
        hour, short = int(rise.argmax()), bus
    else:
        hour, short = _worst(dataset, base)
    when = dataset.indexes["time"][hour].tz_localize("UTC").tz_convert(dataset.attrs["time_zone"])
    kind, name = _line(case, dataset, hour, short) or (
        (PRICE, "") if by_price else _unit(case, dataset, hour, short)
    )
    return Stop(PRICE if by_price else kind, name, when.isoformat(timespec="minutes"))


def _worst(dataset: xr.Dataset, base: xr.Dataset) -> tuple[int, str]:
    """Return the hour, and the bus in it, in which most more load goes unserved."""
    more = (dataset["load_unserved"] - base["load_unserved"]).to_numpy()
    hour = int(more.sum(axis=1).argmax())
    return hour, str(dataset["load_bus"].to_numpy()[int(more[hour].argmax())])


def _line(case: Case, dataset: xr.Dataset, hour: int, bus: str) -> tuple[str, str] | None:
    """Return the line that adds most to the price at a bus over that at the cheapest of its island."""
    price = dataset["price"].isel(time=hour).to_series()
    energy = dataset["price_energy"].isel(time=hour).to_series()
    peers = price[np.isclose(energy, energy[bus], atol=1e-9)]
    cheapest = str(peers.idxmin())
    if price[bus] - peers.min() <= max(_SHARE * abs(price[bus]), _POWER):
        return None
    time = dataset["time"].to_numpy()[hour]
    here, there = (
        price_cause(case, dataset, each, time)["contribution"] for each in (bus, cheapest)
    )
    return LINE, str((here - there).idxmax()[1])


def _unit(case: Case, dataset: xr.Dataset, hour: int, bus: str) -> tuple[str, str]:
    """Return the unit of the bus's island with most output left that a ramp, or being off, holds back."""
    energy = dataset["price_energy"].isel(time=hour).to_series()
    peers = energy.index[np.isclose(energy, energy[bus], atol=1e-9)]
    now = dataset.isel(time=hour)
    near = np.isin(now["unit_bus"].to_numpy(), peers)
    output, on = now["unit_output"].to_numpy(), now["unit_on"].to_numpy()
    left = np.where(near, now["unit_available"].to_numpy() - output, 0.0)
    climbing = _climbing(case, dataset, hour) & (on > _POWER)
    for kind, held in ((RAMP, climbing), (OFF, on < 1 - _POWER)):
        spare = np.where(held, left, 0.0)
        if spare.max(initial=0.0) > _POWER:
            return kind, str(now["unit"].to_numpy()[int(spare.argmax())])
    return SHORTAGE, ""


def _climbing(case: Case, dataset: xr.Dataset, hour: int) -> NDArray[np.bool_]:
    """Tell which units that were on rise as fast as they can, array (unit,)."""
    ramp = case.units["ramp_up_mw_per_h"].to_numpy(float) * case.time.period_hours
    output = dataset["unit_output"].to_numpy()
    before = output[hour - 1] if hour else case.units["initial_output_mw"].to_numpy(float)
    was_on = dataset["unit_on"].to_numpy()[hour - 1] if hour else np.nan_to_num(before)
    found: NDArray[np.bool_] = (output[hour] - before >= ramp - _POWER) & (was_on > _POWER)
    return found
