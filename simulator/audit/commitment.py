"""Checks of units over time: ramps, switches, minimum times, and who has to be on or off.

Public names: `commitment_checks`.

Hours in a state count from before the run (`initial_hours`). A full outage ends what is left of a
minimum up time, and a stop that it forces asks for no minimum down time (2.2).
"""

import numpy as np
from numpy.typing import NDArray

from simulator.audit.check import POWER, SHARE, Check, Residual, beyond, judge
from simulator.audit.evidence import Evidence
from simulator.audit.units import Units
from simulator.case import series

__all__ = ["commitment_checks"]

Floats = NDArray[np.float64]

_WHOLE = 1e-9  # a number of periods this close to a whole one is meant to be that


def commitment_checks(evidence: Evidence, units: Units) -> list[Check]:
    """Check ramps (2.2) and commitment (2.3)."""
    rules: list[tuple[str, float, list[tuple[str, Floats]]]] = [
        ("ramps", POWER, _ramps(units)),
        ("switching", SHARE, _switching(evidence, units)),
        ("outages", SHARE, [("", np.where(units.out, units.on, 0.0))]),
    ]
    if evidence.mode == "given":
        rules.append(("schedule", SHARE, [("", _off_schedule(evidence, units))]))
    else:
        rules += [
            ("minimum up time", SHARE, [("", _minimum_up(units))]),
            ("minimum down time", SHARE, [("", _minimum_down(units))]),
            ("must run", SHARE, [("", _idle(units))]),
        ]
    return [
        judge(name, tolerance, evidence.hours, [_residual(evidence, *part) for part in parts])
        for name, tolerance, parts in rules
    ]


def _residual(evidence: Evidence, rule: str, values: Floats) -> Residual:
    return Residual("unit", evidence.names["unit"], rule, values)


def _ramps(units: Units) -> list[tuple[str, Floats]]:
    up, down = units.ramp_room()
    return [("ramp up", -up), ("ramp down", -down)]


def _switching(evidence: Evidence, units: Units) -> list[tuple[str, Floats]]:
    """Shares from 0 to 1, whole unless relaxed; what is on switched on, what stopped was on."""
    found = [
        ("on", beyond(units.on, 0.0, 1.0)),
        ("start", beyond(units.start, 0.0, units.on)),
        ("stop", beyond(units.stop, 0.0, 1.0 - units.on)),
    ]
    if evidence.mode != "relaxed":
        found.append(("on or off", np.abs(units.on - np.rint(units.on))))
    return found


def _off_schedule(evidence: Evidence, units: Units) -> Floats:
    scheduled = series.unit_schedule(evidence.case, evidence.span) & ~units.out
    return np.abs(units.on - scheduled)


def _idle(units: Units) -> Floats:
    """How far a unit that must run is off while it is not out."""
    held = units.table["must_run"].to_numpy(bool) & ~units.out
    return np.where(held, 1.0 - units.on, 0.0)


def _minimum_up(units: Units) -> Floats:
    """Σ starts within the minimum up time, unless out since, less what is on (Rajan & Takriti, 2005)."""
    elapsed, least = units.evidence.elapsed, units.numbers("min_up_h")
    period = np.arange(len(units.on))[:, None]
    last_out = np.maximum.accumulate(np.where(units.out, period, 0))
    first = np.maximum(period + 1 - _periods(units, least), last_out)
    untouched = ~np.maximum.accumulate(units.out)
    owing = (units.hours > 0) & untouched & (elapsed + units.hours < least - _WHOLE)
    return _summed_from(units.start, first) + owing - units.on


def _minimum_down(units: Units) -> Floats:
    """Σ chosen stops within the minimum down time, less what is off (same source)."""
    elapsed, least = units.evidence.elapsed, units.numbers("min_down_h")
    period = np.arange(len(units.on))[:, None]
    first = np.maximum(period + 1 - _periods(units, least), 0)
    owing = (units.hours < 0) & (elapsed - units.hours < least - _WHOLE)
    return _summed_from(units.chosen_stop, first) + owing - (1.0 - units.on)


def _periods(units: Units, hours: Floats) -> NDArray[np.int64]:
    """Return the whole periods that cover some hours, at least one."""
    periods = np.ceil(hours / units.evidence.length - _WHOLE).astype(int)
    return np.maximum(periods, 1)


def _summed_from(switches: Floats, first: NDArray[np.int64]) -> Floats:
    """Sum switches (period, unit) from period `first` up to each period."""
    total = np.cumsum(switches, axis=0)
    return total - np.take_along_axis(total - switches, first, 0)
