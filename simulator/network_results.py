"""What a run's network carried and cost: prices in parts, and limits of lines, of corridors, after losses.

Public names: `AT_LIMIT`, `corridors`, `lines_and_prices`, `network_record`, `pair_names`, `pairs`,
`priced_of`.

Each takes a finished run and returns arrays by the names of results-format.md.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from simulator import prices
from simulator.dispatch import Priced, loss_factors
from simulator.horizon import Run

__all__ = [
    "AT_LIMIT", "corridors", "lines_and_prices", "network_record", "pair_names", "pairs", "priced_of",
]  # fmt: skip

Floats = NDArray[np.float64]

AT_LIMIT = 1e-4
"""A flow within this of its rating, MW, is at its limit (formulation.md 5.3)."""


def priced_of(run: Run) -> Priced:
    """Return prices, and what limits cost, as the plan asks for them."""
    return run.kept.relaxed if run.plan.pricing == "relaxed" else run.kept.priced


def lines_and_prices(run: Run) -> dict[str, Floats]:
    """Return shadow prices and rents of lines, and prices with their parts (5.1, 5.2)."""
    kept, inputs = run.kept, run.kept_inputs
    priced = priced_of(run)
    price, line_dual = priced.price, priced.line
    island = np.stack([topology.island for topology in inputs.topology.topologies])
    island = island[inputs.topology.index]
    weights = prices.reference_weights(inputs.demand_at_bus, island)
    energy, congestion = prices.energy_and_congestion(price, weights, island)
    loss = np.zeros_like(price)
    if inputs.losses is not None:
        delivered = prices.delivered_share(
            priced.price - priced.congestion, loss_factors(inputs, kept.flow), weights, island
        )
        loss = energy * (delivered - 1.0)
        congestion = congestion - loss
    return {
        "line_shadow_price": np.abs(line_dual),
        "line_limit_side": -np.sign(line_dual).astype(np.int8),
        "congestion_rent": prices.congestion_rent(line_dual, kept.flow, inputs.period_hours),
        "price": price,
        "price_fixed": kept.priced.price,
        "price_relaxed": kept.relaxed.price,
        "price_energy": energy,
        "price_congestion": congestion,
        "price_loss": loss,
    }


def corridors(run: Run) -> dict[str, Any]:
    """Account for corridors: flow, limits, shadow price, rent, hours."""
    limits, dual, length = (
        run.kept_inputs.limits,
        priced_of(run).corridor,
        run.case.time.period_hours,
    )
    flow = limits.corridor_flow(run.kept.flow)
    at_limit = (flow >= limits.forward - AT_LIMIT) | (flow <= AT_LIMIT - limits.reverse)
    return {
        "corridor_flow": flow,
        "corridor_forward_limit": limits.forward,
        "corridor_reverse_limit": limits.reverse,
        "corridor_shadow_price": np.abs(dual),
        "corridor_limit_side": -np.sign(dual).astype(np.int8),
        "corridor_rent": prices.congestion_rent(dual, flow, length),
        "corridor_congestion_hours": (np.abs(dual) > prices.PRICED).sum(axis=0) * length,
        "corridor_hours_at_limit": at_limit.sum(axis=0) * length,
    }


def pairs(run: Run) -> dict[str, Any]:
    """Account for the limits that are priced after a contingency, a row a contingency, line and period."""
    table, inputs, length = priced_of(run).pairs, run.kept_inputs, run.case.time.period_hours
    after = np.zeros(len(table.dual))
    for number in np.unique(inputs.topology.index[table.period]):
        here = np.flatnonzero(inputs.topology.index[table.period] == number)
        loss = inputs.limits.contingencies.after(inputs.topology.topologies[number])
        weights = loss.weights(table.contingency[here], table.line[here])
        after[here] = weights.multiply(run.kept.flow[table.period[here]]).sum(axis=1)
    hit = np.zeros(run.kept.flow.shape, dtype=bool)
    hit[table.period, table.line] = np.abs(table.dual) > prices.PRICED
    return {
        "pair_flow": after,
        "pair_rating": inputs.limits.emergency[table.period, table.line],
        "pair_shadow_price": np.abs(table.dual),
        "pair_limit_side": -np.sign(table.dual).astype(np.int8),
        "pair_rent": prices.congestion_rent(table.dual, after, length),
        "security_hours": hit.sum(axis=0) * length,
    }


def pair_names(run: Run) -> dict[str, Any]:
    """Name the priced pairs: what is lost, the line that would be overloaded, and when."""
    table = priced_of(run).pairs
    lost = np.asarray(run.inputs.whole.limits.contingencies.names, dtype=str)[table.contingency]
    line = run.case.lines.index.to_numpy(dtype=str)[table.line]
    names = [prices.pair_name(*pair) for pair in zip(line, lost, strict=True)]
    return {
        "pair": ("pair", np.array(names, dtype=str)),
        "pair_contingency": ("pair", lost),
        "pair_line": ("pair", line),
        "pair_time": ("pair", run.times.tz_localize(None)[table.period], {"long_name": "period, UTC"}),
    }  # fmt: skip


def network_record(run: Run) -> dict[str, Any]:
    """Return how many contingencies held, which did not and why, and how exact losses are."""
    schedule, held = run.kept_inputs.topology, run.kept_inputs.limits.contingencies
    length, count = run.case.time.period_hours, np.bincount(schedule.index)
    left_out: list[dict[str, Any]] = []
    for reason in ("splits", "idle"):
        hours = np.zeros(len(held))
        for number in np.unique(schedule.index):
            marked = getattr(held.after(schedule.topologies[number]), reason)
            hours += marked * count[number] * length
        left_out += [
            {
                "contingency": str(held.names[place]),
                "reason": _LEFT_OUT[reason],
                "hours": float(hours[place]),
            }
            for place in np.flatnonzero(hours)
        ]
    found: dict[str, Any] = {"contingencies": len(held), "left_out": left_out}
    if run.kept_inputs.losses is not None:
        found |= {
            "loss_accuracy_mw": run.counts.loss_gap, "loss_step_mw": run.counts.loss_step,
            "linearisations": run.counts.linearisations,
        }  # fmt: skip
    return found


_LEFT_OUT = {"splits": "its loss splits the network", "idle": "its lines are out already"}
