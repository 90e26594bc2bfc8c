"""What the duals of a window say: prices, and what limits cost.

Public names: `Pairs`, `Priced`.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Pairs", "Priced"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Pairs:
    """Lines priced after a contingency, arrays (pair,).

    contingency, line, period : positions; dual : signed, currency/MWh
    """

    contingency: Integers
    line: Integers
    period: Integers
    dual: Floats

    def first(self, periods: int) -> "Pairs":
        """Return the pairs of the first periods."""
        here = self.period < periods
        return Pairs(self.contingency[here], self.line[here], self.period[here], self.dual[here])


@dataclass(frozen=True, eq=False)
class Priced:
    """Prices and signed duals of limits, currency/MWh; negative where a flow is held down at its upper limit.

    price : array (period, bus) (5.1); congestion, loss : its parts from limits and from losses, with
        respect to some reference of each island
    reserve : array (period, product) (2.7)
    line (period, line), corridor (period, corridor) : duals of limits as things are
    pairs : duals of limits after contingencies
    """

    price: Floats
    congestion: Floats
    loss: Floats
    reserve: Floats
    line: Floats
    corridor: Floats
    pairs: Pairs

    @classmethod
    def end_to_end(cls, parts: "Sequence[tuple[int, Priced]]") -> "Priced":
        """Join the first periods of some windows, given how many of each."""
        arrays = {
            name: np.concatenate([getattr(priced, name)[:kept] for kept, priced in parts])
            for name in ("price", "congestion", "loss", "reserve", "line", "corridor")
        }
        begins = np.cumsum([0, *(kept for kept, _ in parts)])
        pairs = [priced.pairs.first(kept) for kept, priced in parts]
        return cls(
            **arrays,
            pairs=Pairs(
                np.concatenate([each.contingency for each in pairs]),
                np.concatenate([each.line for each in pairs]),
                np.concatenate([each.period + at for at, each in zip(begins, pairs, strict=False)]),
                np.concatenate([each.dual for each in pairs]),
            ),
        )
