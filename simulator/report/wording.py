"""Numbers and results in the words and figures a reader sees.

Public names: `amount`, `count`, `listed`, `money`, `number`, `percent`, `span_of_hours`.
"""

import math
from collections.abc import Sequence

__all__ = ["amount", "count", "listed", "money", "number", "percent", "span_of_hours"]

MOST = 5
"""How many of a kind a sentence names before it only counts them."""
LARGE, MIDDLING, SMALLEST = 1000.0, 10.0, 0.01
"""Where a quantity loses its decimals, keeps one, and is not put into figures at all."""
MINUS = "\N{MINUS SIGN}"


def number(value: float, decimals: int = 0) -> str:
    """Write a number with separated thousands and a true minus sign.

    >>> number(-1234.56, 1), number(-0.001, 2), number(float("nan"))
    ('−1,234.6', '0.00', '–')
    """
    if not math.isfinite(value):
        return "–"
    text = f"{value:,.{decimals}f}"
    if not text.strip("-0.,"):
        text = text.lstrip("-")
    return text.replace("-", MINUS)


def amount(value: float) -> str:
    """Write a quantity with about three figures, and never as nothing if it is something.

    >>> amount(12345.6), amount(34.56), amount(0.5), amount(0.0002), amount(0)
    ('12,346', '34.6', '0.50', 'less than 0.01', '0')
    """
    size = abs(value)
    if size == 0:
        return "0"
    if 0 < size < SMALLEST:
        return f"less than {SMALLEST}"
    return number(value, 0 if size >= LARGE else 1 if size >= MIDDLING else 2)


def money(value: float) -> str:
    """Write an amount of money, with its hundredths only if it is small.

    >>> money(1234567.8), money(12.345)
    ('1,234,568', '12.35')
    """
    return number(value, 0 if abs(value) >= LARGE or value == 0 else 2)


def percent(share: float, decimals: int = 0) -> str:
    """Write a share as a percentage.

    >>> percent(0.257).split()
    ['26', '%']
    """
    return f"{number(100 * share, decimals)}\N{NO-BREAK SPACE}%" if math.isfinite(share) else "–"


def count(size: int, one: str, many: str = "") -> str:
    """Count things.

    >>> count(1, "bus", "buses"), count(1200, "line")
    ('1 bus', '1,200 lines')
    """
    return f"{size:,} {one if size == 1 else many or one + 's'}"


def span_of_hours(hours: float) -> str:
    """Write a duration.

    >>> span_of_hours(1.0), span_of_hours(0.5)
    ('1 hour', '0.50 hours')
    """
    return f"{number(hours, 0 if hours == int(hours) else 2)} hour" + ("" if hours == 1 else "s")


def listed(items: Sequence[str], kind: str = "") -> str:
    """Join items into a phrase, the first five and how many more.

    >>> listed(["a", "b", "c"]), listed(list("abcdefg"), "lines")
    ('a, b and c', 'a, b, c, d, e and 2 more lines')
    """
    shown = list(items[:MOST])
    if len(items) > MOST:
        shown.append(f"{len(items) - MOST} more {kind}".rstrip())
    return " and ".join(filter(None, [", ".join(shown[:-1]), *shown[-1:]]))
