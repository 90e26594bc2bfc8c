"""The state one window hands to the next (formulation.md 4).

Public names: `State`, `initial_state`.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from simulator.case import Case
from simulator.dispatch.inputs import UnitData

__all__ = ["State", "initial_state"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class State:
    """How things stand at the start of a window.

    output : array (unit,), MW in the period before; NaN where free
    on : array (unit,), 0..1 in the period before; NaN where free
    starts, stops : arrays (lag, unit), how much of each unit started and stopped in the periods
        before, most recent first. They carry the hours in that state, and do so exactly in mode
        `relaxed` too, where a unit may be partly on.
    cooling : array (lag, unit), the stops that no start has used up and that are not cold yet
    stored : array (store,), MWh
    """

    output: Floats
    on: Floats
    starts: Floats
    stops: Floats
    cooling: Floats
    stored: Floats


def initial_state(case: Case, unit: UnitData) -> State:
    """Return the state before the run's first period, from the case's initial columns.

    With hours free, a positive initial output means on, and zero output of a unit that has a minimum
    means off; what then is left open stays free.
    """
    units = case.units
    output = units["initial_output_mw"].to_numpy(float).copy()
    hours = units["initial_hours"].to_numpy(float)
    on = np.where(np.isnan(hours), np.nan, (hours > 0).astype(float))
    unknown = np.isnan(on)
    on[unknown & (output > 0)] = 1.0
    on[unknown & (output == 0) & (units["min_output_mw"].to_numpy(float) > 0)] = 0.0
    output[on == 0] = 0.0
    stops = _since(-hours, unit, case.time.period_hours)
    return State(
        output=output,
        on=on,
        starts=_since(hours, unit, case.time.period_hours),
        stops=stops,
        cooling=np.where(np.arange(1, unit.memory + 1)[:, None] <= unit.hot_periods, stops, 0.0),
        stored=case.storage["initial_mwh"].to_numpy(float).copy(),
    )


def _since(hours: Floats, unit: UnitData, period_hours: float) -> Floats:
    """Mark the switch `hours` ago, array (lag, unit); nothing where hours are not positive."""
    marks = np.zeros((unit.memory, len(hours)))
    for position in np.flatnonzero(hours > 0):
        lag = round(hours[position] / period_hours)
        if 1 <= lag <= unit.memory:
            marks[lag - 1, position] = 1.0
    return marks
