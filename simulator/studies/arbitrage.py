"""What a store that moves no price could earn on price series, exactly, many series at once (6.2).

Public names: `StoreTerms`, `best_earnings`, `daily_spread`.

The store obeys formulation.md 2.4: E_t = kept·E_{t−1} + η_c·Δ·charge − Δ/η_d·discharge, 0 ≤ E ≤ energy,
with both powers between 0 and their limits. It starts empty and may end empty, so all it earns comes
from buying and selling. Like 2.4 it may charge and discharge in one period, which pays only where
prices are negative.

Without a limit on cycles the best is found by a dynamic programme over stored energy: the value of
what is stored is a concave, piecewise linear function, kept by its slopes, so nothing is rounded to a
grid. A limit on cycles ties the periods of a day together; then one linear program is built once and
priced again for each series, from the basis of the last.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from simulator.dispatch.compiled import Vectors
from simulator.dispatch.solver import LinearSolver

__all__ = ["StoreTerms", "best_earnings", "daily_spread"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True)
class StoreTerms:
    """A store as a planner states it.

    charge_mw, discharge_mw : at the bus; energy_mwh : most that is stored
    cycles_per_day : most energy drawn in a local day, in multiples of `energy_mwh`; inf for no limit
    """

    charge_mw: float
    discharge_mw: float
    energy_mwh: float
    charge_efficiency: float = 1.0
    discharge_efficiency: float = 1.0
    loss_percent_per_h: float = 0.0
    throughput_cost_per_mwh: float = 0.0
    cycles_per_day: float = float("inf")

    def kept(self, period_hours: float) -> float:
        """Return the share of stored energy left after a period."""
        return float((1 - self.loss_percent_per_h / 100) ** period_hours)

    def charged(self, period_hours: float) -> float:
        """Return MWh stored a MW charged over a period."""
        return self.charge_efficiency * period_hours

    def drawn(self, period_hours: float) -> float:
        """Return MWh drawn from what is stored a MW discharged over a period."""
        return period_hours / self.discharge_efficiency


def best_earnings(price: Floats, store: StoreTerms, period_hours: float, day: Integers) -> Floats:
    """Return the most the store could earn on each price series, array (series,), currency.

    price : array (period, series), currency/MWh; day : array (period,), number of the local day

    >>> store = StoreTerms(10.0, 10.0, 20.0)
    >>> best_earnings(np.array([[10.0], [20.0], [50.0]]), store, 1.0, np.zeros(3, int))
    array([400.])
    >>> one_cycle = StoreTerms(10.0, 10.0, 20.0, cycles_per_day=0.5)
    >>> best_earnings(np.array([[10.0], [20.0], [50.0]]), one_cycle, 1.0, np.zeros(3, int))
    array([400.])
    """
    if np.isinf(store.cycles_per_day):
        return _by_value_of_energy(price, store, period_hours)
    program = _Program(store, period_hours, day)
    return np.array([program.best(series) for series in price.T])


# The dynamic programme


def _by_value_of_energy(price: Floats, store: StoreTerms, period_hours: float) -> Floats:
    """Step back through time, holding the value of stored energy as widths and slopes.

    V_{t−1}(E) = max over charge, discharge of revenue_t + V_t(kept·E + stored_t − drawn_t). The options of
    a period are two pieces: to forgo charging is worth price/η_c a MWh in store, over the width of a full
    charge, and to discharge (price − cost)·η_d, over that of a full discharge. The maximum over both is
    the sup-convolution of concave functions: their pieces in order of slope. What lies outside
    [0, kept·energy] is cut off. `empty` is the value of an empty store.
    """
    kept = store.kept(period_hours)
    charge, draw = (
        store.charge_mw * store.charged(period_hours),
        store.discharge_mw * store.drawn(period_hours),
    )
    bought, sold = store.charge_mw * period_hours, store.throughput_cost_per_mwh
    series = price.shape[1]
    slopes, widths = np.zeros((series, 1)), np.full((series, 1), store.energy_mwh)
    empty = np.zeros(series)
    new_widths = np.tile([charge, draw], (series, 1))
    for now in price[::-1]:
        ahead = np.stack(
            [now / store.charge_efficiency, (now - sold) * store.discharge_efficiency], axis=1
        )
        slopes, widths = np.hstack([slopes, ahead]), np.hstack([widths, new_widths])
        order = np.argsort(-slopes, axis=1, kind="stable")
        slopes, widths = (np.take_along_axis(each, order, axis=1) for each in (slopes, widths))
        ends = np.cumsum(widths, axis=1)
        within = np.clip(ends, charge, charge + kept * store.energy_mwh)
        below = np.minimum(ends, charge)
        empty += (slopes * np.diff(below, axis=1, prepend=0.0)).sum(axis=1) - now * bought
        widths = np.diff(within, axis=1, prepend=charge)
        slopes, widths = _without_gaps(slopes, widths)
        slopes, widths = slopes * kept, widths / kept
    return empty


_LAST = -1e100
"""The slope of a piece without width, so that it never stands between others."""


def _without_gaps(slopes: Floats, widths: Floats) -> tuple[Floats, Floats]:
    """Drop the pieces without width: those left stand side by side, as many columns as the most have."""
    there = widths > 0
    most = max(int(there.sum(axis=1).max(initial=0)), 1)
    first = there.argmax(axis=1)
    places = first[:, None] + np.arange(most)
    inside = places < widths.shape[1]
    places = np.where(inside, places, 0)
    widths = np.where(inside, np.take_along_axis(widths, places, axis=1), 0.0)
    return np.where(widths > 0, np.take_along_axis(slopes, places, axis=1), _LAST), widths


# The linear program


class _Program:
    """The store's linear program over all periods; only its prices change.

    Columns: charge, discharge and stored energy by period. Rows: the balance of each period, and the
    energy drawn in each day where cycles are limited.
    """

    def __init__(self, store: StoreTerms, period_hours: float, day: Integers) -> None:
        self._store, self._length, self._periods = store, period_hours, len(day)
        limited = np.isfinite(store.cycles_per_day)
        matrix = self._balance()
        days = int(day.max(initial=-1)) + 1 if limited else 0
        if limited:
            matrix = sparse.csc_array(sparse.vstack([matrix, self._drawn_by_day(day, days)]))
        zero = np.zeros(self._periods)
        upper = [zero + store.charge_mw, zero + store.discharge_mw, zero + store.energy_mwh]
        cycled = np.full(days, store.cycles_per_day * store.energy_mwh if limited else 0.0)
        self._vectors = Vectors(
            lower=np.zeros(3 * self._periods),
            upper=np.concatenate(upper),
            cost=np.zeros(3 * self._periods),
            row_lower=np.concatenate([zero, np.zeros(days)]),
            row_upper=np.concatenate([zero, cycled]),
        )
        self._solver = LinearSolver()
        self._solver.load(matrix, self._vectors)

    def _balance(self) -> sparse.csc_array:
        one = sparse.eye_array(self._periods)
        before = sparse.eye_array(self._periods, k=-1)
        charged, drawn = (
            self._store.charged(self._length),
            self._store.drawn(self._length),
        )
        stored = one - self._store.kept(self._length) * before
        return sparse.csc_array(sparse.hstack([-charged * one, drawn * one, stored]))

    def _drawn_by_day(self, day: Integers, days: int) -> sparse.csc_array:
        drawn = np.full(self._periods, self._store.drawn(self._length))
        columns = self._periods + np.arange(self._periods)
        return sparse.csc_array((drawn, (day, columns)), shape=(days, 3 * self._periods))

    def best(self, price: Floats) -> float:
        """Return the most that can be earned on one price series, starting from the last basis."""
        store = self._store
        self._vectors.cost[: self._periods] = price * self._length
        sold = (store.throughput_cost_per_mwh - price) * self._length
        self._vectors.cost[self._periods : 2 * self._periods] = sold
        self._solver.set_vectors(self._vectors)
        self._solver.run()
        return -self._solver.objective


def daily_spread(price: Floats, hours: float, period_hours: float, day: Integers) -> Floats:
    """Return the mean over days of the dearest less the cheapest `hours` of a day, array (series,).

    price : array (period, series), currency/MWh. Days shorter than twice `hours` are left out, since
    dear and cheap hours would overlap; NaN if none is left.

    >>> daily_spread(np.array([[1.0], [2.0], [3.0], [6.0]]), 2.0, 1.0, np.zeros(4, int))
    array([3.])
    """
    count = max(round(hours / period_hours), 1)
    spreads = []
    for number in np.unique(day):
        ordered = np.sort(price[day == number], axis=0)
        if len(ordered) >= 2 * count:
            spreads.append(ordered[-count:].mean(axis=0) - ordered[:count].mean(axis=0))
    return np.mean(spreads, axis=0) if spreads else np.full(price.shape[1], np.nan)
