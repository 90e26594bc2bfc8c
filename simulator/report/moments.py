"""Times as a reader in the case's time zone sees them, and the steps that pictures are drawn in.

Public names: `Clock`, `Steps`, `choose_steps`, `read_clock`.

Results are in UTC (formulation.md 1.1). A local hour that a clock change repeats carries its offset.
"""

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

__all__ = ["Clock", "Steps", "choose_steps", "read_clock"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

WEEKDAYS = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")
MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")
MOST_STEPS = 1_500
"""A picture of more steps than this is neither legible nor quick; it is drawn in coarser ones."""


@dataclass(frozen=True, eq=False)
class Clock:
    """The periods of a run in local time.

    edges : DatetimeIndex (period + 1,), local: the starts of all periods and the end of the last
    period_hours : length of a period, h
    """

    edges: pd.DatetimeIndex
    period_hours: float

    def __len__(self) -> int:
        return len(self.edges) - 1

    @cached_property
    def _with_year(self) -> bool:
        return self.edges[0].year != self.edges[-2].year

    def date(self, edge: int, *, with_year: bool | None = None) -> str:
        """Return the local date of an edge: "Mon 11 Jan", with the year if the run spans two."""
        at = self.edges[edge]
        year = f" {at.year}" if (self._with_year if with_year is None else with_year) else ""
        return f"{WEEKDAYS[at.weekday()]} {at.day} {MONTHS[at.month - 1]}{year}"

    def time(self, edge: int) -> str:
        """Return the local time of an edge: "14:00", or "01:00 (+01:00)" where it is repeated."""
        at = self.edges[edge].to_pydatetime()
        repeated = at.replace(fold=0).utcoffset() != at.replace(fold=1).utcoffset()
        return f"{at:%H:%M} ({at.isoformat()[-6:]})" if repeated else f"{at:%H:%M}"

    def label(self, edge: int, *, with_year: bool | None = None) -> str:
        """Return local date and time of an edge."""
        return f"{self.date(edge, with_year=with_year)} {self.time(edge)}"

    def span(self, first: int, last: int) -> str:
        """Say from when to when the periods `first` to `last` go."""
        start, end = self.edges[first], self.edges[last + 1]
        if start.date() == end.date():
            return f"{self.label(first)}–{self.time(last + 1)}"
        return f"{self.label(first)} – {self.label(last + 1)}"

    def spans(self, periods: Integers) -> list[tuple[int, int]]:
        """Join consecutive periods: first and last of each stretch."""
        if not len(periods):
            return []
        breaks = np.flatnonzero(np.diff(periods) > 1)
        firsts = periods[np.r_[0, breaks + 1]]
        lasts = periods[np.r_[breaks, len(periods) - 1]]
        return list(zip(firsts.tolist(), lasts.tolist(), strict=True))

    @cached_property
    def days(self) -> tuple[Integers, list[int]]:
        """The local day of each period, counted from the first, and the first period of each day."""
        dates = self.edges[:-1].normalize()
        change = np.r_[True, dates[1:] != dates[:-1]]
        return np.cumsum(change) - 1, [int(place) for place in np.flatnonzero(change)]

    @cached_property
    def whole_days(self) -> list[int]:
        """The local days, by number, that the run covers from midnight to midnight."""
        midnights = self.edges.normalize()
        day, firsts = self.days
        whole = [number for number, at in enumerate(firsts) if self.edges[at] == midnights[at]]
        ends_at_midnight = self.edges[-1] == midnights[-1]
        return [number for number in whole if number < day[-1] or ends_at_midnight]


def read_clock(dataset: xr.Dataset) -> Clock:
    """Read the time axis of a results dataset."""
    hours = float(dataset.attrs["period_hours"])
    starts = pd.DatetimeIndex(dataset["time"].to_numpy()).tz_localize("UTC")
    edges = starts.append(pd.DatetimeIndex([starts[-1] + pd.Timedelta(hours=hours)]))
    return Clock(edges.tz_convert(str(dataset.attrs.get("time_zone", "UTC"))), hours)


@dataclass(frozen=True, eq=False)
class Steps:
    """What one column, point or slider position of a picture stands for.

    unit : "hour", "day" or "period", as a word
    first : array (step,), first period of each step
    count : array (step,), periods in each step
    """

    clock: Clock
    unit: str
    first: Integers

    def __len__(self) -> int:
        return len(self.first)

    @property
    def averaged(self) -> bool:
        """Whether a step is the mean of several periods."""
        return len(self) < len(self.clock)

    @cached_property
    def count(self) -> Integers:
        """Periods in each step, array (step,)."""
        return np.diff(np.append(self.first, len(self.clock)))

    def total(self, values: Floats) -> Floats:
        """Sum values (period, …) over each step."""
        summed: Floats = np.add.reduceat(values, self.first, axis=0)
        return summed

    def mean(self, values: Floats) -> Floats:
        """Average values (period, …) over each step."""
        if not self.averaged:
            return values
        count = self.count.reshape(-1, *([1] * (values.ndim - 1)))
        return np.asarray(self.total(values) / count)

    def last(self, values: Floats) -> Floats:
        """Take values (period, …) at the end of each step."""
        return values[self.first + self.count - 1]

    def for_page(self) -> dict[str, Any]:
        """Return day and time of every step, the days spelt once."""
        day, firsts = self.clock.days
        whole_day = self.unit == "day"
        return {
            "unit": self.unit,
            "days": [self.clock.date(first) for first in firsts],
            "day": day[self.first].tolist(),
            "time": ["" if whole_day else self.clock.time(at) for at in self.first.tolist()],
        }


def choose_steps(clock: Clock) -> Steps:
    """Take every period as a step, or hours, or else local days, until there are few enough."""
    each = np.arange(len(clock))
    unit = "hour" if clock.period_hours == 1 else "period"
    if len(each) <= MOST_STEPS:
        return Steps(clock, unit, each)
    hours = each[:: round(1 / clock.period_hours)]
    if clock.period_hours < 1 and len(hours) <= MOST_STEPS:
        return Steps(clock, "hour", hours)
    return Steps(clock, "day", np.array(clock.days[1]))
