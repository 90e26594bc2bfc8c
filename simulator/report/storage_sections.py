"""The sections of a study of storage sites (formulation.md 6.2).

Public names: `sections`.
"""

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from simulator.report.sections import Chart, Section
from simulator.report.study_figures import bars, choices_of, maps_of, moving_ranks, trade_off
from simulator.report.tables import Cell, Table, figure, numbers, ranked, shortened, word, words
from simulator.report.wording import number, percent

__all__ = ["sections"]

Floats = NDArray[np.float64]

DEFINITIONS = [
    (
        "Screening",
        (
            "The most a store that moves no price could earn at a bus's prices over the whole study, "
            "exactly, with perfect foresight; it starts and ends empty."
        ),
    ),
    (
        "Daily spread",
        (
            "Mean of the dearest hours of a local day less mean of its cheapest, as many of each as "
            "the store lasts, averaged over days."
        ),
    ),
    (
        "Earned in place",
        (
            "What the store earns at the prices it leaves, run in the system hour by hour; a store "
            "narrows the spread it lives on."
        ),
    ),
    (
        "Capture rate",
        (
            "Earned in place as a share of the screening. It falls with the prices the store moves, "
            "and with the foresight of a rolled run, which sees a window ahead."
        ),
    ),
    (
        "System saving",
        (
            "Total cost without the store less with it: two full runs. In one window it lies between "
            "what is earned in place and the screening."
        ),
    ),
    (
        "Congestion relieved",
        (
            "Congestion cost, rent and hours of lines priced, without the store less with it. "
            "Congestion cost is the total cost of a run less that of the same run without line "
            "limits."
        ),
    ),
    (
        "Rank correlation",
        (
            "Spearman's, of screening and of earnings in place over the sites run: 1 where the order "
            "held, 0 where it says nothing."
        ),
    ),
    (
        "Within the gap",
        (
            "Where on and off are decided, each run is known to within the gap of its search. A "
            "saving no larger than the gaps of its runs allow is marked ≈ and says nothing about its "
            "sign."
        ),
    ),
]


def sections(dataset: xr.Dataset) -> list[Section]:
    """Return the sections of the study's page, those without a subject left out."""
    made = [_in_place(dataset), _ranked(dataset), _trade(dataset), _screening(dataset), _moves(dataset),
            _map(dataset), Section("definitions", "What the figures mean", facts=DEFINITIONS)]  # fmt: skip
    return [section for section in made if section is not None]


def _names(dataset: xr.Dataset) -> list[str]:
    return [str(name) for name in dataset["bus"].to_numpy()]


def _durations(dataset: xr.Dataset) -> list[str]:
    return [f"{hours:g} h" for hours in dataset["duration"].to_numpy()]


def _tried(dataset: xr.Dataset, place: int) -> list[int]:
    """Return the sites run with the store in place, the greatest saving first."""
    saving = dataset["system_saving"].to_numpy()[:, place]
    return [bus for bus in ranked(np.nan_to_num(saving, nan=-np.inf)) if np.isfinite(saving[bus])]


def _in_place(dataset: xr.Dataset) -> Section:
    currency = dataset.attrs["currency"]
    tables = [
        _table_in_place(dataset, place, f"{title}: sites with the store in place, {currency}")
        for place, title in enumerate(_durations(dataset))
    ]
    orders = [
        f"{title}: {number(float(one), 2)} with earnings, {number(float(other), 2)} with savings"
        for title, one, other in zip(
            _durations(dataset), dataset["rank_correlation"].to_numpy(),
            dataset["saving_rank_correlation"].to_numpy(), strict=True,
        )
    ]  # fmt: skip
    text = [f"Rank correlation of the screening over the sites run, {'; '.join(orders)}."]
    return Section("in-place", "With the store in the system", text, tables=tables)


def _table_in_place(dataset: xr.Dataset, place: int, caption: str) -> Table:
    at, names, rows = dataset.isel(duration=place), _names(dataset), []
    for bus in _tried(dataset, place):
        value = {
            str(name): at[name].to_numpy()[bus]
            for name in at.data_vars
            if at[name].dims == ("bus",)
        }
        saving = figure(value["system_saving"])
        if value["saving_within_gap"]:
            saving = Cell(f"≈ {saving.text}", saving.sort)
        rows.append([
            word(names[bus]), saving, figure(value["earned"]),
            Cell(percent(value["capture_rate"]), float(np.nan_to_num(value["capture_rate"]))),
            figure(value["screening_rank"]), figure(value["screening_earnings"]),
            figure(value["curtailment_avoided"]), figure(value["congestion_cost_avoided"]),
            figure(value["congestion_hours_avoided"]), figure(value["emissions_avoided"]),
            figure(value["cycles_per_day"], 2),
        ])  # fmt: skip
    columns = words("Bus") + numbers(
        "System saving", "Earned", "Capture", "Screening place", "Screening", "Curtailment avoided MWh",
        "Congestion cost avoided", "Line hours avoided", "t CO\N{SUBSCRIPT TWO} avoided", "Cycles a day",
    )  # fmt: skip
    return Table(caption, columns, rows, sortable=True)


def _ranked(dataset: xr.Dataset) -> Section:
    currency = dataset.attrs["currency"]
    figures = {
        title: bars(
            _names(dataset),
            {"system saving": dataset["system_saving"].to_numpy()[:, place],
             "earned in place": dataset["earned"].to_numpy()[:, place],
             "screening": dataset["screening_earnings"].to_numpy()[:, place]},
            _tried(dataset, place), currency,
        )
        for place, title in enumerate(_durations(dataset))
    }  # fmt: skip
    label = f"Sites by system saving, with what the store earns in place and by the screening, {currency}"
    chart = Chart(
        "ranked", label, choices_of(figures), control="choice" if len(figures) > 1 else ""
    )
    if len(figures) == 1:
        chart = Chart("ranked", label, next(iter(figures.values())))
    return Section("ranked", "Sites ranked", charts=[chart])


def _trade(dataset: xr.Dataset) -> Section:
    currency = dataset.attrs["currency"]
    titles = (f"earned in place, {currency}", f"system saving, {currency}")
    figures = {
        title: trade_off(
            _names(dataset), dataset["earned"].to_numpy()[:, place],
            dataset["system_saving"].to_numpy()[:, place], titles, next(iter(_tried(dataset, place)), None),
        )
        for place, title in enumerate(_durations(dataset))
    }  # fmt: skip
    label = f"What the owner earns against what the system saves, {currency}"
    if len(figures) == 1:
        return Section(
            "trade",
            "Owner and system",
            charts=[Chart("trade", label, next(iter(figures.values())))],
        )
    return Section(
        "trade",
        "Owner and system",
        charts=[Chart("trade", label, choices_of(figures), control="choice")],
    )


def _screening(dataset: xr.Dataset) -> Section:
    earnings, spread = (dataset[name].to_numpy() for name in ("screening_earnings", "daily_spread"))
    names, durations = _names(dataset), _durations(dataset)
    rows = [
        [
            word(names[bus]),
            *(cell for place in range(len(durations)) for cell in (
                figure(dataset["screening_rank"].to_numpy()[bus, place]), figure(earnings[bus, place]),
                figure(spread[bus, place], 2))),
        ]
        for bus in ranked(earnings[:, 0])
    ]  # fmt: skip
    titles = [
        f"{title}: {what}" for title in durations for what in ("place", "earnings", "daily spread")
    ]
    currency = dataset.attrs["currency"]
    table = Table(
        f"Screening of every bus, {currency} and {currency}/MWh",
        words("Bus") + numbers(*titles),
        rows,
        sortable=True,
    )
    text = [f"By prices alone: {dataset.attrs['screening']}."]
    return Section("screening", "Screening", text, tables=[shortened(table)])


def _moves(dataset: xr.Dataset) -> Section | None:
    if dataset.sizes["duration"] < 2:  # noqa: PLR2004
        return None
    figure_ = moving_ranks(
        _names(dataset), _durations(dataset), dataset["screening_rank"].to_numpy()
    )
    chart = Chart(
        "moves", "Places by the screening as the duration changes, the first ten", figure_
    )
    return Section("moves", "How the order moves with duration", charts=[chart])


def _map(dataset: xr.Dataset) -> Section | None:
    currency = dataset.attrs["currency"]
    measures = {
        f"{title}, {what}": (dataset[name].to_numpy()[:, place], currency)
        for place, title in enumerate(_durations(dataset))
        for what, name in (("screening", "screening_earnings"), ("system saving", "system_saving"))
    }
    drawn = maps_of(dataset, measures)
    if drawn is None:
        return None
    chart = Chart("sites", f"Answers on the map, {currency}", drawn, control="choice")
    text = ["Buses stand at their coordinates; hollow ones were not run with the store in place."]
    return Section("sites", "On the map", text, charts=[chart])
