"""When may a line be switched out? Each candidate in each block of hours, one full run a pair.

Public names: `OutageCheck`, `answer_outage_check`, `check_outage_check`, `outage_check`.
"""

import time
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from simulator.case import Case, series
from simulator.case.wording import did_you_mean, listed, number, quoted
from simulator.errors import OptionError
from simulator.grid import Contingencies, Network
from simulator.horizon import Origin, Plan, run
from simulator.prices import PRICED, pair_name
from simulator.studies.advice import advise_outage_check, basis
from simulator.studies.base import (
    Answer,
    Base,
    Entries,
    StudySettings,
    attributes,
    fingerprint,
    labelled,
    plan_study,
    proved,
    record_of,
    solved,
)
from simulator.studies.outcome import outcome_of
from simulator.studies.runs import Arrays, Finished, Progress, Runs, Task, engage

__all__ = ["OutageCheck", "answer_outage_check", "check_outage_check", "outage_check"]

Floats = NDArray[np.float64]

STUDY = "outage-check"
MONEY, EACH = "currency", ("line", "block")
NEGLIGIBLE = 1e-3
"""MW or MWh of which nothing is said."""

VARIABLES: Entries = {
    "rank": (EACH, "1", "place of the block among those of the line, the safest first"),
    "secure": (EACH, "1", "whether all load stays served and no contingency would overload or split"),
    "extra_cost": (EACH, MONEY, "total cost with the line out less with it in"),
    "cost_allowance": (EACH, MONEY, "by how much gaps allow the extra cost to be off"),
    "cost_within_gap": (EACH, "1", "whether the extra cost is no more than gaps allow"),
    "extra_unserved": (EACH, "MWh", "unserved energy with the line out less with it in"),
    "extra_curtailed": (EACH, "MWh", "curtailed energy with the line out less with it in"),
    "newly_congested": (EACH, "1", "how many limits are priced in the block that were not"),
    "newly_congested_names": (EACH, "", "their names"),
    "worst_overload": (EACH, "MW", "most that a contingency would overload a line further than with all in"),
    "worst_overload_name": (EACH, "", "that line and contingency"),
    "islanding": (EACH, "1", "how many contingencies would split the network only while the line is out"),
    "splits": (EACH, "1", "whether the network is split while the line is out"),
}  # fmt: skip


@dataclass(frozen=True)
class OutageCheck:
    """A question about when lines may be switched out.

    lines : candidates, none for every line of the case
    block_h : length of the blocks tried one by one; none for local days
    """

    lines: tuple[str, ...] = ()
    block_h: float | None = None
    settings: StudySettings = field(default_factory=StudySettings)


def check_outage_check(
    case: Case, request: OutageCheck, more: Sequence[str] = ()
) -> tuple[Plan, tuple[str, ...], list[tuple[int, int]]]:
    """Return the plan of a study's runs, its lines and its blocks; raise `OptionError` with every problem.

    Blocks are first period and the one after the last, counted from the run's first.
    """
    problems, known = list(more), case.lines.index
    problems += [
        f"--line, must name a line of the case, found {quoted(line)}, "
        + did_you_mean(line, known, "choose one of network/lines.csv")
        for line in request.lines if line not in known
    ]  # fmt: skip
    twice = [line for line in dict.fromkeys(request.lines) if request.lines.count(line) > 1]
    if twice:
        problems.append(f"--line, must be given once each, found {listed(twice)} twice, drop one")
    length, block = case.time.period_hours, request.block_h
    if block is not None and not (block > 0 and np.isclose(block / length, round(block / length))):
        problems.append(
            f"--block-hours, must be a whole number of periods of {number(length)} h, found "
            f"{number(block)}, round it"
        )
    plan = plan_study(case, request.settings, problems)
    if problems or plan is None:
        raise OptionError("\n".join(problems))
    return plan, tuple(request.lines or map(str, known)), _blocks(case, plan, block)


def _blocks(case: Case, plan: Plan, block_h: float | None) -> list[tuple[int, int]]:
    """Cut the run into local days, or into blocks of some hours; what is left over is the last block."""
    if block_h is None:
        local = case.time.local[plan.first : plan.first + plan.periods]
        days = local.normalize()
        starts = [0, *(np.flatnonzero(days[1:] != days[:-1]) + 1).tolist()]
    else:
        starts = list(range(0, plan.periods, round(block_h / case.time.period_hours)))
    return list(zip(starts, [*starts[1:], plan.periods], strict=True))


def outage_check(case: Case, request: OutageCheck, **how: Any) -> xr.Dataset:
    """Return what switching lines out costs and risks. Dimensions `line` and `block`.

    `how` is that of `answer_outage_check`.
    """
    return answer_outage_check(case, request, **how).dataset


def answer_outage_check(
    case: Case, request: OutageCheck, *, workers: int = 1, scratch: Path | None = None,
    progress: Progress | None = None,
) -> Answer:  # fmt: skip
    """Answer when lines may be switched out: a run for each line and block, from what the base run left.

    workers, scratch, progress : as in `answer_new_load`
    """
    began = time.perf_counter()
    plan, lines, blocks = check_outage_check(case, request)
    first = run(case, plan)
    origin, one = Origin(first.starts, first.models), proved(case, first)
    base = Base(plan, plan, origin, origin, one, one, first.inputs.whole.cells.cell)
    seconds = {"base": time.perf_counter() - began}
    work = _Work(case, base, tuple(blocks))
    finished = Finished(scratch, fingerprint(case, plan, request)) if scratch else None
    tasks: list[Task] = [(line, block) for line in lines for block in range(len(blocks))]
    with Runs(engage(work, workers), finished, progress) as runs:
        runs.expect(len(tasks))
        found = runs.results(tasks)
    dataset = _dataset(case, base, lines, blocks, found)
    seconds |= {"runs": runs.seconds, "total": time.perf_counter() - began}
    counts = {"runs": len(runs), "runs_found_done": runs.found, "base_runs": 1}
    names = [str(name) for name in dataset["block_name"].to_numpy()]
    audits = {"with every line in": one.broken} | runs.audits(
        lambda task: f"{task[0]} out, {names[int(task[1])]}"
    )
    record = record_of(dataset, request, _rows(dataset), audits, counts, seconds)
    return Answer(dataset, record)


@dataclass(frozen=True, eq=False)
class _Work:
    """What all runs of the study share; a task is (line, block)."""

    case: Case
    base: Base
    blocks: tuple[tuple[int, int], ...]

    def begin(self) -> Any:
        return self._solve

    def _solve(self, task: Task) -> Arrays:
        began, (first, end) = time.perf_counter(), self.blocks[int(task[1])]
        periods, plan = slice(first, end), self.base.plan
        axis = self.case.time
        start = axis.local[plan.first + first]
        until = axis.local[plan.first + end - 1] + pd.Timedelta(hours=axis.period_hours)
        case = self.case.with_outage("line", str(task[0]), start.isoformat(), until.isoformat())
        out = solved(case, plan, self.base.origin)
        then, now = outcome_of(self.base.run.dataset), outcome_of(out.dataset)
        new = sorted(_priced(out.dataset, periods) - _priced(self.base.run.dataset, periods))
        found: dict[str, Any] = {
            "extra_cost": out.cost - self.base.run.cost,
            "cost_allowance": out.allowed + self.base.run.allowed,
            "extra_unserved": now.unserved - then.unserved,
            "extra_curtailed": now.curtailed - then.curtailed,
            "newly_congested": len(new),
            "newly_congested_names": ", ".join(new),
            **self._exposure(case, out.dataset, periods),
            "broken": np.array(out.broken, dtype=str),
            "seconds": time.perf_counter() - began,
        }
        return {name: np.asarray(value) for name, value in found.items()}

    def _exposure(self, case: Case, dataset: xr.Dataset, periods: slice) -> dict[str, Any]:
        """Apply every contingency to the flows of a block, whatever limits the run was asked to keep to.

        What would be overloaded or split with the line in as well does not count, as far as it would.
        """
        first = self.base.plan.first
        span, every = slice(first + periods.start, first + periods.stop), np.arange(len(case.lines))
        network = Network.of(case)
        held = Contingencies.of(case, network)
        schedule, usual = (
            network.schedule(series.in_service(each, span)) for each in (case, self.case)
        )
        rating = series.line_rating(case, span, "emergency_rating_mw")
        flow, usual_flow = (
            each["line_flow"].to_numpy()[periods] for each in (dataset, self.base.run.dataset)
        )
        worst, name = 0.0, ""
        islanding, splits = np.zeros(len(held), dtype=bool), False
        for number_of in range(len(schedule.topologies)):
            here = np.flatnonzero(schedule.index == number_of)
            topology = schedule.topologies[number_of]
            other = usual.topologies[int(usual.index[here[0]])]
            after, before = held.after(topology), held.after(other)
            islanding |= after.splits & ~before.splits
            splits |= topology.islands > other.islands
            for some, flows in after.blocks(flow[here], every):
                over = np.abs(flows) - rating[here]
                for known, others in before.blocks(usual_flow[here], every, some):
                    at = np.searchsorted(some, known)
                    over[at] -= np.maximum(np.abs(others) - rating[here], 0.0)
                place = np.unravel_index(int(over.argmax()), over.shape)
                if over[place] > max(worst, NEGLIGIBLE):
                    worst = float(over[place])
                    line = str(case.lines.index[place[2]])
                    name = pair_name(line, str(held.names[some[place[0]]]))
        return {
            "worst_overload": worst, "worst_overload_name": name, "islanding": int(islanding.sum()),
            "splits": splits,
        }  # fmt: skip


def _priced(dataset: xr.Dataset, periods: slice) -> set[str]:
    """Return the names of the limits that are priced in some periods."""
    corridor = (dataset["corridor_shadow_price"].to_numpy()[periods] > PRICED).any(axis=0)
    lines = (dataset["line_shadow_price"].to_numpy()[periods] > PRICED).any(axis=0)
    times = pd.DatetimeIndex(dataset["pair_time"].to_numpy())
    pair = times.isin(dataset.indexes["time"][periods]) & (
        dataset["pair_shadow_price"].to_numpy() > PRICED
    )
    return {
        *map(str, dataset["line"].to_numpy()[lines]),
        *(f"corridor {name}" for name in dataset["corridor"].to_numpy()[corridor]),
        *map(str, dataset["pair"].to_numpy()[pair]),
    }


def _dataset(
    case: Case, base: Base, lines: Sequence[str], blocks: Sequence[tuple[int, int]],
    found: Sequence[Arrays],
) -> xr.Dataset:  # fmt: skip
    shape = len(lines), len(blocks)
    derived = ("rank", "secure", "cost_within_gap")
    names = [name for name in VARIABLES if name not in derived]
    values = {name: np.array([each[name][()] for each in found]).reshape(shape) for name in names}
    values["secure"] = (
        (values["extra_unserved"] <= NEGLIGIBLE) & (values["worst_overload"] <= NEGLIGIBLE)
        & (values["islanding"] == 0) & ~values["splits"]
    )  # fmt: skip
    values["cost_within_gap"] = (values["cost_allowance"] > 0) & (
        np.abs(values["extra_cost"]) <= values["cost_allowance"]
    )
    values["rank"] = np.stack([_ranked(values, place) for place in range(len(lines))])
    times = case.time.local[base.plan.first : base.plan.first + base.plan.periods + 1]
    length = pd.Timedelta(hours=case.time.period_hours)
    starts = [times[first] for first, _ in blocks]
    ends = [times[end - 1] + length for _, end in blocks]
    where = {
        "line": ("line", np.array(lines, dtype=str)),
        "block": ("block", np.arange(len(blocks))),
        "block_name": (
            "block",
            np.array([_name(*each) for each in zip(starts, ends, strict=True)]),
        ),
        "block_from": ("block", np.array([start.isoformat() for start in starts])),
        "block_until": ("block", np.array([end.isoformat() for end in ends])),
    }
    title = f"When lines may be switched out in {case.settings.name}"
    dataset = labelled(VARIABLES, values, where, attributes(case, base, STUDY, title))
    dataset.attrs["basis"] = basis(dataset, runs_of="each line out in each block")
    dataset.attrs["recommendation"] = advise_outage_check(dataset)
    return dataset


def _name(start: pd.Timestamp, end: pd.Timestamp) -> str:
    """Name a block by its local day, with its hours if it is not a whole one."""
    day = f"{start:%a} {start.day} {start:%b}"
    if start == start.normalize() and end == (start + pd.DateOffset(days=1)).normalize():
        return day
    last = "24:00" if end == end.normalize() else f"{end:%H:%M}"
    return f"{day} {start:%H:%M}–{last}"


def _ranked(values: dict[str, Any], line: int) -> NDArray[np.int64]:
    """Return places of a line's blocks: secure ones first, then the least unserved, then the cheapest."""
    keys = [
        values["extra_cost"][line], values["worst_overload"][line], values["islanding"][line],
        values["splits"][line], values["extra_unserved"][line].round(3), ~values["secure"][line],
    ]  # fmt: skip
    rank = np.empty(len(keys[0]), dtype=int)
    rank[np.lexsort(keys)] = np.arange(1, len(rank) + 1)
    return rank


def _rows(dataset: xr.Dataset) -> list[dict[str, Any]]:
    """Return the answers as rows, each line's blocks by their rank."""
    rows = []
    for line in range(dataset.sizes["line"]):
        at = dataset.isel(line=line)
        for block in np.argsort(at["rank"].to_numpy()).tolist():
            one = at.isel(block=block)
            row = {"line": str(one["line"].item()), "from": str(one["block_from"].item()),
                   "until": str(one["block_until"].item())}  # fmt: skip
            rows.append(row | {str(name): one[name].item() for name in VARIABLES})
    return rows
