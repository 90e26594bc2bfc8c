"""A small valid case folder for tests: every table, three buses, two days of hours.

`write_case(folder)` writes it; overrides change files or single cells before they are written:

    write_case(tmp_path)
    write_case(tmp_path, {"fleet/storage.csv": None})                     without that file
    write_case(tmp_path, {"case.toml": 'format = 1\\nname = "bare"\\n'})    another text, or bytes
    write_case(tmp_path, cells={("network/lines.csv", 3, "to_bus"): "Midfen"})
    write_case(tmp_path, hours=168, step=30, start="2026-10-19T00:00")    other periods, minutes long

Cells are addressed like problems: path, spreadsheet row (the header is row 1) and column; a row below
the last adds rows. `case_texts` returns the same files as texts, `problems_of` reads a folder and
returns its problems.
"""

import csv
import io
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pandas as pd

from simulator.case import Case, read_case
from simulator.errors import CaseError, Problem

Files = Mapping[str, str | bytes | None]
Cells = Mapping[tuple[str, int, str], str]

_SETTINGS = """\
format = 1
name = "Three fens"
currency = "EUR"
time_zone = "Europe/Dublin"
base_mva = 100

[horizon]
window_hours = 48
keep_hours = 24

[penalties]
unserved = 5000.0
surplus = 500

[commitment]
mode = "optimal"
mip_gap = 0.0001

[network]
limits = "lines"
losses = false

[emissions]
carbon_price_per_t = 10.0
"""

NETWORK_LIMITS = {
    "network/corridors.csv": """\
corridor,forward_mw,reverse_mw,limit_profile
south,130,,warmth
ring,,90,
""",
    "network/corridor_lines.csv": """\
corridor,line,weight
south,N-M,
south,N-S,1
ring,M-S,0.5
ring,N-S,-0.5
""",
    "network/contingencies.csv": """\
contingency,line
gale,N-M
gale,M-S
N-S,N-S
""",
}
"""Files of corridors and contingencies that can be added to the small case."""

_TABLES = {
    "network/buses.csv": """\
bus,zone,voltage_kv,latitude,longitude
Northfen,north,220,53.9,-8.1
Midfen,south,220,53.2,-8.0
Southfen,south,110,52.5,-8.2
""",
    "network/lines.csv": """\
line,from_bus,to_bus,reactance_pu,resistance_pu,rating_mw,emergency_rating_mw,tap_ratio,rating_profile
N-M,Northfen,Midfen,0.10,0.01,80,100,,warmth
M-S,Midfen,Southfen,0.20,0.02,,,1.0,
N-S,Northfen,Southfen,0.20,0.02,60,,0.98,
""",
    "network/dc_ties.csv": """\
tie,from_bus,to_bus,forward_mw,reverse_mw,loss_percent,note
cable,Northfen,Southfen,20,10,2,buried
""",
    "fleet/units.csv": """\
unit,bus,technology,fuel,min_output_mw,max_output_mw,ramp_up_mw_per_h,ramp_down_mw_per_h,\
start_ramp_mw,stop_ramp_mw,no_load_cost_per_h,variable_om_per_mwh,start_cost,cold_start_cost,\
cold_after_h,min_up_h,min_down_h,must_run,initial_output_mw,initial_hours,on_profile
peat 1,Northfen,steam,peat,30,100,40,50,60,,120,2,900,1500,8,6,4,false,50,10,
gas 1,Midfen,combined cycle,gas,20,80,,,,,0,0,300,,,2,2,FALSE,,,
gas 2,Southfen,engine,,0,40,30,,,,0,0,50,,,,,0,0,-3,gas 2 on
""",
    "fleet/offers.csv": """\
unit,up_to_mw,cost_per_mwh
gas 1,20,60
gas 1,50,52
gas 1,80,58.5
gas 2,40,95
""",
    "fleet/heat_rates.csv": """\
unit,up_to_mw,heat_rate_gj_per_mwh
peat 1,30,11
peat 1,100,9.5
""",
    "fleet/fuels.csv": """\
fuel,price_per_gj,co2_t_per_gj,price_profile
peat,3,0.1,
gas,8,0.05,gas price
""",
    "fleet/renewables.csv": """\
plant,bus,technology,capacity_mw,profile,offer_per_mwh
ridge wind,Northfen,wind,90,wind,-5
""",
    "fleet/storage.csv": """\
store,bus,charge_mw,discharge_mw,energy_mwh,charge_efficiency,discharge_efficiency,\
loss_percent_per_h,initial_mwh,final_mwh
cells,Midfen,15,,60,0.95,0.93,0.1,,
""",
    "fleet/reserves.csv": """\
product,direction,zone,requirement_mw,requirement_profile,percent_of_load,response_minutes,\
shortage_per_mwh
spinning,up,,10,watch,3,10,
lowering,down,south,6,,,,400
""",
    "demand/loads.csv": """\
load,bus,profile,scale_mw,unserved_per_mwh
town,Midfen,demand,90,
works,Southfen,demand,60,8000
""",
    "calendar/outages.csv": """\
kind,name,from,until,available_percent
unit,gas 2,2027-01-11T06:00,2027-01-11T18:00,50
line,N-S,2027-01-12T00:00+00:00,2027-01-12T06:00Z,
""",
}  # fmt: skip


def hourly_frames(
    hours: float = 48, step: int = 60, start: str = "2027-01-11T00:00", zone: str = "Europe/Dublin"
) -> dict[str, pd.DataFrame]:
    """Return the hourly tables by path, times local without offset, periods `step` minutes long."""
    count = round(hours * 60 / step)
    instants = pd.date_range(start, periods=count, freq=f"{step}min", tz=zone)
    hour = np.arange(count) * step / 60
    demand = 0.8 + 0.2 * np.sin((hour - 8) * np.pi / 12)
    wind = 0.5 + 0.4 * np.cos(hour * np.pi / 17)
    times = instants.strftime("%Y-%m-%dT%H:%M")
    return {
        "hourly/demand.csv": pd.DataFrame({"time": times, "demand": demand.round(4)}),
        "hourly/weather.csv": pd.DataFrame({
            "time": times,
            "wind": wind.round(4),
            "warmth": (1 - 0.1 * demand).round(4),
            "gas 2 on": (demand > 0.8).astype(int),
            "gas price": (1 + 0.05 * wind).round(4),
            "watch": (0.5 + 0.5 * demand).round(4),
            "note": "as measured",
        }),
    }  # fmt: skip


def case_texts(
    hours: float = 48, step: int = 60, start: str = "2027-01-11T00:00"
) -> dict[str, str]:
    """Return the files of the small case."""
    frames = hourly_frames(hours, step, start)
    hourly = {path: frame.to_csv(index=False) for path, frame in frames.items()}
    return {"case.toml": _SETTINGS, **_TABLES, **hourly}


def change_cells(text: str, cells: Mapping[tuple[int, str], str]) -> str:
    """Return a CSV text with cells changed, addressed by spreadsheet row and column name."""
    rows = list(csv.reader(io.StringIO(text)))
    for (row, column), value in cells.items():
        while len(rows) < row:
            rows.append([""] * len(rows[0]))
        if column not in rows[0]:
            rows = [[*cells_of_row, ""] for cells_of_row in rows]
            rows[0][-1] = column
        rows[row - 1][rows[0].index(column)] = value
    out = io.StringIO()
    csv.writer(out, lineterminator="\n").writerows(rows)
    return out.getvalue()


def write_case(
    folder: Path,
    files: Files | None = None,
    cells: Cells | None = None,
    *,
    hours: float = 48,
    step: int = 60,
    start: str = "2027-01-11T00:00",
) -> Path:
    """Write the small case with some files and then some cells replaced; return the folder."""
    contents: dict[str, str | bytes | None] = {**case_texts(hours, step, start), **(files or {})}
    for path in dict.fromkeys(path for path, _, _ in cells or {}):
        text = contents[path]
        assert isinstance(text, str)
        changed = {(row, column): value for (at, row, column), value in cells.items() if at == path}
        contents[path] = change_cells(text, changed)
    for path, content in contents.items():
        if content is not None:
            target = folder / path
            target.parent.mkdir(parents=True, exist_ok=True)
            target.write_bytes(content.encode() if isinstance(content, str) else content)
    return folder


def small_case(folder: Path, files: Files | None = None, cells: Cells | None = None) -> Case:
    """Write the small case and read it."""
    return read_case(write_case(folder, files, cells))


def problems_of(folder: Path) -> tuple[Problem, ...]:
    """Read a case folder and return its problems, none if it is sound."""
    try:
        read_case(folder)
    except CaseError as error:
        return error.problems
    return ()
