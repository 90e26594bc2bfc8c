"""Checks of prices against one another: their parts, shadow prices, rents and hours counted.

Public names: `price_checks`.

Datasets hold shadow prices without sign; the sign of a line's dual is against its flow, or, in mode
`optimal`, against the side the dataset names. Where a line with a shadow price carries nothing (its
rating is zero) and no side is named the sign is open, and what needs it is left out for that island and
period. Prices of a relaxation come with its shadow prices, whose limits the plan need not be at.
"""

import numpy as np
from numpy.typing import NDArray

from simulator.audit.check import ADDED, COUNTED, POWER, Check, Residual, apart, judge
from simulator.audit.evidence import Evidence, summed
from simulator.audit.network import Network

__all__ = ["price_checks"]

Floats = NDArray[np.float64]
Booleans = NDArray[np.bool_]

PRICED = 1e-6
"""Currency/MWh; a shadow price above it makes an hour a congestion hour (5.3)."""
AT_LIMIT = 1e-4
"""MW; a flow this close to its rating is at its limit (5.3)."""
NO_LOAD = 1e-9
"""MW; an island with less has a reference in which all its buses weigh the same."""


def price_checks(evidence: Evidence, network: Network) -> list[Check]:
    """Check the parts of prices (5.1), the rent identity (5.2) and congestion hours (5.3)."""
    hours = evidence.hours
    return [
        judge("price parts", ADDED, hours, [_parts(evidence)]),
        *_kind(evidence),
        judge("energy price", ADDED, hours, _energy(evidence, network)),
        judge("congestion price", ADDED, hours, [_congestion(evidence, network)]),
        judge("shadow prices", POWER, hours, _shadow_prices(evidence)),
        judge("congestion rent", ADDED, hours, [_rent(evidence)]),
        judge("rent identity", POWER, hours, [_identity(evidence, network)]),
        judge("congestion hours", COUNTED, hours, _hours(evidence)),
    ]


def _at_buses(evidence: Evidence, values: Floats, rule: str = "") -> Residual:
    return Residual("bus", evidence.names["bus"], rule, values)


def _at_lines(evidence: Evidence, values: Floats, rule: str = "") -> Residual:
    return Residual("line", evidence.names["line"], rule, values)


def _parts(evidence: Evidence) -> Residual:
    parts = evidence["price_energy"] + evidence["price_congestion"] + evidence["price_loss"]
    return _at_buses(evidence, apart(evidence["price"], parts))


def _kind(evidence: Evidence) -> list[Check]:
    """In mode `optimal` the price is the kind of price that the run was asked for."""
    if evidence.mode != "optimal":
        return []
    found = []
    for variable, kind in (("price", "bus"), ("reserve_price", "product")):
        asked = evidence[f"{variable}_{evidence.pricing}"]
        off = apart(evidence[variable], asked)
        found.append(Residual(kind, evidence.names[kind], "", off))
    return [judge("kind of price", COUNTED, evidence.hours, found)]


def _weights(evidence: Evidence, network: Network) -> Floats:
    """Return each bus's weight in its island's reference: demand, or the same where there is none."""
    demand = np.maximum(evidence.demand_at_bus, 0.0)
    loaded = network.island_sum(demand) > NO_LOAD
    weight = np.where(loaded, demand, 1.0)
    weights: Floats = weight / network.island_sum(weight)
    return weights


def _energy(evidence: Evidence, network: Network) -> list[Residual]:
    """Hold the energy part to the load-weighted mean price of the island, the same all over it."""
    energy = evidence["price_energy"]
    mean = network.island_sum(_weights(evidence, network) * evidence["price"])
    count = network.island_sum(np.ones_like(energy))
    return [
        _at_buses(evidence, apart(energy, mean), "load-weighted mean"),
        _at_buses(evidence, apart(energy, network.island_sum(energy) / count), "one per island"),
    ]


def _signed(evidence: Evidence) -> Floats:
    """Return the duals of line limits: negative where the flow is held down at +F."""
    signed: Floats = -evidence.limit_side * evidence["line_shadow_price"]
    return signed


def _open(evidence: Evidence, network: Network) -> Booleans:
    """Tell at which buses the sign of some shadow price of the island is open, (period, bus)."""
    priced = evidence["line_shadow_price"] > PRICED
    unsigned = priced & (np.abs(evidence["line_flow"]) < POWER) & (evidence.mode != "optimal")
    at_bus = summed(unsigned.astype(float), network.from_bus, network.buses)
    return network.island_sum(at_bus) > 0


def _congestion(evidence: Evidence, network: Network) -> Residual:
    """5.1: congestion_n = Σ_l PTDF_ln·μ_l, with the PTDF of the load-weighted reference."""
    collected = network.collected(_signed(evidence))
    at_reference = network.island_sum(_weights(evidence, network) * collected)
    off = apart(evidence["price_congestion"], collected - at_reference)
    return _at_buses(evidence, np.where(_open(evidence, network), 0.0, off))


def _shadow_prices(evidence: Evidence) -> list[Residual]:
    """No shadow price is negative; where there is one, the flow is at the rating, MW."""
    shadow = evidence["line_shadow_price"]
    if evidence.limits == "none":
        return [_at_lines(evidence, np.abs(shadow), "without limits")]
    sign = _at_lines(evidence, -shadow, "sign")
    side = np.abs(np.abs(evidence.limit_side) - 1.0)
    named = _at_lines(evidence, np.where(shadow > PRICED, side, 0.0), "side")
    if evidence.pricing == "relaxed":
        return [sign, named]
    slack = np.abs(evidence.limit_side * evidence["line_flow"] - evidence["line_rating"])
    off = _at_lines(evidence, np.where(shadow > PRICED, slack, 0.0), "off its limit")
    return [sign, off] if evidence.mode != "optimal" else [sign, named, off]


def _rent(evidence: Evidence) -> Residual:
    """5.2: shadow price × flow towards the limit × Δ, as a share of it where it is large."""
    rent = -_signed(evidence) * evidence["line_flow"] * evidence.length
    off = apart(evidence["congestion_rent"], rent) / np.maximum(1.0, np.abs(rent))
    return _at_lines(evidence, off)


def _identity(evidence: Evidence, network: Network) -> Residual:
    """5.2: Σ_n price_n·(withdrawal_n − injection_n)·Δ = Σ_l rent_l, in MWh at the island's dearest price.

    What phase shifters alone make flow is taken off the lines' flows.
    """
    paid = network.island_sum(-evidence["price"] * evidence.injection) * evidence.length
    constant = _signed(evidence) * network.shift_flows * evidence.length
    rent = summed(evidence["congestion_rent"] + constant, network.from_bus, network.buses)
    dearest = network.island_peak(np.abs(evidence["price"]))
    off = apart(paid, network.island_sum(rent)) / np.maximum(1.0, dearest)
    off = np.where(_open(evidence, network), 0.0, off)
    return Residual("island of bus", evidence.names["bus"], "", off)


def _hours(evidence: Evidence) -> list[Residual]:
    """5.3: hours with a shadow price, and hours at the limit, counted again."""
    priced = evidence["line_shadow_price"] > PRICED
    at_limit = np.abs(evidence["line_flow"]) >= evidence["line_rating"] - AT_LIMIT
    counted = {"congestion_hours": priced, "hours_at_limit": at_limit}
    return [
        _at_lines(
            evidence,
            apart(evidence[variable], marked.sum(axis=0) * evidence.length),
            variable.replace("_", " "),
        )
        for variable, marked in counted.items()
    ]
