"""Makes the case folder `fennholm` next to this script: an invented region, its fleet, its year 2027.

Run it as `python profiles/make_fennholm.py`; it writes the same bytes each time. The tables are here,
the hours of the year in `fennholm_year.py`. Public names: `FOLDER`, `main`, `tables`.

Everything is invented. Line constants, technology figures and fuel prices are common practice, no
source: round numbers of the right size, not data of any plant, line or market.
"""

from io import StringIO
from pathlib import Path

import numpy as np
import pandas as pd
from fennholm_year import profiles
from numpy.typing import NDArray

__all__ = ["FOLDER", "main", "tables"]

Floats = NDArray[np.float64]

FOLDER = Path(__file__).resolve().parent / "fennholm"
BASE_MVA = 100.0

SETTINGS = """\
format = 1
name = "Fennholm, 2027"
currency = "EUR"
time_zone = "Europe/Dublin"
base_mva = 100.0

[horizon]
window_hours = 48
keep_hours = 24

[penalties]
unserved = 10000.0
surplus = 1000.0

[commitment]
mode = "relaxed"
mip_gap = 0.001

[network]
limits = "lines"
losses = false

[emissions]
carbon_price_per_t = 72.0
"""

BUSES = """\
bus,zone,voltage_kv,latitude,longitude
Skarrowby,north,220,53.28,-16.52
Ulverane,north,220,52.93,-17.38
Thornhesk-220,north,220,52.80,-16.47
Thornhesk-110,north,110,52.74,-16.38
Grimmelsay,north,110,52.98,-15.72
Hallocket,north,110,52.58,-15.93
Corvesk-220,middle,220,52.14,-16.72
Corvesk-110,middle,110,52.08,-16.82
Linnaford,middle,110,52.33,-17.08
Pellowden,middle,110,51.83,-17.16
Dunmarrel,middle,220,52.08,-15.84
Brackamoor,middle,220,51.78,-16.26
Westerkell,west,220,52.04,-17.72
Fallowmarch,west,110,51.52,-17.68
Estermoor,east,220,51.62,-15.33
Ansterwell,south,220,51.42,-16.58
Meridock-220,south,220,51.08,-15.98
Meridock-110,south,110,51.02,-15.88
Kingsvard-220,south,220,51.15,-16.98
Kingsvard-110,south,110,51.08,-17.08
Tarrowmouth,south,220,50.76,-16.42
Oxlevere,south,110,50.84,-15.52
Wendlemere,south,110,50.70,-17.02
Soltrane,south,110,50.52,-16.02
Oskerra,isle,110,51.92,-14.42
Oskerra Quay,isle,110,51.72,-14.58
"""

ROUTES = """\
from_bus,to_bus,circuits,conductor,compensated_percent,phase_shift_deg,rating_profile,note
Skarrowby,Thornhesk-220,2,220 twin,0,,,
Ulverane,Thornhesk-220,1,220 twin,0,,,
Thornhesk-220,Corvesk-220,2,220 twin,0,,,north-south corridor
Thornhesk-220,Dunmarrel,1,220 twin,0,,rating east,"north-south corridor, rating by weather"
Ulverane,Westerkell,1,220 twin,30,,rating west,"north-south corridor, rating by weather, series compensated"
Corvesk-220,Dunmarrel,1,220 single,0,,,
Corvesk-220,Westerkell,1,220 single,0,,,
Dunmarrel,Brackamoor,1,220 twin,0,,,
Corvesk-220,Ansterwell,2,220 twin,0,,,north-south corridor
Brackamoor,Ansterwell,1,220 twin,0,,,north-south corridor
Dunmarrel,Estermoor,1,220 twin,0,,,north-south corridor
Estermoor,Meridock-220,1,220 twin,0,,,north-south corridor
Westerkell,Kingsvard-220,1,220 twin,0,4,,"north-south corridor, phase shifter at Westerkell"
Ansterwell,Meridock-220,2,220 twin,0,,,
Ansterwell,Kingsvard-220,1,220 twin,0,,,
Meridock-220,Tarrowmouth,2,220 twin,0,,,
Kingsvard-220,Tarrowmouth,1,220 twin,0,,,
Thornhesk-110,Hallocket,1,110 large,0,,,
Hallocket,Grimmelsay,1,110 large,0,,,
Thornhesk-110,Grimmelsay,1,110 large,0,,,
Corvesk-110,Linnaford,1,110 single,0,,,
Corvesk-110,Pellowden,1,110 single,0,,,
Pellowden,Fallowmarch,1,110 single,0,,,
Fallowmarch,Kingsvard-110,1,110 large,0,,,
Kingsvard-110,Wendlemere,1,110 large,0,,,
Wendlemere,Soltrane,1,110 large,0,,,
Soltrane,Oxlevere,1,110 large,0,,,
Oxlevere,Meridock-110,1,110 large,0,,,
Soltrane,Meridock-110,1,110 large,0,,,
Oskerra,Oskerra Quay,1,110 large,0,,,
"""

CONDUCTORS = """\
conductor,reactance_ohm_per_km,resistance_ohm_per_km,charging_us_per_km,rating_mw
220 twin,0.31,0.035,3.7,410
220 single,0.41,0.070,2.8,260
110 large,0.38,0.080,3.0,160
110 single,0.40,0.120,2.8,110
"""

TRANSFORMERS = """\
site,count,rating_mw,tap_ratio
Thornhesk,2,220,1.0
Corvesk,2,200,1.01
Meridock,2,300,1.02
Kingsvard,2,250,1.015
"""

DC_TIES = """\
tie,from_bus,to_bus,forward_mw,reverse_mw,loss_percent
Oskerra sound cable,Estermoor,Oskerra Quay,150,120,2.5
"""

TECHNOLOGIES = """\
technology,min,ramp,no_load,om,start,cold_start,cold_after_h,min_up_h,min_down_h,must_run
nuclear,0.80,0.045,0,2.5,120,200,72,72,48,true
coal,0.42,0.16,4.2,3.0,70,130,24,12,8,false
combined cycle,0.45,0.26,5.2,2.0,32,60,12,5,4,false
old combined cycle,0.48,0.17,5.8,2.8,36,70,12,6,5,false
gas turbine,0.30,1.0,7.0,4.5,22,30,6,1,1,false
oil turbine,0.25,1.0,9.0,6.0,20,28,6,1,1,false
gas engine,0.10,1.0,2.0,6.0,4,6,4,1,1,false
biomass,0.40,0.20,0,0,45,90,24,10,8,false
heat and power,0.35,0.30,0,0,25,45,12,6,4,false
"""

UNITS = """\
unit,bus,technology,fuel,max_output_mw
Tarrow Point,Tarrowmouth,nuclear,uranium,660
Westerkell A,Westerkell,coal,coal,340
Westerkell B,Westerkell,coal,coal,340
Meridock CC 1,Meridock-220,combined cycle,gas,460
Meridock CC 2,Meridock-220,old combined cycle,gas,360
Kingsvard CC,Kingsvard-220,combined cycle,gas,380
Ansterwell CC,Ansterwell,old combined cycle,gas,340
Dunmarrel CC,Dunmarrel,combined cycle,gas,300
Estermoor CHP,Estermoor,heat and power,,150
Corvesk biomass,Corvesk-110,biomass,,90
Pellowden biomass,Pellowden,biomass,,60
Thornhesk engines,Thornhesk-110,gas engine,gas,60
Meridock peaker,Meridock-110,gas turbine,,220
Soltrane peaker,Soltrane,gas turbine,gas,200
Oxlevere peaker,Oxlevere,gas turbine,gas,200
Kingsvard peaker,Kingsvard-110,oil turbine,oil,140
Oskerra engines,Oskerra,gas engine,oil,130
"""

HEAT_RATES = """\
unit,up_to_share,heat_rate_gj_per_mwh
Tarrow Point,1.0,10.6
Westerkell A,0.42,8.7
Westerkell A,0.75,8.9
Westerkell A,1.0,9.3
Westerkell B,0.42,8.9
Westerkell B,0.75,9.1
Westerkell B,1.0,9.5
Meridock CC 1,0.45,5.7
Meridock CC 1,0.8,5.85
Meridock CC 1,1.0,6.3
Meridock CC 2,0.48,6.2
Meridock CC 2,0.8,6.4
Meridock CC 2,1.0,6.9
Kingsvard CC,0.45,5.8
Kingsvard CC,0.8,5.95
Kingsvard CC,1.0,6.4
Ansterwell CC,0.48,6.3
Ansterwell CC,0.8,6.5
Ansterwell CC,1.0,7.1
Dunmarrel CC,0.45,5.75
Dunmarrel CC,0.8,6.0
Dunmarrel CC,1.0,6.5
Thornhesk engines,1.0,8.6
Soltrane peaker,0.6,9.3
Soltrane peaker,1.0,9.9
Oxlevere peaker,0.6,9.5
Oxlevere peaker,1.0,10.1
Kingsvard peaker,1.0,10.8
Oskerra engines,1.0,8.9
"""

OFFERS = """\
unit,up_to_mw,cost_per_mwh
Estermoor CHP,52.5,38
Estermoor CHP,100,64
Estermoor CHP,150,83
Corvesk biomass,36,41
Corvesk biomass,90,58
Pellowden biomass,24,44
Pellowden biomass,60,61
Meridock peaker,60,136
Meridock peaker,140,148
Meridock peaker,220,171
"""

FUELS = """\
fuel,price_per_gj,co2_t_per_gj,price_profile
uranium,0.75,0,
coal,3.3,0.094,
gas,9.2,0.056,gas price
oil,16.5,0.074,
"""

RENEWABLES = """\
plant,bus,technology,capacity_mw,profile,offer_per_mwh
Skarrow Head wind,Skarrowby,wind,880,wind skarrow,-6
Ulver Ridge wind,Ulverane,wind,480,wind ulver,1
Thornhesk Moor wind,Thornhesk-220,wind,320,wind thornhesk,1
Grimmel Bank wind,Grimmelsay,wind,240,wind grimmel,-30
Dunmarrel Fell wind,Dunmarrel,wind,220,wind dunmarrel,1
Westerkell Deep wind,Westerkell,wind,300,wind westerkell,1
Tarrow Sands wind,Tarrowmouth,wind,260,wind tarrow,1
Oskerra wind,Oskerra,wind,210,wind oskerra,1
Soltrane solar,Soltrane,solar,190,sun soltrane,0
Wendlemere solar,Wendlemere,solar,200,sun wendlemere,0
Fallowmarch solar,Fallowmarch,solar,150,sun fallowmarch,0
Ulverane river,Ulverane,run of river,80,river north,0
Linnaford river,Linnaford,run of river,70,river middle,0
Brackamoor river,Brackamoor,run of river,100,river middle,0
"""

STORAGE = """\
store,bus,charge_mw,discharge_mw,energy_mwh,charge_efficiency,discharge_efficiency,\
loss_percent_per_h,throughput_cost_per_mwh,end_value_per_mwh
Brackamoor upper lake,Brackamoor,280,300,1800,0.87,0.90,0,1.5,60
Meridock battery,Meridock-110,100,100,300,0.95,0.95,0.02,5,60
"""

LOADS = """\
load,bus,profile,scale_mw,unserved_per_mwh
Skarrowby homes,Skarrowby,homes north,55,
Ulverane homes,Ulverane,homes north,45,
Thornhesk town,Thornhesk-110,town,140,
Hallocket homes,Hallocket,homes north,65,
Corvesk town,Corvesk-110,town,175,
Linnaford homes,Linnaford,homes north,50,
Pellowden homes,Pellowden,homes south,85,
Dunmarrel works,Dunmarrel,works,230,
Westerkell works,Westerkell,works,190,
Fallowmarch homes,Fallowmarch,homes south,75,
Estermoor smelter,Estermoor,smelter,300,2500
Ansterwell homes,Ansterwell,homes south,380,
Ansterwell halls,Ansterwell,halls,170,15000
Meridock city,Meridock-220,city,860,
Meridock harbour,Meridock-110,works,190,
Kingsvard city,Kingsvard-220,city,560,
Kingsvard homes,Kingsvard-110,homes south,160,
Tarrowmouth works,Tarrowmouth,works,180,
Oxlevere homes,Oxlevere,homes south,120,
Wendlemere homes,Wendlemere,homes south,95,
Soltrane town,Soltrane,town,110,
Oskerra homes,Oskerra,homes north,100,
Oskerra cannery,Oskerra Quay,works,40,
"""

OUTAGES = """\
kind,name,from,until,available_percent
unit,Meridock CC 2,2027-01-04T00:00,2027-01-08T06:00,60
line,Corvesk-Ansterwell 1,2027-01-05T06:00,2027-01-07T18:00,0
renewable,Grimmel Bank wind,2027-02-15T08:00,2027-02-19T17:00,50
line,Thornhesk-Corvesk 2,2027-04-12T06:00,2027-04-17T18:00,0
unit,Westerkell A,2027-05-03T00:00,2027-05-24T00:00,0
unit,Tarrow Point,2027-06-14T00:00,2027-07-19T00:00,0
unit,Westerkell B,2027-07-26T00:00,2027-08-14T00:00,0
dc_tie,Oskerra sound cable,2027-08-02T06:00,2027-08-05T18:00,0
unit,Kingsvard CC,2027-08-16T00:00,2027-09-04T00:00,0
storage,Brackamoor upper lake,2027-09-13T00:00,2027-09-20T00:00,50
unit,Dunmarrel CC,2027-09-20T00:00,2027-10-02T00:00,0
line,Meridock T1,2027-10-11T06:00,2027-10-13T18:00,0
"""


def table(text: str) -> pd.DataFrame:
    """Read one of the tables above."""
    return pd.read_csv(StringIO(text))


# Network


def kilometres(buses: pd.DataFrame, start: pd.Series, end: pd.Series) -> Floats:
    """Return great-circle distances plus 8 % for the way lines take, array (route,), km."""
    places = np.radians(buses.set_index("bus")[["latitude", "longitude"]])
    one, two = places.loc[start].to_numpy(), places.loc[end].to_numpy()
    half = np.sin((two - one) / 2) ** 2
    chord = half[:, 0] + np.cos(one[:, 0]) * np.cos(two[:, 0]) * half[:, 1]
    return np.asarray(1.08 * 2 * 6371.0 * np.arcsin(np.sqrt(chord)))


def overhead_lines(buses: pd.DataFrame) -> pd.DataFrame:
    """Return one row a circuit, its constants by length and conductor."""
    routes = table(ROUTES).merge(table(CONDUCTORS), on="conductor", how="left", validate="m:1")
    length = kilometres(buses, routes["from_bus"], routes["to_bus"])
    voltage = buses.set_index("bus").loc[routes["from_bus"], "voltage_kv"].to_numpy(float)
    base_ohm = voltage**2 / BASE_MVA
    left = 1 - routes["compensated_percent"] / 100
    routes["reactance_pu"] = routes["reactance_ohm_per_km"] * length * left / base_ohm
    routes["resistance_pu"] = routes["resistance_ohm_per_km"] * length / base_ohm
    routes["charging_pu"] = routes["charging_us_per_km"] * 1e-6 * length * base_ohm
    routes["emergency_rating_mw"] = 1.2 * routes["rating_mw"]
    lines = routes.loc[routes.index.repeat(routes["circuits"])]
    number = lines.groupby(level=0).cumcount() + 1
    return lines.assign(line=route_names(lines) + " " + number.astype(str), tap_ratio=1.0)


def route_names(lines: pd.DataFrame) -> pd.Series:
    """Return "Thornhesk-Corvesk" for a route between two buses."""
    sites = lines[["from_bus", "to_bus"]].replace(r"-\d+$", "", regex=True)
    return sites["from_bus"] + "-" + sites["to_bus"]


def transformers() -> pd.DataFrame:
    """Return one row a transformer; 12 % short-circuit voltage and 0.4 % losses at its rating."""
    sites = table(TRANSFORMERS)
    rows = sites.loc[sites.index.repeat(sites["count"])]
    number = rows.groupby(level=0).cumcount() + 1
    return rows.assign(
        line=rows["site"] + " T" + number.astype(str),
        from_bus=rows["site"] + "-220",
        to_bus=rows["site"] + "-110",
        reactance_pu=0.12 * BASE_MVA / rows["rating_mw"],
        resistance_pu=0.004 * BASE_MVA / rows["rating_mw"],
        charging_pu=0.0,
        emergency_rating_mw=1.3 * rows["rating_mw"],
        note="transformer",
    )


def lines(buses: pd.DataFrame) -> pd.DataFrame:
    """Return lines.csv."""
    columns = [
        "line", "from_bus", "to_bus", "reactance_pu", "resistance_pu", "charging_pu", "rating_mw",
        "emergency_rating_mw", "tap_ratio", "phase_shift_deg", "rating_profile", "note",
    ]  # fmt: skip
    rows = pd.concat([overhead_lines(buses), transformers()], ignore_index=True)[columns]
    return rows.round(dict.fromkeys(("reactance_pu", "resistance_pu", "charging_pu"), 5))


# Fleet


def units() -> pd.DataFrame:
    """Return units.csv: each unit has the habits of its technology, in proportion to its size."""
    rows = table(UNITS).merge(table(TECHNOLOGIES), on="technology", how="left", validate="m:1")
    size = rows["max_output_mw"]
    return pd.DataFrame({
        **rows[["unit", "bus", "technology", "fuel"]],
        "min_output_mw": (rows["min"] * size).round(1),
        "max_output_mw": size,
        "ramp_up_mw_per_h": (rows["ramp"] * size).round(),
        "ramp_down_mw_per_h": (1.1 * rows["ramp"] * size).round(),
        "no_load_cost_per_h": (rows["no_load"] * size).round(),
        "variable_om_per_mwh": rows["om"].where(~rows["unit"].isin(table(OFFERS)["unit"]), 0.0),
        "start_cost": (rows["start"] * size).round(-1),
        "cold_start_cost": (rows["cold_start"] * size).round(-1),
        **rows[["cold_after_h", "min_up_h", "min_down_h"]],
        "must_run": rows["must_run"].map({True: "true", False: "false"}),
    })  # fmt: skip


def heat_rates() -> pd.DataFrame:
    """Return heat_rates.csv, incremental."""
    rows = table(HEAT_RATES)
    size = table(UNITS).set_index("unit")["max_output_mw"]
    breaks = (rows.pop("up_to_share") * rows["unit"].map(size)).round(1)
    rows.insert(1, "up_to_mw", breaks)
    return rows


def tables() -> dict[str, pd.DataFrame]:
    """Return every table but the hourly ones, by path."""
    buses = table(BUSES)
    return {
        "network/buses.csv": buses,
        "network/lines.csv": lines(buses),
        "network/dc_ties.csv": table(DC_TIES),
        "fleet/units.csv": units(),
        "fleet/heat_rates.csv": heat_rates(),
        "fleet/offers.csv": table(OFFERS),
        "fleet/fuels.csv": table(FUELS),
        "fleet/renewables.csv": table(RENEWABLES),
        "fleet/storage.csv": table(STORAGE),
        "demand/loads.csv": table(LOADS),
        "calendar/outages.csv": table(OUTAGES),
    }


def main() -> None:
    """Write the folder."""
    places = table(BUSES).set_index("bus")[["latitude", "longitude"]]
    sites = {bus: (latitude, longitude) for bus, latitude, longitude in places.itertuples()}
    for path, frame in {**tables(), **profiles(sites)}.items():
        target = FOLDER / path
        target.parent.mkdir(parents=True, exist_ok=True)
        target.write_bytes(frame.to_csv(index=False, lineterminator="\n").encode())
    (FOLDER / "case.toml").write_bytes(SETTINGS.encode())


if __name__ == "__main__":
    main()
