"""The numbers of a window's reserves: bounds, costs, right-hand sides, moving coefficients (2.7).

Public names: `reserve_coefficients`, `reserve_columns`, `reserve_costs`, `reserve_rows`.

An offer is one unit providing one product. Reserve is not checked against line limits: no row says that
it could be delivered through the network, or that its provider could stay there for long. Of one
product, what a unit may provide is limited by its ramp over the response time; several products share
the room between its output and its limits, not its ramp. A case without products has none of this.
"""

import numpy as np
from numpy.typing import NDArray

from simulator.dispatch.inputs import WindowInputs

__all__ = ["reserve_coefficients", "reserve_columns", "reserve_costs", "reserve_rows"]

Floats = NDArray[np.float64]
Bounds = tuple[Floats, Floats]


def reserve_columns(inputs: WindowInputs, on: Floats | None) -> dict[str, Bounds]:
    """Return bounds of what is provided and what is short, MW.

    on : array (period, unit), 0 or 1, where decisions are data
    A shortage has no upper bound, so that no price of a reserve exceeds that of its shortage.
    """
    offers = inputs.reserve
    most = np.full((inputs.periods, len(offers.unit)), np.inf)
    if on is not None:
        most = np.where(on[:, offers.unit] > 0, offers.limit, 0.0)
    short = np.full(inputs.reserve_requirement.shape, np.inf)
    return {
        "reserve": (np.zeros_like(most), most),
        "reserve_short": (np.zeros_like(short), short),
    }


def reserve_costs(inputs: WindowInputs) -> dict[str, Floats]:
    """Return what a MW short costs over one period; what is provided costs what it displaces."""
    price = inputs.reserve.shortage_cost * inputs.period_hours
    return {"reserve_short": np.tile(price, (inputs.periods, 1))}


def reserve_rows(inputs: WindowInputs, on: Floats | None) -> dict[str, Bounds]:
    """Return bounds of the rows; `on` as in `reserve_columns`."""
    offers = inputs.reserve
    share = np.zeros_like(inputs.unit_min) if on is None else on
    most, least = inputs.unit_available * share, inputs.unit_min * share
    rows = {
        "reserve_requirement": _above(inputs.reserve_requirement),
        "headroom": _below(most[:, offers.up_units]),
        "footroom": _above(least[:, offers.down_units]),
    }
    if on is None:
        rows["reserve_response"] = _below(np.zeros((inputs.periods, len(offers.limited))))
    return rows


def reserve_coefficients(inputs: WindowInputs) -> dict[tuple[str, str], Floats]:
    """Return the entries that derates change, with the sign they have in their row."""
    offers = inputs.reserve
    return {
        ("headroom", "on"): -inputs.unit_available[:, offers.up_units],
        ("footroom", "on"): -inputs.unit_min[:, offers.down_units],
    }


def _below(upper: Floats) -> Bounds:
    return np.full(upper.shape, -np.inf), upper


def _above(lower: Floats) -> Bounds:
    return lower, np.full(lower.shape, np.inf)
