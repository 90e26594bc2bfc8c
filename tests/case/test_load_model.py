"""Profile arithmetic against the load model of the IEEE Reliability Test System.

IEEE RTS Task Force, "IEEE Reliability Test System", IEEE Transactions on Power Apparatus and Systems
98(6), 1979: weekly peaks in per cent of the annual peak, daily peaks in per cent of the weekly, hourly
load in per cent of the daily peak, for 52 weeks that begin on a Monday. Published results: 8736 hours,
annual peak 2850 MW, annual energy 15 297 GWh, load factor 61.4 %. All values typed from memory.
"""

import numpy as np
import pandas as pd
import pytest

from simulator.case import read_case
from simulator.case.series import load_demand
from tests.support import write_case

WEEKLY = [
    86.2, 90.0, 87.8, 83.4, 88.0, 84.1, 83.2, 80.6, 74.0, 73.7, 71.5, 72.7, 70.4,
    75.0, 72.1, 80.0, 75.4, 83.7, 87.0, 88.0, 85.6, 81.1, 90.0, 88.7, 89.6, 86.1,
    75.5, 81.6, 80.1, 88.0, 72.2, 77.6, 80.0, 72.9, 72.6, 70.5, 78.0, 69.5, 72.4,
    72.4, 74.3, 74.4, 80.0, 88.1, 88.5, 90.9, 94.0, 89.0, 94.2, 97.0, 100.0, 95.2,
]  # fmt: skip
DAILY = [93, 100, 98, 96, 94, 77, 75]
HOURLY = {
    ("winter", "weekday"): [
        67, 63, 60, 59, 59, 60, 74, 86, 95, 96, 96, 95, 95, 95, 93, 94, 99, 100, 100, 96, 91, 83, 73, 63,
    ],
    ("winter", "weekend"): [
        78, 72, 68, 66, 64, 65, 66, 70, 80, 88, 90, 91, 90, 88, 87, 87, 91, 100, 99, 97, 94, 92, 87, 81,
    ],
    ("summer", "weekday"): [
        64, 60, 58, 56, 56, 58, 64, 76, 87, 95, 99, 100, 99, 100, 100, 97, 96, 96, 93, 92, 92, 93, 87, 72,
    ],
    ("summer", "weekend"): [
        74, 70, 66, 65, 64, 62, 62, 66, 81, 86, 91, 93, 93, 92, 91, 91, 92, 94, 95, 95, 100, 93, 88, 80,
    ],
    ("spring", "weekday"): [
        63, 62, 60, 58, 59, 65, 72, 85, 95, 99, 100, 99, 93, 92, 90, 88, 90, 92, 96, 98, 96, 90, 80, 70,
    ],
    ("spring", "weekend"): [
        75, 73, 69, 66, 65, 65, 68, 74, 83, 89, 92, 94, 91, 90, 90, 86, 85, 88, 92, 100, 97, 95, 90, 85,
    ],
}  # fmt: skip
PEAK_MW = 2850


def season(week):
    """Return the season of a week, counted from 1; spring stands for spring and fall."""
    if week <= 8 or week >= 44:
        return "winter"
    return "summer" if 18 <= week <= 30 else "spring"


def yearly_profile():
    """Return load in shares of the annual peak, array (8736,)."""
    days = [
        week_peak
        * day_peak
        / 100
        * np.array(HOURLY[season(week), "weekend" if day >= 5 else "weekday"])
        / 100
        for week, week_peak in enumerate(WEEKLY, 1)
        for day, day_peak in enumerate(DAILY)
    ]
    return np.concatenate(days) / 100


@pytest.fixture(scope="module")
def case(tmp_path_factory):
    times = pd.date_range("2029-01-01", periods=8736, freq="h").strftime("%Y-%m-%dT%H:%M")
    profile = pd.DataFrame({"time": times, "yearly": yearly_profile()})
    files = {
        "case.toml": 'format = 1\nname = "load model"\n',
        "network/buses.csv": "bus\nonly\n",
        "network/lines.csv": "line,from_bus,to_bus,reactance_pu\n",
        "fleet/units.csv": "unit,bus,max_output_mw\n",
        "demand/loads.csv": f"load,bus,profile,scale_mw\nall,only,yearly,{PEAK_MW}\n",
        "hourly/load.csv": profile.to_csv(index=False),
    }
    unused = ["network/dc_ties.csv", "fleet/offers.csv", "fleet/heat_rates.csv", "fleet/fuels.csv"]
    unused += ["fleet/renewables.csv", "fleet/storage.csv", "fleet/reserves.csv"]
    unused += ["calendar/outages.csv", "hourly/demand.csv", "hourly/weather.csv"]
    return read_case(write_case(tmp_path_factory.mktemp("rts"), {**dict.fromkeys(unused), **files}))


def test_the_year_has_the_published_peak_energy_and_load_factor(case):
    demand = load_demand(case, slice(0, len(case.time)))[:, 0]
    energy_gwh = demand.sum() * case.time.period_hours / 1000
    assert len(demand) == 8736
    assert demand.max() == pytest.approx(PEAK_MW, rel=1e-12)
    assert energy_gwh == pytest.approx(15297, abs=0.5)
    assert energy_gwh * 1000 / (PEAK_MW * 8736) == pytest.approx(0.614, abs=0.0005)


def test_the_peak_is_on_a_winter_tuesday_evening(case):
    demand = load_demand(case, slice(0, len(case.time)))[:, 0]
    peaks = case.time.periods[np.isclose(demand, PEAK_MW)]
    assert set(zip(peaks.day_of_week, peaks.hour, peaks.isocalendar().week, strict=True)) == {
        (1, 17, 51),
        (1, 18, 51),
    }
