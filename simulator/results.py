"""What a run leaves: the dataset of results-format.md, run.json, and the folder they live in.

Public names: `FORMAT`, `open_record`, `open_run`, `refuse_existing`, `run_record`, `save`, `to_dataset`.

The only writer of that contract: each variable is declared once, with its dimensions, unit
and name.
"""

import json
import os
from collections.abc import Callable, Mapping
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from simulator import prices
from simulator.case import series
from simulator.dispatch.counts import WindowRecord
from simulator.errors import OptionError
from simulator.files import made_whole
from simulator.horizon import Run
from simulator.reasons import REASONS, circumstances, unit_reasons

__all__ = [
    "FORMAT",
    "open_record",
    "open_run",
    "refuse_existing",
    "run_record",
    "save",
    "to_dataset",
]

Floats = NDArray[np.float64]
Entry = tuple[tuple[str, ...], str, str]

FORMAT = 1
RUN = "run.json"
PRICED = 1e-6
"""A shadow price above this, currency/MWh, makes an hour a congestion hour (formulation.md 5.3)."""
AT_LIMIT = 1e-4
"""A flow within this of its rating, MW, is at its limit (formulation.md 5.3)."""

COMPONENTS = (
    "unit_running", "unit_start", "renewable", "storage", "unserved", "surplus", "reserve_shortage",
)  # fmt: skip
PACKAGES = ("rampline", "highspy", "pyomo", "xarray", "numpy")
MONEY, PRICE = "currency", "currency/MWh"

VARIABLES: Mapping[str, Entry] = {
    "unit_output": (("time", "unit"), "MW", "output"),
    "unit_available": (("time", "unit"), "MW", "output that outages and derates leave"),
    "unit_on": (("time", "unit"), "1", "share of the unit that is on"),
    "unit_start": (("time", "unit"), "1", "share of the unit that starts"),
    "renewable_available": (("time", "plant"), "MW", "output that wind, sun or water would allow"),
    "renewable_output": (("time", "plant"), "MW", "output"),
    "curtailment": (("time", "plant"), "MW", "available output not taken"),
    "storage_charge": (("time", "store"), "MW", "charging"),
    "storage_discharge": (("time", "store"), "MW", "discharging"),
    "stored_energy": (("time", "store"), "MWh", "energy stored at the end of the period"),
    "load_demand": (("time", "load"), "MW", "demand"),
    "load_unserved": (("time", "load"), "MW", "demand not served"),
    "surplus": (("time", "bus"), "MW", "power that had to be spilled"),
    "tie_flow": (
        ("time", "tie"),
        "MW",
        "flow at the sending end, positive from from_bus to to_bus",
    ),
    "line_flow": (("time", "line"), "MW", "flow, positive from from_bus to to_bus"),
    "line_rating": (("time", "line"), "MW", "rating in the period"),
    "line_shadow_price": (("time", "line"), PRICE, "saving from one more MW of rating"),
    "congestion_rent": (("time", "line"), MONEY, "shadow price times flow"),
    "price": (("time", "bus"), PRICE, "locational price"),
    "price_energy": (("time", "bus"), PRICE, "price at the island's load-weighted reference"),
    "price_congestion": (("time", "bus"), PRICE, "price part caused by lines at their limit"),
    "price_loss": (("time", "bus"), PRICE, "price part caused by losses"),
    "reserve_price": (("time", "product"), PRICE, "reserve price"),
    "reserve_shortage": (("time", "product"), "MW", "reserve not provided"),
    "reserve_requirement": (("time", "product"), "MW", "reserve asked for"),
    "unit_reserve": (("time", "unit", "product"), "MW", "reserve provided"),
    "unit_cost": (("time", "unit"), MONEY, "running cost"),
    "unit_start_cost": (("time", "unit"), MONEY, "start cost"),
    "emissions": (("time", "unit"), "t", "carbon dioxide"),
    "cost": (("time", "component"), MONEY, "cost"),
    "congestion_hours": (("line",), "h", "hours with a shadow price"),
    "hours_at_limit": (("line",), "h", "hours with the flow at the rating"),
    "ramp_limited_hours": (("unit",), "h", "hours in which output moved as fast as the unit can"),
    "make_whole": (("day", "unit"), MONEY, "cost of a local day that revenue does not cover"),
    "unit_reason": (("time", "unit"), "1", "why the unit is on"),
    "window": (("time",), "1", "number of the window the period was kept from"),
}

DERIVED = ("make_whole", "unit_reason")
"""The variables that follow from others."""


OF_DECISIONS: Mapping[str, Entry] = {
    "price_fixed": (("time", "bus"), PRICE, "locational price with the decisions fixed"),
    "price_relaxed": (("time", "bus"), PRICE, "locational price of the relaxation"),
    "reserve_price_fixed": (("time", "product"), PRICE, "reserve price with the decisions fixed"),
    "reserve_price_relaxed": (("time", "product"), PRICE, "reserve price of the relaxation"),
    "line_limit_side": (
        ("time", "line"),
        "1",
        "limit that is priced: 1 from from_bus to to_bus, -1 the other way, 0 none",
    ),
}
"""What mode `optimal` has besides: `price` is that of the two its attribute `pricing` names."""


def to_dataset(run: Run) -> xr.Dataset:
    """Return the results of a run as one labelled dataset (results-format.md)."""
    values = _powers(run) | _lines_and_prices(run) | _reserves(run) | _costs(run) | _summaries(run)
    written = {**VARIABLES, **(OF_DECISIONS if run.plan.mode == "optimal" else {})}
    variables = {
        name: (dims, values[name], {"units": unit, "long_name": label})
        for name, (dims, unit, label) in written.items()
        if name not in DERIVED
    }
    settings = run.case.settings
    attributes = {
        "Conventions": "CF-1.11", "format": FORMAT, "title": f"Dispatch of {settings.name}",
        "case_name": settings.name, "currency": settings.currency, "time_zone": settings.time_zone,
        "period_hours": run.case.time.period_hours, "commitment": run.plan.mode,
        "limits": run.plan.limits, "pricing": run.plan.pricing, "base_mva": settings.base_mva,
    }  # fmt: skip
    return _with_derived(run, xr.Dataset(variables, _coordinates(run), attributes))


def _with_derived(run: Run, dataset: xr.Dataset) -> xr.Dataset:
    """Add what follows from the other results."""
    given = circumstances(run, dataset, _last_cost(run))
    values = {"make_whole": prices.make_whole(dataset), "unit_reason": unit_reasons(given)}
    flags = {
        "flag_values": np.arange(len(REASONS), dtype=np.int8), "flag_meanings": " ".join(REASONS)
    }  # fmt: skip
    for name in DERIVED:
        dims, unit, label = VARIABLES[name]
        more = flags if name == "unit_reason" else {}
        dataset[name] = (dims, values[name], {"units": unit, "long_name": label, **more})
    days = np.unique(prices.local_days(dataset))
    return dataset.assign_coords(day=("day", days, {"long_name": "local date"}))


def _coordinates(run: Run) -> dict[str, Any]:
    case = run.case
    tables = {
        "bus": (case.buses, {"zone": "", "voltage_kv": "kV", "latitude": "degrees_north",
                             "longitude": "degrees_east"}),
        "line": (case.lines, {"from_bus": "", "to_bus": ""}),
        "unit": (case.units, {"bus": "", "technology": "", "fuel": "", "max_output_mw": "MW"}),
        "plant": (case.renewables, {"bus": "", "technology": "", "capacity_mw": "MW"}),
        "store": (case.storage, {"bus": "", "energy_mwh": "MWh"}),
        "tie": (case.dc_ties, {"from_bus": "", "to_bus": ""}),
        "load": (case.loads, {"bus": ""}),
        "product": (case.reserves, {"direction": "", "zone": ""}),
    }  # fmt: skip
    found: dict[str, Any] = {
        "time": ("time", run.times.tz_localize(None), {
            "standard_name": "time", "axis": "T", "long_name": "start of the period, UTC",
        }),
        "component": ("component", np.array(COMPONENTS)),
    }  # fmt: skip
    for dimension, (table, columns) in tables.items():
        found[dimension] = (dimension, table.index.to_numpy(dtype=str))
        for column, unit in columns.items():
            found[f"{dimension}_{column}"] = _coordinate(dimension, table[column], unit)
    return found


def _coordinate(dimension: str, values: pd.Series, unit: str) -> tuple[str, Any, dict[str, str]]:
    if unit:
        return dimension, values.to_numpy(float), {"units": unit}
    return dimension, values.to_numpy(dtype=str), {}


def _powers(run: Run) -> dict[str, Floats]:
    kept, inputs = run.kept, run.kept_inputs
    return {
        "unit_output": kept.output,
        "unit_available": inputs.unit_available,
        "unit_on": kept.on,
        "unit_start": kept.start,
        "renewable_available": inputs.renewable_available,
        "renewable_output": kept.renewable,
        "curtailment": np.maximum(inputs.renewable_available - kept.renewable, 0.0),
        "storage_charge": kept.charge,
        "storage_discharge": kept.discharge,
        "stored_energy": kept.stored,
        "load_demand": inputs.demand,
        "load_unserved": kept.unserved,
        "surplus": kept.surplus,
        "tie_flow": kept.tie_forward - kept.tie_reverse,
        "line_flow": kept.flow,
        "line_rating": inputs.rating,
    }


def _lines_and_prices(run: Run) -> dict[str, Floats]:
    kept, inputs = run.kept, run.kept_inputs
    price, line_dual = _priced(run)
    island = np.stack([topology.island for topology in inputs.topology.topologies])
    island = island[inputs.topology.index]
    weights = prices.reference_weights(inputs.demand_at_bus, island)
    energy, congestion = prices.energy_and_congestion(price, weights, island)
    return {
        "line_shadow_price": np.abs(line_dual),
        "line_limit_side": -np.sign(line_dual).astype(np.int8),
        "congestion_rent": prices.congestion_rent(line_dual, kept.flow, inputs.period_hours),
        "price": price,
        "price_fixed": kept.price,
        "price_relaxed": kept.relaxed_price,
        "price_energy": energy,
        "price_congestion": congestion,
        "price_loss": np.zeros_like(price),
    }


def _reserves(run: Run) -> dict[str, Floats]:
    """Return price, shortage, requirement and provision of reserves.

    The optimum leaves open whether more is provided than asked for, which then is worth nothing; what
    goes beyond is left out, of every unit the same share.
    """
    kept, inputs = run.kept, run.kept_inputs
    offers, asked = inputs.reserve, inputs.reserve_requirement
    provided = np.zeros((len(asked), len(inputs.unit.bus), len(offers.upward)))
    provided[:, offers.unit, offers.product] = kept.reserve
    total = provided.sum(axis=1)
    share = np.divide(asked, total, out=np.ones_like(total), where=total > asked)
    relaxed = run.plan.pricing == "relaxed"
    return {
        "reserve_price": kept.relaxed_reserve_price if relaxed else kept.reserve_price,
        "reserve_price_fixed": kept.reserve_price,
        "reserve_price_relaxed": kept.relaxed_reserve_price,
        "reserve_shortage": kept.reserve_short,
        "reserve_requirement": asked,
        "unit_reserve": provided * share[:, None, :],
    }


def _priced(run: Run) -> tuple[Floats, Floats]:
    """Return prices (period, bus) and line duals (period, line) as the plan asks for them."""
    if run.plan.pricing == "relaxed":
        return run.kept.relaxed_price, run.kept.relaxed_line_dual
    return run.kept.price, run.kept.line_dual


def _costs(run: Run) -> dict[str, Floats]:
    kept, inputs, unit = run.kept, run.kept_inputs, run.kept_inputs.unit
    length = inputs.period_hours
    units, block = len(unit.bus), _along_curve(run)
    above = series.sum_by(inputs.block_cost * block, unit.block_unit, units)
    running = inputs.minimum_cost * kept.on + above
    burnt = series.sum_by(inputs.block_emissions * block, unit.block_unit, units)
    emissions = inputs.minimum_emissions * kept.on + burnt
    starting = unit.hot_start * kept.start + (unit.cold_start - unit.hot_start) * kept.cold_start
    by_component = [
        running.sum(axis=1) * length,
        starting.sum(axis=1),
        kept.renewable @ inputs.renewable_offer * length,
        kept.discharge @ inputs.store.throughput_cost * length,
        kept.unserved @ inputs.unserved_cost * length,
        kept.surplus.sum(axis=1) * inputs.surplus_cost * length,
        kept.reserve_short @ inputs.reserve.shortage_cost * length,
    ]
    return {
        "unit_cost": running * length,
        "unit_start_cost": starting,
        "emissions": emissions * length,
        "cost": np.stack(by_component, axis=1),
    }


def _along_curve(run: Run) -> Floats:
    """Return output above the minimum by block, from the lowest up, array (period, block), MW.

    The optimum leaves open which of several blocks of one cost it uses; the curve does not.
    """
    kept, inputs = run.kept, run.kept_inputs
    owner = inputs.unit.block_unit
    width = inputs.block_width * kept.on[:, owner]
    filled = np.cumsum(width, axis=1) - width
    first = np.searchsorted(owner, owner)
    before = filled - filled[:, first]
    above = (kept.output - inputs.unit_min * kept.on)[:, owner]
    return np.clip(above - before, 0.0, width)


def _last_cost(run: Run) -> Floats:
    """Return the cost of the last MWh above the minimum, array (period, unit), currency/MWh; −inf at it."""
    inputs = run.kept_inputs
    used = np.where(_along_curve(run) > AT_LIMIT, inputs.block_cost, -np.inf)
    last = np.full(run.kept.output.shape, -np.inf)
    np.maximum.at(last.T, inputs.unit.block_unit, used.T)
    return last


def _summaries(run: Run) -> dict[str, Any]:
    kept, inputs = run.kept, run.kept_inputs
    length = inputs.period_hours
    at_limit = np.abs(kept.flow) >= inputs.rating - AT_LIMIT
    return {
        "congestion_hours": (np.abs(_priced(run)[1]) > PRICED).sum(axis=0) * length,
        "hours_at_limit": at_limit.sum(axis=0) * length,
        "ramp_limited_hours": _ramp_limited(run).sum(axis=0) * length,
        "window": run.window,
    }


def _ramp_limited(run: Run) -> NDArray[np.bool_]:
    """Tell where a unit that stays on moved by its whole ramp, array (period − 1, unit)."""
    kept, unit = run.kept, run.kept_inputs.unit
    move = np.diff(kept.output, axis=0)
    staying = (kept.on[1:] > 1 - 1e-6) & (kept.on[:-1] > 1 - 1e-6)
    found: NDArray[np.bool_] = staying & (
        (move >= unit.ramp_up - AT_LIMIT) | (move <= AT_LIMIT - unit.ramp_down)
    )
    return found


def run_record(
    run: Run, dataset: xr.Dataset, seconds: Mapping[str, float], unlimited: Run | None = None
) -> dict[str, Any]:
    """Return run.json as a plain dictionary, audit not included.

    unlimited : the same run without line limits, if what they cost is wanted (formulation.md 5.4)
    """
    counts, axis = run.counts, run.case.time
    end = run.times[-1] + pd.Timedelta(hours=axis.period_hours)
    spent = {**counts.seconds, **seconds}
    return {
        "format": FORMAT,
        "case": run.case.settings.name,
        "from": run.times[0].tz_convert(axis.time_zone).isoformat(),
        "until": end.tz_convert(axis.time_zone).isoformat(),
        "settings": _settings(run),
        "totals": _totals(dataset) | _congestion_cost(dataset, unlimited),
        "counts": {
            "windows": int(run.window[-1]) + 1, "lp_solves": counts.lp_solves,
            "mip_solves": counts.mip_solves, "line_rows": counts.line_rows,
            "rebuilds": max(counts.builds - 1, 0), "simplex_iterations": counts.iterations,
        },
        "windows": [_window_record(run, record) for record in counts.windows],
        "seconds": {name: round(value, 4) for name, value in spent.items()},
        "versions": {name: version(name) for name in PACKAGES},
    }  # fmt: skip


def _window_record(run: Run, record: WindowRecord) -> dict[str, Any]:
    """Return how a window went; `gap` is null where nothing is decided."""
    first = run.times[run.plan.windows[record.window][0]]
    return {
        "window": record.window,
        "from": first.tz_convert(run.case.time.time_zone).isoformat(),
        "seconds": round(record.seconds, 4),
        "gap": record.gap,
        "time_limit": record.time_limit,
    }


def _congestion_cost(dataset: xr.Dataset, unlimited: Run | None) -> dict[str, float]:
    if unlimited is None:
        return {}
    free = float(_costs(unlimited)["cost"].sum())
    return {"congestion_cost": float(dataset["cost"].sum()) - free}


def _settings(run: Run) -> dict[str, Any]:
    """Return the settings as they were in force, the call's own choices included."""
    settings: dict[str, Any] = run.case.settings.model_dump()
    length = run.case.time.period_hours
    settings["horizon"] = {
        "window_hours": run.plan.window * length, "keep_hours": run.plan.keep * length,
        "hours": run.plan.periods * length, "period_hours": length,
    }  # fmt: skip
    settings["commitment"]["mode"] = run.plan.mode
    settings["commitment"]["pricing"] = run.plan.pricing
    settings["network"]["limits"] = run.plan.limits
    return settings


def _totals(dataset: xr.Dataset) -> dict[str, float]:
    length = float(dataset.attrs["period_hours"])

    def energy(name: str) -> float:
        return float(dataset[name].sum()) * length

    return {
        "cost": float(dataset["cost"].sum()),
        "served_mwh": energy("load_demand") - energy("load_unserved"),
        "unserved_mwh": energy("load_unserved"),
        "curtailed_mwh": energy("curtailment"),
        "surplus_mwh": energy("surplus"),
        "emissions_t": float(dataset["emissions"].sum()),
        "congestion_rent": float(dataset["congestion_rent"].sum()),
        "congestion_hours": float(dataset["congestion_hours"].sum()),
        "starts": float(dataset["unit_start"].sum()),
        "make_whole": float(dataset["make_whole"].sum()),
    }


def save(
    dataset: xr.Dataset,
    record: Mapping[str, Any],
    folder: Path,
    *,
    force: bool,
    page: Callable[[Path], None] | None = None,
) -> None:
    """Write a run's folder whole: under another name first, then moved into place.

    page : writes the page of the run to the path it is given
    An existing folder is refused unless `force`; whatever cuts this off leaves it as it was.
    """
    refuse_existing(folder, force=force)
    with made_whole(folder, "--out") as made:
        write_dataset(dataset, made / "results.nc")
        (made / "run.json").write_text(json.dumps(record, indent=2) + "\n", encoding="utf-8")
        if page is not None:
            page(made / "page.html")


def refuse_existing(folder: Path, *, force: bool, mark: str = RUN) -> None:
    """Refuse a folder that is there, unless forced and it holds `mark`, the record of its kind."""
    if not folder.exists():
        return
    if not force:
        raise OptionError(
            f"--out, must not exist yet, found {folder}, choose another folder or pass --force"
        )
    if not folder.is_dir() or (any(folder.iterdir()) and not (folder / mark).exists()):
        raise OptionError(
            f"--force, replaces only the folder of a {mark.removesuffix('.json')}, found {folder} "
            f"without {mark}, choose another folder"
        )


def write_dataset(dataset: xr.Dataset, path: Path) -> None:
    """Write netCDF-4, compressed, with times as whole minutes."""
    compressed = {"zlib": True, "complevel": 1, "shuffle": True}
    encoding: dict[Any, dict[str, Any]] = {
        name: {"_FillValue": None, **(compressed if variable.size else {})}
        for name, variable in dataset.data_vars.items()
        if variable.dtype.kind != "U" and variable.ndim
    }
    if "time" in dataset.dims:
        encoding["time"] = {"units": "minutes since 1970-01-01 00:00:00", "dtype": "int64"}
    dataset.to_netcdf(path, engine="netcdf4", encoding=encoding)


def open_record(folder: str | os.PathLike[str]) -> dict[str, Any]:
    """Return run.json of a run's folder."""
    try:
        record: dict[str, Any] = json.loads((Path(folder) / "run.json").read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise OptionError(
            f"the run folder, must hold run.json, found none that can be read in {folder}, give the "
            "folder that `rampline week` wrote"
        ) from error
    return record


def open_run(folder: str | os.PathLike[str]) -> xr.Dataset:
    """Open the dataset of a run's folder; raise `OptionError` if it is not one."""
    path = Path(folder) / "results.nc"
    if not path.is_file():
        raise OptionError(
            f"the run folder, must hold results.nc, found none in {folder}, give the folder that "
            "`rampline week` wrote"
        )
    try:
        dataset = xr.load_dataset(path, engine="netcdf4")
    except OSError as error:
        raise OptionError(
            f"{path}, must be a netCDF file, found one that cannot be read, run the case again"
        ) from error
    if dataset.attrs.get("format") != FORMAT:
        raise OptionError(
            f"{path}, must be results format {FORMAT}, found {dataset.attrs.get('format')}, "
            "run it again"
        )
    return dataset
