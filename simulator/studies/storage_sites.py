"""Where a store earns most, and what it does to the system it stands in (formulation.md 6.2).

Public names: `StorageSites`, `answer_storage_sites`, `check_storage_sites`, `storage_sites`.
"""

import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from simulator.case import Case
from simulator.case.wording import did_you_mean, listed, number, quoted
from simulator.errors import OptionError
from simulator.horizon import Plan, grown, run
from simulator.results import to_dataset
from simulator.studies.advice import advise_storage_sites, basis
from simulator.studies.arbitrage import StoreTerms, best_earnings, daily_spread
from simulator.studies.base import (
    Answer,
    Base,
    Entries,
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
from simulator.studies.outcome import Outcome, local_days, outcome_of
from simulator.studies.runs import Arrays, Finished, Progress, Runs, Task, engage

__all__ = ["StorageSites", "answer_storage_sites", "check_storage_sites", "storage_sites"]

Floats = NDArray[np.float64]

STUDY = "storage-sites"
MONEY, PRICE = "currency", "currency/MWh"
SITE, DURATION = ("bus", "duration"), ("duration",)

VARIABLES: Entries = {
    "screening_earnings": (SITE, MONEY, "the most a store that moves no price could earn"),
    "screening_rank": (SITE, "1", "place of the bus by screening earnings"),
    "daily_spread": (SITE, PRICE, "dearest less cheapest hours of a day, as many as the store lasts, means"),
    "in_place": (SITE, "1", "whether the bus was run with the store in place"),
    "earned": (SITE, MONEY, "what the store earns in place, at the prices it leaves"),
    "capture_rate": (SITE, "1", "earned in place as a share of screening earnings"),
    "cycles_per_day": (SITE, "1", "energy drawn a day in place, in multiples of the energy stored at most"),
    "system_saving": (SITE, MONEY, "total cost without the store less with it"),
    "saving_allowance": (SITE, MONEY, "by how much gaps allow the saving to be off"),
    "saving_within_gap": (SITE, "1", "whether the saving is no more than gaps allow"),
    "curtailment_avoided": (SITE, "MWh", "curtailed energy without the store less with it"),
    "unserved_avoided": (SITE, "MWh", "unserved energy without the store less with it"),
    "emissions_avoided": (SITE, "t", "emissions without the store less with it"),
    "congestion_cost_avoided": (SITE, MONEY, "congestion cost without the store less with it"),
    "congestion_rent_avoided": (SITE, MONEY, "congestion rent without the store less with it"),
    "congestion_hours_avoided": (SITE, "h", "hours of lines priced, without the store less with it"),
    "rank_correlation": (DURATION, "1", "rank correlation of screening earnings and earnings in place"),
    "saving_rank_correlation": (DURATION, "1", "rank correlation of screening earnings and system saving"),
}  # fmt: skip

_IN_PLACE = (
    "earned", "capture_rate", "cycles_per_day", "system_saving", "saving_allowance",
    "curtailment_avoided", "unserved_avoided", "emissions_avoided", "congestion_cost_avoided",
    "congestion_rent_avoided", "congestion_hours_avoided",
)  # fmt: skip
FEW = 3
"""Sites that a rank correlation needs at least."""


@dataclass(frozen=True)
class StorageSites:
    """A question about where to put a store.

    power_mw : both ways, at the bus; durations_h : energy stored at most, in hours of that power
    buses : where it may stand, none for every bus of the case
    best, spread : how many of the best of the screening are run with the store in place, and how many
        more, spread evenly over the rest of the list
    """

    power_mw: float
    durations_h: tuple[float, ...]
    buses: tuple[str, ...] = ()
    charge_efficiency: float = 0.92
    discharge_efficiency: float = 0.92
    loss_percent_per_h: float = 0.0
    throughput_cost_per_mwh: float = 0.0
    cycles_per_day: float = float("inf")
    best: int = 5
    spread: int = 3
    settings: StudySettings = field(default_factory=StudySettings)

    def terms(self, duration: float) -> StoreTerms:
        """Return the store of a duration."""
        return StoreTerms(
            self.power_mw, self.power_mw, self.power_mw * duration, self.charge_efficiency,
            self.discharge_efficiency, self.loss_percent_per_h, self.throughput_cost_per_mwh,
            self.cycles_per_day,
        )  # fmt: skip


def check_storage_sites(
    case: Case, request: StorageSites, more: Sequence[str] = ()
) -> tuple[Plan, tuple[str, ...]]:
    """Return the plan of a study's runs and its buses; raise `OptionError` with every problem."""
    problems, known = list(more), case.buses.index
    rules = [
        ("--power-mw", request.power_mw, 0 < request.power_mw < np.inf, "a finite number greater than 0"),
        *(("--hours", each, 0 < each < np.inf, "a finite number greater than 0")
          for each in request.durations_h),
        ("--charge-efficiency", request.charge_efficiency, 0 < request.charge_efficiency <= 1,
         "greater than 0 and at most 1"),
        ("--discharge-efficiency", request.discharge_efficiency, 0 < request.discharge_efficiency <= 1,
         "greater than 0 and at most 1"),
        ("--loss-percent-per-h", request.loss_percent_per_h, 0 <= request.loss_percent_per_h < 100,  # noqa: PLR2004
         "at least 0 and less than 100"),
        ("--throughput-cost", request.throughput_cost_per_mwh,
         0 <= request.throughput_cost_per_mwh < np.inf, "a finite number, at least 0"),
        ("--cycles-a-day", request.cycles_per_day, request.cycles_per_day > 0, "greater than 0"),
        ("--top", float(request.best), request.best >= 1, "at least 1"),
        ("--spread", float(request.spread), request.spread >= 0, "at least 0"),
    ]  # fmt: skip
    problems += [
        f"{option}, must be {rule}, found {number(float(value))}, correct it"
        for option, value, right, rule in rules if not right
    ]  # fmt: skip
    problems += [
        f"--bus, must name a bus of the case, found {quoted(bus)}, "
        + did_you_mean(bus, known, "choose one of network/buses.csv")
        for bus in request.buses if bus not in known
    ]  # fmt: skip
    for option, values in (
        ("--bus", list(request.buses)), ("--hours", [number(each) for each in request.durations_h])
    ):  # fmt: skip
        twice = [value for value in dict.fromkeys(values) if values.count(value) > 1]
        if twice:
            problems.append(
                f"{option}, must be given once each, found {listed(twice)} twice, drop one"
            )
    if not request.durations_h:
        problems.append("--hours, must be given, found none, say for how long the store lasts")
    plan = plan_study(case, request.settings, problems)
    if problems or plan is None:
        raise OptionError("\n".join(problems))
    return plan, tuple(request.buses or map(str, known))


def storage_sites(case: Case, request: StorageSites, **how: Any) -> xr.Dataset:
    """Return where a store earns and saves most (6.2). Dimensions `bus` and `duration`.

    `how` is that of `answer_storage_sites`.
    """
    return answer_storage_sites(case, request, **how).dataset


def answer_storage_sites(
    case: Case, request: StorageSites, *, workers: int = 1, scratch: Path | None = None,
    progress: Progress | None = None,
) -> Answer:  # fmt: skip
    """Answer where to put a store: first by prices alone, then with the store in the system.

    workers, scratch, progress : as in `answer_new_load`
    """
    began = time.perf_counter()
    plan, buses = check_storage_sites(case, request)
    first = run(case, plan)
    screened = time.perf_counter()
    screening = _screened(to_dataset(first), request, buses)
    chosen = [_chosen(values, request) for values in screening["screening_earnings"].T]
    seconds = {"base": screened - began, "screening": time.perf_counter() - screened}
    sites = tuple(bus for place, bus in enumerate(buses) if any(place in each for each in chosen))
    room = _with_stores(case, request, sites, {})
    base = solve_base(room, plan, grown(first, room))
    work = _Work(case, base, request, sites)
    finished = Finished(scratch, fingerprint(case, plan, request)) if scratch else None
    pairs = [
        (buses[place], duration)
        for duration, each in zip(request.durations_h, chosen, strict=True) for place in each
    ]  # fmt: skip
    with Runs(engage(work, workers), finished, progress) as runs:
        found = _in_place(work, runs, pairs)
    values = screening | _laid_out(screening, found, pairs, buses, request)
    dataset = _dataset(case, request, base, values, buses)
    seconds |= {"runs": runs.seconds, "total": time.perf_counter() - began}
    counts = {"runs": len(runs), "runs_found_done": runs.found, "base_runs": 2 + base.limited}
    audits = {"without the store": base.run.broken, "without the store or limits": base.free.broken}
    record = record_of(
        dataset, request, _rows(dataset), audits | runs.audits(_in_words), counts, seconds
    )
    return Answer(dataset, record)


def _in_words(task: Task) -> str:
    kind, bus, duration = task
    return f"{number(float(duration))} h at {bus}" + ("" if kind == LIMITED else ", no line limits")


def _screened(
    dataset: xr.Dataset, request: StorageSites, buses: Sequence[str]
) -> dict[str, Floats]:
    """Return what prices alone say of every bus and duration, arrays (bus, duration)."""
    price = dataset["price"].sel(bus=list(buses)).to_numpy()
    length, day = float(dataset.attrs["period_hours"]), local_days(dataset)
    earnings = [
        best_earnings(price, request.terms(each), length, day) for each in request.durations_h
    ]
    spreads = [daily_spread(price, each, length, day) for each in request.durations_h]
    stacked = np.stack(earnings, axis=1)
    return {
        "screening_earnings": stacked,
        "screening_rank": _ranks(stacked),
        "daily_spread": np.stack(spreads, axis=1),
    }


def _ranks(values: Floats) -> Floats:
    """Return places from the largest down, by column; equals, to a millionth, share the first of them."""
    ranks: Floats = pd.DataFrame(values.round(6)).rank(ascending=False, method="min").to_numpy()
    return ranks


def _chosen(earnings: Floats, request: StorageSites) -> list[int]:
    """Return positions of the best buses, and of some spread over the rest of the list."""
    order = np.argsort(-earnings.round(6), kind="stable")
    rest = order[request.best :]
    count = min(request.spread, len(rest))
    places = np.unique(np.linspace(0, len(rest) - 1, count + 1).round().astype(int)[1:])
    return [int(place) for place in [*order[: request.best], *rest[places]]]


def _with_stores(
    case: Case, request: StorageSites, sites: Sequence[str], durations: Mapping[str, float]
) -> Case:
    """Return the case with a store at each site, of no size where no duration is given.

    So the model of every run has one shape: only powers and energies differ.
    """
    word = "new store"
    while any(str(name).startswith(word) for name in case.storage.index):
        word = f"another {word}"
    stores: list[Mapping[str, str | float | None]] = []
    for place, bus in enumerate(sites):
        terms = request.terms(durations.get(bus, 0.0))
        power = terms.charge_mw if bus in durations else 0.0
        stores.append({
            "store": f"{word} {place + 1}", "bus": bus, "charge_mw": power, "discharge_mw": power,
            "energy_mwh": terms.energy_mwh, "charge_efficiency": terms.charge_efficiency,
            "discharge_efficiency": terms.discharge_efficiency,
            "loss_percent_per_h": terms.loss_percent_per_h, "initial_mwh": 0.0, "final_mwh": 0.0,
            "throughput_cost_per_mwh": terms.throughput_cost_per_mwh,
        })  # fmt: skip
    return case.with_stores(stores)


LIMITED, FREE = "limited", "no limits"


@dataclass(frozen=True, eq=False)
class _Work:
    """What all runs of the study share; a task is (kind, bus, hours)."""

    case: Case
    base: Base
    request: StorageSites
    sites: tuple[str, ...]

    def begin(self) -> Any:
        return self._solve

    def _solve(self, task: Task) -> Arrays:
        kind, bus, duration = str(task[0]), str(task[1]), float(task[2])
        began, base = time.perf_counter(), self.base
        case = _with_stores(self.case, self.request, self.sites, {bus: duration})
        limited = kind == LIMITED
        plan, like = (
            (base.plan, base.origin) if limited else (base.free_plan, base.free_origin)
        )  # fmt: skip
        one = solved(case, plan, like)
        found: dict[str, Any] = {
            "cost": one.cost, "allowed": one.allowed, "broken": np.array(one.broken, dtype=str)
        }  # fmt: skip
        if limited:
            place = len(self.case.storage) + self.sites.index(bus)
            found |= self._changes(one.dataset, place, bus, duration)
        found["seconds"] = time.perf_counter() - began
        return {name: np.asarray(value) for name, value in found.items()}

    def _changes(
        self, with_store: xr.Dataset, place: int, bus: str, duration: float
    ) -> dict[str, Any]:
        """Return what changes from the base run; `place` is the new store's among all stores."""
        now: Outcome = outcome_of(with_store)
        then: Outcome = outcome_of(self.base.run.dataset)
        length, terms = float(with_store.attrs["period_hours"]), self.request.terms(duration)
        charge, discharge = (
            with_store[name].to_numpy()[:, place]
            for name in ("storage_charge", "storage_discharge")
        )
        price = with_store["price"].sel(bus=bus).to_numpy()
        sold = float((price * (discharge - charge)).sum()) * length
        worn = float(discharge.sum()) * length * terms.throughput_cost_per_mwh
        drawn = float(discharge.sum()) * terms.drawn(length)
        days = len(discharge) * length / 24
        return {
            "earned": sold - worn,
            "cycles_per_day": drawn / terms.energy_mwh / days,
            "curtailment_avoided": then.curtailed - now.curtailed,
            "unserved_avoided": then.unserved - now.unserved,
            "emissions_avoided": then.emissions - now.emissions,
            "congestion_rent_avoided": then.congestion_rent - now.congestion_rent,
            "congestion_hours_avoided": then.congestion_hours - now.congestion_hours,
        }


def _in_place(
    work: _Work, runs: Runs, pairs: Sequence[tuple[str, float]]
) -> list[dict[str, float]]:
    """Return what each site and duration comes to with the store in the system."""
    base = work.base
    limited: list[Task] = [(LIMITED, *pair) for pair in pairs]
    free = [_free(work, *pair) for pair in pairs] if base.limited else limited
    runs.expect(len({*limited, *free}))
    runs.results([*limited, *free])
    found = []
    for one, other in zip(runs.results(limited), runs.results(free), strict=True):
        each = {name: float(one[name]) for name in _IN_PLACE if name in one}
        caused = float(one["cost"]) - float(other["cost"])
        each["system_saving"] = base.run.cost - float(one["cost"])
        each["saving_allowance"] = base.run.allowed + float(one["allowed"])
        each["congestion_cost_avoided"] = base.congestion_cost - caused
        found.append(each)
    return found


def _free(work: _Work, bus: str, duration: float) -> Task:
    """Return the run without line limits: where lines neither limit nor lose, the first of a cell."""
    if work.case.settings.network.losses:
        return (FREE, bus, duration)
    names = work.case.buses.index
    cell = work.base.cell[names.get_indexer(list(work.sites))]
    mine = work.base.cell[names.get_loc(bus)]
    return (FREE, work.sites[int(np.flatnonzero(cell == mine)[0])], duration)


def _laid_out(
    screening: Mapping[str, Floats], found: Sequence[Mapping[str, float]],
    pairs: Sequence[tuple[str, float]], buses: Sequence[str], request: StorageSites,
) -> dict[str, Any]:  # fmt: skip
    """Return what was found by bus and duration, NaN where no store was put."""
    shape = screening["screening_earnings"].shape
    values = {name: np.full(shape, np.nan) for name in _IN_PLACE}
    in_place = np.zeros(shape, dtype=bool)
    for (bus, duration), one in zip(pairs, found, strict=True):
        at = buses.index(bus), request.durations_h.index(duration)
        in_place[at] = True
        for name, value in one.items():
            values[name][at] = value
    promised = screening["screening_earnings"]
    with np.errstate(divide="ignore", invalid="ignore"):
        values["capture_rate"] = np.where(promised > 0, values["earned"] / promised, np.nan)
    within = (values["saving_allowance"] > 0) & (
        np.abs(values["system_saving"]) <= values["saving_allowance"]
    )
    return values | {
        "in_place": in_place,
        "saving_within_gap": within,
        "rank_correlation": _correlations(promised, values["earned"], in_place),
        "saving_rank_correlation": _correlations(promised, values["system_saving"], in_place),
    }


def _correlations(one: Floats, other: Floats, where: NDArray[np.bool_]) -> Floats:
    """Return Spearman's rank correlation by duration; NaN where too few sites are known or all are equal."""
    found = np.full(one.shape[1], np.nan)
    for place in range(one.shape[1]):
        pair = pd.DataFrame(
            {"one": one[where[:, place], place], "other": other[where[:, place], place]}
        )
        ranks = pair.round(6).rank()
        if len(ranks) >= FEW and (ranks.nunique() > 1).all():
            found[place] = np.corrcoef(ranks["one"], ranks["other"])[0, 1]
    return found


def _dataset(
    case: Case, request: StorageSites, base: Base, values: Mapping[str, Any], buses: tuple[str, ...]
) -> xr.Dataset:
    hours = np.array(request.durations_h, dtype=float)
    duration = ("duration", hours, {"units": "h", "long_name": "energy stored at most over power"})
    title = f"Where to put a store of {number(request.power_mw)} MW in {case.settings.name}"
    attrs = attributes(case, base, STUDY, title)
    attrs |= {
        name: getattr(request, name) for name in (
            "power_mw", "charge_efficiency", "discharge_efficiency", "loss_percent_per_h",
            "throughput_cost_per_mwh", "cycles_per_day",
        )
    }  # fmt: skip
    endless = np.isinf(request.cycles_per_day)
    attrs["screening"] = (
        "dynamic programme over stored energy, exact" if endless
        else "linear program, built once and priced again for each bus, exact"
    )  # fmt: skip
    where = {"duration": duration, **places(base.run.dataset, buses)}
    dataset = labelled(VARIABLES, values, where, attrs)
    dataset.attrs["basis"] = basis(dataset, runs_of="the store at each site run")
    if not endless:
        dataset.attrs["basis"] += (
            " The limit on cycles is held in the screening, not with the store in place, where cycles made "
            "are reported."
        )
    dataset.attrs["recommendation"] = advise_storage_sites(dataset)
    return dataset


def _rows(dataset: xr.Dataset) -> list[dict[str, Any]]:
    """Return the answers as rows, one a bus and duration, for study.json."""
    names = [name for name in dataset.data_vars if dataset[name].dims == SITE]
    return [
        {"bus": str(bus), "duration_h": float(duration)}
        | {str(name): dataset[name].sel(bus=bus, duration=duration).item() for name in names}
        for duration in dataset["duration"].to_numpy()
        for bus in dataset["bus"].to_numpy()
    ]
