"""Checks of cost and carbon, worked out again from output, on and start.

Public names: `cost_checks`.

Amounts are held to a share of what they would be in full: of a unit, all that is available for the
whole period, or a cold start; of a component, the sum of its elements' amounts without sign.
"""

from collections.abc import Mapping

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from simulator.audit.check import MONEY, Check, Residual, beyond, judge
from simulator.audit.evidence import COMPONENTS, Evidence
from simulator.audit.units import Units

__all__ = ["cost_checks"]

Floats = NDArray[np.float64]

_WHOLE = 1e-9  # a number of periods this close to a whole one is meant to be that


def cost_checks(evidence: Evidence, units: Units) -> list[Check]:
    """Check running and start costs of units, emissions, and cost by component and in all."""
    running, full = _running(units)
    cheapest, dearest = _starting(units)
    emitted, most = _emitted(units)
    by_unit = {
        "running cost": _off(evidence["unit_cost"], running, running, full),
        "start cost": _off(
            evidence["unit_start_cost"], cheapest, dearest, units.numbers("cold_start_cost")
        ),
        "emissions": _off(evidence["emissions"], emitted, emitted, most),
    }
    names = evidence.names["unit"]
    return [
        *(
            judge(name, MONEY, evidence.hours, [Residual("unit", names, "", values)])
            for name, values in by_unit.items()
        ),
        judge("cost", MONEY, evidence.hours, _components(evidence, units)),
    ]


def _off(found: Floats, lower: Floats, upper: Floats, full: Floats) -> Floats:
    """Return how far amounts lie outside their bounds, as a share of the full amount, at least 1."""
    return beyond(found, lower, upper) / np.maximum(1.0, full)


def _running(units: Units) -> tuple[Floats, Floats]:
    """Return running cost, and cost of all that is available, arrays (period, unit), currency."""
    no_load, length = units.numbers("no_load_cost_per_h"), units.evidence.length
    energy, whole = units.along_curve(units.block_cost)
    return (no_load * units.on + energy) * length, (np.abs(no_load) + whole) * length


def _emitted(units: Units) -> tuple[Floats, Floats]:
    """Return emissions, and those of all that is available, arrays (period, unit), t."""
    energy, whole = units.along_curve(np.broadcast_to(units.block_carbon, units.block_room.shape))
    return energy * units.evidence.length, whole * units.evidence.length


def _starting(units: Units) -> tuple[Floats, Floats]:
    """Return the least and the most that starts may cost, arrays (period, unit), currency.

    A start is cold as far as the unit did not stop within min_down_h + cold_after_h before it. Both
    agree unless it is free how long a unit has been off before the run and that could still count.
    """
    memory = units.numbers("min_down_h") + units.numbers("cold_after_h")
    elapsed = units.evidence.elapsed
    period = np.arange(len(units.on))[:, None]
    reach = np.floor(memory / units.evidence.length + _WHOLE).astype(int)
    total = np.concatenate([np.zeros((1, len(memory))), np.cumsum(units.stop, axis=0)])
    stopped = total[:-1] - np.take_along_axis(total, np.maximum(period - reach, 0), 0)
    stopped += (units.hours < 0) & (elapsed - units.hours <= memory + _WHOLE)
    cold = np.clip(units.start - stopped, 0.0, np.maximum(units.start, 0.0))
    maybe = np.isnan(units.hours) & (elapsed <= memory)
    surely_cold = np.where(maybe, np.maximum(cold - (1 - units.on_before[0]), 0.0), cold)
    hot, extra = units.numbers("start_cost") * units.start, units.numbers("cold_start_cost")
    extra = extra - units.numbers("start_cost")
    return hot + extra * surely_cold, hot + extra * cold


def _components(evidence: Evidence, units: Units) -> list[Residual]:
    """Cost by component and period, and in all, from amounts."""
    lower, upper, full = _expected(evidence, units)
    found = evidence["cost"]
    off = _off(found, lower, upper, full)
    total = [np.atleast_1d(part.sum()) for part in (found, lower, upper, full)]
    return [
        Residual("component", evidence.names["component"], "", off),
        Residual("component", pd.Index(["all"]), "", _off(*total)),
    ]


def _expected(evidence: Evidence, units: Units) -> tuple[Floats, Floats, Floats]:
    """Return least, most and full amount of each component, arrays (period, component), currency."""
    case, length = evidence.case, evidence.length
    running, full = _running(units)
    cheapest, dearest = _starting(units)
    offer = case.renewables["offer_per_mwh"].to_numpy(float)
    throughput = case.storage["throughput_cost_per_mwh"].to_numpy(float)
    amounts = {
        "renewable": evidence["renewable_output"] * offer,
        "storage": evidence["storage_discharge"] * throughput,
        "unserved": evidence["load_unserved"] * case.loads["unserved_per_mwh"].to_numpy(float),
        "surplus": evidence["surplus"] * case.settings.penalties.surplus,
        "reserve_shortage": evidence["reserve_shortage"]
        * case.reserves["shortage_per_mwh"].to_numpy(float),
    }
    sums = {name: values.sum(axis=1) * length for name, values in amounts.items()}
    sizes = {name: np.abs(values).sum(axis=1) * length for name, values in amounts.items()}
    sums |= {"unit_running": running.sum(axis=1)}
    sizes |= {"unit_running": full.sum(axis=1)}
    lower = sums | {"unit_start": cheapest.sum(axis=1)}
    upper = sums | {"unit_start": dearest.sum(axis=1)}
    sizes |= {"unit_start": upper["unit_start"]}
    return _stacked(lower), _stacked(upper), _stacked(sizes)


def _stacked(amounts: Mapping[str, Floats]) -> Floats:
    """Put amounts of all components side by side, array (period, component)."""
    return np.stack([amounts[name] for name in COMPONENTS], axis=1)
