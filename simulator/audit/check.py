"""One verdict of the audit, the residuals behind it, and the tolerances it is held to.

Public names: `Check`, `Residual`, `apart`, `beyond`, `judge`, and the tolerances `ADDED`, `COUNTED`,
`INSIDE`, `MONEY`, `POWER`, `PRICE`, `SHARE`.

The tolerances follow from what a solver promises, not from what runs happen to reach: HiGHS holds
rows and bounds to 1e-7 and reduced costs to 1e-7.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

__all__ = [
    "ADDED", "COUNTED", "INSIDE", "MONEY", "POWER", "PRICE", "SHARE", "Check", "Residual", "apart",
    "beyond", "judge",
]  # fmt: skip

Floats = NDArray[np.float64]

POWER = 1e-5
"""MW or MWh. Flows up to 1e-6 beyond a rating ask for no limit; a few dozen rows held to 1e-7 add up."""
SHARE = 1e-5
"""Share of a unit that is on or switches: sums over a minimum time of up to a hundred rows held to 1e-7."""
INSIDE = 1e-5
"""MW or MWh. What is closer than this to a bound counts as lying on it, and says nothing of prices."""
PRICE = 1e-4
"""Currency/MWh. 1e-7 on the cost of a period is 6e-6 per MWh where a period lasts a minute; prices add
a few such terms, and rounding where a penalty of 1e5 sets them."""
ADDED = 1e-6
"""Currency/MWh or currency/MWh and MW: sums and products of numbers in the dataset, rounding only."""
MONEY = 1e-6
"""Share of the full amount: on/off and output held to 1e-7, times their costs, over that amount."""
COUNTED = 1e-9
"""What must be equal but for the last digits: inputs echoed, hours counted."""


@dataclass(frozen=True)
class Check:
    """One verdict.

    worst : the largest residual, in the unit of the tolerance; NaN where a number is missing
    where : element and local hour of the worst; empty where nothing is off at all
    """

    name: str
    worst: float
    where: str
    tolerance: float

    @property
    def passed(self) -> bool:
        """Whether the worst residual is a number within the tolerance."""
        return self.worst <= self.tolerance


@dataclass(frozen=True, eq=False)
class Residual:
    """By how much each element of a kind breaks a rule.

    values : array (period, element) or (element,); at most 0 where the rule holds, NaN where a
        number is missing
    names : labels (element,)
    """

    kind: str
    names: pd.Index
    rule: str
    values: Floats


def judge(
    name: str, tolerance: float, hours: pd.DatetimeIndex, residuals: Sequence[Residual]
) -> Check:
    """Find the worst of some residuals; a missing number is worse than any.

    >>> hours = pd.date_range("2027-01-11", periods=1, freq="h", tz="UTC")
    >>> off = Residual("line", pd.Index(["N-M", "M-S"]), "", np.array([[0.0, 2.0]]))
    >>> judge("flows", 1e-5, hours, [off])
    Check(name='flows', worst=2.0, where='line "M-S" at 2027-01-11T00:00+00:00', tolerance=1e-05)
    """
    found = [residual for residual in residuals if residual.values.size]
    peaks = [int(np.argmax(residual.values)) for residual in found]  # the first NaN, if any
    worst = [float(residual.values.flat[peak]) for residual, peak in zip(found, peaks, strict=True)]
    if not found:
        return Check(name, 0.0, "", tolerance)
    first = int(np.argmax(worst))
    if worst[first] <= 0:
        return Check(name, 0.0, "", tolerance)
    return Check(name, worst[first], _place(found[first], peaks[first], hours), tolerance)


def _place(residual: Residual, peak: int, hours: pd.DatetimeIndex) -> str:
    """Name an element and, where there is one, the hour."""
    *period, element = np.unravel_index(peak, residual.values.shape)
    rule = f" ({residual.rule})" if residual.rule else ""
    hour = "".join(f" at {hours[number].isoformat(timespec='minutes')}" for number in period)
    return f'{residual.kind} "{residual.names[element]}"{rule}{hour}'


def beyond(values: Floats, lower: Floats | float, upper: Floats | float) -> Floats:
    """Return by how much values lie outside their bounds, negative inside."""
    with np.errstate(invalid="ignore"):  # inf − inf, of what is unlimited on both sides
        return np.maximum(lower - values, values - upper)


def apart(found: Floats, expected: Floats) -> Floats:
    """Return how far two arrays are apart; zero where both are infinite alike."""
    with np.errstate(invalid="ignore"):
        distance = np.abs(found - expected)
    return np.where(np.isinf(found) & (found == expected), 0.0, distance)
