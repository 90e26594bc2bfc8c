"""Whatever is done to the files of a case, reading it gives a case or a `CaseError`."""

import shutil
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from simulator.case import Case, read_case
from simulator.errors import CaseError
from tests.support import case_texts, hourly_frames, write_case

TEXTS = case_texts(hours=6)
PATHS = sorted(TEXTS)
quick = settings(
    max_examples=12, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)  # fmt: skip


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("random")


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    return read_case(write_case(tmp_path_factory.mktemp("plain"), hours=6))


def read_with(folder: Path, files):
    """Write the case with some files replaced and read it; any other exception fails the test."""
    shutil.rmtree(folder, ignore_errors=True)
    write_case(folder, files, hours=6)
    try:
        return read_case(folder)
    except CaseError as caught:
        error = caught
    assert error.problems
    for problem in error.problems:
        assert problem.row >= 1
        assert "\n" not in str(problem)
        assert not Path(problem.path).is_absolute()
    return error


@st.composite
def spoiled_bytes(draw):
    """Return a path and its bytes, a stretch of them replaced."""
    path = draw(st.sampled_from(PATHS))
    data = TEXTS[path].encode()
    start = draw(st.integers(0, len(data)))
    length = draw(st.integers(0, 40))
    return path, data[:start] + draw(st.binary(max_size=20)) + data[start + length :]


@st.composite
def spoiled_cells(draw):
    """Return a path and its text, some cells replaced by values that have caused trouble before."""
    path = draw(st.sampled_from([path for path in PATHS if path.endswith(".csv")]))
    rows = [line.split(",") for line in TEXTS[path].splitlines()]
    nasty = st.sampled_from([
        "", " ", "nan", "NaN", "inf", "-inf", "1e999", "-1e308", "1e-320", "9" * 400, "0", "-0.0", "1,5",
        "true", "None", "=A1", '"', "''", "\ufeff", "\u202e", "x" * 70, "2027-03-28T01:30",
        "2027-02-30", "2027-01-11T00:00+99:00", "9999-12-31T23:59", "1900-01-01T00:00+14:00",
        "0001-01-01", "Northfen", "demand", "time", "\t", "\r", ";", "\u0661",
    ])  # fmt: skip
    for _ in range(draw(st.integers(1, 3))):
        row = draw(st.integers(0, len(rows) - 1))
        column = draw(st.integers(0, len(rows[row]) - 1))
        rows[row][column] = draw(st.one_of(nasty, st.text(max_size=8)))
    return path, "\n".join(",".join(row) for row in rows) + "\n"


@quick
@given(spoiled_bytes())
def test_spoiled_bytes_never_trace_back(folder, spoiled):
    assert isinstance(read_with(folder, dict([spoiled])), Case | CaseError)


@quick
@given(st.lists(spoiled_cells(), min_size=1, max_size=3))
def test_spoiled_cells_never_trace_back(folder, spoiled):
    files = {path: text.encode("utf-8", "surrogatepass") for path, text in spoiled}
    assert isinstance(read_with(folder, files), Case | CaseError)


@quick
@given(st.sets(st.sampled_from(PATHS), min_size=1))
def test_missing_files_never_trace_back(folder, missing):
    assert isinstance(read_with(folder, dict.fromkeys(missing)), Case | CaseError)


@quick
@given(st.data())
def test_shuffled_rows_make_the_same_case(folder, plain, data):
    """The order of rows is the order of elements; apart from that it means nothing."""
    path = data.draw(
        st.sampled_from(["network/buses.csv", "network/lines.csv", "demand/loads.csv"])
    )
    header, *rows = TEXTS[path].splitlines()
    shuffled = data.draw(st.permutations(rows))
    case = read_with(folder, {path: "\n".join([header, *shuffled]) + "\n"})
    table = path.rpartition("/")[2].removesuffix(".csv")
    one, other = getattr(case, table), getattr(plain, table)
    assert list(one.index) == [row.split(",")[0] for row in shuffled]
    assert one.loc[other.index].equals(other)


@quick
@given(st.integers(0, 3000), st.binary(min_size=1, max_size=6))
def test_spoiled_parquet_never_traces_back(folder, start, change):
    source = folder.parent / "demand.parquet"
    if not source.exists():
        hourly_frames(hours=6)["hourly/demand.csv"].to_parquet(source)
    data = source.read_bytes()
    start %= len(data)
    spoiled = data[:start] + change + data[start + len(change) :]
    files = {"hourly/demand.csv": None, "hourly/demand.parquet": spoiled}
    assert isinstance(read_with(folder, files), Case | CaseError)
