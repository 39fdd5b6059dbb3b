"""Files that appear whole or not at all: written beside their place and moved into it."""

from __future__ import annotations

import contextlib
import hashlib
import os
import re
import secrets
import socket
import stat
from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO

from ..errors import InputError


def check_output(path: str | Path, force: bool = False) -> Path:
    """Say at once whether a file can be written at `path`; worth asking before a long run.

    Parameters
    ----------
    path : str or Path
        The file to be written.
    force : bool
        True allows an existing file to be replaced.

    Returns
    -------
    Path
        The place the data will take: `path` with symbolic links followed, so that a link survives.

    Raises
    ------
    InputError
        If the folder is missing or not writable, or if `path` exists and is not a plain file, or
        exists and `force` is False.
    """
    target, mode = _place(path)
    if mode is not None:
        # Moving a file over a device or a pipe would destroy it.
        if not stat.S_ISREG(mode):
            raise InputError(f"{path}: exists and is not a plain file; choose another output")
        if not force:
            raise InputError(f"{path}: already exists; use --force to replace it")
    if not target.parent.is_dir():
        raise InputError(f"{path}: cannot be written: the folder {target.parent} does not exist")
    if not os.access(target.parent, os.W_OK | os.X_OK):
        raise InputError(f"{path}: cannot be written: no permission in folder {target.parent}")
    return target


def _place(path: str | Path) -> tuple[Path, int | None]:
    """Follow links, and ask for kind and permissions of what stands there, if anything does."""
    try:
        target = Path(os.path.realpath(path))
        try:
            return target, target.stat().st_mode
        except FileNotFoundError:
            return target, None
    except (OSError, ValueError) as error:
        reason = (error.strerror if isinstance(error, OSError) else None) or str(error)
        raise InputError(f"{path}: cannot be written: {reason}") from None


@contextlib.contextmanager
def whole_file(path: str | Path, force: bool = False) -> Iterator[BinaryIO]:
    """Open a temporary file that takes the place of `path` when the block ends without error.

    It stands in the same folder and ends in ".part". On any failure, an interrupt included, it is
    removed and `path` stays as it was. Leftovers of processes that died are swept first. A failure
    to write (disk full, no permission) is raised as one InputError.
    """
    target = check_output(path, force)
    _sweep(target)
    part = target.with_name(f"{_prefix(target)}{os.getpid()}-{secrets.token_hex(4)}.part")
    mode = _place(path)[1]
    permissions = 0o666 if mode is None else mode & 0o777
    try:
        try:
            descriptor = os.open(part, os.O_RDWR | os.O_CREAT | os.O_EXCL, permissions)
            with os.fdopen(descriptor, "w+b") as raw:
                yield raw
                raw.flush()
                os.fsync(raw.fileno())
            check_output(path, force)  # somebody may have written it meanwhile
            os.replace(part, target)
        except OSError as error:
            reason = error.strerror or str(error)
            raise InputError(f"{path}: cannot be written: {reason}") from error
    except BaseException:
        with contextlib.suppress(OSError):
            part.unlink(missing_ok=True)
        raise
    _sync_folder(target.parent)


def _prefix(target: Path) -> str:
    # The host is part of the name: on a shared disk, a process number says nothing on another host.
    host = hashlib.sha256(socket.gethostname().encode()).hexdigest()[:8]
    return f".{target.name}.{host}-"


def _sweep(target: Path) -> None:
    """Remove temporary files of `target` whose process on this host is gone."""
    pattern = re.compile(re.escape(_prefix(target)) + r"(\d+)-[0-9a-f]{8}\.part")
    with contextlib.suppress(OSError):  # what cannot be listed or removed is left
        for entry in os.scandir(target.parent):
            match = pattern.fullmatch(entry.name)
            if match and not _alive(int(match[1])):
                os.unlink(entry.path)


def _alive(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except (OSError, OverflowError):
        return True  # not ours to ask, or no process number: better keep than remove
    return True


def _sync_folder(folder: Path) -> None:
    # Only this makes the new name safe; some file systems cannot, and the file is whole anyway.
    with contextlib.suppress(OSError):
        descriptor = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)
