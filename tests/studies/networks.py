"""Small cases whose answers follow by hand, for the tests of studies."""

from pathlib import Path

from simulator.case import Case
from tests.dispatch.building import case_of


def two_buses(
    folder: Path, *, demand: float | list[float] = 50.0, rating: float = 100.0, periods: int = 2
) -> Case:
    """Cheap power at a (10), dear at b (50), one line of `rating` MW from a to b, load at b."""
    return case_of(
        folder,
        periods=periods,
        buses=[{"bus": "a"}, {"bus": "b"}],
        lines=[
            {"line": "ab", "from_bus": "a", "to_bus": "b", "reactance_pu": 0.1, "rating_mw": rating}
        ],
        units=[
            {"unit": "cheap", "bus": "a", "max_output_mw": 500},
            {"unit": "dear", "bus": "b", "max_output_mw": 200},
        ],
        offers=[
            {"unit": "cheap", "up_to_mw": 500, "cost_per_mwh": 10},
            {"unit": "dear", "up_to_mw": 200, "cost_per_mwh": 50},
        ],
        loads=[{"load": "town", "bus": "b", "mw": demand}],
    )


def triangle(folder: Path, rating: float = 60.0) -> Case:
    """Equal reactances; 100 MW of cheap power at a (10), dear at b (50), 120 MW of load at c, ac limited.

    The flow from a to c is (2·what a feeds in + what b feeds in)/3 ≤ rating.
    """
    lines = [("ab", "a", "b", None), ("ac", "a", "c", rating), ("bc", "b", "c", None)]
    return case_of(
        folder,
        buses=[{"bus": "a"}, {"bus": "b"}, {"bus": "c"}],
        lines=[
            {"line": name, "from_bus": one, "to_bus": other, "reactance_pu": 0.1}
            | ({} if limit is None else {"rating_mw": limit})
            for name, one, other, limit in lines
        ],
        units=[
            {"unit": "cheap", "bus": "a", "max_output_mw": 100},
            {"unit": "dear", "bus": "b", "max_output_mw": 300},
        ],
        offers=[
            {"unit": "cheap", "up_to_mw": 100, "cost_per_mwh": 10},
            {"unit": "dear", "up_to_mw": 300, "cost_per_mwh": 50},
        ],
        loads=[{"load": "town", "bus": "c", "mw": 120.0}],
    )


def climbing(folder: Path) -> Case:
    """One bus: a unit of 300 MW that climbs 20 MW an hour, and load that climbs with it."""
    return case_of(
        folder,
        periods=3,
        buses=[{"bus": "a"}],
        units=[
            {"unit": "slow", "bus": "a", "max_output_mw": 300, "ramp_up_mw_per_h": 20,
             "initial_output_mw": 100},
        ],
        offers=[{"unit": "slow", "up_to_mw": 300, "cost_per_mwh": 20}],
        loads=[{"load": "town", "bus": "a", "mw": [100.0, 110.0, 120.0]}],
    )  # fmt: skip
