"""What schedules of mode `given` do that the rules of their units would not let them do.

Public names: `schedule_oddities`.

Mode `given` runs a schedule as it is written; that it breaks a minimum time or switches off what must
run is allowed, since a planner may want to see it, and said.
"""

from collections.abc import Iterator
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from simulator.case import series
from simulator.case.wording import number
from simulator.errors import Problem

if TYPE_CHECKING:
    from simulator.case.model import Case

__all__ = ["schedule_oddities"]

Booleans = NDArray[np.bool_]
Stretch = tuple[int, int]

WHOLE = 1e-9
"""Hours by which a stretch may miss a minimum time through rounding."""
REMEDY = "change its on_profile if that is not meant; mode given runs it as it is"


def schedule_oddities(case: "Case") -> list[Problem]:
    """Return where a schedule breaks must_run, min_up_h or min_down_h, a warning a unit and rule."""
    if case.settings.commitment.mode != "given":
        return []
    span = slice(0, len(case.time.periods))
    out = series.available_share(case, "unit", case.units.index, span) == 0
    on = series.unit_schedule(case, span) & ~out
    return [
        problem
        for unit in np.flatnonzero(case.units["on_profile"].to_numpy() != "").tolist()
        for problem in _of_unit(case, unit, on[:, unit], out[:, unit])
    ]


def _of_unit(case: "Case", unit: int, on: Booleans, out: Booleans) -> Iterator[Problem]:
    row, sheet = case.units.iloc[unit], case.declared("units")
    idle = _stretches(~on & ~out) if row["must_run"] else []
    # An outage ends a minimum up time, and a stop it forces asks for no minimum down time.
    up = [(first, end) for first, end in _inner(on) if not out[end]]
    down = [(first, end) for first, end in _inner(~on) if not out[first]]
    length = case.time.period_hours
    rules = (
        ("must_run", "is off in its schedule", idle),
        (
            "min_up_h",
            "is on for less than that in its schedule",
            _short(up, row["min_up_h"], length),
        ),
        (
            "min_down_h",
            "is off for less than that in its schedule",
            _short(down, row["min_down_h"], length),
        ),
    )
    for column, rule, stretches in rules:
        if stretches:
            yield sheet.problem(unit, column, rule, _told(case, stretches), REMEDY)


def _stretches(marked: Booleans) -> list[Stretch]:
    """Return first and end of each run of marked periods."""
    edges = np.diff(np.concatenate([[0], marked.astype(int), [0]]))
    starts, ends = np.flatnonzero(edges == 1), np.flatnonzero(edges == -1)
    return list(zip(starts.tolist(), ends.tolist(), strict=True))


def _inner(marked: Booleans) -> list[Stretch]:
    """Leave out the runs at both ends: how long they last is not known."""
    return [(first, end) for first, end in _stretches(marked) if first and end < len(marked)]


def _short(stretches: list[Stretch], least: float, length: float) -> list[Stretch]:
    return [(first, end) for first, end in stretches if (end - first) * length < least - WHOLE]


def _told(case: "Case", stretches: list[Stretch]) -> str:
    first, end = stretches[0]
    begin = pd.Timestamp(case.time.local[first]).isoformat(timespec="minutes")
    more = f" and {len(stretches) - 1} more" if len(stretches) > 1 else ""
    return f"{number((end - first) * case.time.period_hours)} h from {begin}{more}"
