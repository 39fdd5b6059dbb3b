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

    if _same(path, source):
        raise InputError(f"{path}: is the file that is read; choose another output")
    check_output(path, force)


def check_folder(folder: Path) -> None:
    """Raise InputError if `folder` is no place for files; it may still have to be made."""
    place = folder.absolute()
    try:
        while not _stands(place):
            place = place.parent
    except (OSError, ValueError) as error:  # ValueError: a null character
        reason = (error.strerror if isinstance(error, OSError) else None) or str(error)
        raise InputError(f"{folder}: cannot be made: {reason}") from None
    if not place.is_dir():
        kind = "a file, not a" if place.is_file() else "no"
        raise InputError(f"{folder}: cannot be made: {place} is {kind} folder")
    if not os.access(place, os.W_OK | os.X_OK):
        raise InputError(f"{folder}: no permission to write into folder {place}")


def _same(path: Path, source: Path) -> bool:
    try:
        return path.samefile(source)
    except (OSError, ValueError):  # one of them is missing, or no path at all: said by others
        return False


def _stands(place: Path) -> bool:
    """Whether something has this name; a link that leads nowhere has."""
    try:
        place.lstat()
    except (FileNotFoundError, NotADirectoryError):
        return False
    return True
