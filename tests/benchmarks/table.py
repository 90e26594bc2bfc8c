"""A case's measurements as a table for a terminal.

Public names: `table`.
"""

from collections.abc import Mapping
from typing import Any

from rich.table import Table

from tests.benchmarks.measure import SAME
from tests.benchmarks.phases import SIX_WINDOWS

__all__ = ["table"]


def table(record: Mapping[str, Any]) -> Table:
    """Return one case as a table: medians, spread, ratio to the engine's six windows, optimum."""
    shown = Table(title=_title(record), title_justify="left")
    for column, side in (("phase", "left"), ("median s", "right"), ("least … most s", "right"),
                         ("processor s", "right"), ("× engine", "right"), ("optimum", "left")):  # fmt: skip
        shown.add_column(column, justify=side, no_wrap=True)  # type: ignore[arg-type]
    phases = record["phases"]
    engine = next((phase for phase in phases if phase["phase"] == SIX_WINDOWS), None)
    for phase in phases:
        shown.add_row(*_row(phase, engine))
    return shown


def _title(record: Mapping[str, Any]) -> str:
    size = f"{record['case']}: {record['buses']:,} buses, {record['lines']:,} lines"
    machine = f"{record['processors']} processors, load {record['load_average']:.1f}"
    return f"{size}; {record['peak_memory_gb']:.1f} GB at most; {machine}"


def _row(phase: Mapping[str, Any], engine: Mapping[str, Any] | None) -> tuple[str, ...]:
    if phase["failed"] is not None:
        return phase["phase"], "failed", "", "", "", phase["failed"]
    if phase["over"] is not None:
        over = f"over the budget of {phase['over']:g}"
        return phase["phase"], over, "", "", _ratio(phase["over"], engine, "> "), ""
    low, high = min(phase["seconds"]), max(phase["seconds"])
    windows = phase["off"] is not None
    return (
        phase["phase"],
        f"{phase['median']:.3g}",
        f"{low:.3g} … {high:.3g}",
        f"{phase['median_processor']:.3g}",
        _ratio(phase["median_processor"], engine, "") if windows else "",
        _optimum(phase["off"]),
    )


def _ratio(seconds: float, engine: Mapping[str, Any] | None, sign: str) -> str:
    """Compare processor time, so that what else runs on the machine counts little."""
    if engine is None or not engine["median_processor"]:
        return ""
    return f"{sign}{seconds / engine['median_processor']:.1f}"


def _optimum(off: float | None) -> str:
    if off is None:
        return ""
    return f"same ({off:.0e})" if off <= SAME else f"DIFFERS ({off:.0e})"
