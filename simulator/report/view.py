"""A results dataset as the page reads it: plain arrays, names, local times and what is drawn from them.

Public names: `View`, `plotly_text`, `rounded`, `script_json`.
"""

import json
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from simulator.report.moments import Clock, Steps, choose_steps, read_clock

__all__ = ["View", "plotly_text", "rounded", "script_json"]

Floats = NDArray[np.float64]

FINE, COARSE = 1.0, 100.0
"""MW below and above which powers are drawn with four decimals and with one."""
UNSAFE = str.maketrans({each: f"\\u{ord(each):04x}" for each in "<>&\u2028\u2029"})


@dataclass(frozen=True, eq=False)
class View:
    """One run as the page reads it; the dataset is the one of results-format.md."""

    dataset: xr.Dataset
    run: Mapping[str, Any]

    @cached_property
    def clock(self) -> Clock:
        """The run's periods in local time."""
        return read_clock(self.dataset)

    @cached_property
    def steps(self) -> Steps:
        """The steps that pictures are drawn in."""
        return choose_steps(self.clock)

    @property
    def period_hours(self) -> float:
        """Length of a period, h."""
        return self.clock.period_hours

    @property
    def currency(self) -> str:
        """The label of the case's currency."""
        return str(self.dataset.attrs.get("currency", "currency"))

    @property
    def price_unit(self) -> str:
        """The unit of prices as a label."""
        return f"{self.currency}/MWh"

    @property
    def case_name(self) -> str:
        """The name of the case."""
        return str(self.dataset.attrs.get("case_name", self.run.get("case", "unnamed case")))

    def has(self, name: str) -> bool:
        """Tell whether the dataset has a variable or coordinate."""
        return name in self.dataset.variables

    def size(self, dimension: str) -> int:
        """Return the number of elements along a dimension."""
        return int(self.dataset.sizes.get(dimension, 0))

    def values(self, name: str) -> Floats:
        """Return a variable as numbers, its dimensions in the order of the contract."""
        return np.asarray(self.dataset[name].to_numpy(), dtype=float)

    def energy(self, name: str) -> Floats:
        """Sum a power (period, element) over the run, MWh by element."""
        return np.asarray(self.values(name).sum(axis=0) * self.period_hours)

    def names(self, dimension: str) -> list[str]:
        """Return the names of the elements along a dimension."""
        return self.labels(dimension, dimension)

    def labels(self, name: str, dimension: str) -> list[str]:
        """Return a coordinate as text, blanks if the dataset lacks it."""
        if not self.has(name):
            return [""] * self.size(dimension)
        return [str(value) for value in self.dataset[name].to_numpy()]

    def numbers(self, name: str, dimension: str) -> Floats:
        """Return a coordinate as numbers, NaN if the dataset lacks it."""
        return self.values(name) if self.has(name) else np.full(self.size(dimension), np.nan)

    @cached_property
    def loading(self) -> Floats:
        """Flow of each line as a share of its rating, array (period, line); NaN without a rating."""
        flow, rating = self.values("line_flow"), self.values("line_rating")
        limited = np.isfinite(rating) & (rating > 0)
        share = np.full(flow.shape, np.nan)
        np.divide(np.abs(flow), rating, out=share, where=limited)
        return share


def plotly_text(text: str) -> str:
    """Escape a name for the charts, whose labels and hover texts read a kind of HTML.

    >>> plotly_text("<b>North & South")
    '&lt;b&gt;North &amp; South'
    """
    return text.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")


def rounded(values: Floats, decimals: int | None = None) -> Any:
    """Return numbers as nested lists for the page: few digits, whole ones as integers, gaps as None.

    Powers need no count of decimals: it follows from the largest.

    >>> rounded(np.array([[1.256, 200.0], [np.nan, -0.01]]))
    [[1.3, 200], [None, 0]]
    """
    if decimals is None:
        decimals = _decimals(values)
    return _plain(np.round(values, decimals).tolist())


def _decimals(values: Floats) -> int:
    largest = float(np.nan_to_num(np.abs(values), posinf=0.0).max(initial=0.0))
    if largest >= COARSE:
        return 1
    return 2 if largest >= FINE else 4


def _plain(value: Any) -> Any:
    if isinstance(value, list):
        return [_plain(each) for each in value]
    if not np.isfinite(value):
        return None
    return int(value) if value == int(value) else value


def script_json(value: Any) -> str:
    r"""Return compact JSON that can stand inside a script element: nothing in it can end the element.

    >>> script_json({"name": "</script>"})
    '{"name":"\\u003c/script\\u003e"}'
    """
    text = json.dumps(
        value, allow_nan=False, ensure_ascii=False, separators=(",", ":"), sort_keys=True
    )
    return text.translate(UNSAFE)
