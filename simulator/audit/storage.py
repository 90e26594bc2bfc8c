"""Checks of stores: what goes in and out, what is left, and what the run must end with.

Public names: `storage_checks`.
"""

import numpy as np
from numpy.typing import NDArray

from simulator.audit.check import POWER, Check, Residual, apart, beyond, judge
from simulator.audit.evidence import Evidence

__all__ = ["storage_checks"]

Floats = NDArray[np.float64]


def storage_checks(evidence: Evidence) -> list[Check]:
    """Check power limits, energy limits, energy balance and final energy of stores (2.4)."""
    return [
        judge("storage limits", POWER, evidence.hours, _limits(evidence)),
        judge("storage energy", POWER, evidence.hours, [_energy(evidence)]),
        judge("final energy", POWER, evidence.hours, [_final(evidence)]),
    ]


def _residual(evidence: Evidence, rule: str, values: Floats) -> Residual:
    return Residual("store", evidence.names["store"], rule, values)


def _limits(evidence: Evidence) -> list[Residual]:
    stores, share = evidence.case.storage, evidence.store_share
    most = {name: stores[name].to_numpy(float) for name in ("charge_mw", "discharge_mw")}
    energy = stores["energy_mwh"].to_numpy(float)
    rules = {
        "charge": beyond(evidence["storage_charge"], 0.0, share * most["charge_mw"]),
        "discharge": beyond(evidence["storage_discharge"], 0.0, share * most["discharge_mw"]),
        "energy": beyond(evidence["stored_energy"], 0.0, energy),
    }
    return [_residual(evidence, rule, values) for rule, values in rules.items()]


def _energy(evidence: Evidence) -> Residual:
    """2.4: E_t = (1−loss)^Δ·E_{t−1} + η_c·charge·Δ − discharge·Δ/η_d, in MWh."""
    stores, stored = evidence.case.storage, evidence["stored_energy"]
    before = np.concatenate([stores["initial_mwh"].to_numpy(float)[None], stored[:-1]])
    kept = (1 - stores["loss_percent_per_h"].to_numpy(float) / 100) ** evidence.length
    gained = evidence["storage_charge"] * stores["charge_efficiency"].to_numpy(float)
    drawn = evidence["storage_discharge"] / stores["discharge_efficiency"].to_numpy(float)
    expected = kept * before + (gained - drawn) * evidence.length
    return _residual(evidence, "", apart(stored, expected))


def _final(evidence: Evidence) -> Residual:
    """How far the run's last period ends below the final energy, MWh."""
    short = np.zeros(evidence["stored_energy"].shape)
    final = evidence.case.storage["final_mwh"].to_numpy(float)
    short[-1] = final - evidence["stored_energy"][-1]
    return _residual(evidence, "", short)
