"""A page's tables on the terminal, whatever its width: no number and no word of a heading is broken.

Public names: `print_table`.
"""

from collections.abc import Sequence
from textwrap import fill

from rich.console import Console
from rich.markup import escape
from rich.table import Table as TerminalTable

from simulator.report.tables import Cell, Table

__all__ = ["print_table"]

_BETWEEN = 2


def print_table(table: Table, console: Console) -> None:
    """Print a table, in parts where it is too wide, each beginning with the column that names rows."""
    for part in _fitted(table, console.width):
        console.print(_drawn(part, console.width))


def _drawn(table: Table, room: int) -> TerminalTable:
    """Return a table as the terminal prints it."""
    made = TerminalTable(
        title=table.caption, title_justify="left", title_style="bold", box=None, pad_edge=False
    )
    for column, width in zip(table.columns, _shared(table, room), strict=True):
        if column.numeric:
            made.add_column(fill(column.title, width), justify="right", no_wrap=True, width=width)
        else:
            made.add_column(column.title, overflow="fold", width=width)
    for row in [*table.rows, *([table.total] if table.total else [])]:
        made.add_row(*(escape(cell.text) for cell in row))
    return made


def _shared(table: Table, room: int) -> list[int]:
    """Return column widths: what each needs, and what is left to text that would take more."""
    widths = _widths(table)
    left = room - sum(widths) - _BETWEEN * (len(widths) - 1)
    for place, column in enumerate(table.columns):
        if column.numeric or left <= 0:
            continue
        longest = max([len(column.title), *(len(row[place].text) for row in table.rows)])
        more = min(left, max(longest - widths[place], 0))
        widths[place], left = widths[place] + more, left - more
    return widths


def _widths(table: Table) -> list[int]:
    """Return what each column needs so that no number and no word of a heading is broken."""
    rows = [*table.rows, *([table.total] if table.total else [])]
    return [
        max(
            [len(part) for part in column.title.split()]
            + [len(row[place].text) for row in rows if column.numeric]
            + [len(part) for row in rows if not column.numeric for part in row[place].text.split()],
            default=1,
        )
        for place, column in enumerate(table.columns)
    ]


def _fitted(table: Table, width: int) -> list[Table]:
    """Split a table that is too wide into several, each beginning with the column that names rows."""
    needed = [each + _BETWEEN for each in _widths(table)]
    parts: list[list[int]] = [[0]]
    for place in range(1, len(needed)):
        if len(parts[-1]) > 1 and sum(needed[at] for at in [*parts[-1], place]) > width:
            parts.append([0])
        parts[-1].append(place)
    return [_with_columns(table, part, number) for number, part in enumerate(parts)]


def _with_columns(table: Table, places: list[int], number: int) -> Table:
    def chosen(row: Sequence[Cell]) -> list[Cell]:
        return [row[place] for place in places]

    caption = f"{table.caption}, continued" if number else table.caption
    columns = tuple(table.columns[place] for place in places)
    total = chosen(table.total) if table.total else ()
    return Table(caption, columns, [chosen(row) for row in table.rows], total)
