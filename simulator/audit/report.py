"""All checks of a run, in one list, and as the record kept in run.json.

Public names: `audit`, `audit_record`.
"""

import math
from collections.abc import Sequence
from typing import Any

import xarray as xr

from simulator.audit.check import Check
from simulator.audit.commitment import commitment_checks
from simulator.audit.costs import cost_checks
from simulator.audit.evidence import gather
from simulator.audit.limits import Security, limit_checks
from simulator.audit.network import Network
from simulator.audit.optimality import optimality_checks
from simulator.audit.plans import plan_checks
from simulator.audit.powers import power_checks
from simulator.audit.prices import price_checks
from simulator.audit.reserves import Reserves, reserve_checks
from simulator.audit.storage import storage_checks
from simulator.audit.units import Units
from simulator.case import Case

__all__ = ["audit", "audit_record"]


def audit(case: Case, dataset: xr.Dataset) -> list[Check]:
    """Prove a run's dataset from the case it was run on; raise `AuditError` if that cannot be tried.

    Checks that ask nothing of a run are left out: line limits without limits, minimum times and
    must-run in mode `given`, reserves without products.
    """
    evidence = gather(case, dataset)
    network, units = Network(evidence), Units(evidence)
    security = Security.of(evidence, network)
    reserves = Reserves(evidence, units)
    return [
        *power_checks(evidence, network, units),
        *commitment_checks(evidence, units),
        *storage_checks(evidence),
        *limit_checks(evidence, security),
        *reserve_checks(evidence, reserves),
        *price_checks(evidence, network, security),
        *optimality_checks(evidence, units, reserves),
        *cost_checks(evidence, units),
        *plan_checks(evidence, units),
    ]


def audit_record(checks: Sequence[Check]) -> dict[str, Any]:
    """Return the verdict as run.json keeps it; a residual that is no number is null.

    >>> audit_record([Check("flows", 0.5, 'line "N-M" at 2027-01-11T06:00+00:00', 1e-5)])["passed"]
    False
    """
    return {"passed": all(check.passed for check in checks), "checks": [_entry(c) for c in checks]}


def _entry(check: Check) -> dict[str, Any]:
    return {
        "name": check.name,
        "worst": check.worst if math.isfinite(check.worst) else None,
        "where": check.where,
        "tolerance": check.tolerance,
        "passed": check.passed,
    }
