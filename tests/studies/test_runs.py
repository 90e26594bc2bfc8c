"""Runs spread over processes and kept on disk: the same answers for any number, and after any stop."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from simulator.errors import OptionError, SolveError
from simulator.studies.base import StudySettings
from simulator.studies.new_load import NewLoad, answer_new_load
from simulator.studies.runs import Arrays, Finished, OneProcess, Runs, Task, engage
from simulator.studies.storage_sites import StorageSites, storage_sites
from tests.support import small_case, write_case

DAY = StudySettings(hours=24, commitment="relaxed")


class Squares:
    """A work for tests: the square of a number."""

    def begin(self):
        return self.square

    def square(self, task: Task) -> Arrays:
        if task[0] < -1:
            os._exit(9)
        if task[0] < 0:
            raise SolveError(3, "time limit", ["unit 1"])
        return {
            "square": np.array(task[0] ** 2),
            "seconds": np.array(0.0),
            "broken": np.zeros(0, str),
        }


def squares(runs: Runs, numbers) -> list[float]:
    return [float(each["square"]) for each in runs.results([(number,) for number in numbers])]


@pytest.mark.parametrize("count", [1, 2])
def test_results_come_in_the_order_of_tasks_and_each_task_is_done_once(count):
    told = []
    with Runs(engage(Squares(), count), progress=lambda *told_: told.append(told_)) as runs:
        assert squares(runs, [3, 1, 3, 2]) == [9, 1, 9, 4]
        assert squares(runs, [2, 5]) == [4, 25]
        assert len(runs) == 4
    assert told[-1][0] == 4
    assert [done for done, _ in told] == sorted(done for done, _ in told)


@pytest.mark.parametrize("count", [1, 2])
def test_what_fails_in_a_run_is_raised_here(count):
    with (
        Runs(engage(Squares(), count)) as runs,
        pytest.raises(SolveError, match=r"window 3: .* time limit: unit 1") as caught,
    ):
        squares(runs, [1, -1])
    assert caught.value.elements == ("unit 1",)


def test_a_process_that_dies_is_told_in_words():
    with Runs(engage(Squares(), 2)) as runs, pytest.raises(OptionError, match="ended on its own"):
        squares(runs, [1, -2])


class Counted(Squares):
    """Counts what it does."""

    def __init__(self) -> None:
        self.done: list[Task] = []

    def square(self, task: Task) -> Arrays:
        self.done.append(task)
        return super().square(task)


def test_finished_runs_are_not_repeated_unless_something_else_is_asked(tmp_path):
    folder = tmp_path / "unfinished"
    first = Counted()
    with Runs(OneProcess(first), Finished(folder, "one")) as runs:
        squares(runs, [1, 2])
    again = Counted()
    with Runs(OneProcess(again), Finished(folder, "one")) as runs:
        assert squares(runs, [1, 2, 3]) == [1, 4, 9]
        assert runs.found == 2
    assert again.done == [(3,)]
    damaged = next(folder.glob("*.npz"))
    damaged.write_bytes(damaged.read_bytes()[:40])
    mended = Counted()
    with Runs(OneProcess(mended), Finished(folder, "one")) as runs:
        assert squares(runs, [1, 2, 3]) == [1, 4, 9]
    assert len(mended.done) == 1
    other = Counted()
    with Runs(OneProcess(other), Finished(folder, "another")) as runs:
        squares(runs, [1])
    assert other.done == [(1,)]


@pytest.fixture(scope="module")
def fens(tmp_path_factory):
    return small_case(tmp_path_factory.mktemp("fens") / "case")


def test_answers_are_the_same_for_any_number_of_workers(fens):
    request = NewLoad((), (5.0, 20.0), largest_within_mw=20.0, settings=DAY)
    one, two = (answer_new_load(fens, request, workers=count) for count in (1, 2))
    xr.testing.assert_identical(one.dataset, two.dataset)
    assert one.record["answers"] == two.record["answers"]
    sites = StorageSites(5.0, (2.0,), settings=DAY)
    xr.testing.assert_identical(*(storage_sites(fens, sites, workers=count) for count in (1, 2)))


def started(case: Path, out: Path) -> subprocess.Popen:
    """Start a study of many runs in a process of its own."""
    return subprocess.Popen(
        [sys.executable, "-m", "simulator.cli", "new-load", str(case), "--all-buses", "--mw", "5",
         "--mw", "10", "--mw", "15", "--largest", "--largest-within", "2", "--commitment", "relaxed",
         "--hours", "24", "--workers", "1", "--out", str(out), "--json"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip


@pytest.mark.parametrize("how", [signal.SIGKILL, signal.SIGINT])
def test_a_study_that_was_cut_off_goes_on_and_ends_the_same(tmp_path, how):
    case = write_case(tmp_path / "case")
    scratch = tmp_path / ".out-unfinished"
    process = started(case, tmp_path / "out")
    until = time.monotonic() + 300
    while len(list(scratch.glob("*.npz"))) < 3 and time.monotonic() < until:
        time.sleep(0.02)
    process.send_signal(how)
    said = process.communicate(timeout=120)
    assert not (tmp_path / "out").exists()
    if how == signal.SIGINT:
        assert process.returncode == 130
        assert "call again to go on" in said[1]
        assert said[0] == ""
    left = len(list(scratch.glob("*.npz")))
    assert left >= 3
    process = started(case, tmp_path / "out")
    out, _ = process.communicate(timeout=600)
    assert process.returncode == 0
    record = json.loads(out)
    assert record["counts"]["runs_found_done"] == left < record["counts"]["runs"]
    assert not scratch.exists()
    request = NewLoad((), (5.0, 10.0, 15.0), largest_within_mw=2.0, settings=DAY)
    fresh = answer_new_load(small_case(tmp_path / "again"), request)
    with xr.open_dataset(tmp_path / "out" / "results.nc") as kept:
        xr.testing.assert_equal(kept.load(), fresh.dataset)
