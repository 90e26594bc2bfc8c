"""The sentence a study ends in, and what it rests on.

Public names: `advise_new_load`, `advise_outage_check`, `advise_storage_sites`, `basis`.

A recommendation names what it is best by; what gaps of the search for on/off decisions could turn
round is not called better (mode `optimal`).
"""

import math

import numpy as np
import pandas as pd
import xarray as xr

__all__ = ["advise_new_load", "advise_outage_check", "advise_storage_sites", "basis"]

NEGLIGIBLE = 1e-3
_TOLD = 3


def basis(dataset: xr.Dataset, runs_of: str) -> str:
    """Return what the answers rest on: which hours, which settings, how many runs."""
    attrs = dataset.attrs
    hours = (pd.Timestamp(attrs["until"]) - pd.Timestamp(attrs["from"])) / pd.Timedelta(hours=1)
    return (
        f"Full runs of {hours:,.0f} hours, {attrs['from'][:16]} to {attrs['until'][:16]}, with and without "
        f"{runs_of}, commitment {attrs['commitment']}, line limits {attrs['limits']}, no look-ahead past "
        "the end. These hours only: a year, an outage or other fuel prices may rank otherwise."
    )  # fmt: skip


def _amount(value: float) -> str:
    """Write an amount with separated thousands, and decimals only where it is small.

    >>> _amount(-12345.6), _amount(2.345)
    ('−12,346', '2.35')
    """
    text = f"{value:,.0f}" if abs(value) >= 100 else f"{value:,.2f}"  # noqa: PLR2004
    return text.replace("-", "−")


def advise_new_load(dataset: xr.Dataset) -> str:
    """Say where the load costs least, or what it costs, and how much the bus can take."""
    size = float(dataset["size"].to_numpy().max())
    at = dataset.sel(size=size)
    served = at["extra_unserved"].to_numpy() <= NEGLIGIBLE
    if not served.any():
        return (
            f"At none of the {dataset.sizes['bus']} buses can {size:g} MW be served whole. "
            + _largest_of_all(dataset)
        ).rstrip()
    cost = np.where(served, at["extra_production_cost"].to_numpy(), np.inf)
    best = int(cost.argmin())
    one = at.isel(bus=best)
    return " ".join(
        filter(None, [_where(dataset, at, best, size, served), _cost(dataset, one), _takes(one)])
    )


def _where(dataset: xr.Dataset, at: xr.Dataset, best: int, size: float, served: object) -> str:
    """Name the bus and what it is best by."""
    bus = str(dataset["bus"].to_numpy()[best])
    if dataset.sizes["bus"] == 1:
        return f"{size:g} MW at {bus}:"
    whole = int(np.sum(np.asarray(served)))
    text = (
        f"Of {dataset.sizes['bus']} buses, {whole} can take {size:g} MW with all load served; "
        f"{bus} adds least to production cost"
    )
    return f"{text}{_told_apart(at, best, np.asarray(served))}:"


def _told_apart(at: xr.Dataset, best: int, served: np.ndarray) -> str:
    """Say with which buses the best one may change places within the gaps."""
    cost, allowance = at["extra_production_cost"].to_numpy(), at["cost_allowance"].to_numpy()
    near = served & (cost - cost[best] <= allowance + allowance[best]) & (allowance > 0)
    near[best] = False
    names = [str(name) for name in at["bus"].to_numpy()[near][:_TOLD]]
    if not names:
        return ""
    more = int(near.sum()) - len(names)
    listed = ", ".join(names) + (f" and {more} more" if more else "")
    return f", within the gaps of the search no better than {listed}"


def _cost(dataset: xr.Dataset, one: xr.Dataset) -> str:
    currency = dataset.attrs["currency"]
    extra, each = float(one["extra_production_cost"]), float(one["extra_cost_per_mwh"])
    mark = ", no more than the gaps of the search allow" if bool(one["cost_within_gap"]) else ""
    caused = float(one["congestion_cost_caused"])
    of_it = f"congestion cost {'rises' if caused >= 0 else 'falls'} by {_amount(abs(caused))} {currency}"
    if bool(one["congestion_within_gap"]):
        of_it += " (no more than the gaps allow)"
    others = float(one["others_payment"])
    return (
        f"{_amount(extra)} {currency} more to produce"
        + (f" ({_amount(each)} {currency}/MWh)" if math.isfinite(each) else "")
        + f"{mark}; {of_it}; the load pays {_amount(float(one['own_payment']))} {currency} and all others "
        f"{_amount(abs(others))} {currency} {'more' if others >= 0 else 'less'}."
    )


def _takes(one: xr.Dataset) -> str:
    if "largest_size" not in one:
        return ""
    return (
        f"The bus can take {float(one['largest_size']):g} MW; at "
        f"{float(one['smallest_refused']):g} MW {_stop(one)}."
    )


def _stop(one: xr.Dataset) -> str:
    """Say in words what stops a bus."""
    kind, name, hour = (
        str(one[each].item()) for each in ("stopped_by", "stopped_by_name", "stopped_at")
    )
    said = {
        "line": f"line {name} stops it",
        "ramp": f"the ramp of unit {name} stops it",
        "unit off": f"unit {name}, which is not on, is missing",
        "shortage": "all supply there is is used",
        "price": "the price rises too far" + (f", by line {name}" if name else ""),
    }
    return f"{said.get(kind, kind)} ({hour})"


def _largest_of_all(dataset: xr.Dataset) -> str:
    if "largest_size" not in dataset:
        return ""
    best = dataset.isel(bus=int(dataset["largest_size"].to_numpy().argmax()))
    return f"The most is at {best['bus'].item()}. {_takes(best)}"


def advise_outage_check(dataset: xr.Dataset) -> str:
    """Say when each line may be switched out, for the first few lines, and what that costs."""
    told = [_outage(dataset.isel(line=line)) for line in range(min(dataset.sizes["line"], _TOLD))]
    more = dataset.sizes["line"] - len(told)
    return " ".join([*told, f"{more} more lines are in the table." if more else ""]).rstrip()


def _outage(of_line: xr.Dataset) -> str:
    rank, currency = of_line["rank"].to_numpy(), of_line.attrs["currency"]
    best = of_line.isel(block=int(rank.argmin()))
    name, hours = str(best["line"].item()), str(best["block_name"].item())
    if not bool(best["secure"]):
        return f"{name} cannot be out securely in any of these hours; {hours} is the least bad."
    secure = int(of_line["secure"].to_numpy().sum())
    cost = float(best["extra_cost"])
    mark = ", no more than the gaps of the search allow" if bool(best["cost_within_gap"]) else ""
    return (
        f"{name} is best out on {hours}: {_amount(cost)} {currency} more{mark}; "
        f"{secure} of {of_line.sizes['block']} blocks are secure."
    )


def advise_storage_sites(dataset: xr.Dataset) -> str:
    """Say where the system saves most, duration by duration, and how far the screening could be trusted."""
    return " ".join(_site(dataset, place) for place in range(dataset.sizes["duration"]))


def _site(dataset: xr.Dataset, place: int) -> str:
    at, currency = dataset.isel(duration=place), dataset.attrs["currency"]
    saving = at["system_saving"].to_numpy()
    tried = np.isfinite(saving)
    hours = float(at["duration"])
    best = int(np.where(tried, saving, -np.inf).argmax())
    one = at.isel(bus=best)
    near = tried & (
        saving[best] - saving <= at["saving_allowance"].to_numpy() + float(one["saving_allowance"])
    )
    near &= at["saving_allowance"].to_numpy() > 0
    near[best] = False
    level = [str(name) for name in at["bus"].to_numpy()[near][:_TOLD]]
    capture, order = float(one["capture_rate"]), float(at["rank_correlation"])
    text = (
        f"{hours:g} h: of {int(tried.sum())} sites run with the store in place, {one['bus'].item()} "
        f"saves the system most, {_amount(saving[best])} {currency}"
        + (f", within the gaps no more than {', '.join(level)}" if level else "")
        + f"; the store earns {_amount(float(one['earned']))} {currency}"
        + (f", {capture:.0%} of what the screening promised" if math.isfinite(capture) else "")
        + f" (screening rank {int(one['screening_rank'])} of {dataset.sizes['bus']})"
    )  # fmt: skip
    earner = int(np.where(tried, at["earned"].to_numpy(), -np.inf).argmax())
    if earner != best:
        text += f"; {at['bus'].to_numpy()[earner]} earns most"
    if math.isfinite(order):
        text += f"; order of screening and of earnings in place: rank correlation {order:.2f}"
    return f"{text}."
