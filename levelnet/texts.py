"""Text files that a user hands in: read whole, within a size, refused in one line."""

from __future__ import annotations

import os
import stat
from pathlib import Path
from typing import BinaryIO

from .errors import InputError

_UNITS = ((1_000_000, "MB"), (1000, "kB"), (1, "bytes"))


def opened(path: str | Path) -> BinaryIO:
    """Open a plain file for reading, without ever waiting; InputError where that is not possible.

    Anything else is refused: a pipe would wait for a writer for ever, a device may have no end.
    """
    try:
        # Devices and pipes are known before they are opened: opening may already act or wait.
        mode = os.stat(path).st_mode
        if not stat.S_ISREG(mode) and not stat.S_ISDIR(mode):
            raise InputError(f"{path}: cannot be read: not a plain file")
        return open(path, "rb", opener=_without_waiting)
    except (OSError, ValueError) as error:  # ValueError: a null character in the path
        if isinstance(error, InputError):
            raise
        reason = (error.strerror if isinstance(error, OSError) else None) or str(error)
        raise InputError(f"{path}: cannot be read: {reason}") from None


def _without_waiting(path: str, flags: int) -> int:
    # Some that call themselves plain files wait too, and a pipe may have taken the place meanwhile.
    return os.open(path, flags | getattr(os, "O_NONBLOCK", 0))


def read_bytes(path: str | Path, most_bytes: int) -> bytes:
    """Read a plain file.

    Parameters
    ----------
    path : str or Path
        The file.
    most_bytes : int
        Largest size allowed.

    Raises
    ------
    InputError
        If it cannot be read, is no plain file (reading a pipe would wait for ever), or is larger.
    """
    with opened(path) as file:
        try:
            content = file.read(most_bytes + 1) or b""
        except OSError as error:
            raise InputError(f"{path}: cannot be read: {error.strerror or error}") from None
    if len(content) > most_bytes:
        raise InputError(f"{path}: over {_size(most_bytes)}")
    return content


def read_text(path: str | Path, most_bytes: int, encoding: str = "utf-8") -> str:
    """Read a plain text file; as :func:`read_bytes`, and InputError if it is no text."""
    try:
        return read_bytes(path, most_bytes).decode(encoding)
    except UnicodeDecodeError:
        name = "plain ASCII" if encoding == "ascii" else "UTF-8"
        raise InputError(f"{path}: not {name} text") from None


def _size(count: int) -> str:
    unit, name = next(one for one in _UNITS if count >= one[0])
    return f"{count / unit:g} {name}"
