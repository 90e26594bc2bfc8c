"""The frozen `Case`: everything one run needs to know of a case folder, defaults resolved.

Public names: `Case`, `TimeAxis`, `TABLES`.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date
from typing import Any

import pandas as pd
from numpy.typing import ArrayLike

from simulator.case.edits import add_load, add_loads, add_outage, add_stores, change_settings
from simulator.case.settings import Settings
from simulator.case.sheet import Sheet
from simulator.case.summary import summary
from simulator.case.time_axis import TimeAxis
from simulator.errors import Problem

__all__ = ["TABLES", "Case", "TimeAxis"]

TABLES = (
    "buses", "lines", "dc_ties", "units", "blocks", "fuels", "renewables", "storage", "reserves",
    "loads", "outages",
)  # fmt: skip
"""The tables a `Case` holds, each under the attribute of that name."""


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
    renewables, storage, loads : index `plant`, `store`, `load`; columns of their files
    reserves : index `product`; columns of reserves.csv; zone is "all" for every bus, response_minutes
        inf where there is no limit
    outages : columns kind, name, from, until (UTC), available_percent
    profiles : frame (period, profile), dimensionless, on the rows of `time`
    warnings : what was odd but allowed
    """

    settings: Settings
    time: TimeAxis
    _profiles: pd.DataFrame = field(repr=False)
    _tables: dict[str, pd.DataFrame] = field(repr=False)
    _sheets: dict[str, Sheet] = field(repr=False)
    warnings: tuple[Problem, ...] = field(default=(), repr=False)

    def _table(self, name: str) -> pd.DataFrame:
        # Copy-on-write: the caller can change only its own.
        return self._tables[name].copy(deep=False)

    @property
    def profiles(self) -> pd.DataFrame:
        """Hourly profiles, one a column."""
        return self._profiles.copy(deep=False)

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
    def reserves(self) -> pd.DataFrame:
        """Reserve products, one a row."""
        return self._table("reserves")

    @property
    def loads(self) -> pd.DataFrame:
        """Loads, one a row."""
        return self._table("loads")

    @property
    def outages(self) -> pd.DataFrame:
        """Planned outages and derates, one a row."""
        return self._table("outages")

    def declared(self, name: str) -> Sheet:
        """Return a table as declared, before defaults; edits start from it."""
        return self._sheets[name]

    def with_settings(self, **changes: Any) -> "Case":
        """Return a copy with some settings replaced, a section whole or in part.

        For instance `case.with_settings(name="dry year", network={"limits": "none"})`. What follows
        from settings (carbon cost of blocks, default price of unserved load) follows the new ones.
        """
        return change_settings(self, changes)

    def without_limits(self) -> "Case":
        """Return a copy in which no network limit holds: one price, whatever the lines carry."""
        return self.with_settings(network={"limits": "none"})

    def with_load(
        self, name: str, bus: str, mw: ArrayLike, *, unserved_per_mwh: float | None = None
    ) -> "Case":
        """Return a copy with one more load, `mw` a number or an array (period,), MW.

        Its profile is added under the load's name, or that name and a number where it is taken.
        """
        return add_load(self, name, bus, mw, unserved_per_mwh)

    def with_loads(
        self, loads: Mapping[str, tuple[str, float]], profile: ArrayLike = 1.0, *,
        unserved_per_mwh: float | None = None,
    ) -> "Case":  # fmt: skip
        """Return a copy with more loads of one profile, name → (bus, MW where the profile is 1)."""
        return add_loads(self, loads, profile, unserved_per_mwh)

    def with_stores(self, stores: Sequence[Mapping[str, str | float | None]]) -> "Case":
        """Return a copy with more stores, each its cells by column of storage.csv."""
        return add_stores(self, stores)

    def with_store(
        self, name: str, bus: str, charge_mw: float, energy_mwh: float, *,
        discharge_mw: float | None = None, charge_efficiency: float = 1.0,
        discharge_efficiency: float = 1.0, loss_percent_per_h: float = 0.0,
        initial_mwh: float | None = None, final_mwh: float | None = None,
        throughput_cost_per_mwh: float = 0.0, end_value_per_mwh: float = 0.0,
    ) -> "Case":  # fmt: skip
        """Return a copy with one more store; None means the default of storage.csv."""
        cells: dict[str, str | float | None] = {
            "store": name, "bus": bus, "charge_mw": charge_mw, "discharge_mw": discharge_mw,
            "energy_mwh": energy_mwh, "charge_efficiency": charge_efficiency,
            "discharge_efficiency": discharge_efficiency, "loss_percent_per_h": loss_percent_per_h,
            "initial_mwh": initial_mwh, "final_mwh": final_mwh,
            "throughput_cost_per_mwh": throughput_cost_per_mwh,
            "end_value_per_mwh": end_value_per_mwh,
        }  # fmt: skip
        return add_stores(self, [cells])

    def with_outage(
        self, kind: str, name: str, start: str | date, until: str | date,
        available_percent: float = 0.0,
    ) -> "Case":  # fmt: skip
        """Return a copy with one more planned outage, half-open; times local or with an offset."""
        cells = {"kind": kind, "name": name, "from": start, "until": until}
        return add_outage(self, cells | {"available_percent": available_percent})

    def __str__(self) -> str:
        return summary(self)
