"""Written times → instants in UTC, clock changes resolved.

Public names: `Stamps`, `by_order`, `local_stamps`, `read_stamps`.

A local time that a clock change repeats has two instants; `by_order` chooses by the order in which
times are written.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import pandas as pd
from numpy.typing import NDArray

__all__ = ["Stamps", "by_order", "local_stamps", "read_stamps"]

_ISO = (
    r"(?:19|20|21)\d\d-\d\d-\d\d"
    r"(?:[T ]\d\d:\d\d(?::\d\d(?:\.\d{1,6})?)?(?P<offset>Z|[+-]\d\d(?::?\d\d)?)?)?"
)


@dataclass(frozen=True, eq=False)
class Stamps:
    """Times as written and the instants they may mean.

    early, late : DatetimeIndex (stamp,), UTC; different where a clock change repeats the time
    malformed : array (stamp,), no ISO 8601 time of the years 1900 to 2199
    skipped : array (stamp,), a local time that a clock change leaves out
    """

    early: pd.DatetimeIndex
    late: pd.DatetimeIndex
    malformed: NDArray[np.bool_]
    skipped: NDArray[np.bool_]

    @property
    def ambiguous(self) -> NDArray[np.bool_]:
        """Where a time means two instants."""
        return np.asarray(self.early < self.late)


def read_stamps(texts: Iterable[str], zone: str) -> Stamps:
    """Read times with an offset, or without and then local to the zone.

    >>> autumn = ["2026-10-25T01:00", "2026-10-25T01:00+00:00"]
    >>> [stamp.hour for stamp in read_stamps(autumn, "Europe/Dublin").early]
    [0, 1]
    """
    return _read_stamps(tuple(texts), zone)


# Hourly files mostly share their times, and a case that is edited reads its outages again.
@lru_cache(maxsize=8)
def _read_stamps(written: tuple[str, ...], zone: str) -> Stamps:
    texts = pd.Series(written, dtype="str")
    offset = texts.str.extract(f"^{_ISO}$")["offset"]
    proper = texts.str.fullmatch(_ISO).to_numpy(dtype=bool)
    with_offset = offset.notna().to_numpy(dtype=bool)
    walls = _parsed(texts, proper & ~with_offset)
    stamps = local_stamps(walls, zone)
    instants = _parsed(texts, proper & with_offset)
    early, late = (
        _merged(reading, instants, with_offset) for reading in (stamps.early, stamps.late)
    )
    malformed = np.asarray(walls.isna()) & np.asarray(instants.isna())
    return Stamps(early, late, malformed, stamps.skipped)


def _parsed(texts: "pd.Series[str]", chosen: NDArray[np.bool_]) -> pd.DatetimeIndex:
    """Parse some of the texts, NaT for the others; an offset is taken off, so that none is left."""
    parsed = pd.to_datetime(texts.where(chosen), format="ISO8601", errors="coerce", utc=True)
    return pd.DatetimeIndex(parsed).tz_localize(None).as_unit("us")


def _merged(
    reading: pd.DatetimeIndex, instants: pd.DatetimeIndex, with_offset: NDArray[np.bool_]
) -> pd.DatetimeIndex:
    plain = np.where(with_offset, instants.to_numpy(), reading.tz_localize(None).to_numpy())
    return pd.DatetimeIndex(plain).tz_localize("UTC")


def local_stamps(walls: pd.DatetimeIndex, zone: str) -> Stamps:
    """Read local times without offset."""
    early, late = (
        walls.tz_localize(zone, ambiguous=np.full(len(walls), first), nonexistent="NaT").tz_convert(
            "UTC"
        )
        for first in (True, False)
    )
    missing = np.asarray(walls.isna())
    return Stamps(early, late, missing, np.asarray(early.isna()) & ~missing)


def by_order(stamps: Stamps) -> pd.DatetimeIndex:
    """Choose the instants of repeated local times by their order.

    The first of two equal local times is the earlier instant. Where the times begin within the
    repeated hour, the later instant is chosen if only that leaves no gap.
    """
    early, late = stamps.early.asi8, stamps.late.asi8
    ambiguous = stamps.ambiguous
    if not ambiguous.any() or len(early) == 1:
        return stamps.early
    usual = int(np.median(np.diff(early)))
    instants = early.copy()
    # Whichever reading follows at the usual distance is right, even where a zone shifts by less
    # than one period; failing that, the first reading that is later than the row above.
    for place in np.flatnonzero(ambiguous[1:]) + 1:
        previous = instants[place - 1]
        follows = early[place] - previous == usual or late[place] - previous != usual
        instants[place] = early[place] if follows and early[place] > previous else late[place]
    leading = int(np.argmin(np.append(ambiguous, [False])))
    untouched = (instants[:leading] == early[:leading]).all()
    if 0 < leading < len(early) and untouched and instants[leading] - late[leading - 1] == usual:
        instants[:leading] = late[:leading]
    return pd.DatetimeIndex(instants.view("datetime64[us]")).tz_localize("UTC")
