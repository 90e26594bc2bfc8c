"""Files that are missing, strange or not tables at all: always problems in plain words."""

from pathlib import Path

import pytest

from simulator.case import read_case
from simulator.errors import CaseError
from tests.support import case_texts, problems_of, write_case

BUSES, LINES, HOURLY = "network/buses.csv", "network/lines.csv", "hourly/demand.csv"
TABLES = (BUSES, HOURLY)


def with_bytes(folder, path, change):
    return problems_of(write_case(folder, {path: change(case_texts()[path].encode())}))


def test_the_small_case_is_sound(tmp_path):
    assert problems_of(write_case(tmp_path)) == ()


def test_a_folder_that_is_not_there(tmp_path):
    (problem,) = problems_of(tmp_path / "nowhere")
    assert (problem.path, problem.row, problem.subject) == (".", 1, 'case "nowhere"')
    assert problem.found == "nothing there"


def test_a_file_in_place_of_the_folder(tmp_path):
    (tmp_path / "case").write_text("x")
    (problem,) = problems_of(tmp_path / "case")
    assert problem.found == "a file"


def test_an_empty_folder_misses_every_required_file(tmp_path):
    paths = [problem.path for problem in problems_of(tmp_path)]
    assert paths == [
        "case.toml", BUSES, LINES, "fleet/units.csv", "demand/loads.csv", "hourly",
    ]  # fmt: skip


OPTIONAL = [
    "network/dc_ties.csv", "fleet/renewables.csv", "fleet/storage.csv", "fleet/reserves.csv",
    "calendar/outages.csv",
]  # fmt: skip


@pytest.mark.parametrize("path", OPTIONAL)
def test_an_optional_file_may_be_missing(tmp_path, path):
    case = read_case(write_case(tmp_path, {path: None}))
    table = getattr(case, path.rpartition("/")[2].removesuffix(".csv"))
    assert table.empty
    assert len(table.columns) > 2


def test_tables_without_rows_keep_their_types(tmp_path):
    keep = {path: text.splitlines()[0] + "\n" for path, text in case_texts().items() if "/" in path}
    keep = {path: text for path, text in keep.items() if not path.startswith("hourly/")}
    case = read_case(write_case(tmp_path, {**keep, BUSES: "bus\nonly\n"}))
    assert len(case.lines) == len(case.units) == len(case.blocks) == len(case.loads) == 0
    assert case.units["max_output_mw"].dtype == "float64"
    assert case.units["must_run"].dtype == "bool"
    assert case.blocks["cost_per_mwh"].dtype == "float64"
    assert str(case.outages["from"].dtype) == "datetime64[us, UTC]"
    assert "0" in str(case)


def test_buses_without_rows_are_a_problem(tmp_path):
    only_buses = {"case.toml": None, BUSES: "bus,zone\n"}
    problems = problems_of(write_case(tmp_path, only_buses))
    assert [p.rule for p in problems if p.path == BUSES] == ["must have a bus"]


@pytest.mark.parametrize("path", TABLES)
def test_an_empty_file(tmp_path, path):
    problems = with_bytes(tmp_path, path, lambda _: b"")
    assert [(p.path, p.row, p.rule) for p in problems] == [(path, 1, "must have a header")]


@pytest.mark.parametrize("path", TABLES)
def test_a_byte_order_mark_is_fine(tmp_path, path):
    assert with_bytes(tmp_path, path, lambda data: b"\xef\xbb\xbf" + data) == ()


@pytest.mark.parametrize("path", TABLES)
def test_other_line_ends_are_fine(tmp_path, path):
    assert with_bytes(tmp_path / "crlf", path, lambda data: data.replace(b"\n", b"\r\n")) == ()
    assert with_bytes(tmp_path / "cr", path, lambda data: data.replace(b"\n", b"\r")) == ()


@pytest.mark.parametrize("path", TABLES)
def test_blank_rows_are_fine_and_keep_the_row_numbers(tmp_path, path):
    assert (
        with_bytes(tmp_path / "a", path, lambda data: data.replace(b"\n", b"\n\n,,\n") + b"\n")
        == ()
    )


def test_a_fault_below_blank_rows_has_its_spreadsheet_row(tmp_path):
    text = (
        "line,from_bus,to_bus,reactance_pu\n\nN-M,Northfen,Midfen,0.1\n,,,\nM-S,Midfen,Southfen,x\n"
    )
    problems = problems_of(write_case(tmp_path, {LINES: text, "calendar/outages.csv": None}))
    assert [(p.path, p.row, p.column) for p in problems] == [(LINES, 5, "reactance_pu")]


def test_a_cell_of_two_lines_is_one_spreadsheet_row(tmp_path):
    text = 'bus,note\nNorthfen,"two\nlines"\nMidfen,\nSouthfen \n'
    problems = [p for p in problems_of(write_case(tmp_path, {BUSES: text})) if p.path == BUSES]
    assert [(p.row, p.rule) for p in problems] == [(4, "must have one cell for each column")]


@pytest.mark.parametrize("path", TABLES)
@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda data: data.replace(b",", b";"), "semicolons between cells"),
        (lambda data: data.replace(b",", b"\t"), "tabs between cells"),
        (lambda data: data.decode().encode("utf-16"), "UTF-16"),
        (lambda data: data.replace(b"\n", b"\n\0", 1), "a NUL byte"),
        (lambda data: data.replace(b"\n", b"\n\xe9", 1), "byte 0xe9, which is no UTF-8"),
        (lambda data: b'"' + data, "must be a CSV table in UTF-8"),
    ],
)
def test_what_is_no_comma_separated_utf8_is_told(tmp_path, path, change, words):
    (problem,) = with_bytes(tmp_path, path, change)
    assert problem.path == path
    assert problem.row in {1, 2}
    assert words in str(problem)


@pytest.mark.parametrize(("path", "row"), [(BUSES, 3), (HOURLY, 7)])
def test_the_row_of_a_strange_byte_is_told(tmp_path, path, row):
    def spoil(data):
        lines = data.split(b"\n")
        lines[row - 1] += b"\xff"
        return b"\n".join(lines)

    assert [(p.path, p.row) for p in with_bytes(tmp_path, path, spoil)] == [(path, row)]


@pytest.mark.filterwarnings("ignore")  # as in a run, where a library that only warns is not heard
@pytest.mark.parametrize(("path", "row"), [(BUSES, 4), (HOURLY, 2), (HOURLY, 7)])
@pytest.mark.parametrize("extra", [b",one more", b",,,,x"])
def test_a_row_with_too_many_cells_is_told(tmp_path, path, row, extra):
    def spoil(data):
        lines = data.split(b"\n")
        lines[row - 1] += extra
        return b"\n".join(lines)

    told = [(p.path, p.row, p.rule) for p in with_bytes(tmp_path, path, spoil)]
    assert told == [(path, row, "must have one cell for each column")]


def test_a_row_with_too_few_cells_is_told_without_consequences(tmp_path):
    text = case_texts()[BUSES].replace("Midfen,south,220,53.2,-8.0", "Midfen,south")
    (problem,) = problems_of(write_case(tmp_path, {BUSES: text}))
    assert (problem.path, problem.row) == (BUSES, 3)
    assert problem.found == "2 cells, the header has 5"


@pytest.mark.parametrize(("path", "name"), [(BUSES, "zone"), (HOURLY, "demand")])
def test_a_repeated_column_is_told(tmp_path, path, name):
    def spoil(data):
        lines = data.decode().splitlines()
        return "\n".join([f"{lines[0]},{name}", *(f"{line},1" for line in lines[1:])]).encode()

    problems = [p for p in with_bytes(tmp_path, path, spoil) if p.rule == "must be there once"]
    assert [(p.path, p.row, p.column) for p in problems] == [(path, 1, name)]


def test_columns_without_name_and_content_are_fine(tmp_path):
    text = case_texts()[BUSES].replace("\n", ",,\n")
    assert problems_of(write_case(tmp_path, {BUSES: text})) == ()


def test_content_without_a_column_name_is_told(tmp_path):
    text = case_texts()[BUSES].replace("\n", ",\n").replace("-8.0,", "-8.0,kept")
    (problem,) = problems_of(write_case(tmp_path, {BUSES: text}))
    assert (problem.path, problem.row, problem.subject) == (BUSES, 1, "column 6")


@pytest.mark.parametrize("path", ["case.toml", BUSES, "fleet/offers.csv", HOURLY])
def test_a_folder_in_place_of_a_file(tmp_path, path):
    write_case(tmp_path, {path: None})
    (tmp_path / path).mkdir()
    problems = [p for p in problems_of(tmp_path) if p.path == path]
    assert [p.rule for p in problems] == ["must be a file"]


def test_a_file_in_place_of_a_folder(tmp_path):
    write_case(tmp_path, {"calendar/outages.csv": None})
    (tmp_path / "calendar").write_text("x")
    (problem,) = problems_of(tmp_path)
    assert (problem.path, problem.rule) == ("calendar", "must be a folder")


UNKNOWN = [
    ("network/line.csv", 'did you mean "network/lines.csv"?'),
    ("network/loads.csv", 'did you mean "demand/loads.csv"?'),
    ("fleet/storage.xlsx", 'did you mean "fleet/storage.csv"?'),
    ("houry/load.csv", 'did you mean "hourly"?'),
    ("hourly/load.xlsx", "convert or remove it"),
    ("hourly/old/load.csv", "convert or remove it"),
    ("settings.json", "remove it, or put a dot before its name"),
    ("fleet/readme.md", "remove it, or put a dot before its name"),
]


@pytest.mark.parametrize(("path", "remedy"), UNKNOWN)
def test_an_unknown_file_gets_a_suggestion(tmp_path, path, remedy):
    (problem,) = problems_of(write_case(tmp_path, {path: "x"}))
    assert path.startswith(problem.path)
    assert problem.remedy == remedy


def test_plain_text_scripts_and_hidden_files_are_let_be(tmp_path):
    names = ["NOTICE.md", "notes.txt", "LICENSE", "make.py", ".hidden", "network/.~lock.lines.csv#"]
    assert problems_of(write_case(tmp_path, dict.fromkeys(names, "x"))) == ()


def test_a_file_that_cannot_be_read_is_told(tmp_path, monkeypatch):
    write_case(tmp_path)
    read = Path.read_bytes

    def refuse(path):
        if path.name in {"lines.csv", "demand.csv", "case.toml"}:
            raise PermissionError(13, "Permission denied")
        return read(path)

    monkeypatch.setattr(Path, "read_bytes", refuse)
    problems = problems_of(tmp_path)
    assert [p.path for p in problems] == ["case.toml", LINES, HOURLY]
    assert {p.found for p in problems} == {"Permission denied"}


def test_all_problems_of_all_files_are_told_at_once_in_file_order(tmp_path):
    cells = {
        (HOURLY, 9, "demand"): "x",
        (HOURLY, 4, "demand"): "",
        ("demand/loads.csv", 2, "bus"): "Midden",
        ("fleet/units.csv", 4, "bus"): "Soutfen",
        ("fleet/units.csv", 2, "max_output_mw"): "hundred",
        (LINES, 4, "reactance_pu"): "0",
        (BUSES, 2, "latitude"): "99",
        ("calendar/outages.csv", 3, "until"): "2027-01-01",
        ("fleet/storage.csv", 2, "initial_mwh"): "70",
    }
    folder = write_case(tmp_path, {"case.toml": 'format = 1\nname = "x"\nbase_mva = -1\n'}, cells)
    assert [(p.path, p.row, p.column) for p in problems_of(folder)] == [
        ("case.toml", 3, "base_mva"),
        (BUSES, 2, "latitude"),
        (LINES, 4, "reactance_pu"),
        ("fleet/units.csv", 2, "max_output_mw"),
        ("fleet/units.csv", 4, "bus"),
        ("fleet/storage.csv", 2, "initial_mwh"),
        ("demand/loads.csv", 2, "bus"),
        ("calendar/outages.csv", 3, "until"),
        (HOURLY, 4, "demand"),
        (HOURLY, 9, "demand"),
    ]


def test_the_error_lists_every_problem(tmp_path):
    cells = {(BUSES, 2, "voltage_kv"): "x", (LINES, 2, "rating_mw"): "y"}
    with pytest.raises(CaseError) as caught:
        read_case(write_case(tmp_path, cells=cells))
    assert str(caught.value).splitlines() == [str(p) for p in caught.value.problems]
    assert len(caught.value.problems) == 2
