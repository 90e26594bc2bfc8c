"""Checks of prices against one another: their parts, shadow prices, rents and hours counted.

Public names: `price_checks`.

Where a line with a shadow price carries nothing (its rating is zero) and no side is named the sign is
open, and what needs it is left out for that island and period. Prices of a relaxation come with its
shadow prices, whose limits the plan need not be at.
"""

import numpy as np
from numpy.typing import NDArray

from simulator.audit.check import ADDED, COUNTED, POWER, Check, Residual, apart, judge
from simulator.audit.evidence import DIMENSIONS, Evidence, summed
from simulator.audit.limits import Security
from simulator.audit.losses import Margins
from simulator.audit.network import Network
from simulator.audit.shadows import Shadows, collected, gather_shadows, rent_at_bus

__all__ = ["price_checks"]

Floats = NDArray[np.float64]
Booleans = NDArray[np.bool_]

PRICED = 1e-6
"""Currency/MWh; a shadow price above it makes an hour a congestion hour (5.3)."""
AT_LIMIT = 1e-4
"""MW; a flow this close to its rating is at its limit (5.3)."""
LOSS_FACTOR = 2e-3
"""Share of the dearest price. Losses are linearised until they are within 1e-3 MW of the true ones, so at
flows a few MW from the final ones; each MW moves what a line loses of one more MW by 2r/base_mva, 1e-4."""
NO_LOAD = 1e-9
"""MW; an island with less has a reference in which all its buses weigh the same."""


def price_checks(evidence: Evidence, network: Network, security: Security) -> list[Check]:
    """Check the parts of prices (5.1), the rent identity (5.2) and congestion hours (5.3)."""
    hours = evidence.hours
    return [
        judge("price parts", ADDED, hours, [_parts(evidence)]),
        *_kind(evidence),
        judge("energy price", ADDED, hours, _energy(evidence, network)),
        *_network_parts(evidence, network, security),
        judge("shadow prices", POWER, hours, _shadow_prices(evidence)),
        judge("congestion rent", ADDED, hours, _rent(evidence)),
        *_rent_identity(evidence, network, security),
        judge("congestion hours", COUNTED, hours, _hours(evidence)),
    ]


def _at_buses(evidence: Evidence, values: Floats, rule: str = "") -> Residual:
    return Residual("bus", evidence.names["bus"], rule, values)


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


def _open(evidence: Evidence, network: Network) -> Booleans:
    """Tell at which buses the sign of some shadow price of the island is open, (period, bus)."""
    priced = evidence["line_shadow_price"] > PRICED
    unsigned = priced & (np.abs(evidence["line_flow"]) < POWER) & (evidence.mode != "optimal")
    at_bus = summed(unsigned.astype(float), network.from_bus, network.buses)
    return network.island_sum(at_bus) > 0


def _network_parts(evidence: Evidence, network: Network, security: Security) -> list[Check]:
    """5.1: congestion_n = Σ_l PTDF_ln·μ_l, with the PTDF of the load-weighted reference.

    With losses, of one more MW injected a share s arrives at the reference; the loss part is
    energy·(s − 1), and the congestion part what limits cost at n less s times what they do there.
    """
    margins, weights = Margins(evidence, network), _weights(evidence, network)
    by_bus = collected(evidence, network, security, margins)
    share = np.ones_like(by_bus)
    if evidence.lossy:
        kept = 1.0 - margins.of_flows(margins.slope)
        share = kept / network.island_sum(weights * kept)
    at_reference = network.island_sum(weights * by_bus)
    off = apart(evidence["price_congestion"], by_bus - share * at_reference)
    off = np.where(_open(evidence, network), 0.0, off)
    lost = apart(evidence["price_loss"], evidence["price_energy"] * (share - 1.0))
    size = (
        np.maximum(1.0, network.island_peak(np.abs(evidence["price"]))) if evidence.lossy else 1.0
    )
    tolerance = LOSS_FACTOR if evidence.lossy else ADDED
    return [
        judge("congestion price", tolerance, evidence.hours, [_at_buses(evidence, off / size)]),
        judge("loss price", tolerance, evidence.hours, [_at_buses(evidence, lost / size)]),
    ]


def _shadow_prices(evidence: Evidence) -> list[Residual]:
    """No shadow price is negative; where there is one, the flow is at the limit, MW."""
    return [
        Residual(limits.kind, evidence.names[limits.kind], rule, values)
        for limits in gather_shadows(evidence)
        for rule, values in _of_one_kind(evidence, limits).items()
    ]


def _of_one_kind(evidence: Evidence, limits: Shadows) -> dict[str, Floats]:
    if not limits.held:
        return {"without limits": np.abs(limits.shadow)}
    priced = limits.shadow > PRICED
    found = {"sign": -limits.shadow}
    if limits.kind != "line" or evidence.mode == "optimal":
        found["side"] = np.where(priced, np.abs(np.abs(limits.side) - 1.0), 0.0)
    if evidence.pricing == "fixed":
        slack = np.abs(limits.side * limits.flow - limits.limit)
        found["off its limit"] = np.where(priced, slack, 0.0)
    return found


def _rent(evidence: Evidence) -> list[Residual]:
    """5.2: shadow price × flow towards the limit × Δ, as a share of it where it is large."""
    found = []
    for limits in gather_shadows(evidence):
        rent = -limits.signed * limits.flow * evidence.length
        off = apart(limits.rent, rent) / np.maximum(1.0, np.abs(rent))
        found.append(Residual(limits.kind, evidence.names[limits.kind], "", off))
    return found


def _rent_identity(evidence: Evidence, network: Network, security: Security) -> list[Check]:
    """5.2 holds without losses; with them prices are held to limits and losses bus by bus."""
    if evidence.lossy:
        return []
    off = _identity(evidence, network, security)
    return [judge("rent identity", POWER, evidence.hours, [off])]


def _identity(evidence: Evidence, network: Network, security: Security) -> Residual:
    """5.2: Σ_n price_n·(withdrawal_n − injection_n)·Δ = Σ rent, in MWh at the island's dearest price.

    What phase shifters alone make flow is taken off the flows.
    """
    paid = network.island_sum(-evidence["price"] * evidence.injection) * evidence.length
    rent = network.island_sum(rent_at_bus(evidence, network, security))
    dearest = network.island_peak(np.abs(evidence["price"]))
    off = apart(paid, rent) / np.maximum(1.0, dearest)
    off = np.where(_open(evidence, network), 0.0, off)
    return Residual("island of bus", evidence.names["bus"], "", off)


def _hours(evidence: Evidence) -> list[Residual]:
    """5.3: hours with a shadow price, and hours at the limit, counted again."""
    line, corridor, pair = gather_shadows(evidence)
    after = np.zeros(line.flow.shape, dtype=bool)
    np.logical_or.at(after, (evidence.pairs.period, evidence.pairs.line), pair.shadow > PRICED)
    flow, forward = corridor.flow, evidence["corridor_forward_limit"]
    counted = {
        "congestion_hours": line.shadow > PRICED,
        "hours_at_limit": np.abs(line.flow) >= line.limit - AT_LIMIT,
        "security_hours": after,
        "corridor_congestion_hours": corridor.shadow > PRICED,
        "corridor_hours_at_limit": (flow >= forward - AT_LIMIT)
        | (flow <= AT_LIMIT - evidence["corridor_reverse_limit"]),
    }
    found = []
    for variable, marked in counted.items():
        (kind,) = DIMENSIONS[variable]
        off = apart(evidence[variable], marked.sum(axis=0) * evidence.length)
        found.append(Residual(kind, evidence.names[kind], variable.replace("_", " "), off))
    return found
