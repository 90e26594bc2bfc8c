"""Local times, stretches of hours, local days and the steps of pictures."""

import numpy as np
import pytest

from simulator.report.moments import Clock, choose_steps, read_clock
from tests.report.conftest import results


def clock(hours: int, start: str, zone: str = "Europe/Dublin", period_hours: float = 1.0) -> Clock:
    return read_clock(results(hours, start=start, time_zone=zone, period_hours=period_hours))


def test_labels_are_local():
    assert clock(2, "2027-07-01T12:00").label(0) == "Thu 1 Jul 13:00"
    assert (
        clock(2, "2027-07-01T12:00", "Asia/Kolkata").label(1, with_year=True)
        == "Thu 1 Jul 2027 18:30"
    )


def test_years_are_named_where_a_run_spans_two():
    assert clock(30, "2027-12-31T12:00").label(0) == "Fri 31 Dec 2027 12:00"
    assert clock(12, "2027-12-31T12:00").label(0) == "Fri 31 Dec 12:00"


def test_a_skipped_hour_is_not_ambiguous():
    spring = clock(4, "2027-03-28T00:00")
    assert [spring.time(edge) for edge in range(3)] == ["00:00", "02:00", "03:00"]


@pytest.mark.parametrize(
    ("first", "last", "said"),
    [(0, 0, "Mon 11 Jan 00:00–01:00"), (22, 23, "Mon 11 Jan 22:00 – Tue 12 Jan 00:00")],
)
def test_spans_say_the_end_of_the_last_period(first, last, said):
    assert clock(48, "2027-01-11T00:00").span(first, last) == said


def test_consecutive_periods_are_joined():
    found = clock(48, "2027-01-11T00:00").spans(np.array([0, 1, 2, 7, 9, 10]))
    assert found == [(0, 2), (7, 7), (9, 10)]


@pytest.mark.parametrize(
    ("start", "hours", "whole"),
    [
        ("2027-01-11T00:00", 48, [0, 1]),
        ("2027-01-11T06:00", 48, [1]),
        ("2027-01-11T00:00", 47, [0]),
        ("2027-10-30T23:00", 25, [0]),
        ("2027-10-30T23:00", 24, []),
        ("2027-03-28T00:00", 23, [0]),
        ("2027-03-28T00:00", 1, []),
    ],
)
def test_whole_local_days_run_from_midnight_to_midnight(start, hours, whole):
    assert clock(hours, start).whole_days == whole


def test_few_periods_are_steps_of_their_own():
    steps = choose_steps(clock(168, "2027-01-11T00:00"))
    assert (len(steps), steps.unit, steps.averaged) == (168, "hour", False)


def test_many_short_periods_become_hours():
    steps = choose_steps(clock(2016, "2027-01-11T00:00", period_hours=1 / 12))
    assert (len(steps), steps.unit) == (168, "hour")


def test_means_weigh_the_periods_of_each_step():
    steps = choose_steps(clock(1601, "2027-01-11T00:00"))
    assert steps.unit == "day"
    values = np.arange(1601.0)
    assert steps.mean(values)[[0, -1]].tolist() == [11.5, values[-17:].mean()]
    assert steps.last(values)[0] == 23
    assert steps.total(values).sum() == values.sum()
