"""`python -m tests.benchmarks`: measure phases of cases, and the same windows solved by hand.

Every case runs in a process of its own, so that its memory is its own.
"""

import argparse
import json
import multiprocessing
import sys
from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path
from typing import Any

from rich.console import Console

from tests.benchmarks.cases import CASES, ROOT
from tests.benchmarks.measure import SAME, measure_case
from tests.benchmarks.phases import PHASES
from tests.benchmarks.table import table

KEPT = ROOT / "outputs" / "benchmarks.json"
WIDTH = 110  # the table is the same in a terminal, a file and a log
USUAL = ("demo", "rts-gmlc", "300", "1000")


def main(arguments: Sequence[str] | None = None) -> int:
    """Measure, print a table, keep the numbers; 1 where an optimum is not the engine's or there is none."""
    asked = _parser().parse_args(arguments)
    console, found = Console(width=WIDTH), []
    for name in asked.cases:
        record = _measured_apart(name, asked)
        if record is None:
            console.print(f"{name}: its data are not here, left out")
            continue
        found.append(record)
        console.print(table(record))
        _keep(found, asked.json)
    console.print(f"kept in {asked.json}")
    phases = [phase for record in found for phase in record["phases"]]
    return int(any(phase["failed"] or (phase["off"] or 0.0) > SAME for phase in phases))


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks", description=__doc__)
    parser.add_argument("--cases", nargs="+", default=USUAL, choices=CASES, metavar="CASE",
                        help=f"of {', '.join(CASES)}; by default {', '.join(USUAL)}")  # fmt: skip
    parser.add_argument("--phases", nargs="+", default=list(PHASES), choices=PHASES, metavar="PHASE",
                        help="of " + ", ".join(f'"{name}"' for name in PHASES))  # fmt: skip
    parser.add_argument("--repeat", type=int, default=3, help="how often each is measured")
    parser.add_argument("--budget", type=float, default=300.0,
                        help="seconds that one way by hand may take on one case")  # fmt: skip
    parser.add_argument("--json", type=Path, default=KEPT, help="file the numbers are kept in")
    return parser


def _measured_apart(name: str, asked: argparse.Namespace) -> dict[str, Any] | None:
    with ProcessPoolExecutor(1, multiprocessing.get_context("spawn")) as pool:
        work = pool.submit(measure_case, name, asked.phases, asked.repeat, asked.budget)
        return work.result()


def _keep(found: list[dict[str, Any]], path: Path) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(json.dumps(found, indent=2) + "\n", encoding="utf-8")


if __name__ == "__main__":
    sys.exit(main())
