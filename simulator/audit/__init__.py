"""The audit of a run: its dataset proved anew from the case alone (formulation.md 7).

Public names: `Check`, `audit`, `audit_record`.

Shares no code with what solved the run. Its modules: `check` (a verdict and its words), `evidence`
(case and dataset as arrays), `network` (islands and power flow), `units` (what a unit could do),
then the checks themselves: `powers`, `commitment`, `storage`, `prices`, `optimality`, `costs`,
`plans`.
"""

from simulator.audit.check import Check
from simulator.audit.report import audit, audit_record

__all__ = ["Check", "audit", "audit_record"]
