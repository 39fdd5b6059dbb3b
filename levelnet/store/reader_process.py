"""The process that hands files to HDF5; :mod:`levelnet.store.apart` starts and asks it.

The HDF5 library can abort its process, loop or fill the memory on bytes made to harm. Here it may:
this process holds nothing, and has little memory and time. It answers in lines of JSON, numbers
after them as plain bytes; nothing in an answer can be executed.
"""

from __future__ import annotations

import contextlib
import json
import os
import signal
import sys
from pathlib import Path
from typing import Any, BinaryIO

from ..errors import FileFormatError
from .apart import identity
from .hdf5 import Damage, Piece, load
from .kinds import LAYOUTS

# Beside the file itself: Python, the libraries, one slab and its chunks.
_ROOM_BYTES = 1 << 30
_PER_FILE_BYTE = 2
# Seconds of the processor from one piece or slab to the next, and more for a large file.
_PATIENCE_S = 1.0
_PER_BYTE_S = 1e-7


def main() -> None:
    """Answer requests until there are no more."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C is for the process that asked
    requests = sys.stdin.buffer
    # Whatever a library prints must not get into the answers.
    with os.fdopen(os.dup(1), "wb") as answers:
        os.dup2(2, 1)
        _limit("RLIMIT_CORE", 0)
        for line in requests:
            _answer(json.loads(line), answers)


def _answer(asked: dict[str, Any], answers: BinaryIO) -> None:
    """Send a file, and how that ended: "end", "foreign" or "damage" with the reason."""
    size = asked["identity"][2]
    _limit("RLIMIT_AS", _ROOM_BYTES + _PER_FILE_BYTE * size)
    patience_s = _PATIENCE_S + _PER_BYTE_S * size
    try:
        with open(Path(asked["path"]), "rb") as stream:
            if identity(os.fstat(stream.fileno())) != asked["identity"]:
                raise Damage("replaced while it was read")
            _alarm(patience_s)
            for piece in load(stream, LAYOUTS):
                _send(piece, answers, patience_s)
        end = {"end": ""}
    except FileFormatError as error:
        end = {"foreign": str(error)}
    except MemoryError:
        end = {"damage": "HDF5 asks for more memory than a file of its size needs"}
    except Exception as error:
        # Over damaged bytes h5py raises nearly any kind of exception.
        end = {"damage": str(error) or type(error).__name__}
    _alarm(0.0)
    _say(end, answers)
    answers.flush()


def _send(piece: Piece, answers: BinaryIO, patience_s: float) -> None:
    _say(piece.head, answers)
    for numbers in piece.numbers:
        _say({"bytes": len(numbers)}, answers)
        answers.write(numbers)
        _alarm(patience_s)
    _alarm(patience_s)


def _say(what: dict[str, Any], answers: BinaryIO) -> None:
    answers.write(json.dumps(what).encode() + b"\n")


def _alarm(after_s: float) -> None:
    """Let this process be killed when it has used that much of the processor; 0: never."""
    # By its clock, since a slow disk is no reason to give up.
    if hasattr(signal, "setitimer"):
        signal.setitimer(signal.ITIMER_PROF, after_s)


def _limit(name: str, most: int) -> None:
    """Lower a limit of this process, never above what it was started with."""
    with contextlib.suppress(ImportError, ValueError, OSError):  # where there is none
        import resource

        hard = resource.getrlimit(getattr(resource, name))[1]
        most = most if hard == resource.RLIM_INFINITY else min(most, hard)
        resource.setrlimit(getattr(resource, name), (most, hard))
