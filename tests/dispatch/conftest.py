"""Fixtures: random cases, each written and read once in a process."""

from collections.abc import Callable
from functools import cache

import pytest

from simulator.case import Case
from tests.dispatch.building import case_of
from tests.dispatch.drawing import drawn


@pytest.fixture(scope="session")
def random_case(tmp_path_factory) -> Callable[[int], Case]:
    """The random case of a seed."""
    folder = tmp_path_factory.mktemp("random")
    return cache(lambda seed: case_of(folder / str(seed), **drawn(seed)))
