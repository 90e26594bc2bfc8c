"""The command line: arguments, exit codes, printing. No logic of its own.

Public names: `app`, `main`.
"""

import json
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Annotated, Any

import typer
from typer.core import TyperGroup

from simulator.errors import CaseError, RamplineError, SolveError

__all__ = ["app", "main"]

EXIT_INPUT, EXIT_SOLVER, EXIT_AUDIT, EXIT_INTERRUPTED = 2, 3, 4, 130


class Commands(TyperGroup):
    """The commands, with errors turned into messages and exit codes (results-format.md)."""

    def invoke(self, ctx: Any) -> Any:
        """Run a command; what is raised on purpose ends as a message, never as a traceback."""
        try:
            return super().invoke(ctx)
        except KeyboardInterrupt as stop:
            typer.echo(f"interrupted; {str(stop) or 'nothing was written'}", err=True)
            raise typer.Exit(EXIT_INTERRUPTED) from stop
        except SolveError as error:
            typer.echo(f"error: {error}", err=True)
            raise typer.Exit(EXIT_SOLVER) from error
        except RamplineError as error:
            typer.echo(_in_words(error), err=True)
            raise typer.Exit(EXIT_INPUT) from error


def _in_words(error: RamplineError) -> str:
    if not isinstance(error, CaseError):
        return "\n".join(f"error: {line}" for line in str(error).splitlines())
    count = len(error.problems)
    return f"{error}\n{count} problem{'s' if count > 1 else ''}; nothing was written"


app = typer.Typer(
    cls=Commands,
    help="Week-ahead dispatch of a power grid: who runs, what flows, what binds, what power costs where.",
    epilog="A planning aid, not for real-time control or switching: local grid codes, the responsible "
    "operator and licensed practice decide.",
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
)

CasePath = Annotated[Path, typer.Argument(metavar="CASE", help="Case folder.")]
RunPath = Annotated[Path, typer.Argument(metavar="RUN", help="Folder of a run or a study.")]
Json = Annotated[bool, typer.Option("--json", help="Print one JSON document and nothing else.")]


@app.command(epilog="Example: rampline check profiles/fennholm")
def check(case: CasePath, *, as_json: Json = False) -> None:
    """Read and check a case; print what it holds, or every problem."""
    from simulator.case import read_case

    found = read_case(case)
    _say_warnings(found)
    if as_json:
        _print_json(
            {"case": found.settings.name, "warnings": [str(item) for item in found.warnings]}
        )
    else:
        typer.echo(str(found))


@app.command(
    epilog="Example: rampline week profiles/fennholm --from 2027-01-11 --commitment relaxed"
)
def week(
    case: CasePath,
    *,
    start: Annotated[
        str | None,
        typer.Option(
            "--from", help="First period, local; by default the first of the hourly data."
        ),
    ] = None,
    hours: Annotated[float, typer.Option(help="Length of the run.")] = 168.0,
    window_hours: Annotated[float | None, typer.Option(help="What one optimisation sees.")] = None,
    keep_hours: Annotated[float | None, typer.Option(help="What is kept of it.")] = None,
    commitment: Annotated[str | None, typer.Option(help="given | relaxed | optimal")] = None,
    limits: Annotated[str | None, typer.Option(help="none | lines | secure")] = None,
    pricing: Annotated[
        str | None,
        typer.Option(
            help="fixed | relaxed: in mode optimal, prices with on/off decisions fixed, or of the relaxation."
        ),
    ] = None,
    out: Annotated[
        Path | None, typer.Option(help="Folder of results; by default outputs/<case>-<first day>.")
    ] = None,
    force: Annotated[bool, typer.Option(help="Replace an earlier run's folder.")] = False,
    save_commitment: Annotated[
        Path | None,
        typer.Option(
            metavar="FOLDER",
            help="Also write the case again with this run's plan of on and off in it, to edit and run.",
        ),
    ] = None,
    congestion_cost: Annotated[
        bool, typer.Option(help="Run again without line limits and say what the limits cost.")
    ] = False,
    as_json: Json = False,
) -> None:
    """Run a case over a week, or any number of hours, and keep results, record and page."""
    from simulator import results
    from simulator.audit import audit, audit_record
    from simulator.case import commitment_folder, read_case
    from simulator.horizon import plan_run, run, without_limits
    from simulator.report.page import write_page

    clock = Clock()
    found = read_case(case)
    plan = plan_run(
        found, start, hours, window_hours=window_hours, keep_hours=keep_hours,
        commitment=commitment, limits=limits, pricing=pricing,
    )  # fmt: skip
    folder = (
        out or Path("outputs") / f"{case.resolve().name}-{found.time.local[plan.first]:%Y-%m-%d}"
    )
    results.refuse_existing(folder, force=force)
    if save_commitment:
        commitment_folder.refuse_commitment(case, save_commitment, plan.mode, [folder], force=force)
    _say_warnings(found)
    clock.lap("read")
    with _progress() as show:
        finished = run(found, plan, show)
        twin = without_limits(finished, show) if congestion_cost else None
    clock.skip()
    dataset = results.to_dataset(finished)
    clock.lap("results")
    checks = audit(found, dataset)
    clock.lap("audit")
    record = results.run_record(finished, dataset, clock.seconds, twin)
    for each in record["network"]["left_out"]:
        typer.echo(
            f"warning: contingency {each['contingency']} was left out in {each['hours']:g} h: "
            f"{each['reason']}",
            err=True,
        )
    record["audit"] = audit_record(checks)
    results.save(
        dataset, record, folder, force=force, page=lambda path: write_page(dataset, record, path)
    )
    if save_commitment:
        commitment_folder.save_commitment(
            found, case, finished.on_seen, plan.span, save_commitment, force=force
        )
        typer.echo(f"commitment written to {save_commitment}", err=True)
    _report(dataset, record, folder, as_json=as_json)
    _say_gaps(record)
    _stop_unless_proved(record)


Start = Annotated[
    str | None,
    typer.Option("--from", help="First period, local; by default the first of the hourly data."),
]
Buses = Annotated[list[str] | None, typer.Option("--bus", help="A bus; may be repeated.")]
CommitmentOption = Annotated[str | None, typer.Option(help="given | relaxed | optimal")]
LimitsOption = Annotated[str | None, typer.Option(help="none | lines | secure")]
WorkersOption = Annotated[
    int | None, typer.Option(min=1, help="Processes to spread the runs over; by default all cores.")
]
StudyOut = Annotated[
    Path | None,
    typer.Option(help="Folder of results; by default outputs/<case>-<study>-<first day>."),
]
StudyForce = Annotated[bool, typer.Option("--force", help="Replace an earlier study's folder.")]


@app.command(
    "new-load", epilog="Example: rampline new-load profiles/fennholm --bus Ansterwell --mw 200"
)
def new_load(
    case: CasePath,
    *,
    bus: Buses = None,
    mw: Annotated[list[float], typer.Option(help="Size of the load; may be repeated.")],
    profile: Annotated[
        str | None, typer.Option(help="Profile that the size is multiplied by; by default flat.")
    ] = None,
    all_buses: Annotated[bool, typer.Option("--all-buses", help="Every bus of the case.")] = False,
    largest: Annotated[
        bool | None,
        typer.Option(
            "--largest/--no-largest",
            help="Find the largest size of each bus; by default not with --all-buses.",
        ),
    ] = None,
    largest_within: Annotated[float, typer.Option(help="How closely, MW.")] = 1.0,
    most_price_rise: Annotated[
        float | None,
        typer.Option(
            help="Too large, too, where the mean price of the bus rises by more than this."
        ),
    ] = None,
    start: Start = None,
    hours: Annotated[float, typer.Option(help="Length of the runs.")] = 168.0,
    commitment: CommitmentOption = None,
    limits: LimitsOption = None,
    workers: WorkersOption = None,
    out: StudyOut = None,
    force: StudyForce = False,
    as_json: Json = False,
) -> None:
    """Say what a new load costs, whom, what it congests, and how large it may be."""
    from simulator.case import read_case
    from simulator.studies.base import StudySettings
    from simulator.studies.new_load import NewLoad, answer_new_load, check_new_load

    found = read_case(case)
    settings = StudySettings(start, hours, commitment=commitment, limits=limits)
    request = NewLoad(
        tuple(bus or ()), tuple(mw), profile, not all_buses if largest is None else largest,
        largest_within, float("inf") if most_price_rise is None else most_price_rise, settings,
    )  # fmt: skip
    folder, problems = _study_folder(case, found, "new-load", settings, out, force=force)
    if bool(bus) == all_buses:
        problems.append("--bus, must be given, or else --all-buses, found both or none, give one")
    check_new_load(found, request, problems)
    _study(found, folder, force=force, as_json=as_json, workers=workers, answer=(
        lambda **how: answer_new_load(found, request, **how)
    ))  # fmt: skip


@app.command(
    "storage-sites",
    epilog="Example: rampline storage-sites profiles/fennholm --power-mw 50 --hours 4",
)
def storage_sites(
    case: CasePath,
    *,
    power_mw: Annotated[float, typer.Option(help="Charge and discharge power at the bus.")],
    hours: Annotated[
        list[float], typer.Option(help="Energy stored at most, in hours of power; may be repeated.")
    ],
    bus: Buses = None,
    charge_efficiency: Annotated[float, typer.Option(help="Share of charging stored.")] = 0.92,
    discharge_efficiency: Annotated[float, typer.Option(help="Share of what is drawn.")] = 0.92,
    loss_percent_per_h: Annotated[float, typer.Option(help="Loss of what is stored.")] = 0.0,
    throughput_cost: Annotated[float, typer.Option(help="Wear, currency a MWh discharged.")] = 0.0,
    cycles_a_day: Annotated[
        float | None, typer.Option(help="Most energy drawn a local day, in fillings.")
    ] = None,
    top: Annotated[int, typer.Option(help="How many of the best are run in place.")] = 5,
    spread: Annotated[
        int, typer.Option(help="How many more, spread over the rest of the list, are.")
    ] = 3,
    start: Start = None,
    run_hours: Annotated[float, typer.Option(help="Length of the runs.")] = 168.0,
    commitment: CommitmentOption = None,
    limits: LimitsOption = None,
    workers: WorkersOption = None,
    out: StudyOut = None,
    force: StudyForce = False,
    as_json: Json = False,
) -> None:
    """Say where a store earns most by prices alone, and what it does in the system there."""
    from simulator.case import read_case
    from simulator.studies.base import StudySettings
    from simulator.studies.storage_sites import (
        StorageSites,
        answer_storage_sites,
        check_storage_sites,
    )

    found = read_case(case)
    settings = StudySettings(start, run_hours, commitment=commitment, limits=limits)
    request = StorageSites(
        power_mw, tuple(hours), tuple(bus or ()), charge_efficiency, discharge_efficiency,
        loss_percent_per_h, throughput_cost,
        float("inf") if cycles_a_day is None else cycles_a_day, top, spread, settings,
    )  # fmt: skip
    folder, problems = _study_folder(case, found, "storage-sites", settings, out, force=force)
    check_storage_sites(found, request, problems)
    _study(found, folder, force=force, as_json=as_json, workers=workers, answer=(
        lambda **how: answer_storage_sites(found, request, **how)
    ))  # fmt: skip


@app.command(
    "outage-check",
    epilog='Example: rampline outage-check profiles/fennholm --line "Corvesk-Ansterwell 2"',
)
def outage_check(
    case: CasePath,
    *,
    line: Annotated[
        list[str] | None, typer.Option(help="A line to switch out; may be repeated.")
    ] = None,
    all_lines: Annotated[bool, typer.Option("--all-lines", help="Every line of the case.")] = False,
    block_hours: Annotated[
        float | None, typer.Option(help="Length of the outage; by default a local day.")
    ] = None,
    start: Start = None,
    hours: Annotated[float, typer.Option(help="Length of the runs.")] = 168.0,
    commitment: CommitmentOption = None,
    limits: LimitsOption = None,
    workers: WorkersOption = None,
    out: StudyOut = None,
    force: StudyForce = False,
    as_json: Json = False,
) -> None:
    """Say when lines may be switched out, and what it costs and risks, block of hours by block."""
    from simulator.case import read_case
    from simulator.studies.base import StudySettings
    from simulator.studies.outage_check import (
        OutageCheck,
        answer_outage_check,
        check_outage_check,
    )

    found = read_case(case)
    settings = StudySettings(start, hours, commitment=commitment, limits=limits)
    request = OutageCheck(tuple(line or ()), block_hours, settings)
    folder, problems = _study_folder(case, found, "outage-check", settings, out, force=force)
    if bool(line) == all_lines:
        problems.append("--line, must be given, or else --all-lines, found both or none, give one")
    check_outage_check(found, request, problems)
    _study(found, folder, force=force, as_json=as_json, workers=workers, answer=(
        lambda **how: answer_outage_check(found, request, **how)
    ))  # fmt: skip


def _study_folder(
    case: Path, found: Any, study: str, settings: Any, out: Path | None, *, force: bool
) -> tuple[Path, list[str]]:
    """Return a study's folder, and why it cannot be written to, if so."""
    from simulator.studies.base import plan_study
    from simulator.studies.folder import refusals

    plan = plan_study(found, settings, [])
    day = f"{found.time.local[plan.first]:%Y-%m-%d}" if plan else ""
    folder = out or Path("outputs") / f"{case.resolve().name}-{study}-{day}"
    return folder, refusals(folder, force=force)


def _study(
    found: Any, folder: Path, *, force: bool, as_json: bool, workers: int | None,
    answer: Callable[..., Any],
) -> None:  # fmt: skip
    """Answer a study, keep it, print it; what is finished when it is cut off is kept beside it."""
    from rich.console import Console

    from simulator.report.study_page import print_study, write_study
    from simulator.studies.folder import save_study, scratch_of
    from simulator.studies.runs import cores

    _say_warnings(found)
    scratch = scratch_of(folder)
    try:
        with _progress("runs") as show:
            done = answer(workers=workers or cores(), scratch=scratch, progress=show)
    except KeyboardInterrupt as stop:
        raise KeyboardInterrupt(
            f"runs that are done are kept in {scratch}; call again to go on"
        ) from stop
    dataset, record = done.dataset, done.record
    save_study(done, folder, force=force, page=lambda path: write_study(dataset, record, path))
    if record["counts"]["runs_found_done"]:
        typer.echo(f"{record['counts']['runs_found_done']} runs had been done before", err=True)
    if as_json:
        _print_json(record | {"folder": str(folder)})
    else:
        print_study(dataset, record, Console())
    typer.echo(f"written to {folder}", err=True)
    if not record["audit"]["passed"]:
        for name, checks in record["audit"]["failed"].items():
            typer.echo(f"audit: {name}: {', '.join(checks)}", err=True)
        raise typer.Exit(EXIT_AUDIT)


@app.command(epilog="Example: rampline page outputs/fennholm-2027-01-01")
def page(run: RunPath) -> None:
    """Write the page of a run or a study again."""
    from simulator import results
    from simulator.files import replace_file
    from simulator.report.page import write_page
    from simulator.report.study_page import write_study
    from simulator.studies.folder import is_study, open_study, open_study_record

    if is_study(run):
        answers, asked = open_study(run), open_study_record(run)
        replace_file(run / "page.html", lambda path: write_study(answers, asked, path))
        typer.echo(f"written to {run / 'page.html'}", err=True)
        return
    dataset, record = results.open_run(run), results.open_record(run)
    replace_file(run / "page.html", lambda path: write_page(dataset, record, path))
    typer.echo(f"written to {run / 'page.html'}", err=True)


@app.command(epilog="Example: rampline export outputs/fennholm-2027-01-01 workbook --to xlsx")
def export(
    run: RunPath,
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="Folder to write to.")],
    *,
    kind: Annotated[str, typer.Option("--to", help="xlsx | csv | parquet | geojson")],
    force: Annotated[bool, typer.Option(help="Replace an earlier export.")] = False,
    as_json: Json = False,
) -> None:
    """Write the results of a run or a study for other programs: a workbook, tables, or a map layer."""
    from simulator import results
    from simulator.report.export import export_run
    from simulator.report.study_export import export_study
    from simulator.studies.folder import is_study, open_study, open_study_record

    if is_study(run):
        made = export_study(open_study(run), open_study_record(run), kind, folder, force=force)
    else:
        dataset, record = results.open_run(run), results.open_record(run)
        made = export_run(dataset, record, kind, folder, force=force)
    if as_json:
        _print_json({"folder": str(folder), "files": made.files, "left_out": made.left_out})
    if made.left_out:
        typer.echo(f"left out, nothing in the case: {', '.join(made.left_out)}", err=True)
    typer.echo(f"written to {folder}", err=True)


@app.command(epilog="Example: rampline compare outputs/today outputs/new-line --page changes.html")
def compare(
    first: Annotated[Path, typer.Argument(metavar="RUN", help="Folder of the run to start from.")],
    second: Annotated[Path, typer.Argument(metavar="RUN", help="Folder of the other run.")],
    *,
    page: Annotated[Path | None, typer.Option(help="Also write an HTML page to this file.")] = None,
    as_json: Json = False,
) -> None:
    """Say what changes from one run to another over the same hours."""
    from rich.console import Console

    from simulator import results
    from simulator.report import comparison, comparison_page

    names = str(first), str(second)
    records = results.open_record(first), results.open_record(second)
    found = comparison.compare(results.open_run(first), results.open_run(second), names, records)
    if page is not None:
        comparison_page.write_comparison(found, page)
        typer.echo(f"written to {page}", err=True)
    if as_json:
        _print_json(comparison.comparison_record(found))
    else:
        comparison_page.print_comparison(found, Console())


def _say_gaps(record: dict[str, Any]) -> None:
    """Say which windows the time limit ended before their gap, and the gap they reached."""
    seconds = record["settings"]["commitment"]["seconds"]
    asked = record["settings"]["commitment"]["mip_gap"]
    for window in record["windows"]:
        if window["time_limit"]:
            typer.echo(
                f"warning: window {window['window']} from {window['from']} stopped after {seconds:g} s with "
                f"its best plan, gap {window['gap']:.2%}, asked for {asked:.2%}; "
                "raise commitment.seconds or commitment.mip_gap in case.toml",
                err=True,
            )


def _stop_unless_proved(record: dict[str, Any]) -> None:
    """Say each check of the audit that failed, a line each, and end with its exit code."""
    failed = [check for check in record["audit"]["checks"] if not check["passed"]]
    for check in failed:
        typer.echo(
            f"audit: {check['name']} is off by {check['worst']:g} at {check['where']}, "
            f"allowed {check['tolerance']:g}",
            err=True,
        )
    if failed:
        raise typer.Exit(EXIT_AUDIT)


class Clock:
    """Seconds by stage since it was made."""

    def __init__(self) -> None:
        self._began = self._last = time.perf_counter()
        self._laps: dict[str, float] = {}

    def lap(self, stage: str) -> None:
        """Book the time since the last lap on a stage."""
        now = time.perf_counter()
        self._laps[stage], self._last = now - self._last, now

    def skip(self) -> None:
        """Leave the time since the last lap to whoever counted it."""
        self._last = time.perf_counter()

    @property
    def seconds(self) -> dict[str, float]:
        """Seconds by stage and in total."""
        return self._laps | {"total": time.perf_counter() - self._began}


@contextmanager
def _progress(what: str = "windows") -> Iterator[Callable[[int, int], None] | None]:
    """Yield a progress callback that draws a bar on a terminal, or nothing elsewhere."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import (
        BarColumn,
        MofNCompleteColumn,
        Progress,
        TextColumn,
        TimeRemainingColumn,
    )

    columns = (TextColumn(what), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(what, total=None)
        yield lambda done, total: bar.update(task, completed=done, total=total)


def _say_warnings(case: Any) -> None:
    for warning in case.warnings:
        typer.echo(f"warning: {warning}", err=True)


def _print_json(document: Any) -> None:
    typer.echo(json.dumps(document, indent=2))


def _report(dataset: Any, record: dict[str, Any], folder: Path, *, as_json: bool) -> None:
    if as_json:
        _print_json(record | {"folder": str(folder)})
        return
    from rich.console import Console

    from simulator.report.summary import print_summary

    print_summary(dataset, record, Console())
    typer.echo(f"written to {folder}", err=True)


def main() -> None:
    """Run the command line."""
    app(prog_name="rampline")


if __name__ == "__main__":
    main()
