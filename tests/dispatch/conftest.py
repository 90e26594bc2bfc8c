"""Fixtures: random cases, each written and read once in a process."""

from collections.abc import Callable
from functools import cache

import pytest

from simulator.case import Case
from tests.dispatch.building import case_of
from tests.dispatch.drawing import drawn, lossless, secured


@pytest.fixture(scope="session")
def random_case(tmp_path_factory) -> Callable[[int], Case]:
    """The random case of a seed."""
    return cache(lambda seed: case_of(tmp_path_factory.mktemp("random") / "case", **drawn(seed)))


@pytest.fixture(scope="session")
def convex_case(tmp_path_factory) -> Callable[[int], Case]:
    """The same with ties that lose nothing, so that its optimum is that of a linear program."""
    return cache(lambda seed: case_of(tmp_path_factory.mktemp("convex") / "case", **lossless(seed)))


@pytest.fixture(scope="session")
def secured_case(tmp_path_factory) -> Callable[[int], Case]:
    """The same with corridors, emergency ratings and contingencies."""
    return cache(lambda seed: case_of(tmp_path_factory.mktemp("secured") / "case", **secured(seed)))
