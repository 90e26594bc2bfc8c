"""Hourly arrays of a case over a span of periods: what is demanded, available, in service, and at what cost.

Public names: `available_share`, `block_cost`, `block_emissions`, `corridor_limit`, `in_service`,
`line_rating`, `load_demand`, `profile_values`, `renewable_available`, `reserve_requirement`, `sum_by`,
`unit_schedule`, `zone_members`.

Every function takes the case and a span (slice of positions on the case's time axis) and returns an
array (period, element) with elements in table order.
"""

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import sparse

from simulator.case.model import Case
from simulator.case.schema import EVERYWHERE

__all__ = [
    "available_share",
    "block_cost",
    "block_emissions",
    "corridor_limit",
    "in_service",
    "line_rating",
    "load_demand",
    "profile_values",
    "renewable_available",
    "reserve_requirement",
    "sum_by",
    "unit_schedule",
    "zone_members",
]

Floats = NDArray[np.float64]
Booleans = NDArray[np.bool_]


def profile_values(case: Case, names: pd.Series, span: slice) -> Floats:
    """Return the profiles of some elements, dimensionless; 1 where an element names none ("")."""
    labels = names.to_numpy(dtype=object)
    values = np.ones((span.stop - span.start, len(labels)))
    named = np.flatnonzero(labels != "")
    columns = case.profiles.columns.get_indexer(pd.Index(labels[named]))
    values[:, named] = case.profiles.to_numpy()[span][:, columns]
    return values


def available_share(case: Case, kind: str, names: pd.Index, span: slice) -> Floats:
    """Return what planned outages leave of each element, 0 to 1; the lowest of overlapping ones.

    An outage that covers any part of a period counts for the whole of it.
    """
    starts = case.time.periods[span]
    ends = starts + pd.Timedelta(hours=case.time.period_hours)
    share = np.ones((len(starts), len(names)))
    outages = case.outages
    for row in outages[outages["kind"] == kind].to_dict("records"):
        touched = (starts < row["until"]) & (ends > row["from"])
        column = names.get_loc(row["name"])
        left = np.minimum(share[touched, column], row["available_percent"] / 100)
        share[touched, column] = left
    return share


def load_demand(case: Case, span: slice) -> Floats:
    """Return demand of each load, MW; negative is an injection."""
    return profile_values(case, case.loads["profile"], span) * case.loads["scale_mw"].to_numpy(
        float
    )


def renewable_available(case: Case, span: slice) -> Floats:
    """Return what each renewable plant could give, MW, outages taken off."""
    plants = case.renewables
    share = available_share(case, "renewable", plants.index, span)
    return (
        profile_values(case, plants["profile"], span)
        * share
        * plants["capacity_mw"].to_numpy(float)
    )


def zone_members(case: Case, buses: pd.Series) -> Booleans:
    """Tell which elements, by the buses they are at, are in the zone of each reserve product.

    Array (element, product).
    """
    zone = case.buses["zone"].reindex(buses).to_numpy()[:, None]
    wanted = case.reserves["zone"].to_numpy()[None, :]
    members: Booleans = (wanted == EVERYWHERE) | (zone == wanted)
    return members


def reserve_requirement(case: Case, span: slice) -> Floats:
    """Return what each reserve product asks for, MW, array (period, product).

    requirement_mw × profile + percent_of_load / 100 × demand of its zone, where a load that feeds in
    counts as none. It does not fall where load goes unserved.
    """
    products = case.reserves
    demand = np.maximum(load_demand(case, span), 0.0)
    in_zone = demand @ zone_members(case, case.loads["bus"]).astype(float)
    multiplier = profile_values(case, products["requirement_profile"], span)
    fixed = multiplier * products["requirement_mw"].to_numpy(float)
    return fixed + products["percent_of_load"].to_numpy(float) / 100 * in_zone


def in_service(case: Case, span: slice) -> Booleans:
    """Tell which lines are in service."""
    return available_share(case, "line", case.lines.index, span) > 0


def line_rating(case: Case, span: slice, column: str = "rating_mw") -> Floats:
    """Return line ratings, MW, times their hourly multiplier; inf where unlimited."""
    lines = case.lines
    return _multiplied(lines[column], profile_values(case, lines["rating_profile"], span))


def corridor_limit(case: Case, span: slice, column: str) -> Floats:
    """Return `forward_mw` or `reverse_mw` of corridors, MW, times its multiplier; inf where unlimited."""
    corridors = case.corridors
    return _multiplied(corridors[column], profile_values(case, corridors["limit_profile"], span))


def _multiplied(limit: pd.Series, multiplier: Floats) -> Floats:
    """Return limits times their hourly multipliers; what is unlimited stays so, even times 0."""
    limits = limit.to_numpy(float)
    limited = np.isfinite(limits)
    return multiplier * np.where(limited, limits, 0.0) + np.where(limited, 0.0, np.inf)


def block_cost(case: Case, span: slice) -> Floats:
    """Return what a MWh from each cost block costs: its own cost plus heat rate × fuel price."""
    blocks, fuels = case.blocks, case.fuels
    fuel_price = profile_values(case, fuels["price_profile"], span) * fuels[
        "price_per_gj"
    ].to_numpy(float)
    position = fuels.index.get_indexer(pd.Index(blocks["fuel"]))
    price = np.zeros((len(fuel_price), len(blocks)))
    burns = position >= 0
    price[:, burns] = fuel_price[:, position[burns]]
    heat_rate = blocks["heat_rate_gj_per_mwh"].to_numpy(float)
    return blocks["cost_per_mwh"].to_numpy(float) + heat_rate * price


def block_emissions(case: Case) -> Floats:
    """Return carbon per MWh of each cost block, array (block,), t/MWh; 0 for offers, which burn no fuel.

    Offers say nothing of the fuel they stand for, so units with offers count as free of emissions.
    """
    blocks = case.blocks
    content = blocks["fuel"].map(case.fuels["co2_t_per_gj"]).fillna(0.0).to_numpy(float)
    return blocks["heat_rate_gj_per_mwh"].to_numpy(float) * content


def sum_by(values: Floats, group: NDArray[np.int64], groups: int) -> Floats:
    """Sum values (period, element) over the elements of each group, array (period, group).

    >>> sum_by(np.array([[1.0, 2.0, 4.0]]), np.array([1, 0, 1]), 3)
    array([[2., 5., 0.]])
    """
    ones = np.ones(len(group))
    places = sparse.csr_array((ones, (np.arange(len(group)), group)), shape=(len(group), groups))
    total: Floats = values @ places
    return total


def unit_schedule(case: Case, span: slice) -> Booleans:
    """Tell which units are scheduled on in mode `given`; outages are not taken off here."""
    return profile_values(case, case.units["on_profile"], span) == 1
