"""The compiled fleet half: one matrix, and where each family of columns and rows landed in it.

Public names: `CompiledFleet`, `Vectors`, `compile_fleet`.

The same positions carry a window's numbers in and its solution and duals back out by name.
"""

import gc
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pyomo.environ as pyo
from numpy.typing import NDArray
from pyomo.opt import WriterFactory
from scipy import sparse

from simulator.dispatch.fleet import FleetData, within_reach
from simulator.dispatch.formulation import state_fleet
from simulator.dispatch.inputs import WindowInputs

__all__ = ["CompiledFleet", "Vectors", "compile_fleet"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Vectors:
    """A window as whole arrays: lower, upper, cost (column,); row_lower, row_upper (row,)."""

    lower: Floats
    upper: Floats
    cost: Floats
    row_lower: Floats
    row_upper: Floats


@dataclass(frozen=True, eq=False)
class CompiledFleet:
    """The compiled fleet half of every window of one shape.

    matrix : sparse array (row, column)
    columns, rows : family → array (period, element), positions in the matrix
    keys : array (entry,), column × rows + row of each entry, rising
    """

    matrix: sparse.csc_array
    columns: Mapping[str, Integers]
    rows: Mapping[str, Integers]
    keys: Integers = field(repr=False)

    def vectors(self, data: FleetData) -> Vectors:
        """Lay a window's numbers out in the order of the matrix."""
        rows, columns = self.matrix.shape
        vectors = Vectors(*(np.zeros(size) for size in (columns, columns, columns, rows, rows)))
        for family, (lower, upper) in data.columns.items():
            vectors.lower[self.columns[family]] = lower
            vectors.upper[self.columns[family]] = upper
        for family, cost in data.costs.items():
            vectors.cost[self.columns[family]] = cost
        for family, (lower, upper) in data.rows.items():
            vectors.row_lower[self.rows[family]] = lower
            vectors.row_upper[self.rows[family]] = upper
        return vectors

    def filled(self, inputs: WindowInputs, data: FleetData) -> sparse.csc_array:
        """Return the matrix with the entries that derates and outages change as they are in a window."""
        matrix = self.matrix.copy()
        rows, columns, values = _moving_entries(self.rows, self.columns, inputs, data)
        matrix.data[self._places(rows, columns)] = values
        return matrix

    def _places(self, rows: Integers, columns: Integers) -> Integers:
        """Positions of entries in the matrix's data."""
        return np.searchsorted(self.keys, columns * self.matrix.shape[0] + rows)

    def named(self, solution: Floats) -> dict[str, Floats]:
        """Take a solution apart: family → array (period, element)."""
        return {family: solution[positions] for family, positions in self.columns.items()}

    def row_name(self, row: int) -> tuple[str, int, int]:
        """Return the family, period and element position of a row."""
        return _name(self.rows, row)

    def column_name(self, column: int) -> tuple[str, int, int]:
        """Return the family, period and element position of a column."""
        return _name(self.columns, column)


def _moving_entries(
    rows: Mapping[str, Integers],
    columns: Mapping[str, Integers],
    inputs: WindowInputs,
    data: FleetData,
) -> tuple[Integers, Integers, Floats]:
    """Return row, column and value of every entry that derates and outages may change."""
    parts = [
        _entries(row, rows[row], columns[column], values, inputs)
        for (row, column), values in data.coefficients.items()
    ]
    if not parts:
        return np.zeros(0, int), np.zeros(0, int), np.zeros(0)
    row, column, value = zip(*parts, strict=True)
    return np.concatenate(row), np.concatenate(column), np.concatenate(value)


def _entries(
    family: str, rows: Integers, columns: Integers, values: NDArray[Any], inputs: WindowInputs
) -> tuple[Integers, Integers, Floats]:
    if values.ndim == 3:  # noqa: PLR2004  (lag, period, unit)
        return _lagged_entries(rows, columns, values, within_reach(family, inputs))
    columns = columns[:, _units_of(family, inputs)]
    if len(values) < len(rows):  # a row that looks one period ahead
        rows, columns = rows[:-1], columns[1:]
    return rows.ravel(), columns.ravel(), values.ravel()


def _units_of(family: str, inputs: WindowInputs) -> Integers | slice:
    """Return the unit of each row of a family over one period; all of them, in order, by default."""
    units: dict[str, Integers] = {
        "block_width": inputs.unit.block_unit,
        "headroom": inputs.reserve.up_units,
        "footroom": inputs.reserve.down_units,
    }
    return units.get(family, slice(None))


def _lagged_entries(
    rows: Integers, columns: Integers, values: NDArray[Any], reach: NDArray[np.bool_]
) -> tuple[Integers, Integers, Floats]:
    """Entries that tie period t to the periods `lag` before it, for the lags some unit has."""
    lag, period, unit = np.nonzero(reach)
    return rows[period, unit], columns[period - lag, unit], values[lag, period, unit].astype(float)


def _name(families: Mapping[str, Integers], position: int) -> tuple[str, int, int]:
    for family, positions in families.items():
        hits = np.argwhere(positions == position)
        if len(hits):
            return family, int(hits[0][0]), int(hits[0][1])
    raise KeyError(position)


def compile_fleet(inputs: WindowInputs, data: FleetData) -> CompiledFleet:
    """State one window in Pyomo and turn it into a matrix; needed once a window shape."""
    with _collector_off():
        return _compile(state_fleet(inputs, data))


@contextmanager
def _collector_off() -> Iterator[None]:
    """Keep the garbage collector from walking a growing model again and again."""
    was_on = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if was_on:
            gc.enable()


def _compile(model: Any) -> CompiledFleet:
    model.objective = pyo.Objective(expr=0.0)
    form = WriterFactory("compile_standard_form").write(model, mixed_form=True)
    column_at = {id(variable): position for position, variable in enumerate(form.columns)}
    row_at = {id(entry.constraint): position for position, entry in enumerate(form.rows)}
    # A lossless tie within one cell is in no fleet row: its column counts in line rows only.
    for variable in model.component_data_objects(pyo.Var):
        column_at.setdefault(id(variable), len(column_at))
    absent = sparse.csc_array((len(form.rows), len(column_at) - len(form.columns)))
    matrix = sparse.csc_array(sparse.hstack([form.A, absent]))
    matrix.sort_indices()
    owner = np.repeat(np.arange(matrix.shape[1]), np.diff(matrix.indptr))
    return CompiledFleet(
        matrix=matrix,
        columns=_positions(model, pyo.Var, column_at),
        rows=_positions(model, pyo.Constraint, row_at),
        keys=owner * matrix.shape[0] + matrix.indices,
    )


def _positions(model: Any, kind: Any, position_of: Mapping[int, int]) -> dict[str, Integers]:
    """Return, for each family of that kind, its positions as an array (period, element)."""
    found = {}
    for component in model.component_objects(kind):
        shape = tuple(len(part) for part in component.index_set().subsets())
        positions = [position_of[id(item)] for item in component.values()]
        found[component.name] = np.array(positions, dtype=np.int64).reshape(shape)
    return found
