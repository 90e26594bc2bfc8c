"""Shadow prices of all kinds of limit, and what they add up to at buses.

Public names: `Shadows`, `collected`, `gather_shadows`, `rent_at_bus`.

Datasets hold shadow prices without sign; the sign of a dual is against the side of the limit that is priced:
the one the dataset names, and for lines, outside mode `optimal`, the one the flow is on.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from simulator.audit.evidence import Evidence, summed
from simulator.audit.limits import Security, corridor_weights
from simulator.audit.losses import Margins
from simulator.audit.network import Network

__all__ = ["Shadows", "collected", "gather_shadows", "rent_at_bus"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Shadows:
    """One kind of limit; arrays are (period, element), or (pair,).

    kind : dimension of the elements; held : whether the run has limits of this kind at all
    shadow, rent : from the dataset; side : 1, −1, or 0 where it is open or nothing is priced
    flow, limit : MW, limit being that of the side
    """

    kind: str
    held: bool
    shadow: Floats
    side: Floats
    flow: Floats
    limit: Floats
    rent: Floats

    @property
    def signed(self) -> Floats:
        """Duals: negative where the flow is held down at its upper limit."""
        return -self.side * self.shadow


def gather_shadows(evidence: Evidence) -> tuple[Shadows, Shadows, Shadows]:
    """Return shadow prices of lines, of corridors and of lines after contingencies."""
    corridor_side, limited = evidence["corridor_limit_side"], evidence.limits != "none"
    ways = (evidence[f"corridor_{way}_limit"] for way in ("forward", "reverse"))
    return (
        Shadows(
            "line", limited, evidence["line_shadow_price"], evidence.limit_side,
            evidence["line_flow"], evidence["line_rating"], evidence["congestion_rent"],
        ),
        Shadows(
            "corridor", limited, evidence["corridor_shadow_price"], corridor_side,
            evidence["corridor_flow"], np.where(corridor_side > 0, *ways), evidence["corridor_rent"],
        ),
        Shadows(
            "pair", evidence.limits == "secure", evidence["pair_shadow_price"],
            evidence["pair_limit_side"], evidence["pair_flow"], evidence["pair_rating"],
            evidence["pair_rent"],
        ),
    )  # fmt: skip


def _per_line(evidence: Evidence) -> Floats:
    """Return duals of lines and corridors as if all were of line flows, array (period, line)."""
    line, corridor, _ = gather_shadows(evidence)
    weighted: Floats = line.signed + corridor.signed @ corridor_weights(evidence).T
    return weighted


def _pair_terms(
    evidence: Evidence, security: Security
) -> Iterator[tuple[Integers, Floats, Floats]]:
    """Yield pairs with their share of prices (pair, bus) and the flow that shifters alone cause (pair,).

    Both are of the network without the lines that are lost.
    """
    signed = gather_shadows(evidence)[2].signed
    for some, left in security.of_pairs():
        if left is not None:
            line = evidence.pairs.line[some]
            weight = np.zeros((len(some), len(evidence.names["line"])))
            weight[np.arange(len(some)), line] = signed[some]
            still = left.flows(np.zeros((1, len(evidence.names["bus"]))))[0]
            yield some, left.collected(weight), still[line]


def collected(evidence: Evidence, network: Network, security: Security, margins: Margins) -> Floats:
    """Return what all limits add to prices, array (period, bus), with respect to some reference.

    Without losses Σ PTDF·dual. With them, losses that an injection causes move flows too: also those after
    a contingency, before which they are drawn.
    """
    after = np.zeros((evidence.periods, len(evidence.names["bus"])))
    for some, shares, _ in _pair_terms(evidence, security):
        np.add.at(after, evidence.pairs.period[some], shares)
    if not evidence.lossy:
        return network.collected(_per_line(evidence)) + after
    weight = _per_line(evidence) - margins.slope * margins.at_ends(after)
    return margins.of_flows(weight) + after


def rent_at_bus(evidence: Evidence, network: Network, security: Security) -> Floats:
    """Return rents less what shifters alone make flow, at the buses lines come from, currency (5.2)."""
    duals, length = _per_line(evidence), evidence.length
    by_line = -duals * (evidence["line_flow"] - network.shift_flows) * length
    still = np.zeros(len(evidence.pairs.line))
    for some, _, constant in _pair_terms(evidence, security):
        still[some] = constant
    pair = gather_shadows(evidence)[2]
    np.add.at(
        by_line, (evidence.pairs.period, evidence.pairs.line),
        -pair.signed * (pair.flow - still) * length,
    )  # fmt: skip
    return summed(by_line, network.from_bus, network.buses)
