"""Bounds that keep a window from painting a later one into a corner.

Public names: `reachable_ceiling`, `reachable_floor`, `reachable_minimum`.
"""

import numpy as np
from numpy.typing import NDArray

__all__ = ["reachable_ceiling", "reachable_floor", "reachable_minimum"]

Floats = NDArray[np.float64]


def reachable_floor(final: Floats, most_charged: Floats, kept: Floats, run_periods: int) -> Floats:
    """Return the least stored energy from which the final amount can still be reached, MWh.

    final : array (store,), MWh at the end of the run (formulation.md 2.4)
    most_charged : array (period, store), MWh that full charging adds in a period
    kept : array (store,), share of the energy left after a period
    Array (period, store), at the end of each period:
    floor_t = max(0, (floor_{t+1} − most_charged_{t+1}) / kept), floor at the run's end = final; zero
    after it. In one window over the whole run this is implied by the final amount, so it costs
    nothing; in rolled windows it keeps what the final amount asks for within reach.

    >>> reachable_floor(np.array([8.0]), np.full((4, 1), 3.0), np.array([1.0]), 3).ravel()
    array([2., 5., 8., 0.])
    """
    floor = np.zeros_like(most_charged)
    ahead = floor[run_periods - 1] = final
    for period in range(run_periods - 2, -1, -1):
        short = ahead - most_charged[period + 1]
        ahead = floor[period] = np.maximum(0.0, short / np.where(kept > 0, kept, 1.0))
    return floor


def reachable_minimum(minimum: Floats, available: Floats, ramp_up: Floats) -> Floats:
    """Return the minimum output that holds in each period, array (period, unit), MW.

    Minimum output is never more than what is available (formulation.md 2.2), and after a derate it
    returns no faster than the unit can ramp (minimum, ramp_up : arrays (unit,), MW and MW a period),
    so that a unit kept on through a derate is never asked for the impossible.

    >>> derated = np.array([[100.0], [10.0], [100.0], [100.0]])
    >>> reachable_minimum(np.array([40.0]), derated, np.array([20.0])).ravel()
    array([40., 10., 30., 40.])
    """
    least = np.minimum(minimum, available)
    for unit in np.flatnonzero((least < minimum).any(axis=0)):
        column = least[:, unit]
        for period in range(1, len(column)):
            before = column[period - 1]
            if 0 < before < minimum[unit]:
                column[period] = min(column[period], before + ramp_up[unit])
    return least


def reachable_ceiling(
    on: NDArray[np.bool_], available: Floats, ramp_down: Floats, stop_ramp: Floats
) -> Floats:
    """Return the most output from which a given schedule can still be followed, (period, unit), MW.

    on, available : arrays (period, unit); ramp_down, stop_ramp : arrays (unit,), MW
    A unit that will stop has to come down in time: ceiling_t = stop_ramp where it is off next, else
    ceiling_{t+1} + ramp_down; where less is available next, ramps down are overridden (formulation.md
    2.2) and only what is available counts. Implied within one window; it matters where a window ends.

    >>> on = np.array([[True], [True], [True], [False]])
    >>> reachable_ceiling(on, np.full((4, 1), 90.0), np.array([30.0]), np.array([10.0])).ravel()
    array([70., 40., 10., 90.])
    """
    ceiling = available.copy()
    falls = np.diff(available, axis=0) < 0
    for period in range(len(on) - 2, -1, -1):
        ahead = np.where(on[period + 1], ceiling[period + 1] + ramp_down, stop_ramp)
        binding = on[period] & ~falls[period]
        ceiling[period] = np.where(binding, np.minimum(ceiling[period], ahead), ceiling[period])
    return ceiling
