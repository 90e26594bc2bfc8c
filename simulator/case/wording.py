"""Words that problems are told in: quoted finds, close names, five examples and a total.

Public names: `at_most_five`, `closest`, `did_you_mean`, `file_problem`, `listed`, `number`, `quoted`,
`shown`.
"""

import difflib
import json
import math
from collections.abc import Iterable, Sequence
from dataclasses import replace

from simulator.errors import Problem

__all__ = [
    "at_most_five",
    "closest",
    "did_you_mean",
    "file_problem",
    "listed",
    "number",
    "quoted",
    "shown",
]

SHOWN = 5
LONGEST = 70


def quoted(text: str) -> str:
    r"""Return text in quotes, control characters escaped and long text cut.

    >>> print(quoted("Ost\trel"))
    "Ost\trel"
    """
    cut = text if len(text) <= LONGEST else text[:LONGEST] + "…"
    return json.dumps(cut, ensure_ascii=False)


def number(value: float) -> str:
    """Return a number without needless digits.

    >>> number(76.0), number(0.1)
    ('76', '0.1')
    """
    return f"{value:.10g}"


def shown(value: object) -> str:
    """Return a cell's value as a message shows it.

    >>> shown("Ostrel"), shown(0.5), shown(float("nan"))
    ('"Ostrel"', '0.5', 'blank')
    """
    if isinstance(value, str):
        return quoted(value) if value else "blank"
    return number(value) if isinstance(value, float) and not math.isnan(value) else "blank"


def file_problem(path: str, rule: str, found: str, remedy: str, row: int = 1) -> Problem:
    """Return a problem of a whole file, or of one row of it."""
    return Problem(path, row, "-", "the file", rule, found, remedy)


def listed(items: Sequence[str]) -> str:
    """Return at most five items, then the total.

    >>> listed(["1", "2", "3", "4", "5", "6", "7"])
    '1, 2, 3, 4, 5, … (7 in all)'
    """
    shown = ", ".join(items[:SHOWN])
    return shown if len(items) <= SHOWN else f"{shown}, … ({len(items)} in all)"


def closest(wrong: str, known: Iterable[str]) -> str | None:
    """Return the known name that differs in case or blanks only, or else the most alike one."""
    names = list(known)
    folded = [name for name in names if name.strip().casefold() == wrong.strip().casefold()]
    return next(iter(folded or difflib.get_close_matches(wrong, names, n=1)), None)


def did_you_mean(wrong: str, known: Iterable[str], otherwise: str) -> str:
    """Return a question naming the closest known name, or another remedy.

    >>> did_you_mean("Osterl", ["Ostrel", "Westrel"], "add it")
    'did you mean "Ostrel"?'
    """
    close = closest(wrong, known)
    return f"did you mean {quoted(close)}?" if close is not None else otherwise


def at_most_five(problems: Sequence[Problem]) -> list[Problem]:
    """Keep five problems of one kind and add one that tells how many more there are."""
    kept = list(problems[:SHOWN])
    more = len(problems) - SHOWN
    if more > 0:
        found = f"{more} more like the five above"
        kept.append(replace(problems[SHOWN], found=found))
    return kept
