"""What one window needs to know, as whole arrays: cut out of arrays made once for a run.

Public names: `ReserveData`, `RunInputs`, `StoreData`, `UnitData`, `WindowInputs`, `run_inputs`.

Arrays over time have periods first. Powers are MW, prices currency/MWh, Δ is `period_hours`.
"""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import sparse

from simulator.case import Case, series
from simulator.dispatch.limits import NetworkLimits
from simulator.dispatch.reach import reachable_ceiling, reachable_floor, reachable_minimum
from simulator.grid import Cells, Contingencies, LineLosses, Network, TopologySchedule, common_cells

__all__ = ["ReserveData", "RunInputs", "StoreData", "UnitData", "WindowInputs", "run_inputs"]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]


@dataclass(frozen=True)
class UnitData:
    """What does not change over time, arrays (unit,) unless said otherwise.

    ramp_up, ramp_down : most change of output in one period, MW (ramp × Δ)
    start_ramp, stop_ramp : most output in the first and the last period of a run, MW
    hot_start, cold_start : currency a start
    up_periods, down_periods : minimum up and down times in periods, at least 1
    restart_periods : soonest start after a stop: minimum down time, or one period for units that an
        outage of this run takes out, which may return at once
    hot_periods : a start within this many periods of the stop is hot
    maximum : MW, with nothing out; must_run : bool
    least : the lowest minimum output of the run, MW
    block_unit : array (block,), the unit a cost block belongs to
    ramp_up_rows, ramp_down_rows : positions of the units whose ramps can bind; cold_rows : of those
        whose cold starts cost more than hot ones. Fixed for a run, so that its windows have one shape.
    """

    bus: Integers
    ramp_up: Floats
    ramp_down: Floats
    start_ramp: Floats
    stop_ramp: Floats
    hot_start: Floats
    cold_start: Floats
    up_periods: Integers
    down_periods: Integers
    restart_periods: Integers
    hot_periods: Integers
    maximum: Floats
    least: Floats
    must_run: Booleans
    block_unit: Integers
    ramp_up_rows: Integers
    ramp_down_rows: Integers
    cold_rows: Integers

    @property
    def memory(self) -> int:
        """How many periods before a window can still matter to it."""
        longest = np.concatenate([self.up_periods, self.down_periods, self.hot_periods])
        return int(longest.max(initial=1))


@dataclass(frozen=True)
class StoreData:
    """Stores, arrays (store,) (formulation.md 2.4).

    kept : share of stored energy left after one period, (1 − loss)^Δ
    charged, drawn : MWh into and out of the store per MW over one period, η_c·Δ and Δ/η_d
    energy : MWh; throughput_cost : currency/MWh; end_value : currency/MWh
    """

    bus: Integers
    kept: Floats
    charged: Floats
    drawn: Floats
    energy: Floats
    throughput_cost: Floats
    end_value: Floats


@dataclass(frozen=True)
class ReserveData:
    """Reserve products, and the offers of units to provide them (formulation.md 2.7).

    unit, product : arrays (offer,), positions; limit : array (offer,), MW, ramp × response time
    limited : array, positions of the offers that this can limit to less than a unit's whole range
    upward : array (product,), bool; shortage_cost : array (product,), currency/MWh
    up_units, down_units : positions of the units that offer a product of that direction
    """

    unit: Integers
    product: Integers
    limit: Floats
    limited: Integers
    upward: Booleans
    shortage_cost: Floats
    up_units: Integers
    down_units: Integers

    @property
    def there(self) -> bool:
        """Whether there is any product."""
        return bool(len(self.upward))


@dataclass(frozen=True, eq=False)
class WindowInputs:
    """Everything of one window but the state it starts from.

    number : the window's place in the run, from 0; first : its first period, counted from the run's
    gap, seconds : when the search for on/off decisions may stop (mode `optimal`)
    mode : commitment mode; limited : whether network limits hold
    unit_min, unit_available : arrays (period, unit), MW; minimum output is never above what is available
    unit_out : fully out; unit_falling : available output falls from the period before
    unit_out_before : array (lag, unit), the same before the window, most recent first
    unit_given : schedule of mode `given`, outages taken off; unit_ceiling : most output, MW, from
        which that schedule can still be followed
    minimum_cost : array (period, unit), currency/h of output at the minimum, no-load cost included
    block_width, block_cost : arrays (period, block), MW above minimum output and currency/MWh
    block_not_at_start, block_not_at_stop : arrays (period, block), MW of a block that lie above the
        start ramp, and above the stop ramp where it holds in the next period
    minimum_emissions (period, unit), t/h, block_emissions (block,), t/MWh : the same split of carbon
    renewable_available (period, plant); renewable_offer, renewable_bus (plant,)
    store_share : array (period, store), what outages leave; store_floor : least energy from which
        `final_mwh` can still be reached, MWh; ends_run : the window reaches the end of the run
    charge, discharge : arrays (store,), MW
    tie_forward, tie_reverse (period, tie), MW entering; tie_delivered : share that arrives
    tie_lossy : positions of the ties that lose something; tie_widest : array (direction, tie), MW, the
        most either way with nothing out
    reserve_requirement : array (period, product), MW
    demand (period, load); unserved_cost (load,); surplus_cost, short_cost : currency/MWh
    limits : what lines and corridors may carry; losses : what lines lose, None if nothing counts
    topology : which topology holds when
    joined (period, pair)
    """

    number: int
    first: int
    mode: str
    gap: float
    seconds: float
    limited: bool
    period_hours: float
    unit: UnitData
    unit_min: Floats
    unit_available: Floats
    unit_out: Booleans
    unit_falling: Booleans
    unit_out_before: Booleans
    unit_given: Booleans
    unit_ceiling: Floats
    minimum_cost: Floats
    block_width: Floats
    block_cost: Floats
    block_not_at_start: Floats
    block_not_at_stop: Floats
    minimum_emissions: Floats
    block_emissions: Floats
    renewable_bus: Integers
    renewable_offer: Floats
    renewable_available: Floats
    store: StoreData
    charge: Floats
    discharge: Floats
    store_share: Floats
    store_floor: Floats
    ends_run: bool
    reserve: ReserveData
    reserve_requirement: Floats
    tie_from: Integers
    tie_to: Integers
    tie_delivered: Floats
    tie_lossy: Integers
    tie_widest: Floats
    tie_forward: Floats
    tie_reverse: Floats
    load_bus: Integers
    unserved_cost: Floats
    demand: Floats
    surplus_cost: float
    short_cost: float
    limits: NetworkLimits
    losses: LineLosses | None
    topology: TopologySchedule
    cells: Cells
    joined: Booleans
    buses: int

    @property
    def periods(self) -> int:
        """Number of periods."""
        return len(self.demand)

    @property
    def demand_at_bus(self) -> Floats:
        """Demand summed at buses, array (period, bus), MW."""
        return series.sum_by(self.demand, self.load_bus, self.buses)


_BY_PERIOD = (
    "unit_min", "unit_available", "unit_out", "unit_falling", "unit_given", "unit_ceiling",
    "minimum_cost", "minimum_emissions", "block_width", "block_cost",
    "block_not_at_start", "block_not_at_stop", "renewable_available",
    "store_share", "store_floor", "reserve_requirement", "tie_forward", "tie_reverse",
    "demand", "limits", "topology", "joined",
)  # fmt: skip


@dataclass(frozen=True, eq=False)
class RunInputs:
    """The inputs of a whole run and its look-ahead, from which windows are cut.

    whole : all periods from the first of the run to the last the hourly data allow it to see
    run_periods : how many of them the run keeps
    """

    whole: WindowInputs
    run_periods: int

    def window(self, number: int, first: int, periods: int) -> WindowInputs:
        """Cut one window of some periods, counted from the run's first."""
        whole = self.whole
        span = slice(first, first + periods)
        cut = {name: getattr(whole, name)[span] for name in _BY_PERIOD}
        before = np.zeros((whole.unit.memory, len(whole.unit.bus)), dtype=bool)
        past = whole.unit_out[max(0, first - len(before)) : first][::-1]
        before[: len(past)] = past
        ends_run = first + periods >= self.run_periods
        return replace(
            whole, number=number, first=first, unit_out_before=before, ends_run=ends_run, **cut
        )


def run_inputs(case: Case, span: slice, run_periods: int, mode: str, limits: str) -> RunInputs:
    """Make the arrays of a run over `span`, of which the first `run_periods` are kept.

    limits : none, lines or secure
    """
    network = Network.of(case)
    topology = network.schedule(series.in_service(case, span))
    cells, units = common_cells(topology.topologies), _unit_inputs(case, span)
    whole = WindowInputs(
        number=0, first=0, mode=mode, gap=case.settings.commitment.mip_gap,
        seconds=case.settings.commitment.seconds, limited=limits != "none",
        period_hours=case.time.period_hours,
        surplus_cost=case.settings.penalties.surplus, short_cost=_short_cost(case),
        limits=_limits(case, span, network, secure=limits == "secure"), topology=topology, cells=cells,
        losses=LineLosses.of(case, network) if case.settings.network.losses else None,
        joined=cells.joined[topology.index], buses=len(case.buses), ends_run=True,
        reserve_requirement=series.reserve_requirement(case, span), **units,
        reserve=_reserve_data(case, units["unit"]), **_renewable_inputs(case, span),
        **_store_inputs(case, span, run_periods), **_tie_inputs(case, span), **_load_inputs(case, span),
    )  # fmt: skip
    return RunInputs(whole, run_periods)


def _limits(case: Case, span: slice, network: Network, *, secure: bool) -> NetworkLimits:
    members, names = case.corridor_lines, case.corridors.index
    corridor = names.get_indexer(pd.Index(members["corridor"]))
    line = case.lines.index.get_indexer(pd.Index(members["line"]))
    shape = (len(names), len(case.lines))
    return NetworkLimits(
        rating=series.line_rating(case, span),
        emergency=series.line_rating(case, span, "emergency_rating_mw"),
        weight=sparse.csr_array((members["weight"].to_numpy(float), (corridor, line)), shape=shape),
        forward=series.corridor_limit(case, span, "forward_mw"),
        reverse=series.corridor_limit(case, span, "reverse_mw"),
        contingencies=Contingencies.of(case, network) if secure else Contingencies.none(),
    )


_UNIT_NUMBERS = (
    "ramp_up_mw_per_h", "ramp_down_mw_per_h", "start_ramp_mw", "stop_ramp_mw", "start_cost",
    "cold_start_cost", "max_output_mw",
)  # fmt: skip


def _bus(case: Case, names: pd.Series) -> Integers:
    return case.buses.index.get_indexer(pd.Index(names))


def _periods_up(hours: pd.Series, period_hours: float) -> Integers:
    """Round a duration that has to pass up to whole periods."""
    return np.ceil(hours.to_numpy(float) / period_hours - 1e-9).astype(int)


def _periods_down(hours: pd.Series, period_hours: float) -> Integers:
    """Round a duration that must not pass down to whole periods."""
    return np.floor(hours.to_numpy(float) / period_hours + 1e-9).astype(int)


def _unit_data(case: Case, block_unit: Integers, least: Floats, taken_out: Booleans) -> UnitData:
    """Collect the units' constants.

    taken_out : array (unit,), whether an outage of the run takes a unit out fully
    least : array (unit,), the lowest minimum output of the run, MW. Between two periods on, output
    moves by at most the maximum less that, so a wider ramp never binds.
    """
    units, length = case.units, case.time.period_hours
    numbers = {name: units[name].to_numpy(float) for name in _UNIT_NUMBERS}
    ramp_up, ramp_down = (
        numbers["ramp_up_mw_per_h"] * length,
        numbers["ramp_down_mw_per_h"] * length,
    )
    most, moves = numbers["max_output_mw"], numbers["max_output_mw"] - least
    down = np.maximum(_periods_up(units["min_down_h"], length), 1)
    start_ramp, stop_ramp = numbers["start_ramp_mw"], numbers["stop_ramp_mw"]
    return UnitData(
        bus=_bus(case, units["bus"]),
        ramp_up=ramp_up, ramp_down=ramp_down, start_ramp=start_ramp, stop_ramp=stop_ramp,
        hot_start=numbers["start_cost"], cold_start=numbers["cold_start_cost"],
        up_periods=np.maximum(_periods_up(units["min_up_h"], length), 1),
        down_periods=down, restart_periods=np.where(taken_out, 1, down),
        hot_periods=_periods_down(units["min_down_h"] + units["cold_after_h"], length),
        maximum=most, least=least, must_run=units["must_run"].to_numpy(bool), block_unit=block_unit,
        ramp_up_rows=np.flatnonzero((ramp_up < moves) | (start_ramp < most)),
        ramp_down_rows=np.flatnonzero((ramp_down < moves) | (stop_ramp < most)),
        cold_rows=np.flatnonzero(numbers["cold_start_cost"] > numbers["start_cost"]),
    )  # fmt: skip


def _unit_inputs(case: Case, span: slice) -> dict[str, Any]:
    """Availability, minimum output, and cost blocks split at the minimum.

    Up to minimum output a unit has no choice, so that part of its curve is a cost of being on; only
    what lies between the minimum and the available output is left as blocks. This is exact even
    where the curve falls below the minimum.
    """
    units, blocks = case.units, case.blocks
    share = series.available_share(case, "unit", units.index, span)
    available = share * units["max_output_mw"].to_numpy(float)
    ramp_up = units["ramp_up_mw_per_h"].to_numpy(float) * case.time.period_hours
    least = reachable_minimum(units["min_output_mw"].to_numpy(float), available, ramp_up)
    unit = units.index.get_indexer(pd.Index(blocks["unit"]))
    cost = series.block_cost(case, span)
    low, high = blocks["from_mw"].to_numpy(float), blocks["up_to_mw"].to_numpy(float)
    below = np.clip(least[:, unit], low, high) - low
    top = np.minimum(available[:, unit], high)
    width = np.clip(top - low - below, 0.0, None)
    carbon = series.block_emissions(case)
    out = share == 0
    data = _unit_data(case, unit, least.min(axis=0, initial=np.inf), out.any(axis=0))
    falling = np.diff(share, axis=0, prepend=np.ones((1, share.shape[1]))) < 0
    at_start = np.clip(top - np.maximum(low, data.start_ramp[unit]), 0.0, width)
    at_stop = np.clip(top - np.maximum(low, data.stop_ramp[unit]), 0.0, width)
    at_stop[:-1][falling[1:][:, unit]] = 0.0
    used = (width > 0).any(axis=0)
    on = series.unit_schedule(case, span) & ~out
    return {
        "unit": replace(data, block_unit=unit[used]),
        "unit_min": least, "unit_available": available, "unit_out": out,
        "unit_falling": falling,
        "unit_out_before": np.zeros((0, len(units)), dtype=bool),
        "unit_given": on, "unit_ceiling": reachable_ceiling(on, available, data.ramp_down, data.stop_ramp),
        "minimum_cost": series.sum_by(below * cost, unit, len(units))
        + units["no_load_cost_per_h"].to_numpy(float),
        "minimum_emissions": series.sum_by(below * carbon, unit, len(units)),
        "block_width": width[:, used], "block_cost": cost[:, used], "block_emissions": carbon[used],
        "block_not_at_start": at_start[:, used], "block_not_at_stop": at_stop[:, used],
    }  # fmt: skip


def _renewable_inputs(case: Case, span: slice) -> dict[str, Any]:
    plants = case.renewables
    return {
        "renewable_bus": _bus(case, plants["bus"]),
        "renewable_offer": plants["offer_per_mwh"].to_numpy(float),
        "renewable_available": series.renewable_available(case, span),
    }


def _store_inputs(case: Case, span: slice, run_periods: int) -> dict[str, Any]:
    stores, length = case.storage, case.time.period_hours
    data = StoreData(
        bus=_bus(case, stores["bus"]),
        kept=(1 - stores["loss_percent_per_h"].to_numpy(float) / 100) ** length,
        charged=stores["charge_efficiency"].to_numpy(float) * length,
        drawn=length / stores["discharge_efficiency"].to_numpy(float),
        energy=stores["energy_mwh"].to_numpy(float),
        throughput_cost=stores["throughput_cost_per_mwh"].to_numpy(float),
        end_value=stores["end_value_per_mwh"].to_numpy(float),
    )
    share = series.available_share(case, "storage", stores.index, span)
    charge = stores["charge_mw"].to_numpy(float)
    floor = reachable_floor(
        stores["final_mwh"].to_numpy(float), share * charge * data.charged, data.kept, run_periods
    )
    return {
        "store": data, "charge": charge, "discharge": stores["discharge_mw"].to_numpy(float),
        "store_share": share, "store_floor": floor,
    }  # fmt: skip


def _reserve_data(case: Case, unit: UnitData) -> ReserveData:
    """Pair every product with the units of its zone that can move at all."""
    products = case.reserves
    upward = products["direction"].to_numpy(dtype=object) == "up"
    ramps = [case.units[f"ramp_{way}_mw_per_h"].to_numpy(float)[:, None] for way in ("up", "down")]
    hours = products["response_minutes"].to_numpy(float) / 60
    with np.errstate(invalid="ignore"):  # a ramp of nothing over a response time without limit
        limit = np.nan_to_num(np.where(upward, *ramps) * hours, nan=0.0, posinf=np.inf)
    can = series.zone_members(case, case.units["bus"]) & (limit > 0) & (unit.maximum > 0)[:, None]
    offering, product = np.nonzero(can)
    reach = limit[offering, product]
    return ReserveData(
        unit=offering, product=product, limit=reach,
        limited=np.flatnonzero(reach < (unit.maximum - unit.least)[offering]), upward=upward,
        shortage_cost=products["shortage_per_mwh"].to_numpy(float),
        up_units=np.unique(offering[upward[product]]),
        down_units=np.unique(offering[~upward[product]]),
    )  # fmt: skip


def _tie_inputs(case: Case, span: slice) -> dict[str, Any]:
    ties = case.dc_ties
    share = series.available_share(case, "dc_tie", ties.index, span)
    return {
        "tie_from": _bus(case, ties["from_bus"]),
        "tie_to": _bus(case, ties["to_bus"]),
        "tie_delivered": 1 - ties["loss_percent"].to_numpy(float) / 100,
        "tie_lossy": np.flatnonzero(ties["loss_percent"].to_numpy(float) > 0),
        "tie_widest": ties[["forward_mw", "reverse_mw"]].to_numpy(float).T,
        "tie_forward": share * ties["forward_mw"].to_numpy(float),
        "tie_reverse": share * ties["reverse_mw"].to_numpy(float),
    }


def _short_cost(case: Case) -> float:
    """Return the price of missing final energy, currency/MWh: dearer than anything else a run can do.

    So `final_mwh` gives way only where it cannot be reached (formulation.md 1.5 and 2.4).
    """
    penalties, asked = case.settings.penalties, case.loads["unserved_per_mwh"].to_numpy(float)
    dearest = np.max([penalties.unserved, penalties.surplus, *asked, 1.0])
    return 10.0 * float(dearest)


def _load_inputs(case: Case, span: slice) -> dict[str, Any]:
    return {
        "load_bus": _bus(case, case.loads["bus"]),
        "unserved_cost": case.loads["unserved_per_mwh"].to_numpy(float),
        "demand": series.load_demand(case, span),
    }
