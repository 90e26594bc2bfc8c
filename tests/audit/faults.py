"""Faults to plant in the good run of the town case, and what the audit must say of each.

A fault changes the dataset, or the case it is audited against, so that as few checks as physics allows
find it: power is moved between two elements of one bus, accounts are kept in step.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np
import xarray as xr

from tests.audit.plants import Changes

WEST = ("Hill", "Mill", "Town")


@dataclass(frozen=True)
class Fault:
    """One fault.

    check : the check that is there to find it; where : what its text must begin with
    also : the checks that cannot but find it too
    plant : does it to a dataset; changes : cells of the case; mode : commitment mode it is audited as
    reserves, guarded : whether it is planted in the run with reserves, or in the one with a corridor,
        contingencies and losses
    """

    check: str
    where: str
    plant: Callable[[xr.Dataset], None] = lambda _: None
    also: frozenset[str] = frozenset()
    changes: Changes = field(default_factory=dict)
    mode: str = "given"
    reserves: bool = False
    guarded: bool = False


def add(dataset: xr.Dataset, variable: str, hour: int, amounts: Mapping[str, float]) -> None:
    """Add amounts to some elements of a variable in one hour."""
    values = dataset[variable]
    dimension = values.dims[1]
    for name, amount in amounts.items():
        place = list(dataset[dimension].to_numpy()).index(name)
        values.to_numpy()[hour, place] += amount


def taken_as(dataset: xr.Dataset, mode: str) -> None:
    """Let a run in mode `given` pass for one in another mode: its plan is as good there."""
    dataset.attrs["commitment"] = mode
    if mode == "optimal":
        dataset["price_fixed"] = dataset["price"].copy(deep=True)
        dataset["price_relaxed"] = dataset["price"] + 1.0
        dataset["reserve_price_fixed"] = dataset["reserve_price"].copy(deep=True)
        dataset["reserve_price_relaxed"] = dataset["reserve_price"] + 1.0
        dataset["line_limit_side"] = np.sign(dataset["line_flow"]).astype(int)


def count(dataset: xr.Dataset, variable: str, line: str, hours: float) -> None:
    """Add hours to a line's count."""
    dataset[variable].to_numpy()[list(dataset["line"].to_numpy()).index(line)] += hours


def adding(variable: str, hour: int, **amounts: float) -> Callable[[xr.Dataset], None]:
    """Return a plant that adds amounts to one variable; "_" in a name stands for a blank."""
    named = {name.replace("__", "-").replace("_", " "): value for name, value in amounts.items()}
    return lambda dataset: add(dataset, variable, hour, named)


def counting(variable: str, line: str, hours: float) -> Callable[[xr.Dataset], None]:
    """Return a plant that adds hours to a line's count."""
    return lambda dataset: count(dataset, variable, line, hours)


def at(hour: int) -> str:
    return f"at 2027-03-01T{hour:02}:00+00:00"


def shifted_price(hour: int, buses: tuple[str, ...], amount: float) -> Callable[[xr.Dataset], None]:
    """Return a plant that moves the price of a whole island."""

    def plant(dataset: xr.Dataset) -> None:
        for variable in ("price", "price_energy"):
            add(dataset, variable, hour, dict.fromkeys(buses, amount))

    return plant


def slack_shadow_price(dataset: xr.Dataset) -> None:
    """Put a price on a line below its rating, and enter its rent and its hour."""
    add(dataset, "line_shadow_price", 12, {"H-T": 1.0})
    add(dataset, "congestion_rent", 12, {"H-T": float(dataset["line_flow"][12].sel(line="H-T"))})
    count(dataset, "congestion_hours", "H-T", 1.0)


def price_of_the_other_kind(dataset: xr.Dataset) -> None:
    """Name the relaxation's prices as those reported; limits it prices need not be met."""
    dataset.attrs["pricing"] = "relaxed"


def more_than_blows(dataset: xr.Dataset) -> None:
    """Take more from one plant than is available, less from its neighbour."""
    add(dataset, "renewable_output", 8, {"ridge": 0.1, "crest": -0.1})
    add(dataset, "curtailment", 8, {"ridge": -0.1, "crest": 0.1})


def more_available(dataset: xr.Dataset) -> None:
    """Call more wind available than the case has, and curtailed."""
    for variable in ("renewable_available", "curtailment"):
        add(dataset, variable, 2, {"ridge": 1.0})


def negative_surplus(dataset: xr.Dataset) -> None:
    """Take power out of nowhere, and serve a load beyond its demand with it."""
    add(dataset, "surplus", 12, {"Port": -0.5})
    add(dataset, "load_unserved", 12, {"docks": -0.5})
    add(dataset, "cost", 12, {"surplus": -0.5 * 200, "unserved": -0.5 * 900})


def on_while_out(dataset: xr.Dataset) -> None:
    """Leave the spare on through its outage, so that it is not started after it."""
    for hour in (10, 11, 12):
        add(dataset, "unit_on", hour, {"spare": 1.0})
    add(dataset, "unit_start", 13, {"spare": -1.0})


def half_on(dataset: xr.Dataset) -> None:
    add(dataset, "unit_on", 5, {"spare": -0.5})
    add(dataset, "unit_start", 6, {"spare": 0.5})


def lower_rating(dataset: xr.Dataset) -> None:
    """Write down the rating that the changed case has, and the one hour beyond it."""
    dataset["line_rating"].loc[{"line": "H-T"}] = 68.0
    count(dataset, "hours_at_limit", "H-T", 1.0)


def dearer(component: str, variable: str, element: str) -> Callable[[xr.Dataset], None]:
    """Return a plant that books each MWh of an element at 1 more."""

    def plant(dataset: xr.Dataset) -> None:
        amount = dataset[variable].sel({dataset[variable].dims[1]: element})
        dataset["cost"].loc[{"component": component}] += amount

    return plant


def uneven_price(dataset: xr.Dataset) -> None:
    """Raise the price of one bus without a line that would."""
    for variable in ("price", "price_congestion"):
        add(dataset, variable, 12, {"Mill": 0.01})


def moved(giver: str, taker: str) -> Callable[[xr.Dataset], None]:
    """Return a plant that books a part of the price of the western island in another part."""

    def plant(dataset: xr.Dataset) -> None:
        add(dataset, giver, 3, dict.fromkeys(WEST, -1.0))
        add(dataset, taker, 3, dict.fromkeys(WEST, 1.0))

    return plant


def provide(hour: int, product: str, **amounts: float) -> Callable[[xr.Dataset], None]:
    """Return a plant that has units provide more of a product; "_" in a name stands for a blank."""

    def plant(dataset: xr.Dataset) -> None:
        for name, amount in amounts.items():
            place = {"unit": name.replace("_", " "), "product": product}
            dataset["unit_reserve"][hour].loc[place] += amount

    return plant


def less_short(dataset: xr.Dataset) -> None:
    """Call less short than is, and pay for that only."""
    add(dataset, "reserve_shortage", 12, {"spinning": -1.0})
    add(dataset, "cost", 12, {"reserve_shortage": -60.0})


def lower_corridor(dataset: xr.Dataset) -> None:
    """Write down the limit that the changed case has."""
    dataset["corridor_forward_limit"] *= 117.5 / 118


def of_first_pair(variable: str, amount: float) -> Callable[[xr.Dataset], None]:
    """Return a plant that changes a number of the first pair."""

    def plant(dataset: xr.Dataset) -> None:
        dataset[variable].to_numpy()[0] += amount

    return plant


def lower_emergency(dataset: xr.Dataset) -> None:
    """Write down the emergency rating that the changed case has."""
    dataset["pair_rating"] -= 0.5


FAULTS: dict[str, Fault] = {
    "loss": Fault(
        "losses", f'line "H-M" {at(3)}', adding("line_loss", 3, H__M=0.1), guarded=True
    ),
    "losses booked as congestion": Fault(
        "loss price", f'bus "Hill" {at(3)}', moved("price_loss", "price_congestion"),
        also=frozenset({"congestion price"}),
    ),
    "limit of a corridor": Fault(
        "corridor inputs", 'corridor "to town" (forward limit) ' + at(3),
        adding("corridor_forward_limit", 3, to_town=9.0), guarded=True,
    ),
    "flow of a corridor": Fault(
        "corridor flows", f'corridor "to town" {at(3)}', adding("corridor_flow", 3, to_town=1.0),
        guarded=True,
    ),
    "flow beyond a corridor's lower limit": Fault(
        "corridor limits", 'corridor "to town" (forward) at', lower_corridor,
        also=frozenset({"shadow prices"}), changes={("corridors", "to town", "forward_mw"): 117.5},
        guarded=True,
    ),
    "flow after a contingency": Fault(
        "pairs", 'line "H-T after loss of storm" (flow)', of_first_pair("pair_flow", 1.0),
        also=frozenset({"shadow prices", "congestion rent"}), guarded=True,
    ),
    "flow beyond a lower emergency rating": Fault(
        "security", 'line "H-T" (after loss of storm) at', lower_emergency,
        also=frozenset({"shadow prices"}), changes={("lines", "H-T", "emergency_rating_mw"): 109.5},
        guarded=True,
    ),
    "flow": Fault("flows", f'line "H-T" {at(3)}', adding("line_flow", 3, H__T=1.0)),
    "flow on a line out": Fault("flows", f'line "old" {at(11)}', adding("line_flow", 11, old=1.0)),
    "output": Fault(
        "balance", f'island of bus "Port" {at(12)}', adding("unit_output", 12, engine=0.1),
        also=frozenset({"running cost", "cost", "rent identity"}),
    ),
    "demand of two loads exchanged": Fault(
        "inputs", 'load "homes" (load demand) ' + at(2),
        adding("load_demand", 2, homes=1.0, works=-1.0),
    ),
    "available unit": Fault(
        "inputs", 'unit "engine" (unit available) ' + at(2), adding("unit_available", 2, engine=1.0)
    ),
    "available wind": Fault("inputs", 'plant "ridge" (renewable available) ' + at(2), more_available),
    "rating": Fault(
        "inputs", 'line "H-T" (line rating) ' + at(5), adding("line_rating", 5, H__T=50.0)
    ),
    "flow beyond a lower rating": Fault(
        "line limits", f'line "H-T" {at(12)}', lower_rating,
        changes={("lines", "H-T", "rating_mw"): 68.0},
    ),
    "tie beyond a lower limit": Fault(
        "tie limits", 'tie "cable" at', changes={("dc_ties", "cable", "forward_mw"): 29.9}
    ),
    "output below a higher minimum": Fault(
        "unit limits", 'unit "peaker" (minimum output) at',
        also=frozenset({"running cost", "cost"}),
        changes={("units", "peaker", "min_output_mw"): 10.1},
    ),
    "more than blows": Fault(
        "renewable limits", f'plant "ridge" {at(8)}', more_than_blows,
        also=frozenset({"renewable prices"}),
    ),
    "curtailment": Fault(
        "curtailment", f'plant "ridge" {at(0)}', adding("curtailment", 0, ridge=-0.1)
    ),
    "unserved below zero": Fault(
        "unserved", f'load "homes" {at(12)}', adding("load_unserved", 12, homes=-0.5, works=0.5),
        also=frozenset({"unserved prices"}),
    ),
    "surplus below zero": Fault(
        "surplus", f'bus "Port" {at(12)}', negative_surplus, also=frozenset({"unserved"})
    ),
    "ramp from the hours before": Fault(
        "ramps", f'unit "coal" (ramp down) {at(0)}',
        changes={("units", "coal", "initial_output_mw"): 70.1},
    ),
    "ramp": Fault(
        "ramps", 'unit "coal" (ramp up) at', changes={("units", "coal", "ramp_up_mw_per_h"): 11.9}
    ),
    "start ramp": Fault(
        "ramps", 'unit "peaker" (ramp up) at',
        # A start ramp must not be below minimum output, so the minimum goes down with it.
        also=frozenset({"unit prices"}),
        changes={("units", "peaker", "min_output_mw"): 9.9, ("units", "peaker", "start_ramp_mw"): 9.9},
    ),
    "start not told": Fault(
        "switching", f'unit "spare" (stop) {at(13)}', adding("unit_start", 13, spare=-1.0)
    ),
    "half on": Fault(
        "switching", f'unit "spare" (on or off) {at(5)}', half_on, mode="optimal"
    ),
    "on while out": Fault(
        "outages", f'unit "spare" {at(10)}', on_while_out, mode="optimal", also=frozenset({"reasons"}),
    ),
    "off schedule": Fault(
        "schedule", f'unit "gas twin" {at(0)}',
        changes={("units", "gas twin", "on_profile"): "peaker on"},
    ),
    "off too soon": Fault(
        "minimum up time", f'unit "peaker" {at(19)}', mode="optimal",
        changes={("units", "peaker", "min_up_h"): 7.0},
    ),
    "on too soon": Fault(
        "minimum down time", f'unit "peaker" {at(21)}', mode="optimal",
        changes={("units", "peaker", "min_down_h"): 3.0},
    ),
    "on too soon after hours off before the run": Fault(
        "minimum down time",
        f'unit "peaker" {at(13)}',
        mode="optimal",
        # Off for longer than before, both starts are within the time in which a start is hot.
        also=frozenset({"start cost", "cost"}),
        changes={
            ("units", "peaker", "min_down_h"): 15.0,
            ("units", "peaker", "initial_hours"): -1.0,
        },
    ),
    "off though it must run": Fault(
        "must run", f'unit "peaker" {at(0)}', mode="optimal",
        changes={("units", "peaker", "must_run"): "true"},
    ),
    "charging beyond a lower limit": Fault(
        "storage limits", 'store "cells" (charge) at',
        changes={("storage", "cells", "charge_mw"): 11.5},
    ),
    "energy out of nothing": Fault(
        "storage energy", f'store "cells" {at(12)}', adding("stored_energy", 12, cells=1.0)
    ),
    "less left than asked": Fault(
        "final energy", f'store "cells" {at(23)}',
        changes={("storage", "cells", "final_mwh"): 20.5},
    ),
    "price": Fault(
        "price parts", f'bus "Mill" {at(12)}', adding("price", 12, Mill=0.01),
        also=frozenset({"rent identity"}),
    ),
    "price of the other kind": Fault(
        "kind of price", f'bus "Hill" {at(0)}', price_of_the_other_kind, mode="optimal",
    ),
    "price that pays no rent": Fault(
        "rent identity", f'island of bus "Hill" {at(12)}', uneven_price,
        also=frozenset({"congestion price"}),
    ),
    "energy booked as congestion": Fault(
        "energy price", 'bus "Hill" (load-weighted mean) ' + at(3),
        moved("price_energy", "price_congestion"), also=frozenset({"congestion price"}),
    ),
    "congestion booked as losses": Fault(
        "congestion price", f'bus "Hill" {at(3)}', moved("price_congestion", "price_loss"),
        also=frozenset({"loss price"}),
    ),
    "price on a slack line": Fault(
        "shadow prices", f'line "H-T" (off its limit) {at(12)}', slack_shadow_price,
        also=frozenset({"congestion price", "rent identity"}),
    ),
    "rent": Fault(
        "congestion rent", f'line "H-M" {at(3)}', adding("congestion_rent", 3, H__M=1.0)
    ),
    "congestion hours": Fault(
        "congestion hours", 'line "H-M" (congestion hours)', counting("congestion_hours", "H-M", 1.0)
    ),
    "hours at limit": Fault(
        "congestion hours", 'line "old" (hours at limit)', counting("hours_at_limit", "old", 1.0)
    ),
    "price beside cost": Fault(
        "unit prices", f'unit "engine" {at(12)}', shifted_price(12, ("Port",), 0.01)
    ),
    "price beside an offer": Fault(
        "renewable prices", 'plant "ridge" at', dearer("renewable", "renewable_output", "ridge"),
        changes={("renewables", "ridge", "offer_per_mwh"): 2.0},
    ),
    "price beside that of unserved load": Fault(
        "unserved prices", f'load "docks" {at(15)}', shifted_price(15, ("Port",), -0.01)
    ),
    "price below what spilling costs": Fault(
        "surplus prices", f'bus "Port" {at(12)}', shifted_price(12, ("Port",), -333.0),
        also=frozenset({"unit prices", "tie prices", "reasons"}),
    ),
    "prices apart across a tie": Fault(
        "tie prices", f'tie "cable" (forward) {at(9)}', shifted_price(9, ("Port",), -0.01)
    ),
    "store out of step with prices": Fault(
        "storage prices", 'store "cells" at', dearer("storage", "storage_discharge", "cells"),
        changes={("storage", "cells", "throughput_cost_per_mwh"): 1.5},
    ),
    "running cost": Fault(
        "running cost", f'unit "engine" {at(12)}', adding("unit_cost", 12, engine=1.0)
    ),
    "a hot start booked as cold": Fault(
        "start cost", f'unit "peaker" {at(21)}', adding("unit_start_cost", 21, peaker=250.0),
        also=frozenset({"make-whole"}),
    ),
    "cost that does not add up": Fault(
        "cost", 'component "unserved" ' + at(12), adding("cost", 12, unserved=1.0)
    ),
    "make-whole amount": Fault(
        "make-whole", f'unit "peaker" {at(0)}', adding("make_whole", 0, peaker=1.0)
    ),
    "paid by congestion, told as paid without": Fault(
        "reasons", f'unit "gas" {at(2)}', adding("unit_reason", 2, gas=-1)
    ),
    "paid without congestion, told as paid by it": Fault(
        "reasons", f'unit "gas" {at(9)}', adding("unit_reason", 9, gas=1)
    ),
    "out of the money, told as in it": Fault(
        "reasons", f'unit "coal" {at(2)}', adding("unit_reason", 2, coal=-3)
    ),
    "in the money, told as on schedule": Fault(
        "reasons", f'unit "engine" {at(16)}', adding("unit_reason", 16, engine=3)
    ),
    "on, told as off": Fault("reasons", f'unit "gas" {at(9)}', adding("unit_reason", 9, gas=-2)),
    "idle, told as in the money": Fault(
        "reasons", f'unit "spare" {at(2)}', adding("unit_reason", 2, spare=1)
    ),
    "must run that need not": Fault(
        "reasons", f'unit "coal" {at(2)}', adding("unit_reason", 2, coal=1)
    ),
    "reserve that is not": Fault(
        "reasons", f'unit "coal" {at(2)}', adding("unit_reason", 2, coal=-1)
    ),
    "minimum up time long past": Fault(
        "reasons", f'unit "coal" {at(2)}', adding("unit_reason", 2, coal=2)
    ),
    "ramp that does not bind": Fault(
        "reasons", f'unit "peaker" {at(15)}', adding("unit_reason", 15, peaker=3)
    ),
    "kept on for nothing": Fault(
        "reasons", f'unit "peaker" {at(15)}', adding("unit_reason", 15, peaker=4)
    ),
    "no reason where one holds": Fault(
        "reasons", f'unit "coal" {at(2)}', adding("unit_reason", 2, coal=5),
        changes={("units", "coal", "must_run"): "true"},
    ),
    "reserve asked for": Fault(
        "inputs", 'product "lowering" (reserve requirement) ' + at(3), reserves=True,
        plant=adding("reserve_requirement", 3, lowering=-1.0),
    ),
    "less short than is": Fault(
        "reserve requirement", 'product "spinning" (provided and short) ' + at(12), less_short,
        reserves=True,
    ),
    "short of nothing": Fault(
        "reserve requirement", 'product "lowering" (short) ' + at(3), reserves=True,
        plant=adding("reserve_shortage", 3, lowering=1.0),
        also=frozenset({"cost", "reserve prices"}),
    ),
    "reserve above what is available": Fault(
        "reserve room", f'unit "gas" (headroom) {at(12)}', provide(12, "spinning", gas=1.0),
        reserves=True, also=frozenset({"reserve requirement"}),
    ),
    "downward reserve at minimum output": Fault(
        "reserve room", f'unit "engine" (footroom) {at(3)}', provide(3, "lowering", engine=1.0),
        reserves=True,
    ),
    "reserve from another zone": Fault(
        "reserve response", 'unit "engine" (of "spinning") ' + at(3),
        provide(3, "spinning", engine=1.0), reserves=True,
    ),
    "reserve slower than its response time": Fault(
        "reserve response", 'unit "coal" (of "spinning") at', reserves=True,
        changes={("reserves", "spinning", "response_minutes"): 29},
    ),
    "reserve cheaper than its shortage": Fault(
        "reserve prices", 'product "spinning" (while short) ' + at(12), reserves=True,
        plant=adding("reserve_price", 12, spinning=-1.0),
        also=frozenset({"unit prices", "make-whole"}),
    ),
    "reserve dearer than its shortage": Fault(
        "reserve prices", 'product "spinning" (shortage price) ' + at(12), reserves=True,
        also=frozenset({"cost"}), changes={("reserves", "spinning", "shortage_per_mwh"): 59},
    ),
    "a price of reserve of which there is more": Fault(
        "reserve prices", 'unit "', reserves=True, plant=adding("reserve_price", 3, spinning=0.01),
        also=frozenset({"unit prices"}),
    ),
    "a negative price of reserve": Fault(
        "reserve prices", 'product "lowering" (sign) ' + at(3), reserves=True,
        plant=adding("reserve_price", 3, lowering=-0.01),
    ),
    "price beside cost and reserve price": Fault(
        "unit prices", f'unit "gas" {at(12)}', shifted_price(12, WEST, 0.01), reserves=True,
        also=frozenset({"tie prices", "make-whole"}),
    ),
    "shortage that costs more": Fault(
        "cost", 'component "reserve_shortage" ' + at(12), reserves=True,
        plant=lambda dataset: add(dataset, "cost", 12, {"reserve_shortage": 1.0}),
    ),
    "emissions": Fault("emissions", f'unit "gas" {at(9)}', adding("emissions", 9, gas=0.1)),
}  # fmt: skip
