"""The folder a study leaves: results.nc, study.json and page.html, whole or not at all.

Public names: `RECORD`, `is_study`, `open_study`, `open_study_record`, `refusals`, `save_study`, `scratch_of`.
"""

import json
import os
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import xarray as xr

from simulator.errors import OptionError
from simulator.files import made_whole
from simulator.results import refuse_existing, write_dataset
from simulator.studies.base import FORMAT, Answer

__all__ = [
    "RECORD",
    "is_study",
    "open_study",
    "open_study_record",
    "refusals",
    "save_study",
    "scratch_of",
]

RECORD = "study.json"
_REMEDY = "give the folder that `rampline new-load` or `rampline storage-sites` wrote"


def scratch_of(folder: Path) -> Path:
    """Return the folder beside a study's own in which its finished runs are kept until it is saved."""
    return folder.parent / f".{folder.name}-unfinished"


def refusals(folder: Path, *, force: bool) -> list[str]:
    """Return why a folder cannot be written to, in a list that is empty if it can."""
    try:
        refuse_existing(folder, force=force, mark=RECORD)
    except OptionError as error:
        return [str(error)]
    return []


def save_study(
    answer: Answer, folder: Path, *, force: bool, page: Callable[[Path], None] | None = None
) -> None:
    """Write a study's folder whole, then let go of the finished runs kept beside it.

    page : writes the page of the study to the path it is given
    """
    refuse_existing(folder, force=force, mark=RECORD)
    with made_whole(folder, "--out") as made:
        write_dataset(answer.dataset, made / "results.nc")
        text = json.dumps(answer.record, indent=2, ensure_ascii=False) + "\n"
        (made / RECORD).write_text(text, encoding="utf-8")
        if page is not None:
            page(made / "page.html")
    shutil.rmtree(scratch_of(folder), ignore_errors=True)


def is_study(folder: str | os.PathLike[str]) -> bool:
    """Tell whether a folder is that of a study."""
    return (Path(folder) / RECORD).is_file()


def open_study_record(folder: str | os.PathLike[str]) -> dict[str, Any]:
    """Return study.json of a study's folder."""
    try:
        record: dict[str, Any] = json.loads((Path(folder) / RECORD).read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise OptionError(
            f"the study folder, must hold {RECORD}, found none that can be read in {folder}, {_REMEDY}"
        ) from error
    return record


def open_study(folder: str | os.PathLike[str]) -> xr.Dataset:
    """Open the dataset of a study's folder; raise `OptionError` if it is not one."""
    path = Path(folder) / "results.nc"
    try:
        dataset = xr.load_dataset(path, engine="netcdf4")
    except OSError as error:
        raise OptionError(
            f"the study folder, must hold results.nc, found none that can be read in {folder}, {_REMEDY}"
        ) from error
    if dataset.attrs.get("format") != FORMAT or "study" not in dataset.attrs:
        raise OptionError(
            f"{path}, must be a study of format {FORMAT}, found format {dataset.attrs.get('format')}, "
            "run the study again"
        )
    return dataset
