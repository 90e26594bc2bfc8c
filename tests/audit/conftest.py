"""Good runs, solved once."""

import pytest

from simulator.horizon import plan_run, run
from simulator.results import to_dataset
from tests.audit.plants import HOURS, town_case


@pytest.fixture(scope="session")
def town(tmp_path_factory):
    return town_case(tmp_path_factory.mktemp("town") / "case")


@pytest.fixture(scope="session")
def solved(town):
    """The day of the case, in windows that look past what is kept."""
    plan = plan_run(town, hours=HOURS, window_hours=12, keep_hours=8, commitment="given")
    return to_dataset(run(town, plan))


@pytest.fixture(scope="session")
def ready_town(tmp_path_factory):
    """The case with reserves."""
    return town_case(tmp_path_factory.mktemp("ready") / "case", reserves=True)


@pytest.fixture(scope="session")
def solved_ready(ready_town):
    """The same day with reserves."""
    plan = plan_run(ready_town, hours=HOURS, window_hours=12, keep_hours=8, commitment="given")
    return to_dataset(run(ready_town, plan))


@pytest.fixture
def ready(solved_ready):
    """A copy of the good dataset with reserves."""
    return solved_ready.copy(deep=True)


@pytest.fixture(scope="session")
def guarded_town(tmp_path_factory):
    """The case with a corridor, contingencies and losses."""
    return town_case(tmp_path_factory.mktemp("guarded") / "case", guarded=True)


@pytest.fixture(scope="session")
def solved_guarded(guarded_town):
    """The same day, secure and with losses."""
    plan = plan_run(
        guarded_town,
        hours=HOURS,
        window_hours=12,
        keep_hours=8,
        commitment="given",
        limits="secure",
    )
    return to_dataset(run(guarded_town, plan))


@pytest.fixture
def guarded(solved_guarded):
    """A copy of that good dataset."""
    return solved_guarded.copy(deep=True)


@pytest.fixture
def dataset(solved):
    """A copy of the good dataset, to do anything with."""
    return solved.copy(deep=True)
