"""Two runs compared as a reader sees it: tables on the terminal, and one self-contained HTML page.

Public names: `comparison_html`, `print_comparison`, `write_comparison`.
"""

from collections.abc import Sequence
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from markupsafe import Markup
from rich.console import Console
from rich.markup import escape

from simulator.errors import OptionError
from simulator.files import replace_file
from simulator.report.comparison import (
    FEWER,
    GONE,
    MORE,
    NEW,
    ONLY_FIRST,
    ONLY_SECOND,
    Comparison,
    differing_settings,
)
from simulator.report.page import CAUTION, asset, environment, policy
from simulator.report.sections import Section
from simulator.report.tables import (
    NEGLIGIBLE,
    Cell,
    Column,
    Table,
    bar_lengths,
    figure,
    numbers,
    ranked,
    shortened,
    word,
    words,
)
from simulator.report.terminal import print_table
from simulator.report.view import View
from simulator.report.wording import LARGE, amount, count, listed, number, percent

__all__ = ["comparison_html", "print_comparison", "write_comparison"]

MOST_SHOWN = 10
"""How many of the largest changes stand open."""
SMALLEST = 0.005
"""An amount below this shows as none in two decimals, and nothing is a share of it."""
KINDS = {
    "bus": ("bus", "buses"), "line": ("line", ""), "unit": ("unit", ""), "plant": ("renewable plant", ""),
    "store": ("store", ""), "tie": ("tie", ""), "load": ("load", ""), "product": ("reserve product", ""),
}  # fmt: skip
SIDES = ("first", "second")
WIDTH, HEIGHT, LEFT, FOOT = 960, 260, 56, 22
"""Size of the price curves, and the room left of and below them, in units of the picture."""
MOST_TICKS, MOST_DAYS = 5, 8


def write_comparison(comparison: Comparison, path: Path) -> None:
    """Write the page of a comparison whole."""
    html = comparison_html(comparison)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        replace_file(path, lambda made: _write(made, html))
    except OSError as error:
        raise OptionError(
            f"--page, must be a file that can be written, found {path} ({error.strerror}), choose "
            "another file"
        ) from error


def _write(path: Path, html: str) -> None:
    path.write_text(html, encoding="utf-8", newline="\n")


def comparison_html(comparison: Comparison) -> str:
    """Return the page of a comparison as one HTML document."""
    theme = asset("theme.js")
    return environment().get_template("comparison.html").render(
        comparison=comparison, sections=_sections(comparison), alarms=_alarms(comparison),
        title=_title(comparison), curves=_curves(comparison), caution=CAUTION, theme=Markup(theme),
        policy=policy([theme]), style=Markup(asset("page.css") + asset("print.css")),
    )  # fmt: skip


def print_comparison(comparison: Comparison, console: Console) -> None:
    """Print what changes from the first run to the second."""
    console.print(f"[bold]{escape(_title(comparison))}[/bold]")
    for alarm in _alarms(comparison):
        console.print(f"[bold red]{escape(alarm)}[/bold red]")
    for section in _sections(comparison):
        for text in [*(f"{term}: {value}" for term, value in section.facts), *section.text]:
            console.print(escape(text))
        for table in section.tables:
            print_table(table, console)


def _title(comparison: Comparison) -> str:
    first, second = (view.case_name for view in comparison.views)
    return f"{first}: two runs compared" if first == second else f"{first}, compared with {second}"


def _alarms(comparison: Comparison) -> list[str]:
    """Say what a reader must know before any number: load that is not served, runs not proved."""
    said = []
    short = comparison.totals.loc["unserved_mwh", list(SIDES)]
    if short.max() > NEGLIGIBLE:
        parts = [f"{amount(short[side])} MWh in the {side} run" for side in SIDES]
        said.append(f"Load is not served: {' and '.join(parts)}.")
    for side, view in zip(SIDES, comparison.views, strict=True):
        if not (view.run.get("audit") or {}).get("passed", True):
            said.append(f"The audit of the {side} run failed; do not rely on its results.")
    return said


def _sections(comparison: Comparison) -> list[Section]:
    """Return the sections in their order; those without a subject are left out."""
    made = [
        _runs(comparison), _totals(comparison), _cost(comparison), _energy(comparison),
        _prices(comparison), _congestion(comparison),
        _moved(comparison, "curtailment", "Curtailment by plant", "Plant"),
        _moved(comparison, "unserved", "Unserved load", "Load"),
    ]  # fmt: skip
    return [section for section in made if section is not None]


def _runs(comparison: Comparison) -> Section:
    clock = comparison.clock
    zone = str(comparison.views[0].dataset.attrs.get("time_zone", "UTC"))
    span = f"{clock.label(0, with_year=True)} to {clock.label(len(clock), with_year=True)}, {zone}"
    facts = [
        *(
            (f"{side.capitalize()} run", _run_in_words(name, view))
            for side, name, view in zip(SIDES, comparison.names, comparison.views, strict=True)
        ),
        ("Hours", span),
        *(
            (f"Only in the {side} run", _elements_in_words(only))
            for side, only in zip(SIDES, comparison.only_in, strict=True)
            if only
        ),
    ]
    settings = [
        [word(name), word(_setting(one)), word(_setting(other))]
        for name, one, other in differing_settings(comparison)
    ]
    table = Table("Settings that differ", words("Setting", "First", "Second"), settings)
    return Section("runs", "The two runs", facts=facts, tables=[table] if settings else [])


def _run_in_words(name: str, view: View) -> str:
    audit = view.run.get("audit")
    verdict = ("passed" if audit.get("passed") else "failed") if audit else "none on record"
    return f"{name}; case {view.case_name}; audit {verdict}"


def _elements_in_words(only: Any) -> str:
    return "; ".join(
        f"{count(len(names), *KINDS[dimension])}: {listed(names)}"
        for dimension, names in only.items()
    )


def _setting(value: Any) -> str:
    return "not recorded" if value is None else str(value)


def _totals(comparison: Comparison) -> Section:
    frame = comparison.totals
    decimals = [_decimals(row, frame.loc[name, "unit"]) for name, row in _numbers(frame).iterrows()]
    rows = [
        [word(row.label), *_change_cells(row, places), word(row.unit)]
        for row, places in zip(frame.itertuples(), decimals, strict=True)
    ]
    columns = (*_columns("Measure"), *words("Unit"))
    text = ["A change is the second run less the first."]
    return Section("totals", "Totals", text, tables=[Table("Totals", columns, rows)])


def _numbers(frame: pd.DataFrame) -> pd.DataFrame:
    return frame[["first", "second", "change"]]


def _decimals(values: Any, unit: str = "") -> int:
    """Return how many decimals to show: two for prices and small amounts, none for whole numbers."""
    sizes = np.nan_to_num(np.abs(np.asarray(values, dtype=float)))
    if unit.endswith("/MWh"):
        return 2
    return 0 if sizes.max(initial=0.0) >= LARGE or (sizes == np.round(sizes)).all() else 2


def _columns(*titles: str) -> tuple[Column, ...]:
    return (*words(*titles), *numbers("First", "Second", "Change", "Change, %"))


def _change_cells(row: Any, decimals: int, bar: float | None = None) -> list[Cell]:
    """Return the cells of a row: first, second, change, and the change as a share of the first."""
    known = abs(row.first) >= SMALLEST and np.isfinite(row.change)
    return [
        figure(row.first, decimals),
        figure(row.second, decimals),
        _signed(row.change, decimals, bar),
        Cell(_plus(percent(row.change / abs(row.first), 1))) if known else Cell("–"),
    ]


def _signed(value: float, decimals: int, bar: float | None = None) -> Cell:
    cell = figure(value, decimals, bar)
    return Cell(_plus(cell.text), cell.sort, cell.bar)


def _plus(text: str) -> str:
    """Put a plus before a number that is more than nothing.

    >>> _plus("1,204"), _plus("0.00"), _plus("–")
    ('+1,204', '0.00', '–')
    """
    return f"+{text}" if text[0].isdigit() and text.strip("0.,%\N{NO-BREAK SPACE}") else text


def _table(frame: pd.DataFrame, caption: str, title: str, decimals: int | None = None) -> Table:
    """Return changes as a table, in the order they are in, a bar behind each change."""
    places = _decimals(_numbers(frame)) if decimals is None else decimals
    lengths = bar_lengths(np.abs(frame["change"].to_numpy()))
    rows = [
        [word(str(row.Index)), *_change_cells(row, places, float(length))]
        for row, length in zip(frame.itertuples(), lengths, strict=True)
    ]
    return shortened(Table(caption, _columns(title), rows))


def _summed(frame: pd.DataFrame, caption: str, title: str) -> Table:
    """Return changes as a table with a row of totals; what neither run has is left out."""
    table = _table(_largest_first(_present(frame)), caption, title)
    decimals = _decimals(_numbers(frame))
    total = next(_numbers(frame).sum().to_frame().T.itertuples())
    return Table(
        caption, table.columns, table.rows, (word("Total"), *_change_cells(total, decimals))
    )


def _present(frame: pd.DataFrame) -> pd.DataFrame:
    return frame[frame[list(SIDES)].abs().max(axis=1) > NEGLIGIBLE]


def _largest_first(frame: pd.DataFrame) -> pd.DataFrame:
    """Order rows by the size of their change, then by what they are in the first run."""
    keys = [frame["change"].abs().fillna(np.inf).to_numpy(), frame["first"].fillna(0.0).to_numpy()]
    return frame.iloc[ranked(*keys)]


def _cost(comparison: Comparison) -> Section:
    named = comparison.cost.rename(lambda name: str(name).replace("_", " ").capitalize())
    table = _summed(named, f"Cost by component, {comparison.currency}", "Component")
    return Section("cost", "Cost by component", tables=[table])


def _energy(comparison: Comparison) -> Section:
    table = _summed(comparison.energy, "Energy by technology, MWh", "Technology")
    return Section("energy", "Energy by technology", tables=[table])


def _prices(comparison: Comparison) -> Section | None:
    frame, unit = comparison.price, comparison.views[0].price_unit
    if frame.empty:
        return None
    order = frame.dropna().sort_values("change", ascending=False, kind="stable")
    rises, falls = order[order["change"] >= SMALLEST], order[order["change"] <= -SMALLEST][::-1]
    moved = [
        _table(part[:MOST_SHOWN], f"Mean price by bus, largest {name}, {unit}", "Bus", 2)
        for name, part in (("rises", rises), ("falls", falls))
        if len(part)
    ]
    whole = _table(_largest_first(frame), f"Mean price of every bus, {unit}", "Bus", 2)
    return Section(
        "prices", "Prices by bus", [_prices_in_words(len(order), len(rises), len(falls))],
        tables=moved, folded=[whole],
    )  # fmt: skip


def _prices_in_words(buses: int, rises: int, falls: int) -> str:
    if not rises and not falls:
        return "The mean price is the same at every bus of both runs."
    return (
        f"Of {count(buses, 'bus', 'buses')} in both runs, the mean price rises at {rises} and falls "
        f"at {falls}."
    )


def _congestion(comparison: Comparison) -> Section | None:
    lines = comparison.lines
    if lines.empty:
        return None
    kinds = {
        NEW: "Newly congested", GONE: "No longer congested", MORE: "Congested in more hours",
        FEWER: "Congested in fewer hours", ONLY_SECOND: "Only in the second run, and congested there",
        ONLY_FIRST: "Only in the first run, and congested there",
    }  # fmt: skip
    congested = lines[lines[list(SIDES)].max(axis=1) > 0]
    changed = [
        _lines(congested[congested["status"] == status], caption, comparison.currency)
        for status, caption in kinds.items()
        if (congested["status"] == status).any()
    ]
    counted = [
        f"{size} {caption[0].lower()}{caption[1:]}"
        for status, caption in kinds.items()
        if (size := int((congested["status"] == status).sum()))
    ]
    text = [
        f"Lines by their hours priced: {', '.join(counted)}."
        if counted
        else "No line is congested in more or in fewer hours.",
        *_without_limits(comparison),
    ]
    return Section("congestion", "Congested lines", text, tables=changed)


def _without_limits(comparison: Comparison) -> list[str]:
    """Explain the hours of a run in which no flow was limited."""
    free = [
        side
        for side, view in zip(SIDES, comparison.views, strict=True)
        if view.dataset.attrs.get("limits") == "none"
    ]
    if not free:
        return []
    where = " or the ".join(free)
    text = (
        f"No flow was limited in the {where} run: no line is priced there, and hours at limit are "
    )
    return [text + "those with a flow at or beyond the rating."]


def _lines(frame: pd.DataFrame, caption: str, currency: str) -> Table:
    digits = _decimals(frame[["first", "second", "change", "first_limit", "second_limit"]])
    rent = frame["second_rent"].fillna(0.0) - frame["first_rent"].fillna(0.0)
    keys = frame[["change", "second", "first", "first_rent"]].abs().fillna(0.0)
    ordered = frame.assign(rent=rent).iloc[ranked(*keys.to_numpy().T)]
    rows = [
        [
            word(str(row.Index)), figure(row.first, digits), figure(row.second, digits),
            _signed(row.change, digits), figure(row.first_limit, digits),
            figure(row.second_limit, digits), _signed(row.rent, 0),
        ]
        for row in ordered.itertuples()
    ]  # fmt: skip
    columns = words("Line") + numbers(
        "First", "Second", "Change", "At limit, first", "At limit, second",
        f"Change of rent, {currency}",
    )  # fmt: skip
    return shortened(Table(f"{caption}, hours priced", columns, rows))


def _moved(comparison: Comparison, name: str, title: str, of_what: str) -> Section | None:
    """Return the largest changes of an energy by element; None if there are none."""
    frame: pd.DataFrame = getattr(comparison, name)
    moved = _largest_first(frame[frame["change"].abs() >= SMALLEST])
    if moved.empty:
        return None
    table = _table(moved[:MOST_SHOWN], f"{title}, largest changes, MWh", of_what)
    whole = [_table(moved, f"{title}, every change, MWh", of_what)]
    return Section(name, title, tables=[table], folded=whole if len(moved) > MOST_SHOWN else [])


def _curves(comparison: Comparison) -> dict[str, Any] | None:
    """Return the load-weighted prices of both runs as step lines, ready to draw; None without load."""
    steps = comparison.views[0].steps
    demand = [steps.total(each.demand) for each in comparison.hourly]
    payment = [steps.total(each.payment) for each in comparison.hourly]
    prices = [
        np.divide(paid, load, out=np.full(len(load), np.nan), where=load > 0)
        for paid, load in zip(payment, demand, strict=True)
    ]
    if not np.isfinite(prices).any():
        return None
    ticks = _round_values(float(np.nanmin(prices)), float(np.nanmax(prices)))
    across = LEFT + (WIDTH - LEFT) * np.arange(len(steps) + 1) / len(steps)
    return {
        "unit": steps.unit, "width": WIDTH, "height": HEIGHT, "left": LEFT, "foot": HEIGHT - FOOT,
        "paths": [_path(across, _height(price, ticks)) for price in prices],
        "ticks": [(_height(np.array([at]), ticks)[0], number(at, _places(ticks))) for at in ticks],
        "days": _days(comparison, across),
    }  # fmt: skip


def _round_values(low: float, high: float) -> list[float]:
    """Return a few round values that hold all from `low` to `high` between them.

    >>> _round_values(3.0, 88.0)
    [0.0, 20.0, 40.0, 60.0, 80.0, 100.0]
    """
    rough = max(high - low, 0.1 * max(abs(high), 1.0)) / MOST_TICKS
    power = 10.0 ** np.floor(np.log10(rough))
    step = float(power * next(each for each in (1, 2, 5, 10) if each * power >= rough * 0.999))
    first, last = np.floor(low / step), np.ceil(high / step)
    return [float(each * step) for each in np.arange(first, max(last, first + 1) + 1)]


def _places(ticks: Sequence[float]) -> int:
    return max(0, -int(np.floor(np.log10(ticks[1] - ticks[0]))))


def _height(price: Any, ticks: Sequence[float]) -> Any:
    room = HEIGHT - FOOT - 8
    return 8 + room * (ticks[-1] - price) / (ticks[-1] - ticks[0])


def _path(across: Any, heights: Any) -> str:
    """Return a step line as an SVG path, with gaps where the height is not known."""
    pieces, broken = [], True
    for (start, end), height in zip(pairwise(across), heights, strict=True):
        if np.isfinite(height):
            pieces.append(f"{f'M{start:.1f} ' if broken else 'V'}{height:.1f}H{end:.1f}")
        broken = not np.isfinite(height)
    return "".join(pieces)


def _days(comparison: Comparison, across: Any) -> list[tuple[float, str]]:
    """Return where days begin, and their names, as many as fit."""
    clock, steps = comparison.clock, comparison.views[0].steps
    firsts = np.intersect1d(clock.days[1], steps.first).tolist()
    shown = firsts[:: -(-len(firsts) // MOST_DAYS)]
    places = np.searchsorted(steps.first, shown)
    return [
        (round(float(across[at]), 1), clock.date(first))
        for at, first in zip(places, shown, strict=True)
    ]
