"""One run of a case in a line: `solved(case, "relaxed")` is one window over everything."""

import xarray as xr

from simulator.case import Case
from simulator.horizon import Run, plan_run, run
from simulator.results import to_dataset


def finished(
    case: Case,
    mode: str = "relaxed",
    *,
    periods: int | None = None,
    window: int | None = None,
    keep: int | None = None,
    limits: str | None = None,
) -> Run:
    """Run the first periods of a case, by default all, in one window unless told otherwise."""
    length, count = case.time.period_hours, len(case.time)
    plan = plan_run(
        case, hours=(periods or count) * length, window_hours=(window or count) * length,
        keep_hours=(keep or count) * length, commitment=mode, limits=limits,
    )  # fmt: skip
    return run(case, plan)


def solved(case: Case, mode: str = "relaxed", **how: object) -> xr.Dataset:
    """The results of such a run."""
    return to_dataset(finished(case, mode, **how))


def cost(dataset: xr.Dataset) -> float:
    """Total cost of a run."""
    return float(dataset["cost"].sum())
