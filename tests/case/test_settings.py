"""case.toml: every fault with its line, its dotted key and plain words."""

import pytest

from simulator.case import read_case
from tests.support import case_texts, problems_of, write_case

TEXT = case_texts()["case.toml"]
LINES = TEXT.splitlines()


def row_of(line):
    return LINES.index(line) + 1


FAULTS = [
    ("format = 1", "format = 2", "format", "must be 1"),
    ("format = 1", "", "format", "must be there"),
    ('name = "Three fens"', 'name = ""', "name", "must not be empty"),
    ('name = "Three fens"', "name = 3", "name", "must be text"),
    ('currency = "EUR"', "currency = true", "currency", "must be text"),
    ('time_zone = "Europe/Dublin"', 'time_zone = "Europe/Dublim"', "time_zone", 'mean "Europe/Dublin"?'),
    ("base_mva = 100", "base_mva = 0", "base_mva", "must be greater than 0"),
    ("base_mva = 100", 'base_mva = "100"', "base_mva", "must be a number"),
    ("base_mva = 100", "base_mva = inf", "base_mva", "must be a finite number"),
    ("base_mva = 100", "base_mwa = 100", "base_mwa", 'did you mean "base_mva"?'),
    ("window_hours = 48", "window_hours = -48", "horizon.window_hours", "must be greater than 0"),
    ("window_hours = 48", "window_hours = 12", "horizon.keep_hours", "must be at most window_hours"),
    ("window_hours = 48", "window_hours = 48.5", "horizon.window_hours", "whole number of periods of 1 h"),
    ("keep_hours = 24", "keep_hours = true", "horizon.keep_hours", "must be a number"),
    ("keep_hours = 24", "keep_hour = 24", "horizon.keep_hour", 'did you mean "keep_hours"?'),
    ("[horizon]", "[horizons]", "horizons", 'did you mean "horizon"?'),
    ("unserved = 5000.0", "unserved = -1", "penalties.unserved", "must be at least 0"),
    ("surplus = 500", "surplus = nan", "penalties.surplus", "must be"),
    ('mode = "optimal"', 'mode = "best"', "commitment.mode", 'must be "given", "relaxed" or "optimal"'),
    ("mip_gap = 0.0001", "mip_gap = -1", "commitment.mip_gap", "must be at least 0"),
    ('limits = "lines"', 'limits = "line"', "network.limits", 'must be "none", "lines" or "secure"'),
    ("losses = false", "losses = 0", "network.losses", "must be true or false"),
    ("carbon_price_per_t = 10.0", "carbon_price_per_t = -5", "emissions.carbon_price_per_t", "at least 0"),
]  # fmt: skip


@pytest.mark.parametrize(("line", "changed", "key", "words"), FAULTS)
def test_a_faulty_setting_is_told_by_its_key_and_line(tmp_path, line, changed, key, words):
    (problem,) = problems_of(write_case(tmp_path, {"case.toml": TEXT.replace(line, changed, 1)}))
    assert (problem.path, problem.column) == ("case.toml", key)
    moved = "keep_hours = 24" if key == "horizon.keep_hours" else line
    assert problem.row == (1 if changed == "" else row_of(moved))
    assert problem.subject == f'setting "{key}"'
    assert words in str(problem)
    assert "pydantic" not in str(problem)


def test_a_section_that_is_no_section(tmp_path):
    text = 'format = 1\nname = "x"\nhorizon = 48\n'
    (problem,) = problems_of(write_case(tmp_path, {"case.toml": text}))
    assert (problem.row, problem.column, problem.rule) == (3, "horizon", "must be a section")


@pytest.mark.parametrize(
    ("text", "row"),
    [
        ('format = 1\nname = "open\n', 2),
        ("format = 1\nformat = 1\n", 2),
        ("format = 1\nname: x\n", 2),
        ("format = " + "[" * 2000, 1),
        ("format = " + "9" * 5000, 1),
    ],
)
def test_what_is_no_toml_is_told_with_its_line(tmp_path, text, row):
    (problem,) = problems_of(write_case(tmp_path, {"case.toml": text}))
    assert (problem.path, problem.row, problem.rule) == ("case.toml", row, "must be TOML in UTF-8")


@pytest.mark.parametrize("data", [b"\xff\xfef", b"name = '\xe9'", b"a\0"])
def test_bytes_that_are_no_text_are_told(tmp_path, data):
    (problem,) = problems_of(write_case(tmp_path, {"case.toml": data}))
    assert (problem.path, problem.rule) == ("case.toml", "must be TOML in UTF-8")


def test_a_number_beyond_all_numbers_is_told(tmp_path):
    text = TEXT.replace("base_mva = 100", "base_mva = 1" + "0" * 400)
    (problem,) = problems_of(write_case(tmp_path, {"case.toml": text}))
    assert problem.column == "base_mva"


def test_several_faults_are_told_together(tmp_path):
    text = TEXT.replace("format = 1", "format = 2").replace("losses = false", 'losses = "no"')
    problems = problems_of(write_case(tmp_path, {"case.toml": text}))
    assert [p.column for p in problems] == ["format", "network.losses"]


def test_a_faulty_zone_brings_no_other_problems(tmp_path):
    text = TEXT.replace("Europe/Dublin", "Europe/Nowhere")
    problems = problems_of(
        write_case(tmp_path, {"case.toml": text}, start="2026-10-19T00:00", hours=169)
    )
    assert [p.column for p in problems] == ["time_zone"]


def test_left_out_settings_have_their_defaults(tmp_path):
    settings = read_case(
        write_case(tmp_path, {"case.toml": 'format = 1\nname = "bare"\n'})
    ).settings
    assert (settings.currency, settings.time_zone, settings.base_mva) == ("EUR", "UTC", 100.0)
    assert (settings.horizon.window_hours, settings.horizon.keep_hours) == (48.0, 24.0)
    assert (settings.penalties.unserved, settings.penalties.surplus) == (10000.0, 1000.0)
    assert (settings.commitment.mode, settings.commitment.mip_gap) == ("optimal", 0.001)
    assert (settings.network.limits, settings.network.losses) == ("lines", False)
    assert settings.emissions.carbon_price_per_t == 0.0


def test_whole_numbers_are_numbers_too(tmp_path):
    assert read_case(write_case(tmp_path)).settings.base_mva == 100.0


def test_a_byte_order_mark_is_fine(tmp_path):
    assert problems_of(write_case(tmp_path, {"case.toml": b"\xef\xbb\xbf" + TEXT.encode()})) == ()
