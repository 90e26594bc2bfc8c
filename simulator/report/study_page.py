"""A study as a reader sees it: tables on the terminal, and one self-contained HTML page.

Public names: `print_study`, `study_html`, `write_study`.
"""

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import xarray as xr
from markupsafe import Markup
from plotly.offline import get_plotlyjs
from rich.console import Console
from rich.markup import escape

from simulator.report import new_load_sections, outage_sections, storage_sections
from simulator.report.page import CAUTION, asset, environment, made_by, policy
from simulator.report.sections import Section
from simulator.report.tables import Table, word, words
from simulator.report.terminal import print_table
from simulator.report.view import script_json
from simulator.report.wording import count

__all__ = ["print_study", "study_html", "write_study"]

KINDS = {
    "new-load": new_load_sections, "outage-check": outage_sections, "storage-sites": storage_sections,
}  # fmt: skip
MOST_PRINTED = 15
NO_STEPS = {"day": [], "days": [], "time": [], "unit": ""}


def write_study(dataset: xr.Dataset, record: Mapping[str, Any], path: Path) -> None:
    """Write the page of a study, given its dataset and the contents of its study.json."""
    path.write_text(study_html(dataset, record), encoding="utf-8", newline="\n")


def study_html(dataset: xr.Dataset, record: Mapping[str, Any]) -> str:
    """Return the page of a study as one HTML document."""
    parts = [*KINDS[dataset.attrs["study"]].sections(dataset), _about(record)]
    scripts = {
        "theme": asset("theme.js"), "library": get_plotlyjs(), "page": asset("page.js")
    }  # fmt: skip
    figures = {chart.name: chart.figure for part in parts for chart in part.charts}
    return environment().get_template("study.html").render(
        title=dataset.attrs["title"], attrs=dataset.attrs, sections=parts, alarms=_alarms(record),
        caution=CAUTION, style=Markup(asset("page.css") + asset("print.css")),
        policy=policy(scripts.values()), made_by=made_by(record),
        scripts={name: Markup(text) for name, text in scripts.items()},
        data=Markup(script_json({"steps": NO_STEPS, "figures": figures})),
    )  # fmt: skip


def print_study(dataset: xr.Dataset, record: Mapping[str, Any], console: Console) -> None:
    """Print the answers of a study: what it recommends, on what basis, and its tables."""
    console.print(f"[bold]{escape(dataset.attrs['title'])}[/bold]")
    for alarm in _alarms(record):
        console.print(f"[bold red]{escape(alarm)}[/bold red]")
    for section in KINDS[dataset.attrs["study"]].sections(dataset):
        for table in section.tables:
            print_table(_shortened(table), console)
    console.print(f"[bold]{escape(dataset.attrs['recommendation'])}[/bold]")
    console.print(escape(f"Basis: {dataset.attrs['basis']} {_proof(record)}"))


def _shortened(table: Table) -> Table:
    if len(table.rows) <= MOST_PRINTED:
        return table
    caption = f"{table.caption}, the first {MOST_PRINTED} of {len(table.rows)}"
    return Table(caption, table.columns, table.rows[:MOST_PRINTED])


def _alarms(record: Mapping[str, Any]) -> list[str]:
    """Say which runs did not prove themselves."""
    failed = record["audit"]["failed"]
    return [
        f"The audit of a run failed, {name}: {', '.join(checks)}. Do not rely on it."
        for name, checks in failed.items()
    ]


def _proof(record: Mapping[str, Any]) -> str:
    audit = record["audit"]
    runs = count(int(audit["runs"]), "run")
    return f"{runs}, every one audited: {'all passed' if audit['passed'] else 'not all passed'}."


def _about(record: Mapping[str, Any]) -> Section:
    counts, seconds = record["counts"], record["seconds"]
    facts: list[tuple[str, str]] = [
        ("Case", str(record["case_name"])),
        ("Hours", f"{record['from']} to {record['until']}"),
        ("On and off", str(record["settings"]["commitment"])),
        ("Line limits", str(record["settings"]["limits"])),
        ("Runs", f"{counts['base_runs']} to compare with, {counts['runs']} others"),
        ("Time", f"{seconds['total']:,.1f} s"),
        ("Audit", _proof(record)),
    ]
    asked = {**record["request"], **(record["request"].get("settings") or {})}
    asked.pop("settings", None)
    rows = [[word(name.replace("_", " ")), word(_said(value))] for name, value in asked.items()]
    folded = [Table("All that was asked for", words("Setting", "Value"), rows)]
    return Section("about", "How it was found", facts=facts, folded=folded)


def _said(value: Any) -> str:
    if value is None:
        return "as the case says, or no limit"
    if isinstance(value, Sequence) and not isinstance(value, str):
        return ", ".join(map(str, value)) or "all"
    return str(value)
