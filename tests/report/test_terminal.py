"""Tables on a narrow terminal: split, never broken."""

import io

from rich.console import Console

from simulator.report.tables import Table, figure, numbers, word, words
from simulator.report.terminal import print_table


def printed(width: int) -> str:
    columns = (*words("Bus"), *numbers("Extra production cost", "Own payment", "Others pay more"))
    rows = [[word("Long Name of a Bus"), figure(1234567.0), figure(7654321.0), figure(-1111111.0)]]
    console = Console(file=io.StringIO(), width=width)
    print_table(Table("What it costs", columns, rows), console)
    return console.file.getvalue()


def test_a_table_that_fits_is_one_table():
    said = printed(90)
    assert "continued" not in said
    assert "1,234,567" in said


def test_a_table_too_wide_goes_on_below_with_its_names_again():
    said = printed(30)
    for whole in ("1,234,567", "7,654,321", "−1,111,111", "production", "payment"):
        assert whole in said
    assert said.count("continued") == 1
    assert said.count("Long") == 2
    assert max(map(len, said.splitlines())) <= 30
