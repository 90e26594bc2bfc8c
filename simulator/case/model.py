"""The frozen `Case`: everything one run needs to know of a case folder, defaults resolved.

Public names: `Case`, `TimeAxis`, `TABLES`.
"""

from dataclasses import dataclass, field, replace
from typing import Any

import pandas as pd

from simulator.case.settings import Settings
from simulator.errors import Problem

__all__ = ["TABLES", "Case", "TimeAxis"]

TABLES = (
    "buses", "lines", "dc_ties", "units", "blocks", "fuels", "renewables", "storage", "loads", "outages",
)  # fmt: skip
"""The tables a `Case` holds, each under the attribute of that name."""


@dataclass(frozen=True)
class TimeAxis:
    """The periods of the hourly data (formulation.md 1.1).

    periods : DatetimeIndex (period,), UTC, start of each period, equally spaced without gap
    period_hours : length Δ of one period, h
    time_zone : IANA name in which times are shown
    """

    periods: pd.DatetimeIndex
    period_hours: float
    time_zone: str

    @property
    def local(self) -> pd.DatetimeIndex:
        """The period starts in the case's own time zone."""
        return self.periods.tz_convert(self.time_zone)

    def __len__(self) -> int:
        return len(self.periods)


@dataclass(frozen=True, eq=False)
class Case:
    """One case: settings, time axis, profiles and tables, checked and with every default filled in.

    Tables are frames indexed by element name. What may be unlimited holds inf; what may be free
    (`initial_output_mw`, `initial_hours`) holds NaN; names that may be missing (`profile`, `zone`,
    `fuel`, …) hold "". The frames behave as copies: changing one you got never changes the case.

    buses : index `bus`; columns zone, voltage_kv, latitude, longitude (NaN where blank)
    lines : index `line`; columns of lines.csv
    dc_ties : index `tie`; columns of dc_ties.csv
    units : index `unit`; columns of units.csv
    blocks : one row a cost block, units in table order, blocks rising; columns unit, from_mw,
        up_to_mw (MW), cost_per_mwh (all that does not follow a fuel price: the offer, or operation
        and maintenance plus carbon), heat_rate_gj_per_mwh (0 for offers), fuel ("" for offers)
    fuels : index `fuel`; columns price_per_gj, co2_t_per_gj, price_profile
    renewables : index `plant`; storage : index `store`; loads : index `load`; columns of their files
    outages : columns kind, name, from, until (UTC), available_percent
    profiles : frame (period, profile), dimensionless, on the rows of `time`
    warnings : what was odd but allowed
    """

    settings: Settings
    time: TimeAxis
    profiles: pd.DataFrame = field(repr=False)
    _tables: dict[str, pd.DataFrame] = field(repr=False)
    warnings: tuple[Problem, ...] = field(default=(), repr=False)

    def _table(self, name: str) -> pd.DataFrame:
        return self._tables[name].copy(deep=False)  # copy-on-write: the caller can change only its own

    @property
    def buses(self) -> pd.DataFrame:
        """Buses, one a row."""
        return self._table("buses")

    @property
    def lines(self) -> pd.DataFrame:
        """Lines and transformers, one circuit a row."""
        return self._table("lines")

    @property
    def dc_ties(self) -> pd.DataFrame:
        """Controllable links, one a row."""
        return self._table("dc_ties")

    @property
    def units(self) -> pd.DataFrame:
        """Dispatchable units, one a row."""
        return self._table("units")

    @property
    def blocks(self) -> pd.DataFrame:
        """Cost blocks of the units, one a row."""
        return self._table("blocks")

    @property
    def fuels(self) -> pd.DataFrame:
        """Fuels, one a row."""
        return self._table("fuels")

    @property
    def renewables(self) -> pd.DataFrame:
        """Renewable plants, one a row."""
        return self._table("renewables")

    @property
    def storage(self) -> pd.DataFrame:
        """Stores, one a row."""
        return self._table("storage")

    @property
    def loads(self) -> pd.DataFrame:
        """Loads, one a row."""
        return self._table("loads")

    @property
    def outages(self) -> pd.DataFrame:
        """Planned outages and derates, one a row."""
        return self._table("outages")

    def with_settings(self, **changes: Any) -> "Case":
        """Return a copy with some top-level settings replaced, e.g. `name="dry year"`."""
        return replace(self, settings=self.settings.model_copy(update=changes))
