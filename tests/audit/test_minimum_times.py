"""Minimum times of units that are on or off, against a plain walk through the periods."""

from types import SimpleNamespace

import numpy as np
import pytest

from simulator.audit.commitment import _minimum_down, _minimum_up

LENGTH = 0.5
PERIODS = 14


def drawn(seed):
    """One unit: a schedule, outages, minimum times and hours before the run, all random."""
    random = np.random.default_rng(seed)
    out = random.random(PERIODS) < random.choice([0.0, 0.15])
    on = (np.cumsum(random.random(PERIODS) < 0.3) + random.integers(2)) % 2 * ~out
    hours = float(random.integers(1, 8)) * 0.4
    hours = {0: np.nan, 1: hours, 2: -hours}[int(random.integers(3))]
    before = on[0] if np.isnan(hours) else int(hours > 0)
    least = {
        "min_up_h": random.choice([0, 1, 1.2, 2.5]),
        "min_down_h": random.choice([0, 1, 1.7, 3]),
    }
    return on, out, hours, before, least


def unit_of(on, out, hours, before, least):
    """The same as what the checks look at."""
    change = np.diff(on, prepend=before)[:, None].astype(float)
    stop = np.maximum(-change, 0)
    return SimpleNamespace(
        on=on[:, None].astype(float), start=np.maximum(change, 0), out=out[:, None],
        chosen_stop=np.where(out[:, None], 0.0, stop), hours=np.array([hours]),
        numbers=lambda column: np.array([float(least[column])]),
        evidence=SimpleNamespace(
            length=LENGTH, elapsed=np.arange(PERIODS)[:, None] * LENGTH
        ),
    )  # fmt: skip


def broken(on, out, hours, before, least):
    """Walk through the periods; tell whether an up time and a down time are cut short."""
    state, spent, owes = before, abs(hours), not np.isnan(hours)
    up = down = False
    for now, forced in zip(on.tolist(), out.tolist(), strict=True):
        if now != state:
            short = owes and spent < least["min_up_h" if state else "min_down_h"] - 1e-9
            up |= short and state == 1 and not forced
            down |= short and state == 0
            state, spent, owes = now, 0.0, not forced
        spent += LENGTH
    return bool(up), bool(down)


@pytest.mark.parametrize("seed", range(150))
def test_minimum_times_agree_with_a_walk_through_the_periods(seed):
    drawing = drawn(seed)
    unit = unit_of(*drawing)
    found = bool(_minimum_up(unit).max() > 0.5), bool(_minimum_down(unit).max() > 0.5)
    assert found == broken(*drawing)


def test_some_of_the_drawings_break_each_rule_and_some_none():
    verdicts = {broken(*drawn(seed)) for seed in range(150)}
    assert {(True, False), (False, True), (False, False)} <= verdicts


def test_an_outage_ends_what_is_left_of_an_up_time():
    on, out = np.array([0, 1, 0, 0] + [0] * 10), np.array([0, 0, 1, 0] + [0] * 10, bool)
    least = {"min_up_h": 3.0, "min_down_h": 0.0}
    assert _minimum_up(unit_of(on, out, -9.0, 0, least)).max() <= 0
    assert _minimum_up(unit_of(on, out & False, -9.0, 0, least)).max() == 1


def test_a_stop_by_outage_asks_for_no_down_time():
    on, out = np.array([1, 0, 1, 1] + [1] * 10), np.array([0, 1, 0, 0] + [0] * 10, bool)
    least = {"min_up_h": 0.0, "min_down_h": 3.0}
    assert _minimum_down(unit_of(on, out, 9.0, 1, least)).max() <= 0
    assert _minimum_down(unit_of(on, out & False, 9.0, 1, least)).max() == 1
