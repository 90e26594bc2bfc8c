"""Hourly files: values, times, clock changes, period lengths, and the periods that files share."""

import io

import numpy as np
import pandas as pd
import pytest

from simulator.case import read_case
from tests.support import case_texts, hourly_frames, problems_of, write_case

DEMAND, WEATHER = "hourly/demand.csv", "hourly/weather.csv"


def demand(times):
    """Return a demand file of some times, and no outages, so that times stand for themselves."""
    rows = [f"{time},{0.5 + place / 1000}" for place, time in enumerate(times)]
    return "\n".join(["time,demand", *rows]) + "\n"


def only_demand(folder, times, zone="Europe/Dublin"):
    """Write a case whose only hourly file has these times."""
    settings = f'format = 1\nname = "clock"\ntime_zone = "{zone}"\n'
    gone = [path for path in case_texts() if path.split("/")[0] in {"fleet", "calendar", "hourly"}]
    files = {
        **dict.fromkeys(gone),
        "case.toml": settings,
        "fleet/units.csv": "unit,bus,max_output_mw\n",
        "network/lines.csv": "line,from_bus,to_bus,reactance_pu\na,Northfen,Midfen,1\nb,Midfen,Southfen,1",
        DEMAND: demand(times),
    }
    return write_case(folder, files)


def local_times(start, end, step="60min", zone="Europe/Dublin"):
    return pd.date_range(start, end, freq=step, tz=zone, inclusive="left")


# --- values ---------------------------------------------------------------------------------------

VALUES = [
    ("", "blank"), ("x", '"x"'), ("nan", '"nan"'), ("NA", '"NA"'), ("inf", '"inf"'),
    ("-Infinity", '"-Infinity"'), ("1e13", '"1e13"'), ("0,7", '"0,7"'), ("true", '"true"'),
    ("0x1", '"0x1"'), ("1_0", '"1_0"'),
]  # fmt: skip


@pytest.mark.parametrize(("value", "found"), VALUES)
def test_a_cell_without_a_number_is_told(tmp_path, value, found):
    (problem,) = problems_of(write_case(tmp_path, cells={(DEMAND, 5, "demand"): value}))
    assert (problem.path, problem.row, problem.column) == (DEMAND, 5, "demand")
    assert (problem.subject, problem.found) == ('profile "demand"', found)


def test_a_column_without_any_number_is_told_in_six_lines(tmp_path):
    text = case_texts()[DEMAND]
    blank = "\n".join(
        [text.splitlines()[0], *(f"{line.split(',')[0]}," for line in text.splitlines()[1:])]
    )
    problems = problems_of(write_case(tmp_path, {DEMAND: blank}))
    assert [p.row for p in problems] == [2, 3, 4, 5, 6, 7]
    assert problems[-1].found == "43 more like the five above"


@pytest.mark.parametrize(
    ("path", "column", "value", "user"),
    [
        (WEATHER, "wind", "1.01", 'plant "ridge wind"'),
        (WEATHER, "wind", "-0.01", 'plant "ridge wind"'),
        (WEATHER, "gas 2 on", "0.5", 'unit "gas 2"'),
        (WEATHER, "warmth", "-1", 'line "N-M"'),
        (WEATHER, "gas price", "-1", 'fuel "gas"'),
        (WEATHER, "watch", "-1", 'product "spinning"'),
    ],
)
def test_a_value_that_its_use_does_not_allow_is_told(tmp_path, path, column, value, user):
    cells = {(path, row, column): value for row in (4, 6)}
    (problem,) = problems_of(write_case(tmp_path, cells=cells))
    assert (problem.path, problem.row, problem.column) == (path, 4, column)
    assert user in problem.rule
    assert problem.found == f"{value} in row 4, {value} in row 6"


def test_a_load_profile_may_be_anything(tmp_path):
    case = read_case(write_case(tmp_path, cells={(DEMAND, 4, "demand"): "-7"}))
    assert case.profiles["demand"].iloc[2] == -7.0


def test_notes_in_hourly_files_are_let_be(tmp_path):
    assert "note" not in read_case(write_case(tmp_path)).profiles


def test_quoted_files_read_like_plain_ones(tmp_path):
    plain = read_case(write_case(tmp_path / "plain")).profiles
    frames = hourly_frames()
    quoted = {path: frame.to_csv(index=False, quoting=1) for path, frame in frames.items()}
    again = read_case(write_case(tmp_path / "quoted", quoted)).profiles
    pd.testing.assert_frame_equal(plain, again)


# --- names ----------------------------------------------------------------------------------------


def test_the_first_column_must_be_time(tmp_path):
    text = case_texts()[DEMAND].replace("time", "hour", 1)
    (problem,) = problems_of(write_case(tmp_path, {DEMAND: text}))
    assert (problem.path, problem.row, problem.found) == (DEMAND, 1, '"hour"')


def test_a_file_without_a_profile_is_told(tmp_path):
    text = "\n".join(["time", *hourly_frames()[DEMAND]["time"]]) + "\n"
    problems = problems_of(write_case(tmp_path, {"hourly/empty.csv": text}))
    assert [(p.path, p.rule) for p in problems] == [("hourly/empty.csv", "must have a profile")]


def test_a_profile_name_keeps_the_rules_of_names(tmp_path):
    text = case_texts()[DEMAND].replace("demand", "demand ", 1)
    told = [p for p in problems_of(write_case(tmp_path, {DEMAND: text})) if p.path == DEMAND]
    assert [(p.row, p.column) for p in told] == [(1, "demand ")]


def test_a_profile_in_two_files_is_told(tmp_path):
    text = case_texts()[DEMAND]
    (problem,) = problems_of(write_case(tmp_path, {"hourly/more.csv": text}))
    assert (problem.path, problem.row, problem.column) == ("hourly/more.csv", 1, "demand")
    assert problem.found == "it in hourly/demand.csv too"


# --- times ----------------------------------------------------------------------------------------

TIMES = ["2027-01-11T00:00", "2027-01-11T01:00", "2027-01-11T02:00", "2027-01-11T03:00"]


@pytest.mark.parametrize(
    "wrong",
    ["11.01.2027 01:00", "", "2027-02-30T01:00", "2027-01-11T25:00", "1802-01-11T01:00", "noon"],
)
def test_a_time_that_is_none_is_told(tmp_path, wrong):
    (problem,) = problems_of(only_demand(tmp_path, [TIMES[0], wrong, *TIMES[2:]]))
    assert (problem.path, problem.row, problem.column) == (DEMAND, 3, "time")
    assert problem.rule == "must be an ISO 8601 time"


@pytest.mark.parametrize(
    ("times", "row", "found", "remedy"),
    [
        ([*TIMES, "2027-01-11T06:00"], 6, "180 minutes", "add the missing rows"),
        ([*TIMES, "2027-01-11T03:00"], 6, "0 minutes", "remove the repeat"),
        ([*TIMES, "2027-01-11T02:00"], 6, "-60 minutes", "sort the rows by time"),
        ([*TIMES, "2027-01-11T04:10"], 6, "70 minutes", "mend the time"),
        ([*TIMES, "2027-01-11T03:20"], 6, "20 minutes", "mend the time"),
    ],
)
def test_a_time_that_does_not_follow_is_told(tmp_path, times, row, found, remedy):
    (problem,) = problems_of(only_demand(tmp_path, times))
    assert (problem.path, problem.row, problem.column) == (DEMAND, row, "time")
    assert (problem.found, problem.remedy) == (found, remedy)
    assert times[-1] in problem.subject


@pytest.mark.parametrize("step", [1, 5, 15, 20, 30, 60])
def test_lengths_that_divide_an_hour_are_fine(tmp_path, step):
    times = local_times("2027-01-11 00:00", "2027-01-11 02:00", f"{step}min")
    case = read_case(only_demand(tmp_path, times.strftime("%Y-%m-%dT%H:%M")))
    assert case.time.period_hours == pytest.approx(step / 60, rel=1e-15)
    assert len(case.time) == 120 // step


@pytest.mark.parametrize("step", ["120min", "25min", "90s", "1D"])
def test_lengths_that_do_not_divide_an_hour_are_told(tmp_path, step):
    times = pd.date_range("2027-01-11", periods=6, freq=step).strftime("%Y-%m-%dT%H:%M:%S")
    (problem,) = problems_of(only_demand(tmp_path, times))
    assert (problem.path, problem.row) == (DEMAND, 3)
    assert "must be 60 minutes, or a whole number of minutes that divides 60" in problem.rule


@pytest.mark.parametrize("times", [[], TIMES[:1]])
def test_a_file_of_less_than_two_periods_is_told(tmp_path, times):
    (problem,) = problems_of(only_demand(tmp_path, times))
    assert (problem.path, problem.found) == (DEMAND, f"{len(times)} periods")


def test_a_row_left_out_for_its_shape_is_no_gap_as_well(tmp_path):
    text = demand(TIMES).replace("T02:00,", "T02:00,,,x")
    problems = problems_of(
        write_case(only_demand(tmp_path, TIMES), {DEMAND: text, **_as_written(tmp_path)})
    )
    assert [(p.row, p.rule) for p in problems] == [(4, "must have one cell for each column")]


def _as_written(folder):
    """Return the files of a folder, so that writing over it keeps them."""
    written = {path: folder / path for path in case_texts() if path != DEMAND}
    return {path: file.read_bytes() if file.exists() else None for path, file in written.items()}


# --- clock changes --------------------------------------------------------------------------------

WEEKS = [
    ("2027-03-22", "2027-03-29", 167),
    ("2026-10-19", "2026-10-26", 169),
    ("2027-01-11", "2027-01-18", 168),
]


@pytest.mark.parametrize(("start", "end", "hours"), WEEKS)
def test_a_week_with_a_clock_change_has_its_true_hours(tmp_path, start, end, hours):
    instants = local_times(start, end)
    assert len(instants) == hours
    case = read_case(only_demand(tmp_path, instants.strftime("%Y-%m-%dT%H:%M")))
    assert (case.time.periods == instants.tz_convert("UTC")).all()
    assert (case.time.local == instants).all()


@pytest.mark.parametrize("form", ["%Y-%m-%dT%H:%M%z", "%Y-%m-%d %H:%M:%S%z"])
@pytest.mark.parametrize(("start", "end", "hours"), WEEKS)
def test_offsets_say_the_same(tmp_path, start, end, hours, form):
    instants = local_times(start, end)
    case = read_case(only_demand(tmp_path, instants.strftime(form)))
    assert len(case.time) == hours
    assert (case.time.periods == instants.tz_convert("UTC")).all()


def test_utc_marked_by_z_and_mixed_forms_say_the_same(tmp_path):
    instants = local_times("2026-10-24", "2026-10-27")
    utc = instants.tz_convert("UTC").strftime("%Y-%m-%dT%H:%MZ")
    local = instants.strftime("%Y-%m-%d %H:%M")
    mixed = [
        one if place % 3 else other
        for place, (one, other) in enumerate(zip(utc, local, strict=True))
    ]
    for name, times in {"utc": utc, "mixed": mixed}.items():
        case = read_case(only_demand(tmp_path / name, times))
        assert (case.time.periods == instants.tz_convert("UTC")).all()


def test_a_local_time_that_does_not_exist_is_told(tmp_path):
    times = ["2027-03-28T00:00", "2027-03-28T01:00", "2027-03-28T02:00", "2027-03-28T03:00"]
    (problem,) = problems_of(only_demand(tmp_path, times))
    assert (problem.path, problem.row, problem.column) == (DEMAND, 3, "time")
    assert problem.rule == "must exist in Europe/Dublin"


def test_a_repeated_hour_that_is_left_out_is_a_gap(tmp_path):
    times = ["2026-10-25T00:00", "2026-10-25T01:00", "2026-10-25T02:00", "2026-10-25T03:00"]
    (problem,) = problems_of(only_demand(tmp_path, times))
    assert (problem.row, problem.found) == (4, "120 minutes")


def test_a_repeated_time_without_a_clock_change_is_a_repeat(tmp_path):
    times = local_times("2026-10-24", "2026-10-27").strftime("%Y-%m-%dT%H:%M")
    (problem,) = problems_of(only_demand(tmp_path, times, zone="UTC"))
    assert problem.remedy == "remove the repeat"


# --- shared periods -------------------------------------------------------------------------------


def shifted(frame, hours):
    times = pd.to_datetime(frame["time"]) + pd.Timedelta(hours=hours)
    return frame.assign(time=times.dt.strftime("%Y-%m-%dT%H:%M")).to_csv(index=False)


def test_files_of_different_spans_share_what_they_overlap(tmp_path):
    case = read_case(write_case(tmp_path, {DEMAND: shifted(hourly_frames()[DEMAND], 5)}))
    assert len(case.time) == len(case.profiles) == 43
    assert case.time.local[0] == pd.Timestamp("2027-01-11T05:00", tz="Europe/Dublin")
    np.testing.assert_array_equal(case.profiles["demand"], hourly_frames()[DEMAND]["demand"][:43])
    np.testing.assert_array_equal(case.profiles["wind"], hourly_frames()[WEATHER]["wind"][5:])
    assert case.time.ends_first.path == WEATHER
    assert [each.path for each in case.time.coverage] == [DEMAND, WEATHER]
    assert case.time.coverage[0].end == pd.Timestamp("2027-01-13T05:00", tz="UTC")


def test_files_that_share_nothing_are_told(tmp_path):
    (problem,) = problems_of(write_case(tmp_path, {DEMAND: shifted(hourly_frames()[DEMAND], 48)}))
    assert problem.rule == "must share periods with the other files"
    assert (problem.path, problem.found.count(DEMAND)) == (WEATHER, 1)


def test_files_out_of_step_are_told(tmp_path):
    (problem,) = problems_of(
        write_case(tmp_path, {WEATHER: shifted(hourly_frames()[WEATHER], 0.5)})
    )
    assert problem.path == WEATHER
    assert "must have periods that begin when" in problem.rule


def test_files_of_different_length_of_period_are_told(tmp_path):
    half = hourly_frames(hours=48, step=30)[WEATHER].to_csv(index=False)
    (problem,) = problems_of(write_case(tmp_path, {WEATHER: half}))
    assert (problem.path, problem.found) == (
        WEATHER,
        "30 minutes, hourly/demand.csv has 60 minutes",
    )


@pytest.mark.parametrize("step", [15, 30])
def test_a_whole_case_of_shorter_periods(tmp_path, step):
    case = read_case(write_case(tmp_path, step=step))
    assert len(case.time) == 48 * 60 // step
    assert case.units.at["gas 2", "start_ramp_mw"] == 30 * step / 60


# --- Parquet --------------------------------------------------------------------------------------


def parquet(frame):
    out = io.BytesIO()
    frame.to_parquet(out)
    return out.getvalue()


def forms(frame):
    """Return a frame with its times as text, local, aware, in UTC, as index, and numbers narrower."""
    local = pd.to_datetime(frame["time"])
    aware = local.dt.tz_localize("Europe/Dublin", ambiguous="infer")
    return {
        "text": frame,
        "local": frame.assign(time=local),
        "aware": frame.assign(time=aware),
        "utc": frame.assign(time=aware.dt.tz_convert("UTC")),
        "nanoseconds": frame.assign(time=local.astype("datetime64[ns]")),
        "index": frame.assign(time=aware).set_index("time"),
        "category": frame.assign(time=frame["time"].astype("category")),
    }


@pytest.mark.parametrize(
    "form", ["text", "local", "aware", "utc", "nanoseconds", "index", "category"]
)
def test_parquet_equals_csv(tmp_path, form):
    week = {"hours": 169, "start": "2026-10-19T00:00"}
    csv = read_case(write_case(tmp_path / "csv", **week))
    files = dict.fromkeys(hourly_frames())
    for path, frame in hourly_frames(**week).items():
        files[path.replace(".csv", ".parquet")] = parquet(forms(frame)[form])
    again = read_case(write_case(tmp_path / "parquet", files, **week))
    pd.testing.assert_frame_equal(csv.profiles, again.profiles)
    assert (csv.time.periods == again.time.periods).all()


def parquet_problems(folder, frame):
    data = frame if isinstance(frame, bytes) else parquet(frame)
    return problems_of(write_case(folder, {DEMAND: None, "hourly/demand.parquet": data}))


def test_faults_in_parquet_are_told_with_rows(tmp_path):
    frame = hourly_frames()[DEMAND]
    frame.loc[[3, 7], "demand"] = [np.nan, np.inf]
    told = parquet_problems(tmp_path, frame)
    assert [(p.row, p.column, p.found) for p in told] == [
        (5, "demand", "blank"),
        (9, "demand", "inf"),
    ]


@pytest.mark.parametrize(
    ("change", "column", "rule"),
    [
        (lambda f: f.assign(demand="x"), "demand", "must hold numbers"),
        (lambda f: f.assign(demand=True), "demand", "must hold numbers"),
        (lambda f: f.assign(time=range(len(f))), "time", "must hold timestamps or ISO 8601 text"),
        (
            lambda f: f.rename(columns={"time": "hour"}),
            "time",
            'must have each column once, one of them "time"',
        ),
    ],
)
def test_columns_of_the_wrong_type_in_parquet_are_told(tmp_path, change, column, rule):
    told = [
        (p.row, p.column, p.rule)
        for p in parquet_problems(tmp_path, change(hourly_frames()[DEMAND]))
    ]
    assert told == [(1, column, rule)]


FAR = "a year outside 1900 to 2199"


@pytest.mark.parametrize("zone", [None, "UTC", "Asia/Tokyo"])
@pytest.mark.parametrize(
    ("wrong", "found"),
    [(pd.NaT, "blank"), ("1802-01-01", f'"{FAR}"'), ("9999-12-31", f'"{FAR}"')],
)
def test_timestamps_that_are_none_are_told(tmp_path, wrong, found, zone):
    times = pd.to_datetime(hourly_frames()[DEMAND]["time"]).dt.tz_localize(zone)
    times[4] = pd.Timestamp(wrong, tz=zone) if isinstance(wrong, str) else wrong
    frame = hourly_frames()[DEMAND].assign(time=times)
    files = {DEMAND: None, "hourly/demand.parquet": parquet(frame)}
    told = [
        p for p in problems_of(write_case(tmp_path, files)) if p.rule == "must be an ISO 8601 time"
    ]
    assert [(p.path, p.row, p.found) for p in told] == [("hourly/demand.parquet", 6, found)]


def test_local_timestamps_that_a_clock_change_skips_are_told(tmp_path):
    times = pd.date_range("2027-03-28T00:00", periods=48, freq="h")
    told = parquet_problems(tmp_path, hourly_frames()[DEMAND].assign(time=times))
    assert [(p.row, p.rule) for p in told] == [(3, "must exist in Europe/Dublin")]


@pytest.mark.parametrize("keep", [0, 3, 200, -1, -9])
def test_a_cut_parquet_file_is_told(tmp_path, keep):
    (problem,) = parquet_problems(tmp_path, parquet(hourly_frames()[DEMAND])[:keep])
    assert (problem.path, problem.rule) == ("hourly/demand.parquet", "must be a Parquet table")


def test_integers_and_narrow_numbers_in_parquet_are_numbers(tmp_path):
    frame = hourly_frames()[WEATHER]
    narrow = frame.assign(
        wind=frame["wind"].astype("float32"), warmth=frame["warmth"].round().astype("int8")
    )
    case = read_case(
        write_case(tmp_path, {WEATHER: None, "hourly/weather.parquet": parquet(narrow)})
    )
    np.testing.assert_allclose(case.profiles["wind"], frame["wind"], rtol=1e-6)
    assert (case.profiles["warmth"] == 1.0).all()
