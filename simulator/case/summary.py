"""What a case holds, in a few lines of text.

Public names: `summary`.
"""

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from simulator.case.wording import number

if TYPE_CHECKING:
    from simulator.case.model import Case

__all__ = ["summary"]


def summary(case: "Case") -> str:
    """Return name, hours covered, counts, MW by technology and peak load."""
    rows = {
        "hours": _hours(case),
        "network": _network(case),
        "units": _fleet(case.units, "max_output_mw"),
        "renewables": _fleet(case.renewables, "capacity_mw"),
        "storage": _storage(case),
        **({} if case.reserves.empty else {"reserves": _reserves(case)}),
        "loads": _loads(case),
        "outages": str(len(case.outages)),
        "warnings": str(len(case.warnings)),
    }
    lines = [f"  {label:<11} {text}" for label, text in rows.items()]
    return "\n".join([case.settings.name, *lines])


def _hours(case: "Case") -> str:
    time = case.time
    end = time.local[-1] + pd.Timedelta(hours=time.period_hours)
    periods = f"{len(time)} periods of {number(time.period_hours)} h"
    return f"{_moment(time.local[0])} to {_moment(end)} {time.time_zone}, {periods}"


def _moment(time: pd.Timestamp) -> str:
    return time.strftime("%Y-%m-%d %H:%M")


def _network(case: "Case") -> str:
    counts = {
        "buses": len(case.buses), "lines": len(case.lines), "DC ties": len(case.dc_ties),
        "corridors": len(case.corridors),
        "contingencies": case.contingencies["contingency"].nunique(),
    }  # fmt: skip
    always = ("buses", "lines", "DC ties")
    return ", ".join(f"{size} {noun}" for noun, size in counts.items() if size or noun in always)


def _fleet(table: pd.DataFrame, column: str) -> str:
    total = f"{len(table)}, {_mw(table[column].sum())}"
    by_technology = table.groupby("technology")[column].sum().sort_values(ascending=False)
    parts = [f"{name or 'unnamed'} {_mw(power)}" for name, power in by_technology.items()]
    return f"{total}: {', '.join(parts)}" if len(table) else "0"


def _mw(power: float) -> str:
    return f"{power:,.0f} MW"


def _storage(case: "Case") -> str:
    stores = case.storage
    if stores.empty:
        return "0"
    return (
        f"{len(stores)}, {_mw(stores['discharge_mw'].sum())}, {stores['energy_mwh'].sum():,.0f} MWh"
    )


def _reserves(case: "Case") -> str:
    return f"{len(case.reserves)}: " + ", ".join(
        f"{product} ({_asked(row)})" for product, row in case.reserves.iterrows()
    )


def _asked(row: pd.Series) -> str:
    """Return what is asked of one product: "up, 100 MW and 3 % of load"."""
    fixed, share = row["requirement_mw"], row["percent_of_load"]
    parts = [_mw(fixed)] if fixed or not share else []
    parts += [f"{number(share)} % of load"] if share else []
    return f"{row['direction']}, {' and '.join(parts)}"


def _loads(case: "Case") -> str:
    loads = case.loads
    if loads.empty:
        return "0"
    scale = loads.groupby("profile")["scale_mw"].sum()
    total = case.profiles[scale.index].to_numpy() @ scale.to_numpy()
    peak = int(np.argmax(total))
    return f"{len(loads)}, peak {_mw(total[peak])} at {_moment(case.time.local[peak])}"
