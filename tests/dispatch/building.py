"""Case folders written from rows, for tests that need a case of their own shape.

`case_of(folder, settings, minutes=60, buses=[...], ..., profiles={...})` writes the tables given and
reads them back. A table is a list of rows (dictionaries); None or a column left out is a blank cell.
A row of `loads` may give `mw` in place of `profile`: a number, or one for each period.
"""

import csv
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import pandas as pd

from simulator.case import Case, read_case

Row = dict[str, Any]
Tables = Mapping[str, Sequence[Row]]

PATHS = {
    "buses": "network/buses.csv",
    "lines": "network/lines.csv",
    "dc_ties": "network/dc_ties.csv",
    "corridors": "network/corridors.csv",
    "corridor_lines": "network/corridor_lines.csv",
    "contingencies": "network/contingencies.csv",
    "units": "fleet/units.csv",
    "offers": "fleet/offers.csv",
    "heat_rates": "fleet/heat_rates.csv",
    "fuels": "fleet/fuels.csv",
    "renewables": "fleet/renewables.csv",
    "storage": "fleet/storage.csv",
    "reserves": "fleet/reserves.csv",
    "loads": "demand/loads.csv",
    "outages": "calendar/outages.csv",
}
REQUIRED = {
    "buses": ["bus"],
    "lines": ["line", "from_bus", "to_bus", "reactance_pu"],
    "units": ["unit", "bus", "max_output_mw"],
    "loads": ["load", "bus", "profile"],
}
START = "2027-03-01T00:00"


def case_of(
    folder: Path,
    settings: Mapping[str, Any] | None = None,
    *,
    minutes: int = 60,
    periods: int = 2,
    profiles: Mapping[str, Sequence[float]] | None = None,
    **tables: Sequence[Row],
) -> Case:
    """Write a case folder and read it."""
    columns = dict(profiles or {})
    tables = dict(tables)
    tables["loads"] = [_profiled(row, columns, periods) for row in tables.get("loads", [])]
    columns.setdefault("flat", [1.0] * periods)
    (folder / "hourly").mkdir(parents=True)
    (folder / "case.toml").write_text(toml(settings or {}))
    for name, path in PATHS.items():
        if tables.get(name) or name in REQUIRED:
            (folder / path).parent.mkdir(exist_ok=True)
            _write(folder / path, tables.get(name, []), REQUIRED.get(name, []))
    times = pd.date_range(START, periods=periods, freq=f"{minutes}min").strftime("%Y-%m-%dT%H:%M")
    pd.DataFrame({"time": times, **columns}).to_csv(folder / "hourly" / "all.csv", index=False)
    return read_case(folder)


def _profiled(row: Row, columns: dict[str, Sequence[float]], periods: int) -> Row:
    """Turn `mw` of a load into a profile of the load's name."""
    if "mw" not in row:
        return row
    mw, name = row["mw"], f"{row['load']} profile"
    columns[name] = list(mw) if isinstance(mw, Sequence) else [float(mw)] * periods
    return {key: value for key, value in row.items() if key != "mw"} | {"profile": name}


def _write(path: Path, rows: Sequence[Row], required: Sequence[str]) -> None:
    columns = list(dict.fromkeys([*required, *(name for row in rows for name in row)]))
    with path.open("w", newline="") as file:
        writer = csv.DictWriter(file, columns, restval="", lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)


def toml(settings: Mapping[str, Any]) -> str:
    """Write settings, sections last, as TOML."""
    settings = {"format": 1, "name": "a case of a test"} | dict(settings)
    plain = {key: value for key, value in settings.items() if not isinstance(value, Mapping)}
    lines = [f"{key} = {_literal(value)}" for key, value in plain.items()]
    for name, section in settings.items():
        if isinstance(section, Mapping):
            lines += [f"[{name}]", *(f"{key} = {_literal(item)}" for key, item in section.items())]
    return "\n".join(lines) + "\n"


def _literal(value: object) -> str:
    if isinstance(value, str):
        return f'"{value}"'
    if isinstance(value, bool):
        return str(value).lower()
    return repr(value)
