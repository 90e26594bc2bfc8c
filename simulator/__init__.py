"""Rampline: week-ahead dispatch of a power grid, from a case folder to a results dataset.

Public names: `Case`, `open_run`, `plan_run`, `price_cause`, `read_case`, `run`, `to_dataset`; each is
loaded when it is first asked for, so that the command line can answer `--help` without the numerical
libraries.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from simulator.case import Case, read_case
    from simulator.causes import price_cause
    from simulator.horizon import plan_run, run
    from simulator.results import open_run, to_dataset

__all__ = ["Case", "open_run", "plan_run", "price_cause", "read_case", "run", "to_dataset"]

_HOMES = {
    "Case": "case",
    "open_run": "results",
    "plan_run": "horizon",
    "read_case": "case",
    "price_cause": "causes",
    "run": "horizon",
    "to_dataset": "results",
}


def __getattr__(name: str) -> Any:
    """Load a public name from the room it lives in."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"simulator.{_HOMES[name]}"), name)
