"""Many runs of one study: spread over processes, and kept on disk so that a study can go on.

Public names: `Arrays`, `Finished`, `OneProcess`, `Processes`, `Progress`, `Runs`, `Task`, `Work`, `Workers`,
`cores`, `engage`.

A run is a task, a tuple of plain values, turned into named arrays by what all runs of the study share,
a `Work`. Among the arrays are `seconds`, what the run took, and `broken`, its audit's failed checks.
Tasks, works and arrays can be pickled, and what comes out depends on work and task alone, so any `Workers`
may do them in any order: this process, several, or machines elsewhere.
"""

import hashlib
import json
import multiprocessing
import os
import shutil
import signal
import threading
import zipfile
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from concurrent.futures.process import BrokenProcessPool
from multiprocessing.connection import Connection
from pathlib import Path
from typing import Any, BinaryIO, Protocol, TypeAlias

import numpy as np
from numpy.typing import NDArray

from simulator.errors import OptionError
from simulator.files import replace_file

__all__ = [
    "Arrays",
    "Finished",
    "OneProcess",
    "Processes",
    "Progress",
    "Runs",
    "Task",
    "Work",
    "Workers",
    "cores",
    "engage",
]

Task: TypeAlias = tuple[str | int | float, ...]
Arrays: TypeAlias = Mapping[str, NDArray[Any]]
Solve: TypeAlias = Callable[[Task], Arrays]
Progress: TypeAlias = Callable[[int, int], None]

MARK = "study.json"


class Work(Protocol):
    """What all runs of a study share."""

    def begin(self) -> Solve:
        """Return the function that does a task, in whatever process this is called."""


class Workers(Protocol):
    """Who does the tasks."""

    def done(self, tasks: Sequence[Task]) -> Iterator[tuple[Task, Arrays]]:
        """Yield each task with its arrays as it gets done, in any order."""

    def close(self) -> None:
        """Let go of whatever was held; tasks under way are given up."""


class OneProcess:
    """Does the tasks here, one after another."""

    def __init__(self, work: Work) -> None:
        self._work, self._solve = work, None  # type: tuple[Work, Solve | None]

    def done(self, tasks: Sequence[Task]) -> Iterator[tuple[Task, Arrays]]:
        """Yield each task with its arrays."""
        if self._solve is None:
            self._solve = self._work.begin()
        for task in tasks:
            yield task, self._solve(task)

    def close(self) -> None:
        """Hold nothing."""


class Processes:
    """Does the tasks in processes of their own, started afresh, so that no state is inherited."""

    def __init__(self, work: Work, count: int) -> None:
        context = multiprocessing.get_context("spawn")
        watched, self._lifeline = context.Pipe(duplex=False)
        self._pool = ProcessPoolExecutor(
            count, mp_context=context, initializer=_begin, initargs=(work, watched)
        )

    def done(self, tasks: Sequence[Task]) -> Iterator[tuple[Task, Arrays]]:
        """Yield each task with its arrays as it gets done."""
        try:
            waiting = {self._pool.submit(_do, task): task for task in tasks}
            for future in as_completed(waiting):
                yield waiting[future], future.result()
        except BrokenProcessPool as error:
            raise OptionError(
                "--workers, must leave each process enough memory, found one that ended on its own, "
                "call again with fewer: runs that are done are not repeated"
            ) from error

    def close(self) -> None:
        """End the processes, whatever they are at."""
        self._lifeline.close()
        self._pool.shutdown(wait=True, cancel_futures=True)


def cores() -> int:
    """Return how many cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def engage(work: Work, count: int) -> Workers:
    """Return workers for a study: this process if one will do, else processes of their own."""
    return OneProcess(work) if count <= 1 else Processes(work, count)


_solve_here: Solve


def _begin(work: Work, watched: Connection) -> None:
    """Make a process ready for tasks; it ends as soon as the one that started it ends or lets go."""
    global _solve_here  # noqa: PLW0603  (what a process is started with has no other place to live)
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_end_with, args=(watched,), daemon=True).start()
    _solve_here = work.begin()


def _end_with(watched: Connection) -> None:
    try:
        watched.recv()
    except (EOFError, OSError):
        os._exit(0)


def _do(task: Task) -> Arrays:
    return _solve_here(task)


class Finished:
    """The finished runs of a study in a folder beside its output, a file each.

    fingerprint : of all the runs depend on; what another study left there is thrown away
    """

    def __init__(self, folder: Path, fingerprint: str) -> None:
        self._folder = folder
        if self._mark() != fingerprint:
            self.discard()
            folder.mkdir(parents=True)
            mark = json.dumps({"fingerprint": fingerprint})
            replace_file(folder / MARK, lambda path: _write_text(path, mark))

    def _mark(self) -> str | None:
        try:
            return str(json.loads((self._folder / MARK).read_text(encoding="utf-8"))["fingerprint"])
        except (OSError, ValueError, KeyError, TypeError):
            return None

    def _path(self, task: Task) -> Path:
        return self._folder / f"{hashlib.sha256(repr(task).encode()).hexdigest()[:32]}.npz"

    def get(self, task: Task) -> Arrays | None:
        """Return what a task left, None if it is not finished."""
        try:
            with self._path(task).open("rb") as file, np.load(file, allow_pickle=False) as held:
                return {name: held[name] for name in held.files}
        except (OSError, ValueError, EOFError, zipfile.BadZipFile):
            return None

    def put(self, task: Task, arrays: Arrays) -> None:
        """Keep what a task left, whole or not at all."""
        replace_file(self._path(task), lambda path: _write_arrays(path, arrays))

    def discard(self) -> None:
        """Throw all of it away."""
        shutil.rmtree(self._folder, ignore_errors=True)


def _write_text(path: Path, text: str) -> None:
    path.write_text(text, encoding="utf-8")


def _write_arrays(path: Path, arrays: Arrays) -> None:
    file: BinaryIO
    with path.open("wb") as file:
        np.savez(file, allow_pickle=False, **dict(arrays))


class Runs:
    """The runs of one study, each done once.

    workers : who does them; finished : where they are kept, None for nowhere
    progress : called with (runs done, runs in all)
    found : how many runs had been done before
    """

    def __init__(
        self,
        workers: Workers,
        finished: Finished | None = None,
        progress: Progress | None = None,
    ) -> None:
        self._workers, self._finished, self._progress = workers, finished, progress
        self._known: dict[Task, Arrays] = {}
        self._expected = 0
        self.found = 0

    def __enter__(self) -> "Runs":
        return self

    def __exit__(self, *_: object) -> None:
        self._workers.close()

    def expect(self, runs: int) -> None:
        """Say how many runs there will be in all, as far as that is known."""
        self._expected = runs
        self._tell()

    def results(self, tasks: Sequence[Task]) -> list[Arrays]:
        """Return the arrays of tasks in their order, doing those that are not done yet."""
        missing = [task for task in dict.fromkeys(tasks) if not self._holds(task)]
        self._tell()
        for task, arrays in self._workers.done(missing):
            if self._finished:
                self._finished.put(task, arrays)
            self._known[task] = arrays
            self._tell()
        return [self._known[task] for task in tasks]

    def _holds(self, task: Task) -> bool:
        """Tell whether a task is done, now or in an earlier attempt at the study."""
        if task not in self._known and self._finished:
            held = self._finished.get(task)
            if held is not None:
                self._known[task] = held
                self.found += 1
        return task in self._known

    def __len__(self) -> int:
        return len(self._known)

    @property
    def seconds(self) -> float:
        """Seconds the runs took, summed over workers; what was found done counts as it was then."""
        return float(sum(float(arrays["seconds"]) for arrays in self._known.values()))

    def audits(self, in_words: Callable[[Task], str]) -> dict[str, tuple[str, ...]]:
        """Return the failed checks of each run, by the run in words."""
        return {
            in_words(task): tuple(str(name) for name in self._known[task]["broken"])
            for task in sorted(self._known, key=repr)
        }

    def _tell(self) -> None:
        if self._progress:
            done = len(self._known)
            self._progress(done, max(self._expected, done))
