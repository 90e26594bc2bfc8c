"""What solving took.

Public names: `Counts`, `WindowRecord`.
"""

import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field

__all__ = ["Counts", "WindowRecord"]


@dataclass(frozen=True)
class WindowRecord:
    """How one window went: `gap` is None where nothing was decided; `time_limit` tells what ended it.

    allowed : by how much the best plan of the window may cost less than the one found, currency
    """

    window: int
    seconds: float
    gap: float | None = None
    time_limit: bool = False
    allowed: float = 0.0


@dataclass
class Counts:
    """Solves, line rows added, models built, seconds by stage, and a record a window."""

    lp_solves: int = 0
    mip_solves: int = 0
    line_rows: int = 0
    builds: int = 0
    iterations: int = 0
    windows: list[WindowRecord] = field(default_factory=list)
    seconds: dict[str, float] = field(
        default_factory=lambda: {"build": 0.0, "solve": 0.0, "network": 0.0}
    )

    @contextmanager
    def timed(self, stage: str) -> Iterator[None]:
        """Add the seconds of a block to a stage."""
        began = time.perf_counter()
        yield
        self.seconds[stage] += time.perf_counter() - began
