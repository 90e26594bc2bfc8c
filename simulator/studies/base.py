"""What every study has in common: its hours, the run all others are compared with, what it leaves.

Public names: `Answer`, `Base`, `Entries`, `StudySettings`, `attributes`, `fingerprint`, `labelled`, `places`,
`plan_study`, `proved`, `record_of`, `solve_base`, `solved`, `Solved`.
"""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from datetime import date, datetime
from importlib.metadata import version
from typing import Any, TypeAlias

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from simulator.audit import audit
from simulator.case import Case
from simulator.case.model import TABLES
from simulator.errors import OptionError
from simulator.horizon import Like, Origin, Plan, Run, plan_run, run, without_limits
from simulator.results import to_dataset

__all__ = [
    "Answer",
    "Base",
    "Entries",
    "Solved",
    "StudySettings",
    "attributes",
    "fingerprint",
    "labelled",
    "places",
    "plan_study",
    "proved",
    "record_of",
    "solve_base",
    "solved",
]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Entries: TypeAlias = Mapping[str, tuple[tuple[str, ...], str, str]]
"""Variable → dimensions, unit ("currency" stands for the case's), name."""

FORMAT = 1
PACKAGES = ("rampline", "highspy", "pyomo", "xarray", "numpy")
FAILED_SHOWN = 20


@dataclass(frozen=True)
class StudySettings:
    """The hours a study is about and how they are run; what is None comes from the case."""

    start: str | date | datetime | None = None
    hours: float = 168.0
    window_hours: float | None = None
    keep_hours: float | None = None
    commitment: str | None = None
    limits: str | None = None


@dataclass(frozen=True, eq=False)
class Answer:
    """What a study comes to: its dataset, and study.json as a plain dictionary."""

    dataset: xr.Dataset
    record: dict[str, Any]


def plan_study(case: Case, settings: StudySettings, problems: list[str]) -> Plan | None:
    """Return the plan of every run of a study, or None and one problem more.

    No window sees past the end of the study. So all its runs end alike, and nothing that one of them
    stores for later is left out of the account.
    """
    try:
        plan = plan_run(
            case, settings.start, settings.hours, window_hours=settings.window_hours,
            keep_hours=settings.keep_hours, commitment=settings.commitment, limits=settings.limits,
        )  # fmt: skip
    except OptionError as error:
        problems.append(str(error))
        return None
    return replace(plan, seen=plan.periods)


@dataclass(frozen=True, eq=False)
class Solved:
    """One run of a study.

    dataset : its results; allowed : by how much the best plan may cost less, currency (mode `optimal`)
    broken : names of the audit's checks that failed
    """

    dataset: xr.Dataset
    allowed: float
    broken: tuple[str, ...]

    @property
    def cost(self) -> float:
        """What the run minimises, currency."""
        return float(self.dataset["cost"].sum())


def solved(case: Case, plan: Plan, like: Origin) -> Solved:
    """Run a case from what the base run left, and audit it."""
    finished = run(case, plan, like=like)
    like.models.update(finished.models)
    return proved(case, finished)


def proved(case: Case, finished: Run) -> Solved:
    """Return a finished run with its dataset and what its audit says."""
    dataset = to_dataset(finished)
    broken = tuple(check.name for check in audit(case, dataset) if not check.passed)
    allowed = sum(window.allowed for window in finished.counts.windows)
    return Solved(dataset, allowed, broken)


@dataclass(frozen=True, eq=False)
class Base:
    """The run without what a study adds, and the same without line limits (formulation.md 5.4).

    plan, free_plan : of both; origin, free_origin : what runs like them start from
    run, free : both solved; free is the run itself where no limit holds
    cell : array (bus,), the part of the network a bus is in whatever planned outages take out
    """

    plan: Plan
    free_plan: Plan
    origin: Origin
    free_origin: Origin
    run: Solved
    free: Solved
    cell: Integers

    @property
    def limited(self) -> bool:
        """Whether any line limit holds."""
        return self.plan.limits != "none"

    @property
    def congestion_cost(self) -> float:
        """What line limits cost without what the study adds, currency (5.4)."""
        return self.run.cost - self.free.cost


def solve_base(case: Case, plan: Plan, like: Like | None = None) -> Base:
    """Solve the base of a study, on a case that has room for what the study adds."""
    limited = run(case, plan, like=like)
    free = without_limits(limited) if plan.limits != "none" else limited
    origin, free_origin = (Origin(each.starts, free.models) for each in (limited, free))
    cell = limited.inputs.whole.cells.cell
    return Base(
        plan, free.plan, origin, free_origin, proved(case, limited), proved(case, free), cell
    )


def fingerprint(case: Case, plan: Plan, request: Any) -> str:
    """Return a number of all that a study's runs depend on, the program's version included."""
    digest = hashlib.sha256(repr((plan, request, case.settings, _versions())).encode())
    frames = [case.profiles, *(getattr(case, name) for name in TABLES)]
    for frame in frames:
        digest.update(repr((list(frame.columns), len(frame))).encode())
        digest.update(pd.util.hash_pandas_object(frame, index=True).to_numpy().tobytes())
    return digest.hexdigest()


def _versions() -> dict[str, str]:
    return {name: version(name) for name in PACKAGES}


def labelled(
    entries: Entries, values: Mapping[str, Any], coordinates: Mapping[str, Any], attrs: dict[str, Any]
) -> xr.Dataset:  # fmt: skip
    """Return the dataset of a study: each variable with its unit and name."""
    variables = {
        name: (dims, np.asarray(values[name]), {"units": unit, "long_name": label})
        for name, (dims, unit, label) in entries.items()
        if name in values
    }
    return xr.Dataset(variables, coordinates, attrs)


def attributes(case: Case, base: Base, study: str, title: str) -> dict[str, Any]:
    """Return the attributes of a study's dataset."""
    attrs = base.run.dataset.attrs
    times = case.time.local[base.plan.first : base.plan.first + base.plan.periods]
    end = times[-1] + pd.Timedelta(hours=case.time.period_hours)
    return {
        "Conventions": "CF-1.11", "format": FORMAT, "study": study, "title": title,
        **{name: attrs[name] for name in (
            "case_name", "currency", "time_zone", "period_hours", "commitment", "limits"
        )},
        "from": times[0].isoformat(), "until": end.isoformat(),
    }  # fmt: skip


def places(dataset: xr.Dataset, buses: Sequence[str]) -> dict[str, Any]:
    """Return the coordinates of a study: its buses, and the lines of the case."""
    at = dataset.indexes["bus"].get_indexer(list(buses))
    chosen = {
        str(name): ("bus", coordinate.to_numpy()[at], coordinate.attrs)
        for name, coordinate in dataset.coords.items()
        if coordinate.dims == ("bus",)
    }
    lines = {
        str(name): ("line", coordinate.to_numpy(), coordinate.attrs)
        for name, coordinate in dataset.coords.items()
        if coordinate.dims == ("line",)
    }
    return chosen | lines


def record_of(
    dataset: xr.Dataset, request: Any, answers: Sequence[Mapping[str, Any]],
    audits: Mapping[str, Sequence[str]], counts: Mapping[str, int], seconds: Mapping[str, float],
) -> dict[str, Any]:  # fmt: skip
    """Return study.json: what was asked, the answers, the audit of every run, counts and seconds.

    audits : run in words → names of the checks that failed
    """
    failed = {name: list(broken) for name, broken in audits.items() if broken}
    return {
        "format": FORMAT,
        **{name: dataset.attrs[name] for name in ("study", "case_name", "from", "until")},
        "request": _plain(asdict(request)),
        "settings": {name: dataset.attrs[name] for name in ("commitment", "limits")},
        "recommendation": dataset.attrs["recommendation"],
        "basis": dataset.attrs["basis"],
        "answers": [_plain(answer) for answer in answers],
        "audit": {
            "passed": not failed, "runs": len(audits),
            "failed": dict(list(failed.items())[:FAILED_SHOWN]),
        },
        "counts": dict(counts),
        "seconds": {name: round(value, 3) for name, value in seconds.items()},
        "versions": _versions(),
    }  # fmt: skip


def _plain(value: Any) -> Any:
    """Return a value as JSON has it: names, finite numbers, None for what is not known."""
    if isinstance(value, Mapping):
        return {str(key): _plain(each) for key, each in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(each) for each in value]
    if isinstance(value, (date, datetime)):
        return value.isoformat()
    if isinstance(value, np.generic):
        value = value.item()
    return None if isinstance(value, float) and not np.isfinite(value) else value
