"""Windows rolled over a run, and the state handed from one to the next (formulation.md 4).

Public names: `Like`, `Origin`, `Plan`, `Run`, `grown`, `plan_run`, `run`, `without_limits`.
"""

from collections.abc import Callable
from dataclasses import dataclass, field, fields, replace
from datetime import date, datetime
from typing import Any, Protocol

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from simulator.case import Case
from simulator.dispatch import RunInputs, State, WindowInputs, WindowModel, WindowSolution
from simulator.dispatch.counts import Counts
from simulator.dispatch.inputs import run_inputs
from simulator.dispatch.priced import Priced
from simulator.dispatch.start import Start
from simulator.dispatch.state import initial_state
from simulator.dispatch.window import WindowError, shape_of
from simulator.errors import OptionError, SolveError

__all__ = ["Like", "Origin", "Plan", "Run", "grown", "plan_run", "run", "without_limits"]

Integers = NDArray[np.int64]
Models = dict[tuple[object, ...], WindowModel]
Progress = Callable[[int, int], None]

MODES = ("given", "relaxed", "optimal")
LIMITS = ("none", "lines", "secure")
PRICING = ("fixed", "relaxed")
_ROUNDING = 1e-9
WEEK = 168.0


@dataclass(frozen=True)
class Plan:
    """What to run: positions on the case's time axis and how it is cut into windows.

    first : position of the first period; periods : how many are kept in all
    seen : how many periods from the first the hourly data hold, look-ahead included
    window, keep : periods one optimisation sees, and how many of them are kept
    mode, limits : commitment mode and line limits
    pricing : where prices come from in mode `optimal`. `fixed`: the linear program that is left when the
        on/off decisions are fixed (formulation.md 5.5). `relaxed`: the window's relaxation, that is,
        all of formulation.md 2 from the state the plan handed over, with every on, start and stop of
        every unit free to be any share from 0 to 1 and the tightening rows of mode `optimal` in place.
        A unit that sets such a price is on in part, so that minimum output, no-load and start costs
        are spread over what it gives while it runs. Output, flows and costs are the plan's either way;
        limits that bind in the relaxation need not be met by the plan's flows. The idea is that of
        convex hull prices, which the relaxation gives where its rows describe each unit exactly
        (Gribik, Hogan & Pope, Market-Clearing Electricity Prices and Energy Uplift, 2007; Hua & Baldick,
        IEEE Trans. Power Systems 32(5), 2017; both cited from memory) and comes near elsewhere.
    """

    first: int
    periods: int
    seen: int
    window: int
    keep: int
    mode: str
    limits: str
    pricing: str = "fixed"

    @property
    def windows(self) -> list[tuple[int, int]]:
        """First period and length of each window, counted from the run's first period."""
        starts = range(0, self.periods, self.keep)
        return [(start, min(self.window, self.seen - start)) for start in starts]

    @property
    def span(self) -> slice:
        """The periods any window sees, on the case's time axis."""
        last = max(start + length for start, length in self.windows)
        return slice(self.first, self.first + max(last, self.periods))


class Like(Protocol):
    """What a run like an earlier one needs of that: a `Run`, or what is left of it.

    models : by shape of window; starts : by window
    """

    @property
    def models(self) -> Models:
        """Models that only save compiling: results do not hang on them."""

    @property
    def starts(self) -> tuple[Start, ...]:
        """What each window left."""


@dataclass(frozen=True, eq=False)
class Origin:
    """What is left of a run for runs like it; its models stay in their process when it is pickled."""

    starts: tuple[Start, ...]
    models: Models = field(default_factory=dict, repr=False)

    def __reduce__(self) -> tuple[type["Origin"], tuple[tuple[Start, ...]]]:
        return Origin, (self.starts,)


@dataclass(frozen=True, eq=False)
class Run:
    """A finished run.

    case, plan, inputs : what was run (`inputs.whole` covers the run and its look-ahead)
    kept : the kept periods of all windows, end to end
    window : array (period,), the window a period was kept from
    counts : solves, rows, builds and seconds
    last : the last window whole, its look-ahead included
    models : a model for each shape of window, which a like run may use
    starts : what each window left, from which the same window of a like run may start
    """

    case: Case
    plan: Plan
    inputs: RunInputs
    kept: WindowSolution
    window: Integers
    counts: Counts = field(repr=False)
    last: WindowSolution = field(repr=False)
    models: Models = field(default_factory=dict, repr=False)
    starts: tuple[Start, ...] = field(default=(), repr=False)

    @property
    def times(self) -> pd.DatetimeIndex:
        """Starts of the kept periods, UTC."""
        return self.case.time.periods[self.plan.first : self.plan.first + self.plan.periods]

    @property
    def kept_inputs(self) -> WindowInputs:
        """The inputs of the kept periods."""
        return self.inputs.window(0, 0, self.plan.periods)

    @property
    def on_seen(self) -> NDArray[np.float64]:
        """On or off in all periods of `plan.span`, array (period, unit): kept, then look-ahead."""
        kept = int((self.window == self.window[-1]).sum())
        return np.concatenate([self.kept.on, self.last.on[kept:]])


def plan_run(
    case: Case,
    start: str | date | datetime | None = None,
    hours: float | None = None,
    *,
    window_hours: float | None = None,
    keep_hours: float | None = None,
    commitment: str | None = None,
    limits: str | None = None,
    pricing: str | None = None,
) -> Plan:
    """Turn what a caller asks for into a `Plan`; what is left out comes from the case.

    start : local time without offset, or with one; a date is its local midnight
    hours : length of the run, by default a week of 168 hours
    Raises `OptionError` for what the case or this program cannot do.
    """
    horizon = case.settings.horizon
    window = _periods(case, _or(window_hours, horizon.window_hours), "--window-hours")
    keep = _periods(case, _or(keep_hours, horizon.keep_hours), "--keep-hours")
    if keep > window:
        raise OptionError(
            f"--keep-hours, must be at most --window-hours, found {keep} periods kept of {window}, "
            "lengthen the window"
        )
    first = 0 if start is None else _position(case, start)
    periods = _periods(case, _or(hours, WEEK), "--hours")
    seen = len(case.time) - first
    if periods > seen:
        raise OptionError(_too_long(case, first, periods))
    mode = _choice("--commitment", commitment or case.settings.commitment.mode, MODES)
    chosen = _choice("--limits", limits or case.settings.network.limits, LIMITS)
    return Plan(first, periods, seen, window, keep, mode, chosen, _pricing(pricing, mode))


def _or(asked: float | None, otherwise: float) -> float:
    return otherwise if asked is None else asked


def _choice(option: str, value: str, known: tuple[str, ...]) -> str:
    if value not in known:
        raise OptionError(
            f'{option}, must be one of {", ".join(known)} in this version, found "{value}", '
            f"pass {option} {known[-1]}"
        )
    return value


def _pricing(pricing: str | None, mode: str) -> str:
    chosen = _choice("--pricing", pricing or "fixed", PRICING)
    if chosen == "relaxed" and mode != "optimal":
        raise OptionError(
            "--pricing relaxed, must go with whole on/off decisions, "
            f"found --commitment {mode}, pass --commitment optimal"
        )
    return chosen


def _periods(case: Case, hours: float, option: str) -> int:
    periods = hours / case.time.period_hours
    if not (np.isfinite(periods) and periods >= 1 and abs(periods - round(periods)) < _ROUNDING):
        raise OptionError(
            f"{option}, must be a whole number of periods of {case.time.period_hours:g} h, at least one, "
            f"found {hours:g} h, round it"
        )
    return round(periods)


def _position(case: Case, start: str | date | datetime) -> int:
    """Find the period that starts at a local or zoned time."""
    axis = case.time
    try:
        moment = pd.Timestamp(start)
        if moment.tzinfo is None:
            moment = moment.tz_localize(axis.time_zone)
    except ValueError as error:
        raise OptionError(
            f"--from, must be a date or time that exists once in {axis.time_zone}, found {start}, "
            "write it like 2027-01-11 or 2027-01-11T06:00+01:00"
        ) from error
    position = int(axis.periods.get_indexer(pd.DatetimeIndex([moment.tz_convert("UTC")]))[0])
    if position < 0:
        raise OptionError(
            f"--from, must be the start of a period of the hourly data, found {start}, choose one "
            f"between {axis.local[0].isoformat()} and {axis.local[-1].isoformat()}"
        )
    return position


def _too_long(case: Case, first: int, periods: int) -> str:
    axis = case.time
    end = axis.periods[first] + pd.Timedelta(hours=periods * axis.period_hours)
    last = axis.periods[-1] + pd.Timedelta(hours=axis.period_hours)
    local = [moment.tz_convert(axis.time_zone).isoformat() for moment in (end, last)]
    return (
        f"--hours, must end within the hourly data, found a run until {local[0]} where the data end at "
        f"{local[1]}, shorten the run or add hourly data"
    )


def run(
    case: Case, plan: Plan, progress: Progress | None = None, *, like: Like | None = None
) -> Run:
    """Solve the windows of a plan one after another.

    progress : called with (windows done, windows in all) before the first and after each window
    like : a run of the same plan; its model is used where it fits, and each window starts from what the
        same window left there. What comes out depends on that run, not on what its model did since.
    Raises `SolveError` with the window, the solver's status and the elements that contradict.
    """
    inputs = run_inputs(case, plan.span, plan.periods, plan.mode, plan.limits)
    if like is None:
        return _rolled(case, plan, inputs, {}, (), progress)
    return _rolled(case, plan, inputs, dict(like.models), like.starts, progress)


def without_limits(limited: Run, progress: Progress | None = None) -> Run:
    """Run the same hours again with no line limits, from what the first run left (5.4)."""
    plan = replace(limited.plan, limits="none")
    whole = replace(limited.inputs.whole, limited=False)
    inputs = replace(limited.inputs, whole=whole)
    starts = tuple(start.without_limits() for start in limited.starts)
    return _rolled(limited.case, plan, inputs, dict(limited.models), starts, progress)


def grown(before: Run, case: Case) -> Origin:
    """Return what a run of the same plan starts from where its case has more elements than before.

    case : that of the run before with elements added at the end of its tables
    """
    plan = before.plan
    inputs = run_inputs(case, plan.span, plan.periods, plan.mode, plan.limits)
    state, counts, models = initial_state(case, inputs.whole.unit), Counts(), Models()
    starts = []
    for number, (first, length) in enumerate(plan.windows):
        model = _model_for(models, inputs.window(number, first, length), state, counts)
        left = before.starts[number]
        starts.append(left.grown(before.models[left.shape].fleet, model.fleet, model.shape))
    return Origin(tuple(starts), models)


def _rolled(
    case: Case,
    plan: Plan,
    inputs: RunInputs,
    models: Models,
    starts: tuple[Start, ...],
    progress: Progress | None,
) -> Run:
    """Roll over the windows; each starts from its own of `starts`, or from what the last one left."""
    state, counts = initial_state(case, inputs.whole.unit), Counts()
    solved: list[tuple[int, WindowSolution]] = []
    spans = plan.windows
    for number, (start, length) in enumerate(spans):
        if progress:
            progress(number, len(spans))
        window = inputs.window(number, start, length)
        model = _model_for(models, window, state, counts)
        before = solved[-1][1].left if solved else None
        origin = starts[number] if starts else before
        solution = _solve(case, plan, model, window, state, origin)
        kept = min(plan.keep, plan.periods - start)
        solved.append((kept, solution))
        state = solution.state_after(
            state, kept, inputs.whole.unit.hot_periods, whole=plan.mode == "optimal"
        )
    if progress:
        progress(len(spans), len(spans))
    left = tuple(solution.left for _, solution in solved)
    return Run(
        case, plan, inputs, _joined(solved), _window_numbers(solved), counts, solved[-1][1], models,
        left,
    )  # fmt: skip


def _model_for(models: Models, window: WindowInputs, state: State, counts: Counts) -> WindowModel:
    """Return a model of the window's shape: one used before, or a new one."""
    shape = shape_of(window)
    if shape not in models:
        models[shape] = WindowModel(window, state, counts)
    models[shape].counts = counts
    return models[shape]


def _solve(
    case: Case,
    plan: Plan,
    model: WindowModel,
    window: WindowInputs,
    state: State,
    start: Start | None,
) -> WindowSolution:
    try:
        return model.solve(window, state, start)
    except WindowError as failure:
        first = plan.first + window.first
        elements = [
            _described(case, first, family, period, _element(window, family, position))
            for family, period, position in failure.broken
        ]
        remedy = _MORE_TIME if window.mode == "optimal" and failure.status == _LATE else ""
        raise SolveError(window.number, failure.status, elements, remedy=remedy) from failure


_LATE = "time limit"  # the solver's words
_MORE_TIME = (
    "no plan was found in time, raise commitment.seconds in case.toml or pass --commitment relaxed"
)


_ELEMENT = {
    "unit": ("output_split", "block_width", "ramp_up", "ramp_down", "switching", "minimum_up",
             "minimum_down", "cold_start_stops", "stops_summed", "matched_sum", "matched_after_stop",
             "matched_in_time", "output", "on", "start", "stop", "cold_start", "headroom", "footroom"),
    "plant": ("renewable",),
    "store": ("store_balance", "energy_floor", "charge", "discharge", "stored"),
    "tie": ("tie_forward", "tie_reverse"),
    "load": ("unserved",),
}  # fmt: skip


def _element(window: WindowInputs, family: str, position: int) -> int:
    """Return which element is meant: some families have rows for some units only, or for blocks."""
    unit, reserve = window.unit, window.reserve
    cold = ("cold_start", "cold_start_stops", "stops_summed", "matched_sum", "matched_after_stop",
            "matched_in_time")  # fmt: skip
    units = dict.fromkeys(cold, unit.cold_rows) | {
        "block_width": unit.block_unit, "ramp_up": unit.ramp_up_rows,
        "ramp_down": unit.ramp_down_rows, "headroom": reserve.up_units, "footroom": reserve.down_units,
    }  # fmt: skip
    return int(units[family][position]) if family in units else position


def _described(case: Case, first: int, family: str, period: int, element: int) -> str:
    """Name one row or column for a planner: kind, name, rule and local hour."""
    hour = case.time.local[first + period].isoformat(timespec="minutes")
    rule = family.replace("_", " ")
    tables = {"unit": case.units, "plant": case.renewables, "store": case.storage,
              "tie": case.dc_ties, "load": case.loads}  # fmt: skip
    if family == "limit":
        lines, names = len(case.lines), [*case.lines.index, *case.corridors.index]
        return f'{"line" if element < lines else "corridor"} "{names[element]}" (limit) at {hour}'
    for kind, families in _ELEMENT.items():
        if family in families:
            return f'{kind} "{tables[kind].index[element]}" ({rule}) at {hour}'
    return f"{rule} {element} at {hour}"


def _joined(solved: list[tuple[int, WindowSolution]]) -> WindowSolution:
    """Put the kept periods of all windows end to end."""
    values: dict[str, Any] = {
        item.name: np.concatenate(
            [getattr(solution, item.name)[:kept] for kept, solution in solved]
        )
        for item in fields(WindowSolution)
        if item.name not in ("priced", "relaxed", "objective", "left")
    }
    for name in ("priced", "relaxed"):
        values[name] = Priced.end_to_end([(kept, getattr(each, name)) for kept, each in solved])
    objective = sum(solution.objective for _, solution in solved)
    return WindowSolution(**values, objective=objective, left=solved[-1][1].left)


def _window_numbers(solved: list[tuple[int, WindowSolution]]) -> Integers:
    return np.repeat(np.arange(len(solved)), [kept for kept, _ in solved])
