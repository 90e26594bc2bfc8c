"""Measuring: phases of a case, one after the other and over again.

Public names: `SAME`, `Measured`, `measure`, `measure_case`.
"""

import gc
import os
import platform
import resource
import statistics
import tempfile
import time
from collections.abc import Sequence
from dataclasses import dataclass, field
from importlib.metadata import version
from pathlib import Path
from typing import Any

from simulator.dispatch.window import WindowError
from simulator.errors import SolveError
from tests.benchmarks.budget import OverBudgetError
from tests.benchmarks.cases import CASES, Subject
from tests.benchmarks.phases import BY_HAND, PHASES, SIX_WINDOWS

__all__ = ["SAME", "Measured", "measure", "measure_case"]

PACKAGES = ("highspy", "numpy", "pyomo", "scipy")

SAME = 1e-6
"""Optima this close, relative, are the same."""


@dataclass
class Measured:
    """What repeats of one phase took.

    seconds : wall clock; processor : seconds of this process, which other programs hardly lengthen
    over : the budget that was not enough, s
    failed : what the engine ended a window with, or that of an earlier phase
    off : for what solves all windows, the most that an optimum is off the engine's, relative
    """

    case: str
    phase: str
    seconds: list[float] = field(default_factory=list)
    processor: list[float] = field(default_factory=list)
    over: float | None = None
    failed: str | None = None
    off: float | None = None

    @property
    def median(self) -> float | None:
        """Median wall clock, s."""
        return statistics.median(self.seconds) if self.seconds else None

    @property
    def median_processor(self) -> float | None:
        """Median processor time, s."""
        return statistics.median(self.processor) if self.processor else None

    def record(self) -> dict[str, Any]:
        """Return it as JSON keeps it."""
        return vars(self) | {"median": self.median, "median_processor": self.median_processor}


def measure_case(
    name: str, phases: Sequence[str], repeat: int, budget: float
) -> dict[str, Any] | None:
    """Measure one case; None where its data are not there."""
    with tempfile.TemporaryDirectory(prefix="benchmark-") as scratch:
        folder = CASES[name].folder(Path(scratch))
        if folder is None:
            return None
        subject = Subject(folder, CASES[name].start, budget)
        results = measure(name, subject, phases, repeat)
        lines, buses = len(subject.case.lines), len(subject.case.buses)
    return {
        "case": name, "buses": buses, "lines": lines, "peak_memory_gb": _peak_memory_gb(),
        "load_average": os.getloadavg()[0], "processors": os.cpu_count(),
        "versions": {"python": platform.python_version(), **{one: version(one) for one in PACKAGES}},
        "phases": [result.record() for result in results],
    }  # fmt: skip


def measure(name: str, subject: Subject, phases: Sequence[str], repeat: int) -> list[Measured]:
    """Measure phases `repeat` times, in turn, so that what else the machine does meets all alike."""
    found = {phase: Measured(name, phase) for phase in phases}
    for _ in range(repeat):
        for result in found.values():
            try:
                if result.over is None:
                    _once(subject, result)
            except (WindowError, SolveError) as failure:
                _give_up(list(found.values()), str(failure))
                return list(found.values())
    return list(found.values())


def _give_up(results: Sequence[Measured], failure: str) -> None:
    """Leave out what has not been measured: it would solve the same windows once more."""
    for result in results:
        if not result.seconds and result.over is None:
            result.failed = failure


def _once(subject: Subject, result: Measured) -> None:
    work = PHASES[result.phase].prepare(subject)
    gc.collect()
    wall, processor = time.perf_counter(), time.process_time()
    try:
        optima = work()
    except OverBudgetError as over:
        result.over = over.seconds
        return
    result.processor.append(time.process_time() - processor)
    result.seconds.append(time.perf_counter() - wall)
    if result.phase in {*BY_HAND, SIX_WINDOWS}:
        result.off = max(result.off or 0.0, _off(optima, subject.optima))


def _off(optima: Sequence[float], engine: Sequence[float]) -> float:
    pairs = zip(optima, engine, strict=True)
    return max(abs(one - other) / max(abs(other), 1.0) for one, other in pairs)


def _peak_memory_gb() -> float:
    """Return the most memory this process has held so far."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024**2
