"""The DC power flow of a run, by dense least squares: `injections(run)`, `flows(...)`, `lines_out(case)`.

Section numbers are those of formulation.md. Nothing here comes from the project's grid algebra.
"""

import numpy as np
import pandas as pd

from simulator.case import Case
from simulator.horizon import Run

TOLERANCE = 1e-5  # MW


def injections(run: Run) -> np.ndarray:
    """1.2: what enters each bus less what leaves it, lines aside, array (period, bus), MW."""
    case, kept = run.case, run.kept
    at_bus = -kept.surplus
    demand = run.kept_inputs.demand
    arrives = 1 - case.dc_ties["loss_percent"].to_numpy(float) / 100

    def add(values: np.ndarray, buses: pd.Series) -> None:
        for column, bus in enumerate(case.buses.index.get_indexer(buses)):
            at_bus[:, bus] += values[:, column]

    add(kept.output, case.units["bus"])
    add(kept.renewable, case.renewables["bus"])
    add(kept.discharge - kept.charge, case.storage["bus"])
    add(kept.unserved - demand, case.loads["bus"])
    add(kept.tie_reverse * arrives - kept.tie_forward, case.dc_ties["from_bus"])
    add(kept.tie_forward * arrives - kept.tie_reverse, case.dc_ties["to_bus"])
    return at_bus


def flows(case: Case, injection: np.ndarray, out: np.ndarray) -> np.ndarray:
    """2.6: flows from injections, array (period, line), MW; `out` tells which lines are out.

    Angles are any that balance every bus; that there are such angles is checked.
    """
    lines, buses = case.lines, case.buses.index
    ends = np.zeros((len(lines), len(buses)))
    ends[np.arange(len(lines)), buses.get_indexer(lines["from_bus"])] += 1
    ends[np.arange(len(lines)), buses.get_indexer(lines["to_bus"])] -= 1
    series = (lines["reactance_pu"] * lines["tap_ratio"]).to_numpy(float)
    per_rad = case.settings.base_mva / series
    shift = np.radians(lines["phase_shift_deg"].to_numpy(float))
    found = np.zeros((len(injection), len(lines)))
    for t, injected in enumerate(injection):
        here = np.where(out[t], 0.0, per_rad)
        matrix, right = ends.T @ (here[:, None] * ends), injected + ends.T @ (here * shift)
        angle = np.linalg.lstsq(matrix, right, rcond=1e-11)[0]
        assert np.abs(matrix @ angle - right).max() < TOLERANCE
        found[t] = here * (ends @ angle - shift)
    return found


def lines_out(case: Case) -> np.ndarray:
    """Which lines are out when, array (period, line)."""
    length = pd.Timedelta(hours=case.time.period_hours)
    out = np.zeros((len(case.time), len(case.lines)), dtype=bool)
    for outage in case.outages.to_dict("records"):
        if outage["kind"] == "line":
            starts = case.time.periods
            touched = (starts < outage["until"]) & (starts + length > outage["from"])
            out[touched, case.lines.index.get_loc(outage["name"])] = True
    return out
