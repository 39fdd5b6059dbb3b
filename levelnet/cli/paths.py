"""Checks of output places, made before any work starts."""

from __future__ import annotations

import os
from pathlib import Path

from ..errors import InputError


def check_target(path: Path, force: bool, source: Path) -> None:
    """Raise InputError if `path` cannot become an output file made from `source`.

    Parameters
    ----------
    path : Path
        The file to be written.
    force : bool
        True lets an existing file be replaced.
    source : Path
        The file that is read; it is never replaced.
    """
    from ..store import check_output

    if path.exists() and source.exists() and path.samefile(source):
        raise InputError(f"{path}: is the file that is read; choose another output")
    check_output(path, force)


def check_folder(folder: Path) -> None:
    """Raise InputError if `folder` is no place for files; it may still have to be made."""
    place = folder.absolute()
    while not place.exists():
        place = place.parent
    if not place.is_dir():
        raise InputError(f"{folder}: cannot be made: {place} is a file, not a folder")
    if not os.access(place, os.W_OK | os.X_OK):
        raise InputError(f"{folder}: no permission to write into folder {place}")
