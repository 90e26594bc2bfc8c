"""What each unit could do and did: availability, minimum output, switches, ramps, and its cost curve.

Public names: `Units`.
"""

from functools import cached_property
from itertools import pairwise

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from simulator.audit.evidence import Evidence, summed
from simulator.case import series

__all__ = ["Units"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]


class Units:
    """The units of a run; arrays are (period, unit) unless said otherwise.

    available : MW; out : fully out; falling : less is available than in the period before, where a
        unit counts as whole before the run
    minimum : MW, minimum output while on
    output, on, start : from the dataset
    """

    def __init__(self, evidence: Evidence) -> None:
        self.evidence, self.table = evidence, evidence.case.units
        share = series.available_share(evidence.case, "unit", self.table.index, evidence.span)
        self.available = share * self.numbers("max_output_mw")
        self.out = share == 0
        self.falling = np.diff(share, axis=0, prepend=1.0) < 0
        self.minimum = _least_output(
            self.numbers("min_output_mw"), self.available, self.limit("ramp_up_mw_per_h")
        )
        self.output, self.on = evidence["unit_output"], evidence["unit_on"]
        self.start = evidence["unit_start"]

    def numbers(self, column: str) -> Floats:
        """Return a column of units.csv, array (unit,)."""
        return self.table[column].to_numpy(float)

    def limit(self, column: str) -> Floats:
        """Return a ramp as the most MW a period allows, array (unit,)."""
        return self.numbers(column) * (self.evidence.length if column.endswith("_per_h") else 1.0)

    @cached_property
    def hours(self) -> Floats:
        """Hours on (positive) or off (negative) at the run's start, array (unit,); NaN where free."""
        return self.numbers("initial_hours")

    @cached_property
    def on_at_first(self) -> Floats:
        """On or off before the run, array (unit,); NaN where free.

        Where the hours are free, output means on, and none of a unit that has a minimum means off.
        """
        output, idle = self.numbers("initial_output_mw"), self.numbers("min_output_mw") > 0
        by_output = np.where(output > 0, 1.0, np.where((output == 0) & idle, 0.0, np.nan))
        return np.where(np.isnan(self.hours), by_output, (self.hours > 0).astype(float))

    @cached_property
    def on_before(self) -> Floats:
        """On in the period before; what is free counts as in the first period."""
        first = np.where(np.isnan(self.on_at_first), self.on[0], self.on_at_first)
        return np.concatenate([first[None], self.on[:-1]])

    @cached_property
    def stop(self) -> Floats:
        """How much stops: on_t − on_{t−1} = start_t − stop_t (2.3)."""
        return self.start - (self.on - self.on_before)

    @cached_property
    def chosen_stop(self) -> Floats:
        """How much stops without an outage that forces it."""
        return np.where(self.out, 0.0, self.stop)

    @cached_property
    def output_before(self) -> Floats:
        """Output in the period before; NaN where free."""
        first = np.where(self.on_at_first == 0, 0.0, self.numbers("initial_output_mw"))
        return np.concatenate([first[None], self.output[:-1]])

    def ramp_room(self, *, widest: bool = True) -> tuple[Floats, Floats]:
        """Return what is left of ramps up and down, MW; inf where none holds (2.2).

        up: ramp·on_{t−1} + start_ramp·start_t − (output_t − output_{t−1}); down likewise. Unless
        `widest`, a ramp beyond maximum output is taken as that, which means the same to a unit that
        is on or off and is stricter to one partly on. A free output before the run leaves its ramps
        open; a free on or off before it counts as on.
        """
        most = np.inf if widest else self.numbers("max_output_mw")
        change = self.output - self.output_before
        limits = {
            name: np.minimum(self.limit(name), most)
            for name in ("ramp_up_mw_per_h", "ramp_down_mw_per_h", "start_ramp_mw", "stop_ramp_mw")
        }
        on_before = self.on_before.copy()
        on_before[0, np.isnan(self.on_at_first)] = 1.0
        up = _times(limits["ramp_up_mw_per_h"], on_before) - change
        up += _times(limits["start_ramp_mw"], self.start)
        down = _times(limits["ramp_down_mw_per_h"], self.on) + change
        down += _times(limits["stop_ramp_mw"], self.stop)
        free = np.zeros(change.shape, dtype=bool)
        free[0] = np.isnan(self.output_before[0])
        return np.where(free, np.inf, up), np.where(free | self.falling, np.inf, down)

    @cached_property
    def ramp_limited(self) -> Booleans:
        """Whether any ramp of a unit is narrower than its maximum output, array (unit,)."""
        names = ("ramp_up_mw_per_h", "ramp_down_mw_per_h", "start_ramp_mw", "stop_ramp_mw")
        # A wider ramp cannot bind; a narrower one may not either, but then little is left out.
        narrowest = np.min([self.limit(name) for name in names], axis=0)
        narrow: Booleans = narrowest < self.numbers("max_output_mw")
        return narrow

    # The cost curve, split at minimum output; arrays (period, block) unless said otherwise

    @cached_property
    def blocks(self) -> pd.DataFrame:
        """Cost blocks, in the order of the units, each unit's from the lowest up."""
        return self.evidence.case.blocks

    @cached_property
    def block_unit(self) -> Integers:
        """The unit of each block, array (block,)."""
        return self.evidence.names["unit"].get_indexer(pd.Index(self.blocks["unit"]))

    @cached_property
    def block_cost(self) -> Floats:
        """Currency/MWh."""
        return series.block_cost(self.evidence.case, self.evidence.span)

    @cached_property
    def block_carbon(self) -> Floats:
        """t/MWh, array (block,)."""
        return series.block_emissions(self.evidence.case)

    def _edges(self, output: Floats) -> Floats:
        """Return how much of each block lies below an output of its unit, MW."""
        low, high = (self.blocks[name].to_numpy(float) for name in ("from_mw", "up_to_mw"))
        return np.clip(output[:, self.block_unit], low, high) - low

    @cached_property
    def block_below(self) -> Floats:
        """MW of each block that minimum output takes up."""
        return self._edges(self.minimum)

    @cached_property
    def block_room(self) -> Floats:
        """MW of each block between minimum and available output, as far as the unit is on."""
        width = np.maximum(self._edges(self.available) - self.block_below, 0.0)
        return width * self.on[:, self.block_unit]

    @cached_property
    def block_taken(self) -> Floats:
        """MW taken of that room, the lowest blocks first."""
        start = np.maximum(self.blocks["from_mw"].to_numpy(float), self.minimum[:, self.block_unit])
        ahead = (start - self.minimum[:, self.block_unit]) * self.on[:, self.block_unit]
        above = (self.output - self.minimum * self.on)[:, self.block_unit]
        return np.clip(above - ahead, 0.0, self.block_room)

    def along_curve(self, rate: Floats) -> tuple[Floats, Floats]:
        """Integrate a rate per MWh (period, block) up to output, and up to all that is available.

        Returns two arrays (period, unit), per hour. As far as a unit is on, it has the whole of its
        minimum output, and above that the lowest blocks first.
        """
        units = len(self.table)
        at_minimum = summed(self.block_below * rate, self.block_unit, units)
        taken = summed(self.block_taken * rate, self.block_unit, units)
        whole = summed(self._edges(self.available) * np.abs(rate), self.block_unit, units)
        return at_minimum * self.on + taken, whole


def _times(limit: Floats, share: Floats) -> Floats:
    """Return limit (unit,) × share (period, unit); a share of none, or of rounding below it, is no ramp."""
    with np.errstate(invalid="ignore"):
        return np.where(share <= 0, 0.0, limit * share)


def _least_output(minimum: Floats, available: Floats, ramp_up: Floats) -> Floats:
    """Return minimum output in each period, array (period, unit), MW (2.2).

    Never more than what is available; after a derate it comes back no faster than the unit ramps.
    minimum, ramp_up : arrays (unit,), MW and MW a period
    """
    least = np.minimum(available, minimum)
    for before, now in pairwise(least):
        climbing = (before > 0) & (before < minimum)
        now[climbing] = np.minimum(now, before + ramp_up)[climbing]
    return least
