"""The periods of a case and which hourly file covers which of them.

Public names: `Coverage`, `TimeAxis`.
"""

from dataclasses import dataclass, field

import pandas as pd

__all__ = ["Coverage", "TimeAxis"]


@dataclass(frozen=True)
class Coverage:
    """What one hourly file covers, UTC: start of its first period, end of its last."""

    path: str
    start: pd.Timestamp
    end: pd.Timestamp


@dataclass(frozen=True)
class TimeAxis:
    """The periods of the hourly data (formulation.md 1.1).

    periods : DatetimeIndex (period,), UTC, start of each period, equally spaced without gap
    period_hours : length Δ of one period, h
    time_zone : IANA name in which times are shown
    coverage : what each hourly file covers; the periods are what all of them share
    """

    periods: pd.DatetimeIndex
    period_hours: float
    time_zone: str
    coverage: tuple[Coverage, ...] = field(default=(), repr=False)

    @property
    def local(self) -> pd.DatetimeIndex:
        """The period starts in the case's own time zone."""
        return self.periods.tz_convert(self.time_zone)

    @property
    def ends_first(self) -> Coverage | None:
        """The hourly file that ends first, and so ends the periods."""
        return min(self.coverage, key=lambda file: file.end, default=None)

    def __len__(self) -> int:
        return len(self.periods)
