"""Checks of corridors and of flows after contingencies, each contingency applied by a fresh power flow.

Public names: `Security`, `corridor_weights`, `limit_checks`.

A contingency that leaves more islands than there were, or that takes out only lines that are out already,
asks for nothing in those hours.
"""

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from simulator.audit.check import COUNTED, POWER, Check, Residual, apart, judge
from simulator.audit.evidence import Evidence
from simulator.audit.network import Network, PowerFlow
from simulator.case import series

__all__ = ["Security", "corridor_weights", "limit_checks"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]


def corridor_weights(evidence: Evidence) -> Floats:
    """Return what each line's flow counts in each corridor, array (line, corridor)."""
    weights = np.zeros((len(evidence.names["line"]), len(evidence.names["corridor"])))
    members = evidence.case.corridor_lines
    line = evidence.names["line"].get_indexer(pd.Index(members["line"]))
    corridor = evidence.names["corridor"].get_indexer(pd.Index(members["corridor"]))
    np.add.at(weights, (line, corridor), members["weight"].to_numpy(float))
    return weights


@dataclass(frozen=True, eq=False)
class Security:
    """The power flows of a run after its contingencies.

    lost : name → lines, bool array (line,)
    """

    evidence: Evidence
    network: Network
    lost: dict[str, Booleans]
    _made: dict[bytes, PowerFlow | None] = field(default_factory=dict, repr=False)

    @classmethod
    def of(cls, evidence: Evidence, network: Network) -> "Security":
        """Read the contingencies of the case; by default each line whose loss leaves it whole."""
        table, names = evidence.case.contingencies, evidence.names["line"]
        if table.empty:
            alone = {str(name): names == name for name in names}
            every = np.ones(len(names), dtype=bool)
            whole = network.islands(every)
            return cls(evidence, network, {
                name: lost for name, lost in alone.items() if network.islands(~lost) == whole
            })  # fmt: skip
        groups = table.groupby("contingency", sort=False)["line"]
        lost = {str(name): names.isin(lines) for name, lines in groups}
        return cls(evidence, network, lost)

    def after(self, name: str, used: Booleans) -> PowerFlow | None:
        """Return the power flow without the lines of a contingency; None where it asks for nothing.

        used : lines in service before it, array (line,)
        """
        left = used & ~self.lost[name]
        key = np.packbits(used).tobytes() + np.packbits(left).tobytes()
        if key not in self._made:
            holds = (left != used).any() and self.network.islands(left) == self.network.islands(
                used
            )
            self._made[key] = self.network.power_flow(left) if holds else None
        return self._made[key]

    def worst(self) -> Residual:
        """Find the contingency that leaves a line furthest beyond its emergency rating, MW."""
        evidence = self.evidence
        rating = series.line_rating(evidence.case, evidence.span, "emergency_rating_mw")
        injection = evidence.net_injection
        worst = Residual("line", evidence.names["line"], "", np.full(rating.shape, -np.inf))
        for name in self.lost:
            over = np.full(rating.shape, -np.inf)
            for periods, used in self.network.states:
                flow = self.after(name, used)
                if flow is not None:
                    over[periods] = np.abs(flow.flows(injection[periods])) - rating[periods]
            if not over.max(initial=-np.inf) <= worst.values.max(
                initial=-np.inf
            ):  # NaN is the worst
                worst = Residual("line", evidence.names["line"], f"after loss of {name}", over)
        return worst

    def of_pairs(self) -> Iterator[tuple[Integers, PowerFlow | None]]:
        """Yield priced pairs that share a contingency and lines in service, with their power flow."""
        pairs = self.evidence.pairs
        for periods, used in self.network.states:
            here = np.isin(pairs.period, periods)
            for name in np.unique(pairs.lost[here]).tolist():
                known = name in self.lost
                some = np.flatnonzero(here & (pairs.lost == name))
                yield some, self.after(name, used) if known else None


def limit_checks(evidence: Evidence, security: Security) -> list[Check]:
    """Check corridors, and what is carried after contingencies."""
    hours, found = evidence.hours, []
    if len(evidence.names["corridor"]):
        found += [
            judge("corridor inputs", COUNTED, hours, _corridor_inputs(evidence)),
            judge("corridor flows", POWER, hours, [_corridor_flows(evidence)]),
        ]
        if evidence.limits != "none":
            found.append(judge("corridor limits", POWER, hours, _corridor_limits(evidence)))
    if evidence.limits == "secure":
        found += [
            judge("pairs", POWER, hours, _pairs(evidence, security)),
            judge("security", POWER, hours, [security.worst()]),
        ]
    return found


def _at_corridors(evidence: Evidence, values: Floats, rule: str = "") -> Residual:
    return Residual("corridor", evidence.names["corridor"], rule, values)


def _corridor_inputs(evidence: Evidence) -> list[Residual]:
    return [
        _at_corridors(
            evidence,
            apart(
                evidence[f"corridor_{way}_limit"],
                series.corridor_limit(evidence.case, evidence.span, f"{way}_mw"),
            ),
            f"{way} limit",
        )
        for way in ("forward", "reverse")
    ]


def _corridor_flows(evidence: Evidence) -> Residual:
    summed = evidence["line_flow"] @ corridor_weights(evidence)
    return _at_corridors(evidence, apart(evidence["corridor_flow"], summed))


def _corridor_limits(evidence: Evidence) -> list[Residual]:
    flow = evidence["corridor_flow"]
    return [
        _at_corridors(evidence, flow - evidence["corridor_forward_limit"], "forward"),
        _at_corridors(evidence, -flow - evidence["corridor_reverse_limit"], "reverse"),
    ]


def _pairs(evidence: Evidence, security: Security) -> list[Residual]:
    """Hold flows after losses to fresh power flows, and ratings to the case.

    A loss that asks for nothing, or of which the case does not know, has no price.
    """
    pairs, injection = evidence.pairs, evidence.net_injection
    flow = np.full(len(pairs.line), np.inf)
    for some, left in security.of_pairs():
        if left is not None:
            period, own = np.unique(pairs.period[some], return_inverse=True)
            flow[some] = left.flows(injection[period])[own, pairs.line[some]]
    rating = series.line_rating(evidence.case, evidence.span, "emergency_rating_mw")
    names = evidence.names["pair"]
    return [
        Residual("line", names, "flow", apart(evidence["pair_flow"], flow)),
        Residual(
            "line",
            names,
            "rating",
            apart(evidence["pair_rating"], rating[pairs.period, pairs.line]),
        ),
    ]
