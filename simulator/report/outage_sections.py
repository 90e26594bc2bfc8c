"""The sections of a check of outages: when each line may be switched out.

Public names: `sections`.
"""

import numpy as np
import xarray as xr

from simulator.report.sections import Section
from simulator.report.tables import Cell, Table, figure, numbers, word, words
from simulator.report.wording import count, money

__all__ = ["sections"]

DEFINITIONS = [
    (
        "Secure",
        (
            "With the line out, all load of the run stays served that was served before, no contingency of "
            "the case would overload a line in the block further than with it in, and none would split the "
            "network that does not anyway."
        ),
    ),
    (
        "Extra cost",
        (
            "Total cost of the run with the line out in the block less that with it in. Marked ≈ where it is "
            "no more than the gaps of the search for on and off allow."
        ),
    ),
    (
        "Overload",
        (
            "How far the line that fares worst would be beyond its emergency rating after a contingency, MW, "
            "and further than with all lines in. A run that is asked to be secure has none."
        ),
    ),
    ("New limits", "Limits that are priced in the block with the line out and are not with it in."),
]


def sections(dataset: xr.Dataset) -> list[Section]:
    """Return the sections of the study's page."""
    secure = dataset["secure"].to_numpy().astype(bool)
    text = [
        f"{count(int(secure.any(axis=1).sum()), 'line')} of {len(secure)} can be out securely in some block."
    ]
    tables = [_best(dataset), *(_of_line(dataset, line) for line in range(dataset.sizes["line"]))]
    return [
        Section("answers", "When lines may be switched out", text, tables=tables),
        Section("definitions", "What the figures mean", facts=DEFINITIONS),
    ]


COLUMNS = (
    "Extra cost", "Unserved MWh", "Curtailed MWh", "Overload MW", "Splitting contingencies", "New limits",
)  # fmt: skip


def _best(dataset: xr.Dataset) -> Table:
    """Return the safest block of each line, the safest lines first."""
    rank = dataset["rank"].to_numpy()
    best = [(line, int(rank[line].argmin())) for line in range(len(rank))]
    secure, cost = (dataset[name].to_numpy() for name in ("secure", "extra_cost"))
    best.sort(key=lambda each: (not secure[each], cost[each]))
    rows = [
        [word(str(dataset["line"].to_numpy()[line])), *_cells(dataset, line, block)]
        for line, block in best
    ]
    columns = words("Line", "Safest", "Secure") + numbers(*_titles(dataset)) + words("Which")
    return Table("The safest time of each line", columns, rows, sortable=True)


def _of_line(dataset: xr.Dataset, line: int) -> Table:
    order = np.argsort(dataset["rank"].to_numpy()[line])
    rows = [_cells(dataset, line, int(block)) for block in order]
    columns = words("Hours", "Secure") + numbers(*_titles(dataset)) + words("Which")
    return Table(
        f"{dataset['line'].to_numpy()[line]} out, the safest first", columns, rows, sortable=True
    )


def _titles(dataset: xr.Dataset) -> list[str]:
    first, *rest = COLUMNS
    return [f"{first} {dataset.attrs['currency']}", *rest]


def _cells(dataset: xr.Dataset, line: int, block: int) -> list[Cell]:
    at = dataset.isel(line=line, block=block)
    cost = float(at["extra_cost"])
    mark = "≈ " if bool(at["cost_within_gap"]) else ""
    names = [str(at[name].item()) for name in ("newly_congested_names", "worst_overload_name")]
    return [
        word(str(at["block_name"].item())),
        word("yes" if bool(at["secure"]) else _why_not(at)),
        Cell(f"{mark}{money(cost)}", cost),
        figure(float(at["extra_unserved"]), 1),
        figure(float(at["extra_curtailed"]), 1),
        figure(float(at["worst_overload"]), 1),
        figure(float(at["islanding"])),
        figure(float(at["newly_congested"])),
        word("; ".join(filter(None, names))),
    ]


def _why_not(at: xr.Dataset) -> str:
    """Say what stands against an outage, the gravest first."""
    if float(at["extra_unserved"]) > 0:
        return "no: load unserved"
    if bool(at["splits"]):
        return "no: splits the network"
    if float(at["worst_overload"]) > 0:
        return "no: overload after a loss"
    return "no: a loss would split the network"
