"""Prices taken apart and congestion accounted for (formulation.md 5): pure functions of arrays.

Public names: `congestion_rent`, `energy_and_congestion`, `reference_weights`.

Arrays have periods first; prices are currency/MWh, powers MW, Δ is the length of a period in h.
"""

import numpy as np
from numpy.typing import NDArray

__all__ = ["congestion_rent", "energy_and_congestion", "reference_weights"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

_NO_LOAD = 1e-9


def reference_weights(demand: Floats, island: Integers) -> Floats:
    """Return each bus's weight in the reference of its island, array (period, bus), summing to one.

    demand : array (period, bus), MW; negative counts as none
    island : array (period, bus), island number
    Weights follow demand; an island without any gives all its buses the same weight.
    """
    positive = np.maximum(demand, 0.0)
    total = _island_sums(positive, island)
    size = _island_sums(np.ones_like(positive), island)
    return np.where(total > _NO_LOAD, positive / np.where(total > _NO_LOAD, total, 1.0), 1.0 / size)


def _island_sums(values: Floats, island: Integers) -> Floats:
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
    energy = _island_sums(weights * price, island)
    return energy, price - energy


def congestion_rent(line_dual: Floats, flow: Floats, period_hours: float) -> Floats:
    """Return the rent of each line, array (period, line), currency: shadow price × |flow| × Δ (5.2)."""
    return np.abs(line_dual) * np.abs(flow) * period_hours
