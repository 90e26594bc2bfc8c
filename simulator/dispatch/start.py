"""Where the solve of a window starts from.

Public names: `Start`.

What a window's result depends on is its inputs, the state handed over and this: nothing stays hidden in a
solver between windows. So a run stopped and resumed, or done by any number of workers, is the same run.
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from simulator.dispatch.compiled import CompiledFleet
from simulator.dispatch.solver import BASIC, LOWER

__all__ = ["Start"]

Integers = NDArray[np.int64]
Statuses = NDArray[np.int8]


@dataclass(frozen=True, eq=False)
class Start:
    """A basis, the line rows that stood, and the decisions of a window solved before.

    shape : the shape of that window; another shape starts from nothing
    first : its first period, counted from the run's
    columns, rows, line_rows : arrays (column,), (fleet row,), (line row,), solver statuses
    line, period, topology, idle : arrays (line row,), in the order in which the rows stood; idle counts
        the windows in which a row has not been at its limit
    on : array (period, unit), 0 or 1, decided; None where nothing is decided
    """

    shape: tuple[object, ...]
    first: int
    columns: Statuses
    rows: Statuses
    line_rows: Statuses
    line: Integers
    period: Integers
    topology: Integers
    idle: Integers
    on: Statuses | None

    def moved_to(self, first: int, periods: int) -> int:
        """Return by how many periods a window that begins at `first` overlaps later; 0 if not at all."""
        shift = first - self.first
        return shift if 0 < shift < periods else 0

    def without_lines(self) -> "Start":
        """Return the same start with no line rows, for a run without line limits."""
        none = np.zeros(0, dtype=np.int64)
        return replace(
            self, line_rows=np.zeros(0, dtype=np.int8), line=none, period=none, topology=none, idle=none
        )  # fmt: skip

    def grown(
        self, before: CompiledFleet, after: CompiledFleet, shape: tuple[object, ...]
    ) -> "Start":
        """Return the same start for a model with more elements at the end of its tables.

        before, after : the fleet halves of both models. New columns stand at their lower bound and new
            rows are basic, so the basis stays one, and it stays optimal where new elements can do nothing.
        """
        return replace(
            self, shape=shape,
            columns=_spread(self.columns, before.columns, after.columns, after.matrix.shape[1], LOWER),
            rows=_spread(self.rows, before.rows, after.rows, after.matrix.shape[0], BASIC),
        )  # fmt: skip


def _spread(
    status: Statuses,
    before: Mapping[str, Integers],
    after: Mapping[str, Integers],
    size: int,
    new: int,
) -> Statuses:
    """Put the statuses of a model's families where a larger model has them; `new` everywhere else."""
    found = np.full(size, new, dtype=np.int8)
    for family, positions in before.items():
        found[after[family][:, : positions.shape[1]]] = status[positions]
    return found


def shifted(
    status: Statuses, families: Mapping[str, Integers], shift: int, periods: int
) -> Statuses:
    """Give each period the status of the one `shift` later; the last ones keep theirs.

    Hours that are new so take the status of the last ones seen: the same hours of the day before,
    where windows overlap by a day.
    """
    later = np.arange(periods) + shift
    source = np.where(later < periods, later, np.arange(periods))
    moved = status.copy()
    for positions in families.values():
        moved[positions] = status[positions[source]]
    return moved
