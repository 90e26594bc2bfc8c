"""A study's tables for other programs.

Public names: `export_study`, `study_sheets`.
"""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from simulator.report.export import Export, Sheet, export_tables
from simulator.report.page import CAUTION

__all__ = ["export_study", "study_sheets"]

KINDS = ("csv", "parquet", "xlsx")


def export_study(
    dataset: xr.Dataset, record: Mapping[str, Any], kind: str, folder: Path, *, force: bool = False
) -> Export:
    """Write a study to a folder, given its dataset and its study.json."""
    return export_tables(
        lambda: study_sheets(dataset, record), kind, folder, force=force, kinds=KINDS
    )


def study_sheets(dataset: xr.Dataset, record: Mapping[str, Any]) -> list[Sheet]:
    """Return a study's tables: what it is about, its answers, and what has other dimensions."""
    if "block" in dataset.dims:
        return [_about(dataset, record), Sheet("answers", _by(dataset, ("line", "block")))]
    second = "size" if "size" in dataset.dims else "duration"
    made = [_about(dataset, record), Sheet("answers", _by(dataset, ("bus", second)))]
    if second == "duration":
        made.append(Sheet("durations", _by(dataset, ("duration",))))
    if "line_hours_congested" in dataset:
        made.append(Sheet("lines", _lines(dataset)))
    return made


def _unit(dataset: xr.Dataset, name: str) -> str:
    unit = str(dataset[name].attrs.get("units", "1"))
    return unit.replace("currency", str(dataset.attrs["currency"]))


def _heading(dataset: xr.Dataset, name: str) -> str:
    unit = _unit(dataset, name)
    return name if unit in ("1", "") else f"{name} [{unit}]"


def _by(dataset: xr.Dataset, dims: tuple[str, ...]) -> pd.DataFrame:
    """Return all variables whose dimensions are among these, a row for each of their elements."""
    names = [
        str(name)
        for name, each in dataset.data_vars.items()
        if each.dims and set(each.dims) <= set(dims)
    ]
    frame = _bare(dataset[names], dims).to_dataframe(dim_order=list(dims)).reset_index()
    return frame.rename(columns={name: _heading(dataset, name) for name in frame.columns})


def _bare(dataset: xr.Dataset, dims: tuple[str, ...]) -> xr.Dataset:
    return dataset.drop_vars([str(name) for name in dataset.coords if name not in dims])


def _lines(dataset: xr.Dataset) -> pd.DataFrame:
    """Return the hours of the lines whose congestion changes."""
    names = ["line_hours_congested", "line_hours_relieved"]
    frame = _bare(dataset[names], ("bus", "size", "line")).to_dataframe().reset_index()
    frame = frame[(frame[names] > 0).any(axis=1)].reset_index(drop=True)
    return frame.rename(columns={name: _heading(dataset, name) for name in frame.columns})


def _about(dataset: xr.Dataset, record: Mapping[str, Any]) -> Sheet:
    """Return terms and values: the study, its recommendation and basis, what was asked, units."""
    attrs = dataset.attrs
    asked = pd.json_normalize(dict(record["request"])).to_dict("records")[0]
    rows: list[tuple[str, Any]] = [
        ("study", attrs["title"]), ("caution", CAUTION), ("recommendation", attrs["recommendation"]),
        ("basis", attrs["basis"]), ("audit", "passed" if record["audit"]["passed"] else "failed"),
        *((name, attrs[name]) for name in ("from", "until", "time_zone", "commitment", "limits")),
        *((f"asked for {name}", _said(value)) for name, value in asked.items()),
        *((str(name), float(dataset[name])) for name in dataset.data_vars if not dataset[name].dims),
        *((str(name), _described(dataset, str(name))) for name in dataset.data_vars),
    ]  # fmt: skip
    return Sheet("about", pd.DataFrame(rows, columns=["term", "value"], dtype=object))


def _said(value: Any) -> Any:
    if isinstance(value, (list, tuple)):
        return ", ".join(map(str, value))
    return "" if value is None or (isinstance(value, float) and not np.isfinite(value)) else value


def _described(dataset: xr.Dataset, name: str) -> str:
    variable, unit = dataset[name], _unit(dataset, name)
    by = f", by {' and '.join(map(str, variable.dims))}" if variable.dims else ""
    return f"{variable.attrs['long_name']}{'' if unit == '1' else f', {unit}'}{by}"
