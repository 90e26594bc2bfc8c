"""Checks of reserves: what is asked, who provides it, what it is worth (formulation.md 2.7).

Public names: `Reserves`, `reserve_checks`.

Arrays are (period, unit, product) unless said otherwise. What room is worth to a unit is not in the
dataset, but reserve prices bound it. Room above a unit's output is worth nothing where some is left, at
least the price of each upward product of which the unit could provide more, and at most the price of
each it provides; below its output and downward likewise. These bounds must not cross, and the price of
energy less a unit's cost must be what its rooms are worth (`optimality.py`).
"""

from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from simulator.audit.check import INSIDE, POWER, PRICE, Check, Residual, judge
from simulator.audit.evidence import Evidence
from simulator.audit.units import Units

__all__ = ["Reserves", "reserve_checks"]

Floats = NDArray[np.float64]
Booleans = NDArray[np.bool_]


class Reserves:
    """The reserves of a run.

    provided : MW; price, short, asked : arrays (period, product), from the dataset; in mode `optimal`
        prices are those with the decisions fixed, as in `optimality.py`
    upward : array (product,), bool; worth : array (product,), currency/MWh of shortage
    """

    def __init__(self, evidence: Evidence, units: Units) -> None:
        self.evidence, self.units, self.table = evidence, units, evidence.case.reserves
        self.upward = (self.table["direction"] == "up").to_numpy(bool)
        self.worth = self.table["shortage_per_mwh"].to_numpy(float)
        self.provided, self.price = evidence["unit_reserve"], evidence.reserve_price_of_plan
        self.short, self.asked = evidence["reserve_shortage"], evidence["reserve_requirement"]

    @cached_property
    def limit(self) -> Floats:
        """MW: what a unit may provide as far as it is on; none outside the zone."""
        most = np.zeros((len(self.units.table), len(self.table)))
        zones = self.evidence.case.buses["zone"]
        at = self.units.table["bus"].map(zones).tolist()
        for column, product in enumerate(self.table.to_dict("records")):
            ramp = self.units.numbers(f"ramp_{product['direction']}_mw_per_h")
            moves = np.where(ramp > 0, ramp * (product["response_minutes"] / 60), 0.0)
            inside = np.array([product["zone"] in {"all", zone} for zone in at], dtype=bool)
            most[:, column] = np.where(inside, moves, 0.0)
        on = self.units.on[:, :, None] > 0
        share = np.where(on, self.units.on[:, :, None], 1.0)
        return np.where(on, most * share, 0.0)

    def total(self, *, upward: bool) -> Floats:
        """Return what each unit provides in one direction, array (period, unit), MW."""
        total: Floats = self.provided[:, :, self.upward == upward].sum(axis=2)
        return total

    def room(self, *, upward: bool) -> Floats:
        """Return what is left beyond output and reserve, array (period, unit), MW."""
        units, total = self.units, self.total(upward=upward)
        if upward:
            return units.available * units.on - units.output - total
        return units.output - total - units.minimum * units.on

    def value(self, *, upward: bool) -> tuple[Floats, Floats]:
        """Return the least and the most that room is worth, arrays (period, unit), currency/MWh."""
        price = np.broadcast_to(self.price[:, None, :], self.provided.shape)
        own = self.upward == upward
        more = own & (self.limit - self.provided > INSIDE)
        some = own & (self.provided > INSIDE)
        least = np.where(more, price, 0.0).max(axis=2, initial=0.0)
        most = np.where(some, price, np.inf).min(axis=2, initial=np.inf)
        return least, np.where(self.room(upward=upward) > INSIDE, 0.0, most)


def reserve_checks(evidence: Evidence, reserves: Reserves) -> list[Check]:
    """Check requirement, room and response of reserves, and their prices; none without products."""
    if not len(reserves.table):
        return []
    rules = [
        ("reserve requirement", POWER, _requirement(reserves)),
        ("reserve room", POWER, _room(reserves)),
        ("reserve response", POWER, _response(reserves)),
        ("reserve prices", PRICE, _prices(reserves)),
    ]
    return [judge(name, tolerance, evidence.hours, parts) for name, tolerance, parts in rules]


def _of_products(reserves: Reserves, rule: str, values: Floats) -> Residual:
    return Residual("product", reserves.table.index, rule, values)


def _of_units(reserves: Reserves, rule: str, values: Floats) -> Residual:
    return Residual("unit", reserves.units.table.index, rule, values)


def _requirement(reserves: Reserves) -> list[Residual]:
    """Hold what is provided and what is short to what is asked; nothing is short beyond that."""
    missing = reserves.asked - reserves.provided.sum(axis=1)
    return [
        _of_products(reserves, "provided and short", missing - reserves.short),
        _of_products(reserves, "short", reserves.short - np.maximum(missing, 0.0)),
    ]


def _room(reserves: Reserves) -> list[Residual]:
    """2.7: output + Σ up ≤ available·on; output − Σ down ≥ minimum·on."""
    return [
        _of_units(reserves, "headroom", -reserves.room(upward=True)),
        _of_units(reserves, "footroom", -reserves.room(upward=False)),
    ]


def _response(reserves: Reserves) -> list[Residual]:
    """2.7: 0 ≤ provided ≤ ramp × response time × on, by units of the zone."""
    over = np.maximum(reserves.provided - reserves.limit, -reserves.provided)
    return [
        _of_units(reserves, f'of "{product}"', over[:, :, column])
        for column, product in enumerate(reserves.table.index)
    ]


def _prices(reserves: Reserves) -> list[Residual]:
    """0 ≤ price ≤ price of shortage, which holds where any is short; no cheaper provider is left."""
    price, worth = reserves.price, reserves.worth
    found = [
        _of_products(reserves, "sign", -price),
        _of_products(reserves, "shortage price", price - worth),
        _of_products(
            reserves, "while short", np.where(reserves.short > INSIDE, worth - price, 0.0)
        ),
    ]
    for upward, rule in ((True, "headroom left"), (False, "footroom left")):
        least, most = reserves.value(upward=upward)
        found.append(_of_units(reserves, rule, least - most))
    return found
