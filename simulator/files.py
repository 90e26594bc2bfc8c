"""Files and folders written whole or not at all.

Public names: `made_whole`, `replace_file`.
"""

import os
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from tempfile import TemporaryDirectory

from simulator.errors import OptionError

__all__ = ["made_whole", "replace_file"]


@contextmanager
def made_whole(folder: Path, option: str) -> Iterator[Path]:
    """Yield an empty folder that takes the place of `folder` once all went well.

    option : what the caller named the folder by, for the message if it cannot be written
    """
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        with TemporaryDirectory(prefix=f".{folder.name}-", dir=folder.parent) as scratch:
            made = Path(scratch) / "new"
            made.mkdir()
            yield made
            _swap(made, folder, Path(scratch) / "old")
    except OSError as error:
        raise OptionError(
            f"{option}, must be a folder that can be written, found {folder} ({error.strerror}), "
            "choose another folder"
        ) from error


def _swap(made: Path, folder: Path, aside: Path) -> None:
    """Put the new folder in place of an old one; the old one is back if that is cut off."""
    if folder.exists():
        folder.rename(aside)
    try:
        made.rename(folder)
    except BaseException:
        if aside.exists():
            aside.rename(folder)
        raise


def replace_file(path: Path, write: Callable[[Path], None]) -> None:
    """Write a file under another name and move it into place whole."""
    made = path.with_name(f".{path.name}-{os.getpid()}")
    try:
        write(made)
        made.replace(path)
    finally:
        made.unlink(missing_ok=True)
