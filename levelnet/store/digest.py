"""Two checksums of a file: of all that it says, and of the bytes as they are.

The digest goes over the content, however HDF5 encodes it; it stands in the file as an attribute.
The seal goes over the bytes and follows the end of the HDF5 data, where HDF5 and netCDF readers do
not look. It is needed because the HDF5 library can abort the whole process on damaged bytes: random
flips of bits did so, by a double free in HDF5 2.0. A file without its seal is not given to it.
"""

from __future__ import annotations

import hashlib
import os
from typing import BinaryIO

import numpy as np

from .schema import Content, Stored

_SEAL_START = b"\nlevelnet sha256 "
_SEAL_LENGTH = len(_SEAL_START) + 64 + 1


def content_digest(content: Content) -> str:
    """SHA-256 over names, dimensions, shapes, attributes and data, as "sha256:" and 64 digits.

    Parameters
    ----------
    content : Content
        What the file says; its attribute "digest", if there is one, is left out.

    Notes
    -----
    Every piece is preceded by its length, so that no two contents give the same stream; entries go
    in the order of their names; numbers as little-endian bytes.
    """
    total = hashlib.sha256()

    def put(*pieces: object) -> None:
        for piece in pieces:
            data = (
                piece
                if isinstance(piece, memoryview)
                else str(piece).encode("utf-8", "surrogatepass")
            )
            total.update(b"%d:" % len(data))
            total.update(data)

    kept = {key: value for key, value in content.attributes.items() if key != "digest"}
    put("attributes", *_flat(kept))
    for path, attributes in sorted(content.groups.items()):
        put("group", path, *_flat(attributes))
    for path, stored in sorted(content.variables.items()):
        put("variable", path, stored.dimensions, stored.shape, *_flat(stored.attributes))
        put(*_data(stored))
    return f"sha256:{total.hexdigest()}"


def _flat(attributes: dict[str, str] | dict[str, str | int]) -> list[object]:
    """Count, then key and value of each attribute with the type that tells 1 from "1"."""
    flat: list[object] = [len(attributes)]
    for key, value in sorted(attributes.items()):
        flat += [key, type(value).__name__, value]
    return flat


def _data(stored: Stored) -> tuple[object, ...]:
    if isinstance(stored.values, tuple):
        return ("text", *stored.values)
    values = stored.values.astype(stored.values.dtype.newbyteorder("<"), copy=False)
    # Its bytes in place: a copy would double the memory that the largest array takes.
    return (values.dtype.str, np.ascontiguousarray(values).reshape(-1).view(np.uint8).data)


def seal(raw: BinaryIO) -> None:
    """Append the seal to a file that is open for reading and writing."""
    length = raw.seek(0, os.SEEK_END)
    line = _seal(raw, length)
    raw.seek(length)
    raw.write(line)


def seal_fault(raw: BinaryIO) -> str:
    """Say what is wrong with the seal of a file; "" where it is right."""
    length = raw.seek(0, os.SEEK_END) - _SEAL_LENGTH
    raw.seek(max(length, 0))
    end = raw.read()
    if not end.startswith(_SEAL_START):
        return (
            "not a file of levelnet, or cut off or changed by another program (no seal at its end)"
        )
    return (
        ""
        if end == _seal(raw, length)
        else "damaged: its bytes differ from the checksum at its end"
    )


def _seal(raw: BinaryIO, length: int) -> bytes:
    """Make the line that seals the first `length` bytes."""
    raw.seek(0)
    total = hashlib.sha256()
    while length > 0 and (piece := raw.read(min(length, 1 << 20))):
        total.update(piece)
        length -= len(piece)
    return _SEAL_START + total.hexdigest().encode() + b"\n"
