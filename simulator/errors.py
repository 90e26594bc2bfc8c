"""The errors this program raises, and the line in which it reports one problem of an input.

RamplineError
├── CaseError      the case folder is wrong; carries every problem found        exit code 2
├── OptionError    a call asks for what cannot be done                          exit code 2
├── SolveError     the solver could not finish a window                         exit code 3
└── AuditError     a result does not prove itself                               exit code 4

Public names: `Problem`, `RamplineError`, `CaseError`, `OptionError`, `SolveError`, `AuditError`.
"""

from collections.abc import Sequence
from dataclasses import dataclass

__all__ = ["AuditError", "CaseError", "OptionError", "Problem", "RamplineError", "SolveError"]


@dataclass(frozen=True, order=True)
class Problem:
    """One fault of an input: where it is, what it is about, and how to mend it.

    `row` counts from 1, the header; `column` is the column's or setting's name, "-" for a whole row
    or file.

    >>> print(Problem("network/lines.csv", 4, "to_bus", 'line "X4"',
    ...     "must name a bus of network/buses.csv", '"Osterl"', 'did you mean "Ostrel"?'))
    network/lines.csv:4:to_bus: line "X4", must name a bus of network/buses.csv, found "Osterl", \
did you mean "Ostrel"?
    """

    path: str
    row: int
    column: str
    subject: str
    rule: str
    found: str
    remedy: str

    def __str__(self) -> str:
        place = f"{self.path}:{self.row}:{self.column}"
        return f"{place}: {self.subject}, {self.rule}, found {self.found}, {self.remedy}"


class RamplineError(Exception):
    """The root: everything this program raises on purpose."""


class CaseError(RamplineError):
    """A case that cannot be used; `problems` holds every fault found, in the order of the files."""

    def __init__(self, problems: Sequence[Problem]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class OptionError(RamplineError):
    """A call that asks for what cannot be done; the message names the option and the remedy."""


class SolveError(RamplineError):
    """A window that the solver could not finish.

    `window` is its number in the run, `status` the solver's verdict in words, `elements` the
    elements and hours that contradict each other, as far as they could be found; `remedy` what to do
    where there are none to name.
    """

    def __init__(
        self, window: int, status: str, elements: Sequence[str] = (), *, remedy: str = ""
    ) -> None:
        self.window, self.status, self.elements = window, status, tuple(elements)
        shown = "; ".join(self.elements) or remedy or "no single element could be named"
        super().__init__(f"window {window}: the solver ended with status {status}: {shown}")

    def __reduce__(self) -> tuple[type["SolveError"], tuple[int, str, tuple[str, ...]]]:
        return type(self), (self.window, self.status, self.elements)


class AuditError(RamplineError):
    """A results dataset on which a check cannot even be evaluated; names the check and why."""
