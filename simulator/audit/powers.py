"""Checks of power: numbers there, inputs echoed, balances, flows, and what nothing may exceed.

Public names: `power_checks`.
"""

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from simulator.audit.check import ADDED, COUNTED, POWER, Check, Residual, apart, beyond, judge
from simulator.audit.evidence import DIMENSIONS, Evidence
from simulator.audit.network import Network
from simulator.audit.units import Units
from simulator.case import series

__all__ = ["power_checks"]

Floats = NDArray[np.float64]


def power_checks(evidence: Evidence, network: Network, units: Units) -> list[Check]:
    """Check numbers, inputs, balance (2.5), flows and line limits (2.6), and all bounds on power."""
    found = [
        judge("numbers", 0.0, evidence.hours, _missing(evidence)),
        judge("inputs", COUNTED, evidence.hours, _inputs(evidence, units)),
        judge("balance", POWER, evidence.hours, [_balance(evidence, network)]),
        judge("flows", POWER, evidence.hours, [_flows(evidence, network)]),
        judge("losses", ADDED, evidence.hours, [_losses(evidence)]),
        judge("tie limits", POWER, evidence.hours, [_tie_limits(evidence)]),
        judge("unit limits", POWER, evidence.hours, _unit_limits(evidence, units)),
        judge("renewable limits", POWER, evidence.hours, [_renewable_limits(evidence)]),
        judge("curtailment", POWER, evidence.hours, [_curtailment(evidence)]),
        judge("unserved", POWER, evidence.hours, [_unserved(evidence)]),
        judge("surplus", POWER, evidence.hours, [_surplus(evidence)]),
    ]
    if evidence.limits != "none":
        found.append(judge("line limits", POWER, evidence.hours, [_line_limits(evidence)]))
    return found


def _missing(evidence: Evidence) -> list[Residual]:
    """Mark with 1 where a variable has no number."""
    found = []
    for variable, dimensions in DIMENSIONS.items():
        values = evidence[variable]
        there = ~np.isnan(values)
        kind, names = "variable", pd.Index([variable])
        if values.ndim > 2:  # noqa: PLR2004  (time, element, another): of one element all are one
            there = np.all(there, axis=2)
            kind, names = dimensions[1], evidence.names[dimensions[1]]
        elif dimensions != ("time",):
            kind, names = dimensions[-1], evidence.names[dimensions[-1]]
            there = np.atleast_1d(there.all(axis=0)) if dimensions[0] == "day" else there
        else:
            there = there[:, None]
        found.append(Residual(kind, names, variable.replace("_", " "), 1.0 - there))
    return found


def _inputs(evidence: Evidence, units: Units) -> list[Residual]:
    """Compare what the dataset says was asked and available with the case."""
    case, span = evidence.case, evidence.span
    expected = {
        "load_demand": series.load_demand(case, span),
        "renewable_available": series.renewable_available(case, span),
        "unit_available": units.available,
        "line_rating": series.line_rating(case, span),
        "reserve_requirement": series.reserve_requirement(case, span),
    }
    return [
        _residual(evidence, variable, variable.replace("_", " "), apart(evidence[variable], values))
        for variable, values in expected.items()
    ]


def _residual(evidence: Evidence, variable: str, rule: str, values: Floats) -> Residual:
    """Label residuals by the elements of a variable."""
    kind = DIMENSIONS[variable][-1]
    return Residual(kind, evidence.names[kind], rule, values)


def _balance(evidence: Evidence, network: Network) -> Residual:
    left_over = np.abs(network.island_sum(evidence.net_injection))
    return Residual("island of bus", evidence.names["bus"], "", left_over)


def _flows(evidence: Evidence, network: Network) -> Residual:
    """Flows against a power flow of the dataset's own injections; lines out carry nothing."""
    expected = network.flows(evidence.net_injection)
    return _residual(evidence, "line_flow", "", apart(evidence["line_flow"], expected))


def _losses(evidence: Evidence) -> Residual:
    """Hold what a line loses to r·f²/base_mva."""
    lost = evidence.loss_rate * evidence["line_flow"] ** 2
    return _residual(evidence, "line_loss", "", apart(evidence["line_loss"], lost))


def _line_limits(evidence: Evidence) -> Residual:
    over = np.abs(evidence["line_flow"]) - evidence["line_rating"]
    return _residual(evidence, "line_flow", "", over)


def _tie_limits(evidence: Evidence) -> Residual:
    ties = evidence.case.dc_ties
    forward, reverse = (ties[name].to_numpy(float) for name in ("forward_mw", "reverse_mw"))
    outside = beyond(
        evidence["tie_flow"], -evidence.tie_share * reverse, evidence.tie_share * forward
    )
    return _residual(evidence, "tie_flow", "", outside)


def _unit_limits(evidence: Evidence, units: Units) -> list[Residual]:
    """2.1: minimum·on ≤ output ≤ available·on."""
    below = units.minimum * units.on - units.output
    above = units.output - units.available * units.on
    return [
        _residual(evidence, "unit_output", "minimum output", below),
        _residual(evidence, "unit_output", "available output", above),
    ]


def _renewable_limits(evidence: Evidence) -> Residual:
    outside = beyond(evidence["renewable_output"], 0.0, evidence["renewable_available"])
    return _residual(evidence, "renewable_output", "", outside)


def _curtailment(evidence: Evidence) -> Residual:
    left = evidence["renewable_available"] - evidence["renewable_output"]
    return _residual(evidence, "curtailment", "", apart(evidence["curtailment"], left))


def _unserved(evidence: Evidence) -> Residual:
    demand = np.maximum(evidence["load_demand"], 0.0)
    outside = beyond(evidence["load_unserved"], 0.0, demand)
    return _residual(evidence, "load_unserved", "", outside)


def _surplus(evidence: Evidence) -> Residual:
    return _residual(evidence, "surplus", "", -evidence["surplus"])
