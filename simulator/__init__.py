"""Rampline: week-ahead dispatch of a power grid, from a case folder to a results dataset.

Public names: `Case`, `NewLoad`, `StorageSites`, `StudySettings`, `new_load`, `open_run`, `open_study`,
`plan_run`, `price_cause`, `read_case`, `run`, `storage_sites`, `to_dataset`; each is loaded when it is first
asked for, so that the command line can answer `--help` without the numerical libraries.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from simulator.case import Case, read_case
    from simulator.horizon import plan_run, run
    from simulator.prices import price_cause
    from simulator.results import open_run, to_dataset
    from simulator.studies.base import StudySettings
    from simulator.studies.folder import open_study
    from simulator.studies.new_load import NewLoad, new_load
    from simulator.studies.storage_sites import StorageSites, storage_sites

__all__ = [
    "Case",
    "NewLoad",
    "StorageSites",
    "StudySettings",
    "new_load",
    "open_run",
    "open_study",
    "plan_run",
    "price_cause",
    "read_case",
    "run",
    "storage_sites",
    "to_dataset",
]

_HOMES = {
    "Case": "case",
    "NewLoad": "studies.new_load",
    "StorageSites": "studies.storage_sites",
    "StudySettings": "studies.base",
    "new_load": "studies.new_load",
    "open_study": "studies.folder",
    "storage_sites": "studies.storage_sites",
    "open_run": "results",
    "plan_run": "horizon",
    "read_case": "case",
    "price_cause": "prices",
    "run": "horizon",
    "to_dataset": "results",
}


def __getattr__(name: str) -> Any:
    """Load a public name from the room it lives in."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"simulator.{_HOMES[name]}"), name)
