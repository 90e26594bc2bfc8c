"""An hourly Parquet file → its times and its numbers.

Public names: `ParquetTable`, `read_parquet`.
"""

import io
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from simulator.case.clock import Stamps, local_stamps, read_stamps
from simulator.case.wording import file_problem, listed, quoted
from simulator.errors import Problem

__all__ = ["ParquetTable", "read_parquet"]

YEARS = range(1900, 2200)
"""The years that a case may be about, the same as for written times."""


@dataclass(frozen=True, eq=False)
class ParquetTable:
    """Times, times as written, and values: frame (period, profile), NaN where there is none."""

    stamps: Stamps
    written: Sequence[str]
    values: pd.DataFrame


def read_parquet(path: str, data: bytes, zone: str) -> tuple[ParquetTable | None, list[Problem]]:
    """Read a Parquet file; its time column may stand anywhere, as it does written from an index."""
    try:
        table = pq.ParquetFile(io.BytesIO(data)).read()
        names = table.column_names
        times = _times(table.column("time")) if names.count("time") == 1 else None
        stamps = None if times is None else _stamps(times, zone)
        written = [] if times is None or stamps is None else _written(times, stamps)
    except (pa.ArrowException, OSError, ValueError, LookupError, OverflowError) as error:
        found = quoted(str(error).partition("\n")[0])
        return None, [file_problem(path, "must be a Parquet table", found, "write it anew")]
    if times is None or len(set(names)) < len(names):
        rule, found = 'must have each column once, one of them "time"', listed(names)
        return None, [Problem(path, 1, "time", "the file", rule, found, "rename the columns")]
    if stamps is None:
        rule, found = "must hold timestamps or ISO 8601 text", str(table.schema.field("time").type)
        return None, [Problem(path, 1, "time", "the time column", rule, found, "convert it")]
    values, problems = _numbers(path, table)
    return ParquetTable(stamps, written, values), problems


def _times(column: pa.ChunkedArray) -> "pd.Series[Any]":
    """Return times as text or as timestamps."""
    if pa.types.is_dictionary(column.type):
        column = column.cast(column.type.value_type)
    if pa.types.is_string(column.type) or pa.types.is_large_string(column.type):
        return pd.Series([text or "" for text in column.to_pylist()], dtype="str")
    return column.to_pandas()


def _stamps(times: "pd.Series[Any]", zone: str) -> Stamps | None:
    if pd.api.types.is_string_dtype(times.dtype):
        return read_stamps(times, zone)
    if not pd.api.types.is_datetime64_any_dtype(times.dtype):
        return None
    stamps = pd.DatetimeIndex(times).as_unit("us")
    # In UTC even a year that no calendar of the zone reaches can be asked for.
    stamps = stamps if stamps.tz is None else stamps.tz_convert("UTC")
    usable = pd.DatetimeIndex(stamps.where(stamps.year.isin(YEARS)))
    if usable.tz is None:
        return local_stamps(usable, zone)
    missing = np.asarray(usable.isna())
    return Stamps(usable, usable, missing, np.zeros_like(missing))


def _written(times: "pd.Series[Any]", stamps: Stamps) -> list[str]:
    """Return times as text; a timestamp of a year past use may not even have one."""
    if pd.api.types.is_string_dtype(times.dtype):
        return times.tolist()
    faulty = zip(times.where(~stamps.malformed), times.isna(), stamps.malformed, strict=True)
    return [
        "" if missing else "a year outside 1900 to 2199" if malformed else str(time)
        for time, missing, malformed in faulty
    ]


def _numbers(path: str, table: pa.Table) -> tuple[pd.DataFrame, list[Problem]]:
    columns, problems = {}, []
    for field, column in zip(table.schema, table.columns, strict=True):
        if field.name == "time" or field.name.startswith("note"):
            continue
        numeric = pa.types.is_floating(field.type) or pa.types.is_integer(field.type)
        if numeric or pa.types.is_decimal(field.type):
            columns[field.name] = column.cast(pa.float64(), safe=False).to_numpy()
        else:
            subject, found = f"profile {quoted(field.name)}", str(field.type)
            problems.append(
                Problem(path, 1, field.name, subject, "must hold numbers", found, "convert it")
            )
            columns[field.name] = np.zeros(len(column))
    return pd.DataFrame(columns, index=range(table.num_rows), dtype="float64"), problems
