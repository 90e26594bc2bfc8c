"""Limits beyond those of single lines, and what lines lose, as tables of a page.

Public names: `after_losses`, `corridors`, `line_losses`, `pair_totals`.
"""

import numpy as np
import pandas as pd

from simulator.report.tables import Table, bar_lengths, cash, figure, numbers, ranked, word, words
from simulator.report.view import View

__all__ = ["after_losses", "corridors", "line_losses", "pair_totals"]

SHOWN = 1e-6
"""Hours or MWh below which a limit or a line is left out."""


def pair_totals(view: View) -> pd.DataFrame:
    """Return hours priced, rent and highest shadow price of each line after each contingency.

    Frame indexed by what the pair is called, the most hours first; columns line, contingency, hours,
    rent, shadow.
    """
    if not view.size("pair"):
        return pd.DataFrame(columns=["line", "contingency", "hours", "rent", "shadow"])
    frame = pd.DataFrame({
        "pair": view.names("pair"), "line": view.labels("pair_line", "pair"),
        "contingency": view.labels("pair_contingency", "pair"),
        "hours": view.period_hours * (view.values("pair_shadow_price") > SHOWN),
        "rent": view.values("pair_rent"), "shadow": view.values("pair_shadow_price"),
    })  # fmt: skip
    totals = frame.groupby("pair", sort=False).agg({
        "line": "first", "contingency": "first", "hours": "sum", "rent": "sum", "shadow": "max",
    })  # fmt: skip
    return totals.sort_values(["hours", "rent"], ascending=False, kind="stable")


def after_losses(view: View) -> Table:
    """Lines that were priced after a contingency, by hours and then by rent."""
    totals = pair_totals(view)
    hours, rents = totals["hours"].to_numpy(float), totals["rent"].to_numpy(float)
    lengths = bar_lengths(hours)
    rows = [
        [
            word(row.line), word(row.contingency), figure(row.hours, _digits(view), float(length)),
            cash(row.rent, rents), figure(row.shadow, 2),
        ]
        for row, length in zip(totals.itertuples(), lengths, strict=True)
    ]  # fmt: skip
    columns = words("Line", "After loss of") + numbers(
        "Hours priced", f"Rent {view.currency}", f"Highest shadow price {view.price_unit}"
    )
    return Table("Lines priced after a contingency", columns, rows, sortable=True)


def corridors(view: View) -> Table:
    """Return each corridor's flow and limits, the most congested first."""
    names, flow = view.names("corridor"), view.values("corridor_flow")
    priced, at_limit = (
        view.values(name) for name in ("corridor_congestion_hours", "corridor_hours_at_limit")
    )
    rent = view.values("corridor_rent").sum(axis=0)
    shadow = view.values("corridor_shadow_price").max(axis=0)
    lengths, digits = bar_lengths(priced), _digits(view)
    rows = [
        [
            word(names[place]), figure(flow[:, place].min(), 1), figure(flow[:, place].max(), 1),
            figure(priced[place], digits, float(lengths[place])), figure(at_limit[place], digits),
            cash(rent[place], rent), figure(shadow[place], 2),
        ]
        for place in ranked(priced, rent, at_limit)
    ]  # fmt: skip
    columns = words("Corridor") + numbers(
        "Least MW", "Most MW", "Hours priced", "Hours at limit", f"Rent {view.currency}",
        f"Highest shadow price {view.price_unit}",
    )  # fmt: skip
    return Table("Corridors", columns, rows, sortable=True)


def line_losses(view: View) -> Table:
    """Return what each line lost, the most first."""
    names, lost = view.names("line"), view.energy("line_loss")
    carried = np.abs(view.values("line_flow")).sum(axis=0) * view.period_hours
    most = view.values("line_loss").max(axis=0)
    share = np.divide(lost, carried, out=np.zeros_like(lost), where=carried > SHOWN)
    rows = [
        [
            word(names[line]), figure(lost[line], 1), figure(most[line], 2),
            figure(100 * share[line], 2),
        ]
        for line in ranked(lost)
        if lost[line] > SHOWN
    ]  # fmt: skip
    columns = words("Line") + numbers("Lost MWh", "Most MW", "% of what it carried")
    return Table("Losses of lines", columns, rows, sortable=True)


def _digits(view: View) -> int:
    return 0 if view.period_hours == 1 else 2
