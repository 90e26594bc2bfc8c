"""How long solving by hand may take.

Public names: `Budget`, `OverBudgetError`.
"""

import time

__all__ = ["Budget", "OverBudgetError"]


class OverBudgetError(Exception):
    """What was measured would take longer than its budget."""

    def __init__(self, seconds: float) -> None:
        self.seconds = seconds
        super().__init__(f"over the budget of {seconds:g} s")


class Budget:
    """Seconds from now on."""

    def __init__(self, seconds: float) -> None:
        self.seconds, self._end = seconds, time.perf_counter() + seconds

    def left(self) -> float:
        """Return the seconds left; raise `OverBudgetError` if there are none."""
        left = self._end - time.perf_counter()
        if left <= 0:
            raise OverBudgetError(self.seconds)
        return left
