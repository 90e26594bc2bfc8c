"""Local times and clock changes: what was written is found again, whatever the zone and the length."""

import numpy as np
import pandas as pd
import pytest

from simulator.case.clock import by_order, read_stamps


def nights(zone, start, end, step):
    return pd.date_range(start, end, freq=step, tz=zone, inclusive="left")


def read_back(instants):
    """Write instants as local times without offset and read them in order."""
    return by_order(read_stamps(instants.strftime("%Y-%m-%dT%H:%M"), str(instants.tz)))


CHANGES = [
    ("Europe/Dublin", "2026-10-24 20:00", "2026-10-25 06:00"),
    ("Europe/Dublin", "2027-03-27 20:00", "2027-03-28 06:00"),
    ("America/St_Johns", "2026-10-31 20:00", "2026-11-01 06:00"),
    ("Australia/Lord_Howe", "2026-04-04 20:00", "2026-04-05 06:00"),
    ("Australia/Lord_Howe", "2026-10-03 20:00", "2026-10-04 06:00"),
    ("Pacific/Apia", "2011-12-29 20:00", "2011-12-31 06:00"),
    ("Asia/Kathmandu", "2026-10-31 20:00", "2026-11-01 06:00"),
]


@pytest.mark.parametrize(("zone", "start", "end"), CHANGES)
@pytest.mark.parametrize("step", ["10min", "15min", "30min", "60min"])
def test_times_across_a_clock_change_are_found_again(zone, start, end, step):
    instants = nights(zone, start, end, step)
    assert (read_back(instants) == instants.tz_convert("UTC")).all()


@pytest.mark.parametrize("step", ["15min", "30min", "60min"])
def test_times_may_begin_or_end_anywhere_in_the_night(step):
    instants = nights("Europe/Dublin", "2026-10-24 22:00", "2026-10-25 05:00", step)
    for first in range(len(instants) - 4):
        night = instants[first:]
        # What begins in the last repeated period has nothing before the change to tell it by.
        assert (read_back(night) == night.tz_convert("UTC")).all()
    for last in range(4, len(instants)):
        night = instants[:last]
        assert (read_back(night) == night.tz_convert("UTC")).all()


def test_one_repeated_time_alone_is_the_first():
    stamps = read_stamps(["2026-10-25T01:00"], "Europe/Dublin")
    assert by_order(stamps)[0] == pd.Timestamp("2026-10-25T00:00Z")
    assert stamps.ambiguous.tolist() == [True]


def test_a_gap_before_the_repeated_hour_does_not_shift_it():
    texts = [
        "2026-10-24T21:00",
        "2026-10-24T22:00",
        "2026-10-25T01:00",
        "2026-10-25T01:00",
        "2026-10-25T02:00",
    ]
    assert [instant.hour for instant in by_order(read_stamps(texts, "Europe/Dublin"))] == [
        20,
        21,
        0,
        1,
        2,
    ]


def test_no_times_at_all():
    assert len(by_order(read_stamps([], "Europe/Dublin"))) == 0


WRITTEN = [
    ("2027-01-11", "2027-01-11T05:00Z"),
    ("2027-01-11T06:30", "2027-01-11T11:30Z"),
    ("2027-01-11 06:30:00", "2027-01-11T11:30Z"),
    ("2027-01-11T06:30:00.5", "2027-01-11T11:30:00.5Z"),
    ("2027-01-11T06:30Z", "2027-01-11T06:30Z"),
    ("2027-01-11T06:30+02", "2027-01-11T04:30Z"),
    ("2027-01-11T06:30-0330", "2027-01-11T10:00Z"),
    ("2027-01-11T06:30+05:45", "2027-01-11T00:45Z"),
]


@pytest.mark.parametrize(("text", "instant"), WRITTEN)
def test_forms_of_iso_8601(text, instant):
    stamps = read_stamps([text], "America/New_York")
    assert stamps.early[0] == stamps.late[0] == pd.Timestamp(instant)
    assert not (stamps.malformed | stamps.skipped | stamps.ambiguous).any()


@pytest.mark.parametrize(
    "text", ["", " ", "2027", "2027-13-01", "2027-02-29", "11.01.2027", "2027-01-11T24:30", "2027-W02-1",
             "2027-01-11T06", "2027-01-11T06:30 CET", "1899-12-31", "2200-01-01", "2027-01-11T06:30+"]
)  # fmt: skip
def test_what_is_no_time(text):
    stamps = read_stamps([text], "UTC")
    assert stamps.malformed.tolist() == [True]
    assert stamps.early.isna().all()


def test_faults_are_told_apart_stamp_by_stamp():
    texts = [
        "2027-03-28T00:30",
        "2027-03-28T01:30",
        "x",
        "2026-10-25T01:30",
        "2027-03-28T01:30+00:00",
    ]
    stamps = read_stamps(texts, "Europe/Dublin")
    np.testing.assert_array_equal(stamps.skipped, [False, True, False, False, False])
    np.testing.assert_array_equal(stamps.malformed, [False, False, True, False, False])
    np.testing.assert_array_equal(stamps.ambiguous, [False, False, False, True, False])
