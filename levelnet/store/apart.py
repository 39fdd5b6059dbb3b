"""Read HDF5 in a process of its own, kept from one file to the next.

Bytes that kill it are one complaint about the file here. Everything it says is checked: sizes
against that of the file before memory is taken, the digest over all of it by the reader.
"""

from __future__ import annotations

import atexit
import contextlib
import json
import math
import os
import signal
import subprocess
import sys
import threading
from io import BufferedReader
from pathlib import Path
from typing import Any, cast

import numpy as np
from numpy.typing import NDArray

from ..errors import FileFormatError
from .hdf5 import Damage
from .schema import Content, Stored

# What a file may hold: 512 MiB, of which two copies leave room below 2 GiB, or twenty times its
# size. Deflate can shrink a thousandfold what says nothing. Measured: histories of n_max = 30 to
# 100 hold 1.1 to 1.4 times their file, other results less. Estimated: a large sweep that failed in
# nearly every case holds 20 times its file.
_MOST_BYTES, _MOST_EXPANDED = 1 << 29, 20
# An empty package stands for levelnet.store there: the rest of it would triple the start-up time.
_PROGRAM = f"""
import json, sys, types
sys.path[:] = json.loads(sys.stdin.buffer.readline())
package = sys.modules["{__package__}"] = types.ModuleType("{__package__}")
package.__path__ = json.loads(sys.stdin.buffer.readline())
from {__package__}.reader_process import main
main()
"""


def load_apart(path: Path, identity: list[int]) -> Content:
    """Read everything that the HDF5 file at `path` says in a layout of levelnet.

    Parameters
    ----------
    path : Path
        The file.
    identity : list of int
        As :func:`identity` gives for the file that was checked.

    Raises
    ------
    FileFormatError
        If the file is of another kind or a newer layout; says so without a path.
    Damage
        If anything differs from the layout, or HDF5 did not survive the file.
    """
    with _KEPT.lock:
        process = _KEPT.running()
        try:
            return process.content(path, identity)
        except BaseException:
            if not process.at_rest:  # died, or was interrupted in the middle of an answer
                _KEPT.end()
            raise


def identity(status: os.stat_result) -> list[int]:
    """Return what tells a file from another in its place; third is its size in bytes."""
    return [status.st_dev, status.st_ino, status.st_size, status.st_mtime_ns]


class _Process:
    """The process, and what it says of one file at a time."""

    def __init__(self) -> None:
        try:
            self._process = subprocess.Popen(
                [sys.executable or "python", "-c", _PROGRAM],
                stdin=subprocess.PIPE,
                stdout=subprocess.PIPE,
                stderr=subprocess.DEVNULL,
                env=os.environ | {"OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"},
            )
        except OSError as error:
            raise FileFormatError(
                f"cannot be read: no process can be started for HDF5: {error.strerror}"
            ) from None
        self.at_rest = True
        self._say(sys.path)
        self._say([str(Path(__file__).parent)])

    @property
    def alive(self) -> bool:
        return self._process.poll() is None

    def content(self, path: Path, identity: list[int]) -> Content:
        self.at_rest = False
        self._say({"path": os.path.abspath(path), "identity": identity})
        content = Content()
        size = identity[2]
        room = max(_MOST_BYTES, _MOST_EXPANDED * size)
        while "end" not in (head := self._head(size)):
            if "variable" in head:
                stored = self._stored(head, room, size)
                content.variables[head["variable"]] = stored
                if not isinstance(stored.values, tuple):
                    room -= stored.values.nbytes
            elif "group" in head:
                content.groups[head["group"]] = head["attributes"]
            else:
                content.attributes = head["attributes"]
        self.at_rest = True
        return content

    def _say(self, what: object) -> None:
        assert self._process.stdin is not None
        with contextlib.suppress(BrokenPipeError):  # it died; the answer, or its lack, tells
            self._process.stdin.write(json.dumps(what).encode() + b"\n")
            self._process.stdin.flush()

    def _head(self, file_size: int) -> dict[str, Any]:
        """Take the next line; raise what it complains of."""
        line = self._answers.readline((1 << 20) + 8 * file_size)
        if not line.endswith(b"\n"):
            raise Damage(self._last_words())
        head: dict[str, Any] = json.loads(line)
        if "foreign" in head or "damage" in head:
            self.at_rest = True
            raise FileFormatError(head["foreign"]) if "foreign" in head else Damage(head["damage"])
        return head

    def _stored(self, head: dict[str, Any], room: int, file_size: int) -> Stored:
        dimensions = tuple(head["dimensions"])
        if "texts" in head:
            return Stored(dimensions, head["attributes"], tuple(head["texts"]))
        values = self._numbers(head, room, file_size)
        return Stored(dimensions, head["attributes"], values)

    def _numbers(self, head: dict[str, Any], room: int, file_size: int) -> NDArray[Any]:
        """Take an array, slab by slab; a complaint may come between any two."""
        kind, shape = np.dtype(head["type"]), tuple(head["shape"])
        declared = math.prod(shape) * kind.itemsize
        if declared > room:
            raise Damage(f"{head['variable']} declares {declared} bytes, too many for such a file")
        values = np.empty(shape, kind)
        view = values.reshape(-1).view(np.uint8).data
        while view:
            slab = view[: self._head(file_size)["bytes"]]
            if self._answers.readinto(slab) < len(slab):
                raise Damage(self._last_words())
            view = view[len(slab) :]
        return values

    @property
    def _answers(self) -> BufferedReader:
        return cast(BufferedReader, self._process.stdout)

    def _last_words(self) -> str:
        self.end()
        if self._process.returncode == -getattr(signal, "SIGPROF", 0):
            return "HDF5 does not come to an end over it"
        return "HDF5 does not survive reading it"

    def end(self) -> None:
        """End the process, which holds nothing."""
        for stream in (self._process.stdin, self._process.stdout):
            with contextlib.suppress(OSError):
                if stream is not None:
                    stream.close()
        try:
            self._process.wait(1.0)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()


class _Kept:
    """The process that is kept; a copy of this one made by fork makes its own."""

    def __init__(self) -> None:
        self.lock = threading.Lock()
        self._process: _Process | None = None
        self._of_parent: list[_Process | None] = []

    def running(self) -> _Process:
        if self._process is None or not self._process.alive:
            self.end()
            self._process = _Process()
        return self._process

    def end(self) -> None:
        if self._process is not None:
            self._process.end()
            self._process = None

    def leave_to_parent(self) -> None:
        self.lock = threading.Lock()
        self._of_parent.append(self._process)  # kept, so that nothing ends it here
        self._process = None


_KEPT = _Kept()
atexit.register(_KEPT.end)
if hasattr(os, "register_at_fork"):
    os.register_at_fork(after_in_child=_KEPT.leave_to_parent)
