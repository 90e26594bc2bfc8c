"""What a new load costs, whom, and how large it may be (formulation.md 6.1).

Public names: `NewLoad`, `answer_new_load`, `check_new_load`, `new_load`.
"""

import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from simulator.case import Case
from simulator.case.wording import did_you_mean, listed, number, quoted
from simulator.errors import OptionError
from simulator.horizon import Plan
from simulator.results import PRICED
from simulator.studies.advice import advise_new_load, basis
from simulator.studies.base import (
    Answer,
    Base,
    Entries,
    Solved,
    StudySettings,
    attributes,
    fingerprint,
    labelled,
    places,
    plan_study,
    record_of,
    solve_base,
    solved,
)
from simulator.studies.largest import Largest, Probe, headroom, largest_sizes, steps
from simulator.studies.outcome import outcome_of, own_prices, payments
from simulator.studies.runs import Arrays, Finished, Progress, Runs, Task, engage
from simulator.studies.stopping import stopping_limit

__all__ = ["NewLoad", "answer_new_load", "check_new_load", "new_load"]

Floats = NDArray[np.float64]

STUDY = "new-load"
MONEY, PRICE = "currency", "currency/MWh"
BY_SIZE, BY_LINE = ("bus", "size"), ("bus", "size", "line")

VARIABLES: Entries = {
    "extra_production_cost": (BY_SIZE, MONEY, "production cost with the load less without"),
    "extra_cost_per_mwh": (BY_SIZE, PRICE, "extra production cost a MWh the load is served"),
    "extra_penalty_cost": (BY_SIZE, MONEY, "penalties for what should not happen, with less without"),
    "congestion_cost_caused": (BY_SIZE, MONEY, "congestion cost with the load less without"),
    "extra_congestion_rent": (BY_SIZE, MONEY, "congestion rent with the load less without"),
    "own_energy": (BY_SIZE, "MWh", "energy the load is served"),
    "own_payment": (BY_SIZE, MONEY, "what the load pays at the price of its bus"),
    "others_payment": (BY_SIZE, MONEY, "what all other loads pay more"),
    "price_without": (("bus",), PRICE, "mean price at the bus without the load"),
    "price_with": (BY_SIZE, PRICE, "mean price at the bus with the load"),
    "lines_congested": (BY_SIZE, "1", "lines priced with the load and never without"),
    "hours_congested": (BY_SIZE, "h", "hours of lines priced with the load and not without"),
    "hours_relieved": (BY_SIZE, "h", "hours of lines priced without the load and not with it"),
    "line_hours_congested": (BY_LINE, "h", "hours priced with the load and not without"),
    "line_hours_relieved": (BY_LINE, "h", "hours priced without the load and not with it"),
    "own_unserved": (BY_SIZE, "MWh", "energy of the load that is not served"),
    "extra_unserved": (BY_SIZE, "MWh", "unserved energy of all loads with the load less without"),
    "extra_curtailed": (BY_SIZE, "MWh", "curtailed energy with the load less without"),
    "extra_surplus": (BY_SIZE, "MWh", "energy spilled at buses with the load less without"),
    "extra_emissions": (BY_SIZE, "t", "emissions with the load less without"),
    "cost_allowance": (BY_SIZE, MONEY, "by how much gaps allow the extra cost to be off"),
    "cost_within_gap": (BY_SIZE, "1", "whether the extra cost is no more than gaps allow"),
    "congestion_allowance": (BY_SIZE, MONEY, "by how much gaps allow the congestion cost to be off"),
    "congestion_within_gap": (BY_SIZE, "1", "whether the congestion cost is no more than gaps allow"),
    "largest_size": (("bus",), "MW", "largest size before load goes unserved or the price rises too far"),
    "smallest_refused": (("bus",), "MW", "smallest size tried that is too large"),
    "stopped_by": (("bus",), "1", "the kind of limit that is met first"),
    "stopped_by_name": (("bus",), "1", "the line or unit that is met first"),
    "stopped_at": (("bus",), "1", "the local hour in which it is met"),
    "base_production_cost": ((), MONEY, "production cost without the load"),
    "base_congestion_cost": ((), MONEY, "congestion cost without the load"),
}  # fmt: skip

_BY_RUN = tuple(
    name for name, (dims, *_) in VARIABLES.items()
    if dims in (BY_SIZE, BY_LINE) and not name.startswith(("congestion_", "cost_within"))
)  # fmt: skip
"""What a run with limits gives alone."""

_LEAST = 1e-3
"""MWh below which nothing goes unserved."""


@dataclass(frozen=True)
class NewLoad:
    """A question about a new load.

    buses : where, none for every bus of the case; sizes_mw : how large
    profile : name of a profile of the case that sizes are multiplied by; None for a flat load
    largest : whether to find the largest size of each bus, to within `largest_within_mw`
    most_price_rise : a size is too large, too, where the mean price at its bus rises by more than this,
        currency/MWh
    """

    buses: tuple[str, ...] = ()
    sizes_mw: tuple[float, ...] = (100.0,)
    profile: str | None = None
    largest: bool = True
    largest_within_mw: float = 1.0
    most_price_rise: float = float("inf")
    settings: StudySettings = field(default_factory=StudySettings)


def check_new_load(
    case: Case, request: NewLoad, more: Sequence[str] = ()
) -> tuple[Plan, tuple[str, ...]]:
    """Return the plan of a study's runs and its buses; raise `OptionError` with every problem.

    more : problems found elsewhere, to be told with these
    """
    problems = list(more)
    known = case.buses.index
    problems += [
        f"--bus, must name a bus of the case, found {quoted(bus)}, "
        + did_you_mean(bus, known, "choose one of network/buses.csv")
        for bus in request.buses if bus not in known
    ]  # fmt: skip
    problems += _repeated("--bus", request.buses)
    problems += _repeated("--mw", [number(size) for size in request.sizes_mw])
    problems += [
        f"--mw, must be a finite number greater than 0, found {number(size)}, write MW"
        for size in request.sizes_mw if not 0 < size < np.inf
    ]  # fmt: skip
    if not request.sizes_mw:
        problems.append("--mw, must be given, found none, say how large the load is")
    problems += [
        f"{option}, must be {rule}, found {number(value)}, write {unit}"
        for option, value, right, rule, unit in (
            ("--largest-within", request.largest_within_mw, 0 < request.largest_within_mw < np.inf,
             "a finite number greater than 0", "MW"),
            ("--most-price-rise", request.most_price_rise, request.most_price_rise > 0,
             "greater than 0", "currency/MWh"),
        ) if not right
    ]  # fmt: skip
    profiles = case.profiles.columns
    if request.profile is not None and request.profile not in profiles:
        problems.append(
            f"--profile, must name a profile of the case, found {quoted(request.profile)}, "
            + did_you_mean(request.profile, profiles, "leave it out for a flat load")
        )
    elif request.profile is not None and not (case.profiles[request.profile] >= 0).all():
        problems.append(
            f"--profile, must nowhere be negative, found {quoted(request.profile)}, choose another"
        )
    plan = plan_study(case, request.settings, problems)
    if plan and request.profile in profiles and not _asks(case, request, plan):
        problems.append(
            "--profile, must be above 0 in some hour of the study, found "
            f"{quoted(str(request.profile))} at 0 in all, choose another or other hours"
        )
    if problems or plan is None:
        raise OptionError("\n".join(problems))
    return plan, tuple(request.buses or map(str, known))


def _asks(case: Case, request: NewLoad, plan: Plan) -> bool:
    hours = slice(plan.first, plan.first + plan.periods)
    return bool((_profile(case, request)[hours] > 0).any())


def _repeated(option: str, values: Sequence[str]) -> list[str]:
    twice = [value for value in dict.fromkeys(values) if list(values).count(value) > 1]
    if not twice:
        return []
    return [f"{option}, must be given once each, found {listed(twice)} twice, drop one"]


def new_load(case: Case, request: NewLoad, **how: Any) -> xr.Dataset:
    """Return what a new load costs, whom, and how large it may be (6.1).

    Dimensions `bus`, `size` and `line`. `how` is that of `answer_new_load`.
    """
    return answer_new_load(case, request, **how).dataset


def answer_new_load(
    case: Case, request: NewLoad, *, workers: int = 1, scratch: Path | None = None,
    progress: Progress | None = None,
) -> Answer:  # fmt: skip
    """Answer a question about a new load.

    workers : processes that the runs are spread over; the answer does not depend on it
    scratch : folder in which finished runs are kept until the study is saved, so that it can go on
    progress : called with (runs done, runs in all)
    """
    began = time.perf_counter()
    plan, buses = check_new_load(case, request)
    profile = _profile(case, request)
    room = _with_sizes(case, buses, profile, {})
    base = solve_base(room, plan)
    based = time.perf_counter()
    work = _Work(case, base, buses, profile, request.most_price_rise)
    finished = Finished(scratch, fingerprint(case, plan, request)) if scratch else None
    with Runs(engage(work, workers), finished, progress) as runs:
        sweep = _Sweep(request, work, runs)
        values = sweep.values() | sweep.largest()
    dataset = _dataset(case, request, base, values, buses)
    audits = {"without the load": base.run.broken, "without the load or limits": base.free.broken}
    seconds = {"base": based - began, "runs": runs.seconds, "total": time.perf_counter() - began}
    counts = {
        "runs": len(runs),
        "runs_found_done": runs.found,
        "base_runs": 2 if base.limited else 1,
    }
    record = record_of(
        dataset, request, _rows(dataset), audits | runs.audits(_in_words), counts, seconds
    )
    return Answer(dataset, record)


def _in_words(task: Task) -> str:
    kind, bus, size = task
    return f"{number(float(size))} MW at {bus}" + ("" if kind == LIMITED else ", no line limits")


def _profile(case: Case, request: NewLoad) -> Floats:
    """Return what sizes are multiplied by, array over the case's time axis."""
    if request.profile is None:
        return np.ones(len(case.time))
    return case.profiles[request.profile].to_numpy(float)


def _with_sizes(
    case: Case, buses: Sequence[str], profile: Floats, sizes: Mapping[str, float]
) -> Case:
    """Return the case with a load at each bus of a study, of no size where none is given.

    So the model of every run has one shape: only demand differs.
    """
    free = _free_names(case, len(buses))
    loads = {name: (bus, sizes.get(bus, 0.0)) for name, bus in zip(free, buses, strict=True)}
    return case.with_loads(loads, profile)


def _free_names(case: Case, count: int) -> list[str]:
    taken = set(case.loads.index)
    word = "new load"
    while any(name.startswith(word) for name in taken):
        word = f"another {word}"
    return [f"{word} {place + 1}" for place in range(count)]


LIMITED, FREE = "limited", "no limits"


@dataclass(frozen=True, eq=False)
class _Work:
    """What all runs of the study share; a task is (kind, bus, MW)."""

    case: Case
    base: Base
    buses: tuple[str, ...]
    profile: Floats
    most_price_rise: float

    def begin(self) -> Any:
        return self._solve

    def _solve(self, task: Task) -> Arrays:
        kind, bus, size = str(task[0]), str(task[1]), float(task[2])
        began = time.perf_counter()
        case = _with_sizes(self.case, self.buses, self.profile, {bus: size})
        limited = kind == LIMITED
        plan, like = (
            (self.base.plan, self.base.origin) if limited
            else (self.base.free_plan, self.base.free_origin)
        )  # fmt: skip
        run = solved(case, plan, like)
        found = {
            "cost": run.cost,
            "allowed": run.allowed,
            "broken": np.array(run.broken, dtype=str),
        }
        if limited:
            place = len(self.case.loads) + self.buses.index(bus)
            found |= self._changes(run.dataset, place, bus) | self._stop(case, run, bus)
            found["cost_allowance"] = run.allowed + self.base.run.allowed
        found["seconds"] = time.perf_counter() - began
        return {name: np.asarray(value) for name, value in found.items()}

    def _changes(self, with_load: xr.Dataset, place: int, bus: str) -> dict[str, Any]:
        """Return what changes from the base run; `place` is the new load's among all loads."""
        without = self.base.run.dataset
        now, then = outcome_of(with_load), outcome_of(without)
        length = float(with_load.attrs["period_hours"])
        paid, before = payments(with_load), payments(without)
        demand = with_load["load_demand"].to_numpy()[:, place]
        short = with_load["load_unserved"].to_numpy()[:, place]
        priced, was_priced = (
            each["line_shadow_price"].to_numpy() > PRICED for each in (with_load, without)
        )
        added = (priced & ~was_priced).sum(axis=0) * length
        relieved = (was_priced & ~priced).sum(axis=0) * length
        energy = float((demand - short).sum()) * length
        production = now.production_cost - then.production_cost
        return {
            "extra_production_cost": production,
            "extra_cost_per_mwh": production / energy if energy > _LEAST else np.nan,
            "extra_penalty_cost": now.penalty_cost - then.penalty_cost,
            "extra_congestion_rent": now.congestion_rent - then.congestion_rent,
            "own_energy": energy,
            "own_payment": paid[place],
            "others_payment": float(np.delete(paid - before, place).sum()),
            "price_with": own_prices(with_load, bus, demand),
            "lines_congested": float((priced.any(axis=0) & ~was_priced.any(axis=0)).sum()),
            "hours_congested": added.sum(),
            "hours_relieved": relieved.sum(),
            "line_hours_congested": added,
            "line_hours_relieved": relieved,
            "own_unserved": float(short.sum()) * length,
            "extra_unserved": now.unserved - then.unserved,
            "extra_curtailed": now.curtailed - then.curtailed,
            "extra_surplus": now.surplus - then.surplus,
            "extra_emissions": now.emissions - then.emissions,
        }

    def _stop(self, case: Case, run: Solved, bus: str) -> dict[str, Any]:
        """Return whether the size is too large and, if so, what stops it."""
        base = self.base.run.dataset
        unserved = float((run.dataset["load_unserved"] - base["load_unserved"]).sum())
        weight = self.window_profile
        rise = own_prices(run.dataset, bus, weight) - own_prices(base, bus, weight)
        short = unserved * float(base.attrs["period_hours"]) > _LEAST
        found = {
            "too_large": short or rise > self.most_price_rise,
            "kind": "",
            "name": "",
            "hour": "",
        }
        if found["too_large"]:
            stop = stopping_limit(case, run.dataset, base, bus, by_price=not short)
            found |= {"kind": stop.kind, "name": stop.name, "hour": stop.hour}
        return found

    @property
    def window_profile(self) -> Floats:
        """The profile in the hours of the study, array (period,)."""
        first = self.base.plan.first
        return self.profile[first : first + self.base.plan.periods]


class _Sweep:
    """The runs a question asks for, put together by bus and size."""

    def __init__(self, request: NewLoad, work: _Work, runs: Runs) -> None:
        self._request, self._work, self._runs, self._base = request, work, runs, work.base
        self._pairs = [(bus, size) for bus in work.buses for size in request.sizes_mw]
        self._most = self._bounds() if request.largest else {}
        within = request.largest_within_mw
        runs.expect(len(self._tasks()) + sum(steps(most, within) for most in self._most.values()))

    def _tasks(self) -> list[Task]:
        """Return the runs of the sweep; without limits, one serves all buses that it cannot tell apart."""
        limited: list[Task] = [(LIMITED, bus, size) for bus, size in self._pairs]
        free = [self._free(bus, size) for bus, size in self._pairs] if self._base.limited else []
        return list(dict.fromkeys([*limited, *free]))

    def _free(self, bus: str, size: float) -> Task:
        """Return the run without line limits: where lines neither limit nor lose, the first of a cell."""
        if self._work.case.settings.network.losses:
            return (FREE, bus, size)
        names = self._work.case.buses.index
        cell = self._base.cell[names.get_indexer(list(self._work.buses))]
        mine = self._base.cell[names.get_loc(bus)]
        return (FREE, self._work.buses[int(np.flatnonzero(cell == mine)[0])], size)

    def values(self) -> dict[str, Floats]:
        """Return the variables by bus and size."""
        self._runs.results(self._tasks())
        limited = self._runs.results([(LIMITED, *pair) for pair in self._pairs])
        stacked = {name: self._shaped([run[name] for run in limited]) for name in _BY_RUN
                   if name in limited[0]}  # fmt: skip
        free = limited
        if self._base.limited:
            free = self._runs.results([self._free(*pair) for pair in self._pairs])
        cost, allowed, free_cost, free_allowed = (
            self._shaped([run[name] for run in group])
            for group in (limited, free) for name in ("cost", "allowed")
        )  # fmt: skip
        caused = cost - free_cost - self._base.congestion_cost
        spread = allowed + free_allowed + self._base.run.allowed + self._base.free.allowed
        if not self._base.limited:
            caused, spread = np.zeros_like(cost), np.zeros_like(cost)
        extra, allowance = stacked["extra_production_cost"], stacked["cost_allowance"]
        return stacked | {
            "cost_within_gap": _within(extra, allowance),
            "congestion_cost_caused": caused,
            "congestion_allowance": spread,
            "congestion_within_gap": _within(caused, spread),
        }

    def _shaped(self, values: Sequence[Any]) -> Any:
        sizes = len(self._request.sizes_mw)
        stacked = np.stack([np.asarray(value) for value in values])
        return stacked.reshape(len(self._work.buses), sizes, *stacked.shape[1:])

    def _bounds(self) -> dict[str, float]:
        base, work = self._base.run.dataset, self._work
        profile = work.window_profile
        return {
            bus: headroom(work.case, base, bus, profile, limited=self._base.limited)
            for bus in work.buses
        }

    def largest(self) -> dict[str, Any]:
        """Return the largest size of each bus and what stops it, if that was asked for."""
        if not self._request.largest:
            return {}
        known: dict[str, dict[float, Probe]] = {bus: {} for bus in self._work.buses}
        for (bus, size), probe in zip(self._pairs, self._probes(self._pairs), strict=True):
            known[bus][size] = probe
        found = largest_sizes(self._most, known, self._request.largest_within_mw, self._probes)
        each: list[Largest] = [found[bus] for bus in self._work.buses]
        return {
            "largest_size": [one.size for one in each],
            "smallest_refused": [one.refused for one in each],
            "stopped_by": [one.stop.kind for one in each],
            "stopped_by_name": [one.stop.name for one in each],
            "stopped_at": [one.stop.hour for one in each],
        }

    def _probes(self, pairs: Sequence[tuple[str, float]]) -> list[Probe]:
        runs = self._runs.results([(LIMITED, bus, size) for bus, size in pairs])
        return [
            Probe(bool(run["too_large"]), str(run["kind"]), str(run["name"]), str(run["hour"]))
            for run in runs
        ]


def _within(difference: Floats, allowance: Floats) -> NDArray[np.bool_]:
    """Tell which differences gaps alone might make; none where nothing is decided."""
    found: NDArray[np.bool_] = (allowance > 0) & (np.abs(difference) <= allowance)
    return found


def _dataset(
    case: Case, request: NewLoad, base: Base, values: Mapping[str, Any], buses: tuple[str, ...]
) -> xr.Dataset:
    without = outcome_of(base.run.dataset)
    first, work = base.plan.first, base.run.dataset
    weight = _profile(case, request)[first : first + base.plan.periods]
    fixed = {
        "price_without": [own_prices(work, bus, weight) for bus in buses],
        "base_production_cost": without.production_cost,
        "base_congestion_cost": base.congestion_cost,
    }
    size = ("size", np.array(request.sizes_mw), {"units": "MW", "long_name": "size of the load"})
    title = f"What a new load costs in {case.settings.name}"
    attrs = attributes(case, base, STUDY, title)
    attrs["profile"] = request.profile or "flat"
    attrs["most_price_rise"] = request.most_price_rise
    attrs["largest_within_mw"] = request.largest_within_mw
    dataset = labelled(VARIABLES, {**values, **fixed}, {"size": size, **places(work, buses)}, attrs)
    dataset.attrs["basis"] = basis(dataset, runs_of="each bus and size")
    dataset.attrs["recommendation"] = advise_new_load(dataset)
    return dataset


def _rows(dataset: xr.Dataset) -> list[dict[str, Any]]:
    """Return the answers as rows, one a bus and size, for study.json."""
    by_size = [name for name in dataset.data_vars if dataset[name].dims == BY_SIZE]
    by_bus = [name for name in dataset.data_vars if dataset[name].dims == ("bus",)]
    rows = []
    for bus in dataset["bus"].to_numpy():
        at = dataset.sel(bus=bus)
        for size in dataset["size"].to_numpy():
            one = at.sel(size=size)
            rows.append(
                {"bus": str(bus), "size_mw": float(size)}
                | {str(name): one[name].item() for name in by_size}
                | {str(name): at[name].item() for name in by_bus}
            )
    return rows
