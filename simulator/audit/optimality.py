"""Checks that prices and amounts belong to one optimum: complementary slackness (formulation.md 7).

Public names: `optimality_checks`.

For whatever supplies at a cost: where some is taken, the price is at least the cost; where more could
be taken, at most. So it equals the cost strictly between the limits. In mode `optimal` prices are those
with the decisions fixed, whichever kind the run was asked for: amounts are no optimum at the
relaxation's. What is checked:

units : every block of the cost curve that a unit may use as far as it is on, in all modes, with the
    blocks filled from the lowest up. The price counts less what room above the output is worth for
    upward reserve, and more what room below it is for downward reserve (`reserves.py`). Left out are
    the hours in which a ramp may set the price too: the ramp from the hour before or to the hour after
    is at its limit, and, for units with a ramp narrower than their maximum output, the last kept hour
    of each window, whose next hour is not in the dataset.
    Left out too are blocks that cost less than the one below them, and that one: such a curve has no
    price, and lies open only while a derate brings minimum output down to it. On/off decisions bound
    blocks but add nothing to their cost, so they hide no other case.
renewables : available output at the offer; loads : unserved demand at its price; buses : surplus
ties : between the prices of its ends, after losses; while a tie runs one way, the other way is left
    out: it pays only where power that is burnt in losses does, which no real tie allows
stores : charging and discharging at the value of energy in store. That value is never seen, but each
    period bounds it, and within a window it is handed on: unchanged but for losses while the store is
    between its limits, no lower after it was full and no higher after it was empty.
"""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from simulator.audit.check import INSIDE, PRICE, Check, Residual, judge
from simulator.audit.evidence import Evidence
from simulator.audit.reserves import Reserves
from simulator.audit.units import Units

__all__ = ["optimality_checks"]

Floats = NDArray[np.float64]
Booleans = NDArray[np.bool_]


def optimality_checks(evidence: Evidence, units: Units, reserves: Reserves) -> list[Check]:
    """Check units, renewables, unserved load, surplus, ties and stores against prices."""
    rules: dict[str, Callable[[], list[Residual]]] = {
        "unit prices": lambda: [_units(evidence, units, reserves)],
        "renewable prices": lambda: [_renewables(evidence)],
        "unserved prices": lambda: [_unserved(evidence)],
        "surplus prices": lambda: [_surplus(evidence)],
        "tie prices": lambda: _ties(evidence),
        "storage prices": lambda: [_stores(evidence)],
    }
    return [judge(name, PRICE, evidence.hours, rule()) for name, rule in rules.items()]


def _mismatch(
    taken: Floats, room: Floats, cost: Floats, price: Floats, highest: Floats | None = None
) -> Floats:
    """Return by how much prices break slackness, currency/MWh.

    taken, room : MW taken and MW that could still be taken, at `cost`
    price, highest : the least and the most that what is taken may be worth; one price by default
    """
    highest = price if highest is None else highest
    too_low = np.where(taken > INSIDE, cost - highest, 0.0)
    too_high = np.where(room > INSIDE, price - cost, 0.0)
    known = 0.0 * taken + np.where(np.isnan(price), np.nan, 0.0)  # a missing number is no agreement
    return np.maximum(np.maximum(too_low, too_high), 0.0) + known


def _units(evidence: Evidence, units: Units, reserves: Reserves) -> Residual:
    price = evidence.price_of_plan[:, evidence.bus(units.table)]
    (above, most_above), (below, most_below) = (reserves.value(upward=up) for up in (True, False))
    lowest, highest = (
        worth[:, units.block_unit]
        for worth in (price - most_above + below, price - above + most_below)
    )
    taken, room = units.block_taken, units.block_room
    by_block = _mismatch(taken, room - taken, units.block_cost, lowest, highest)
    by_block = np.where(_falling(units), 0.0, by_block)
    worst = np.zeros(price.shape)
    np.maximum.at(worst.T, units.block_unit, by_block.T)
    return Residual("unit", evidence.names["unit"], "", np.where(_ramping(units), 0.0, worst))


def _falling(units: Units) -> Booleans:
    """Tell which blocks are next to one of their unit where the curve falls, array (period, block)."""
    cost, usable = units.block_cost, units.block_room > 0
    same = units.block_unit[1:] == units.block_unit[:-1]
    falls = same & (cost[:, 1:] < cost[:, :-1]) & usable[:, 1:] & usable[:, :-1]
    beside = np.zeros(usable.shape, dtype=bool)
    beside[:, 1:] |= falls
    beside[:, :-1] |= falls
    return beside


def _ramping(units: Units) -> Booleans:
    """Tell where a ramp may set a unit's price as well, array (period, unit)."""
    up, down = units.ramp_room(widest=False)
    tight = units.ramp_limited & (np.minimum(up, down) < INSIDE)
    ahead = np.zeros_like(tight)
    ahead[:-1] = tight[1:]
    # The next window solved the hour after anew, so its kept output is not what this price saw.
    unseen = units.evidence.window_ends[:, None] & units.ramp_limited
    return tight | ahead | unseen


def _renewables(evidence: Evidence) -> Residual:
    plants = evidence.case.renewables
    offer = plants["offer_per_mwh"].to_numpy(float)
    taken = evidence["renewable_output"]
    room = evidence["renewable_available"] - taken
    price = evidence.price_of_plan[:, evidence.bus(plants)]
    return Residual("plant", evidence.names["plant"], "", _mismatch(taken, room, offer, price))


def _unserved(evidence: Evidence) -> Residual:
    loads = evidence.case.loads
    worth = loads["unserved_per_mwh"].to_numpy(float)
    taken = evidence["load_unserved"]
    room = np.maximum(evidence["load_demand"], 0.0) - taken
    price = evidence.price_of_plan[:, evidence.bus(loads)]
    return Residual("load", evidence.names["load"], "", _mismatch(taken, room, worth, price))


def _surplus(evidence: Evidence) -> Residual:
    """Surplus takes power off a bus, so it supplies at less than nothing: price ≥ −penalty."""
    penalty = np.array(evidence.case.settings.penalties.surplus)
    taken = evidence["surplus"]
    off = _mismatch(taken, np.full(taken.shape, np.inf), penalty, -evidence.price_of_plan)
    return Residual("bus", evidence.names["bus"], "", off)


def _ties(evidence: Evidence) -> list[Residual]:
    """Take a tie as supply of its receiving end at the price of its sending end, over what arrives."""
    ties, flow = evidence.case.dc_ties, evidence["tie_flow"]
    ends = {
        end: evidence.price_of_plan[:, evidence.bus(ties, end)] for end in ("from_bus", "to_bus")
    }
    found = []
    for sign, direction, sending, receiving in (
        (1.0, "forward", "from_bus", "to_bus"),
        (-1.0, "reverse", "to_bus", "from_bus"),
    ):
        taken = np.maximum(sign * flow, 0.0)
        room = evidence.tie_share * ties[f"{direction}_mw"].to_numpy(float) - taken
        worth = evidence.tie_delivered * ends[receiving]
        off = _mismatch(taken, room, ends[sending], worth)
        opposed = sign * flow < -INSIDE
        found.append(Residual("tie", evidence.names["tie"], direction, np.where(opposed, 0.0, off)))
    return found


def _stores(evidence: Evidence) -> Residual:
    """How far apart the bounds on the value of stored energy are, currency per MWh in store."""
    low, high = _value_bounds(evidence)
    full, empty = _at_ends(evidence)
    kept = _kept(evidence)
    off = np.zeros(low.shape)
    off[:1] = low[:1] - high[:1]
    for now in range(1, len(low)):
        before = now - 1
        # Across windows energy is handed over, its value is not.
        if not evidence.window_ends[before]:
            carried = np.where(empty[before], -np.inf, low[before] / kept)
            low[now] = np.maximum(low[now], carried)
            carried = np.where(full[before], np.inf, high[before] / kept)
            high[now] = np.minimum(high[now], carried)
        off[now] = low[now] - high[now]
    known = 0.0 * (evidence["stored_energy"] + evidence["storage_charge"])
    return Residual("store", evidence.names["store"], "", np.maximum(off, 0.0) + known)


def _kept(evidence: Evidence) -> Floats:
    """Return the share of stored energy that is left after a period, array (store,)."""
    loss = evidence.case.storage["loss_percent_per_h"].to_numpy(float) / 100
    kept: Floats = (1 - loss) ** evidence.length
    return kept


def _value_bounds(evidence: Evidence) -> tuple[Floats, Floats]:
    """Return what each period alone says of the value of energy in store, arrays (period, store).

    Charging supplies energy in store at price/η_c, discharging takes it at η_d·(price − throughput).
    """
    stores, share = evidence.case.storage, evidence.store_share
    price = evidence.price_of_plan[:, evidence.bus(stores)]
    charging = price / stores["charge_efficiency"].to_numpy(float)
    throughput = stores["throughput_cost_per_mwh"].to_numpy(float)
    discharging = (price - throughput) * stores["discharge_efficiency"].to_numpy(float)
    charge, discharge = evidence["storage_charge"], evidence["storage_discharge"]
    more_in = share * stores["charge_mw"].to_numpy(float) - charge > INSIDE
    more_out = share * stores["discharge_mw"].to_numpy(float) - discharge > INSIDE
    low = np.maximum(
        np.where(charge > INSIDE, charging, -np.inf), np.where(more_out, discharging, -np.inf)
    )
    high = np.minimum(
        np.where(more_in, charging, np.inf), np.where(discharge > INSIDE, discharging, np.inf)
    )
    return low, high


def _at_ends(evidence: Evidence) -> tuple[Booleans, Booleans]:
    """Tell where a store is full, and where it has no more than it must keep, (period, store).

    It must keep what lets full charging from then on still reach the final energy.
    """
    stores, share = evidence.case.storage, evidence.store_share
    stored = evidence["stored_energy"]
    kept = _kept(evidence)
    gain = stores["charge_mw"] * stores["charge_efficiency"] * evidence.length
    floor = np.zeros(stored.shape)
    floor[-1] = stores["final_mwh"].to_numpy(float)
    for period in range(len(floor) - 2, -1, -1):
        short = floor[period + 1] - share[period + 1] * gain.to_numpy(float)
        floor[period] = np.maximum(0.0, short / kept)
    full: Booleans = stored > stores["energy_mwh"].to_numpy(float) - INSIDE
    return full, stored < floor + INSIDE
