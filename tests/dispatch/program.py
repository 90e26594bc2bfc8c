"""A linear program written by name, solved by scipy: columns and rows are tuples like ("output", "g1", 3).

Nothing here knows of power systems, and nothing comes from the project.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.optimize import linprog

Name = tuple[object, ...]
Terms = Sequence[tuple[float, Name]]

INFEASIBLE, UNDECIDED = 2, 4  # scipy's statuses; the second is "infeasible or unbounded"


@dataclass(frozen=True)
class Optimum:
    """cost; value of each column; dual of each equality: what one more of its right side costs.

    With columns that must be whole, duals are those of nothing in particular.
    """

    cost: float
    value: dict[Name, float]
    dual: dict[Name, float]


class Program:
    """Minimise Σ cost·column under the rows; columns in `whole` take whole numbers only."""

    def __init__(self) -> None:
        self.whole: set[Name] = set()
        self._columns: dict[Name, tuple[float, float, float]] = {}
        self._rows: dict[str, list[tuple[Name, Terms, float]]] = {"=": [], "<=": []}

    def __contains__(self, name: Name) -> bool:
        return name in self._columns

    def column(
        self, name: Name, lower: float = 0.0, upper: float = np.inf, cost: float = 0.0
    ) -> None:
        assert name not in self._columns, name
        self._columns[name] = (lower, upper, cost)

    def row(self, name: Name, terms: Terms, sense: str, right: float) -> None:
        self._rows[sense].append((name, terms, right))

    def fix(self, values: Mapping[Name, float]) -> None:
        """Fix columns at values; those that had to be whole are now."""
        for name, value in values.items():
            self._columns[name] = (value, value, self._columns[name][2])
        self.whole -= set(values)

    def solve(self, more: Mapping[Name, float] | None = None) -> Optimum | None:
        """Solve, with `more` added to the right side of some equalities; None if it cannot be met."""
        place = {name: number for number, name in enumerate(self._columns)}
        lower, upper, cost = np.array(list(self._columns.values())).T
        equal, right = self._matrix("=", place)
        at_most, limit = self._matrix("<=", place)
        for number, (name, _, _) in enumerate(self._rows["="]):
            right[number] += (more or {}).get(name, 0.0)
        found = linprog(
            cost, at_most, limit, equal, right, bounds=np.stack([lower, upper], axis=1),
            integrality=[int(name in self.whole) for name in place] if self.whole else None,
            options={"mip_rel_gap": 0.0} if self.whole else {}, method="highs",
        )  # fmt: skip
        if found.status in (INFEASIBLE, UNDECIDED):
            return None
        assert found.status == 0, found.message
        names = [name for name, _, _ in self._rows["="]]
        value = dict(zip(self._columns, found.x.tolist(), strict=True))
        return Optimum(found.fun, value, dict(zip(names, found.eqlin.marginals, strict=True)))

    def _matrix(self, sense: str, place: Mapping[Name, int]) -> tuple[sparse.csr_array, np.ndarray]:
        rows = self._rows[sense]
        entries = [
            (number, place[column], factor)
            for number, (_, terms, _) in enumerate(rows)
            for factor, column in terms
        ]
        number, column, factor = np.array(entries).reshape(-1, 3).T
        shape = (len(rows), len(place))
        matrix = sparse.csr_array((factor, (number.astype(int), column.astype(int))), shape=shape)
        return matrix, np.array([right for _, _, right in rows])
