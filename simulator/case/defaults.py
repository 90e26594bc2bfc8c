"""Declared tables → the tables of a `Case`, every default filled in (case-format.md).

Public names: `resolved`.
"""

from collections.abc import Mapping

import numpy as np
import pandas as pd

from simulator.case.clock import read_stamps
from simulator.case.settings import Settings
from simulator.case.sheet import Sheet
from simulator.case.time_axis import TimeAxis

__all__ = ["resolved"]


def resolved(
    settings: Settings, time: TimeAxis, sheets: Mapping[str, Sheet]
) -> dict[str, pd.DataFrame]:
    """Return the tables of a faultless case."""
    frames = {name: sheet.frame.set_index(sheet.table.key) for name, sheet in sheets.items()}
    tables = {name: frames[name] for name in ("buses", "fuels", "renewables")}
    tables["lines"] = _lines(frames["lines"])
    tables["dc_ties"] = _filled(frames["dc_ties"], reverse_mw="forward_mw")
    tables["corridors"] = _filled(frames["corridors"], forward_mw=np.inf, reverse_mw=np.inf)
    for name in ("corridor_lines", "contingencies"):
        tables[name] = sheets[name].frame.copy()
    tables["units"] = _units(frames["units"], time.period_hours)
    tables["storage"] = _storage(frames["storage"])
    tables["loads"] = _filled(frames["loads"], unserved_per_mwh=settings.penalties.unserved)
    tables["reserves"] = _filled(
        frames["reserves"],
        response_minutes=np.inf,
        shortage_per_mwh=settings.penalties.unserved / 2,
    )
    tables["outages"] = _outages(sheets["outages"].frame, time.time_zone)
    tables["blocks"] = _blocks(settings, sheets)
    return tables


def _filled(frame: pd.DataFrame, **fills: str | float) -> pd.DataFrame:
    """Fill blanks, in order, by a number or by another column."""
    filled = frame.copy()
    for column, fill in fills.items():
        filled[column] = filled[column].fillna(filled[fill] if isinstance(fill, str) else fill)
    return filled


def _lines(lines: pd.DataFrame) -> pd.DataFrame:
    return _filled(lines, rating_mw=np.inf, emergency_rating_mw="rating_mw")


def _units(units: pd.DataFrame, period_hours: float) -> pd.DataFrame:
    filled = _filled(
        units,
        ramp_up_mw_per_h=np.inf,
        ramp_down_mw_per_h="ramp_up_mw_per_h",
        cold_start_cost="start_cost",
    )
    for switch, ramp in (
        ("start_ramp_mw", "ramp_up_mw_per_h"),
        ("stop_ramp_mw", "ramp_down_mw_per_h"),
    ):
        in_a_period = np.maximum(filled["min_output_mw"], filled[ramp] * period_hours)
        filled[switch] = filled[switch].where(filled[switch].notna(), in_a_period)
    return filled


def _storage(stores: pd.DataFrame) -> pd.DataFrame:
    # The final amount follows the initial one, so that one comes first.
    halves = stores["initial_mwh"].fillna(stores["energy_mwh"] / 2)
    return _filled(
        stores.assign(initial_mwh=halves), discharge_mw="charge_mw", final_mwh="initial_mwh"
    )


def _outages(outages: pd.DataFrame, zone: str) -> pd.DataFrame:
    instants = {column: read_stamps(outages[column], zone).early for column in ("from", "until")}
    return outages.assign(**instants)[["kind", "name", "from", "until", "available_percent"]]


def _blocks(settings: Settings, sheets: Mapping[str, Sheet]) -> pd.DataFrame:
    """Return cost blocks, units in table order and blocks rising.

    cost = offer, or variable operation and maintenance + heat rate * carbon content * carbon price
    """
    units = sheets["units"].frame.set_index("unit")
    carbon_price = settings.emissions.carbon_price_per_t
    carbon = sheets["fuels"].frame.set_index("fuel")["co2_t_per_gj"] * carbon_price
    offers = sheets["offers"].frame.assign(heat_rate_gj_per_mwh=0.0, fuel="")
    burning = sheets["heat_rates"].frame
    fuel = units["fuel"].reindex(burning["unit"]).to_numpy()
    own_cost = units["variable_om_per_mwh"].reindex(burning["unit"]).to_numpy()
    per_gj = carbon.reindex(fuel).to_numpy()
    burning = burning.assign(
        cost_per_mwh=own_cost + burning["heat_rate_gj_per_mwh"] * per_gj, fuel=fuel
    )
    blocks = pd.concat([offers, burning], ignore_index=True)
    blocks["fuel"] = blocks["fuel"].astype("str")
    place = units.index.get_indexer(pd.Index(blocks["unit"]))
    blocks = blocks.iloc[np.argsort(place, kind="stable")].reset_index(drop=True)
    # The last break may differ from the maximum by rounding, which must not leave a gap.
    last = ~blocks["unit"].duplicated(keep="last")
    blocks.loc[last, "up_to_mw"] = units["max_output_mw"].reindex(blocks["unit"][last]).to_numpy()
    blocks["from_mw"] = blocks.groupby("unit", sort=False)["up_to_mw"].shift(fill_value=0.0)
    return blocks[["unit", "from_mw", "up_to_mw", "cost_per_mwh", "heat_rate_gj_per_mwh", "fuel"]]
