"""What the page says of the plan of on and off: reasons, make-whole amounts, how windows were solved.

Public names: `HELD`, `PAYS`, `PHRASES`, `hours_by_reason`, `largest_gap`, `make_whole_days`, `reason_rows`,
`windows`.
"""

from collections.abc import Mapping, Sequence
from string import ascii_lowercase
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from simulator.report.tables import (
    NEGLIGIBLE,
    Cell,
    Table,
    cash,
    figure,
    numbers,
    ranked,
    shortened,
    word,
    words,
)
from simulator.report.view import View
from simulator.report.wording import percent

__all__ = [
    "HELD", "PAYS", "PHRASES", "hours_by_reason", "largest_gap", "make_whole_days", "reason_rows",
    "windows",
]  # fmt: skip

Floats = NDArray[np.float64]

PHRASES = {
    "off": "off",
    "at_no_cost": "on at no cost",
    "in_the_money": "in the money",
    "line": "in the money through congestion",
    "reserve": "holds reserve that has a price",
    "given": "on by schedule",
    "must_run": "must run",
    "minimum_up_time": "minimum up time",
    "ramp": "ramp",
    "kept_on": "kept on to save a start",
    "other": "out of the money, no rule holds it",
    "needed_whole": "needed whole: pays at the relaxed price only",
}
"""The reasons a unit is on for, by flag meaning, as a reader sees them."""

PAID = ("off", "at_no_cost", "in_the_money", "line")
PAYS = "on, the hour pays"
HELD = "on though the hour does not pay"
MOST_DAYS = 7


def reasons(view: View) -> list[str]:
    """Return the flag meanings of `unit_reason`, in the order of their codes; none if it is not there."""
    if not view.has("unit_reason"):
        return []
    return str(view.dataset["unit_reason"].attrs["flag_meanings"]).split()


def reason_rows(view: View, order: Sequence[int]) -> dict[str, Any]:
    """Return the reasons for the chart, a letter a step and a row a unit, and what the letters mean.

    A step of several periods has the reason of the most of them in which the unit is on.
    """
    known = reasons(view)
    if not known:
        return {}
    code = view.values("unit_reason")[:, list(order)]
    times = np.stack([view.steps.total((code == each) * 1.0) for each in range(1, len(known))])
    most = np.where(times.max(axis=0) > 0, times.argmax(axis=0) + 1, 0)
    letters = np.array(list(ascii_lowercase))[most.T]
    return {
        "reasons": ["".join(row) for row in letters.tolist()],
        "phrases": [PHRASES.get(name, name) for name in known],
        "held": "".join(
            letter for letter, name in zip(ascii_lowercase, known, strict=False) if name not in PAID
        ),
    }


def hours_by_reason(view: View, order: Sequence[int]) -> Table | None:
    """Hours on by reason, a row a unit; reasons that no unit has are left out."""
    known = reasons(view)
    if not known:
        return None
    code = view.values("unit_reason")
    hours = np.stack([(code == each).sum(axis=0) for each in range(len(known))]) * view.period_hours
    shown = [each for each in range(1, len(known)) if hours[each].any()]
    digits = 0 if np.allclose(hours, np.round(hours), atol=NEGLIGIBLE) else 2
    names = view.names("unit")
    rows = [
        [word(names[unit]), *(_hours(hours[each, unit], digits) for each in shown)]
        for unit in order
        if hours[1:, unit].any()
    ]
    titles = [PHRASES.get(known[each], known[each]) for each in shown]
    columns = words("Unit") + numbers(*(title[:1].upper() + title[1:] for title in titles))
    return Table("Hours on by reason", columns, rows, sortable=True) if rows else None


def _hours(value: float, digits: int) -> Cell:
    return figure(value, digits) if value else Cell("", 0.0)


def make_whole_days(view: View) -> Table | None:
    """Make-whole amounts by unit and local day, the largest first; None if there is none."""
    if not view.has("make_whole") or not (amounts := view.values("make_whole")).any():
        return None
    if not (amounts.sum(axis=0) > NEGLIGIBLE).any():
        return None
    names, days = view.names("unit"), view.names("day")
    if len(days) > MOST_DAYS + 1:  # a week that begins within a day has eight
        rows = [
            [word(names[unit]), word(days[day]), cash(amounts[day, unit], amounts)]
            for day, unit in _largest(amounts)
        ]
        columns = words("Unit", "Day") + numbers(view.currency)
        return shortened(Table("Make-whole amounts", columns, rows, sortable=True))
    total = amounts.sum(axis=0)
    rows = [
        [word(names[unit]), *(cash(amounts[day, unit], amounts) for day in range(len(days))),
         cash(total[unit], total)]
        for unit in ranked(total) if total[unit] > NEGLIGIBLE
    ]  # fmt: skip
    columns = words("Unit") + numbers(*(_day(day) for day in days), f"All days, {view.currency}")
    every = [cash(each, amounts) for each in amounts.sum(axis=1)]
    last = (word("All units"), *every, cash(float(total.sum()), total))
    return Table("Make-whole amounts", columns, rows, last, sortable=True)


def _day(date: str) -> str:
    return pd.Timestamp(date).strftime("%a %d %b").replace(" 0", " ")


def _largest(amounts: Floats) -> list[tuple[int, int]]:
    some = np.argwhere(amounts > NEGLIGIBLE)
    order = np.argsort(-amounts[tuple(some.T)], kind="stable")
    return [(int(day), int(unit)) for day, unit in some[order]]


def windows(run: Mapping[str, Any]) -> Table | None:
    """How each window was solved, as run.json has it; None where it has nothing of that."""
    solved = run.get("windows") or ()
    if not solved:
        return None
    rows = [
        [
            Cell(str(each.get("window", "")), float(each.get("window", 0))),
            word(_local(each.get("from"))),
            _number(each.get("seconds"), 2),
            _gap(each.get("gap")),
            word("reached" if each.get("time_limit") else ""),
        ]
        for each in solved
    ]
    columns = words("Window", "From") + numbers("Seconds", "Gap") + words("Time limit")
    return shortened(Table("Windows", columns, rows, sortable=True))


def _local(value: Any) -> str:
    return str(value or "")[:16].replace("T", " ")


def _number(value: Any, decimals: int) -> Cell:
    return Cell("–", "") if value is None else figure(float(value), decimals)


def _gap(value: Any) -> Cell:
    return Cell("–", "") if value is None else Cell(percent(float(value), 3), float(value))


def largest_gap(run: Mapping[str, Any]) -> tuple[float, int, int] | None:
    """Return the largest gap, the window it was left in, and in how many time ran out; None if unknown."""
    known = [each for each in run.get("windows") or () if each.get("gap") is not None]
    if not known:
        return None
    worst = max(known, key=lambda each: float(each["gap"]))
    late = sum(bool(each.get("time_limit")) for each in run["windows"])
    return float(worst["gap"]), int(worst["window"]), late
