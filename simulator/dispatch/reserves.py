"""Reserves of one window: the numbers and the rows of formulation.md 2.7.

Public names: `reserve_coefficients`, `reserve_columns`, `reserve_costs`, `reserve_rows`, `reserve_rules`.

An offer is one unit providing one product. Reserve is not checked against line limits: no row says that
it could be delivered through the network, or that its provider could stay there for long. Of one
product, what a unit may provide is limited by its ramp over the response time; several products share
the room between its output and its limits, not its ramp. A case without products has none of this.
"""

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from simulator.dispatch.inputs import WindowInputs

__all__ = [
    "reserve_coefficients",
    "reserve_columns",
    "reserve_costs",
    "reserve_rows",
    "reserve_rules",
]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Bounds = tuple[Floats, Floats]
Model = Any
Rule = Callable[[Model, int, int], Any]


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


def reserve_requirement(model: Model, t: int, product: int) -> Any:
    """2.7: Σ provided + short ≥ requirement; its dual is the price of the product."""
    offers = np.flatnonzero(model.inputs.reserve.product == product).tolist()
    provided = sum(model.reserve[t, offer] for offer in offers)
    right = model.right["reserve_requirement"][t][product]
    return provided + model.reserve_short[t, product] >= right


def headroom(model: Model, t: int, position: int) -> Any:
    """2.7: output + Σ upward reserve ≤ available·on.

    It has no term for the start or the stop ramp: 2.7 holds a unit's reserve against its maximum only,
    so a tighter row would cut off plans. Blocks keep theirs (`block_width`), and with output split at
    the minimum this row is Σ blocks + Σ reserve ≤ (available − minimum)·on.
    """
    offers = model.inputs.reserve
    unit = int(offers.up_units[position])
    used = model.output[t, unit] + _provided(model, t, unit, upward=True)
    if model.data.committed:
        used += model.moving["headroom", "on"][t][position] * model.on[t, unit]
    return used <= model.right["headroom"][t][position]


def footroom(model: Model, t: int, position: int) -> Any:
    """2.7: output − Σ downward reserve ≥ minimum·on."""
    offers = model.inputs.reserve
    unit = int(offers.down_units[position])
    left = model.output[t, unit] - _provided(model, t, unit, upward=False)
    if model.data.committed:
        left += model.moving["footroom", "on"][t][position] * model.on[t, unit]
    return left >= model.right["footroom"][t][position]


def reserve_response(model: Model, t: int, position: int) -> Any:
    """2.7: reserve ≤ ramp × response time × on, where that is less than a unit's whole range."""
    offers = model.inputs.reserve
    offer = int(offers.limited[position])
    most = float(offers.limit[offer]) * model.on[t, int(offers.unit[offer])]
    return model.reserve[t, offer] - most <= 0.0


def _provided(model: Model, t: int, unit: int, *, upward: bool) -> Any:
    offers = model.inputs.reserve
    own = (offers.unit == unit) & (offers.upward[offers.product] == upward)
    return sum(model.reserve[t, offer] for offer in np.flatnonzero(own).tolist())


GIVEN_ROWS: Mapping[str, Rule] = {
    "reserve_requirement": reserve_requirement,
    "headroom": headroom,
    "footroom": footroom,
}
COMMITTED_ROWS: Mapping[str, Rule] = {**GIVEN_ROWS, "reserve_response": reserve_response}


def reserve_rules(inputs: WindowInputs) -> Mapping[str, Rule]:
    """Return the rows to state in a window: none where there are no products."""
    if not inputs.reserve.there:
        return {}
    return GIVEN_ROWS if inputs.mode == "given" else COMMITTED_ROWS
