"""One self-contained HTML page from a run: no network, the same bytes for the same run.

Public names: `CAUTION`, `asset`, `environment`, `made_by`, `page_html`, `policy`, `write_page`.
"""

import hashlib
from base64 import b64encode
from collections.abc import Mapping, Sequence
from functools import lru_cache
from importlib import resources
from pathlib import Path
from typing import Any

import xarray as xr
from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup
from plotly.offline import get_plotlyjs

from simulator.report.sections import Chart, Section, sections, unserved_notice
from simulator.report.tables import unserved_spans
from simulator.report.view import View, script_json
from simulator.report.wording import number

__all__ = ["CAUTION", "asset", "environment", "made_by", "page_html", "policy", "write_page"]

CAUTION = (
    "Rampline is a planning aid. It is not for real-time control or switching. Local grid codes, the "
    "responsible operator and licensed practice decide."
)


def write_page(dataset: xr.Dataset, run: Mapping[str, Any], path: Path) -> None:
    """Write the page of a run, given its dataset and the contents of its run.json."""
    path.write_text(page_html(dataset, run), encoding="utf-8", newline="\n")


def page_html(dataset: xr.Dataset, run: Mapping[str, Any]) -> str:
    """Return the page of a run as one HTML document (results-format.md)."""
    view = View(dataset, run)
    parts = sections(view)
    notice = unserved_notice(view)
    scripts = {
        "theme": asset("theme.js"), "library": get_plotlyjs(), "page": asset("page.js")
    }  # fmt: skip
    return environment().get_template("page.html").render(
        view=view, sections=parts, notice=notice,
        spans=unserved_spans(view) if notice else None, caution=CAUTION, title=_title(view),
        style=Markup(asset("page.css") + asset("print.css")), policy=policy(scripts.values()),
        scripts={name: Markup(text) for name, text in scripts.items()},
        data=Markup(script_json(_data(view, parts))), made_by=made_by(run),
        number=number,
    )  # fmt: skip


def _title(view: View) -> str:
    clock = view.clock
    start, end = clock.date(0, with_year=False), clock.date(len(clock) - 1, with_year=True)
    return f"{view.case_name}: {end if start == end[: len(start)] else f'{start} to {end}'}"


def _data(view: View, parts: Sequence[Section]) -> dict[str, Any]:
    """Collect what the page's script draws."""
    charts: list[Chart] = [chart for section in parts for chart in section.charts]
    return {
        "steps": view.steps.for_page(),
        "figures": {chart.name: chart.figure for chart in charts},
    }


def made_by(run: Mapping[str, Any]) -> str:
    """Say with what a run or a study was made."""
    versions = run.get("versions") or {}
    return ", ".join(f"{name} {versions[name]}" for name in sorted(versions))


def policy(scripts: Any) -> str:
    """Return a content security policy: these scripts alone, and nothing from anywhere else."""
    hashes = " ".join(f"'sha256-{_digest(text)}'" for text in scripts)
    return (
        f"default-src 'none'; script-src {hashes}; style-src 'unsafe-inline'; img-src data: blob:; "
        "base-uri 'none'; form-action 'none'"
    )


def _digest(text: str) -> str:
    return b64encode(hashlib.sha256(text.encode()).digest()).decode()


def asset(name: str) -> str:
    """Return the text of a file in templates/."""
    return (resources.files("simulator.report") / "templates" / name).read_text("utf-8")


@lru_cache(maxsize=1)
def environment() -> Environment:
    """Return the template environment: everything escaped, anything missing an error."""
    return Environment(
        loader=PackageLoader("simulator.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
