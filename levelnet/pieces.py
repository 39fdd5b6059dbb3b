"""Resumable pieces of long work: named arrays kept under a key, in a folder or in memory.

A kept piece may be lost at any time and is never trusted without its checksum: no failure of the
cache is ever an error of the calculation.
"""

from __future__ import annotations

import contextlib
import functools
import hashlib
import io
import logging
import numbers
import os
import sys
import tempfile
import time
import zipfile
from collections.abc import Mapping
from pathlib import Path
from typing import Protocol

import numpy as np
from numpy.lib import format as npy

from .arrays import FloatArray
from .errors import InputError

_LOG = logging.getLogger(__name__)
_HEADER = b"levelnet piece 1\n"
_DIGEST_BYTES = hashlib.sha256().digest_size
_SUFFIX, _TEMPORARY_SUFFIX = ".piece", ".piece-part"
_DAY_S = 86400.0
_PACKAGE = Path(__file__).parent
_LOADED_AT_S = time.time()


class Pieces(Protocol):
    """A place that keeps named arrays under a key, and may forget them."""

    def get(self, key: str) -> dict[str, FloatArray] | None:
        """Return the arrays kept under `key`, bit for bit, or None."""

    def put(self, key: str, arrays: Mapping[str, FloatArray]) -> None:
        """Keep `arrays` under `key`, in place of what was there."""


class MemoryPieces:
    """Pieces kept in memory, for one process."""

    def __init__(self) -> None:
        self._kept: dict[str, dict[str, FloatArray]] = {}

    def get(self, key: str) -> dict[str, FloatArray] | None:
        """Return copies of the arrays kept under `key`, or None."""
        kept = self._kept.get(key)
        return None if kept is None else {name: array.copy() for name, array in kept.items()}

    def put(self, key: str, arrays: Mapping[str, FloatArray]) -> None:
        """Keep copies of `arrays` under `key`."""
        self._kept[key] = {name: np.array(array, np.float64) for name, array in arrays.items()}


class FolderPieces:
    """Pieces kept as files in a folder, shared by processes.

    Parameters
    ----------
    folder : Path or str
        Made on the first :meth:`put`. If it cannot be written, nothing is kept.
    max_bytes : int, bytes
        Bound on the total size; the oldest pieces are removed first.

    Notes
    -----
    A file holds a header line, the SHA-256 of key and content, and the content: float64 arrays in
    an uncompressed npz without pickles. Written to a temporary file and moved into place, so that
    readers and other writers see a whole file or none.
    """

    def __init__(self, folder: Path | str, max_bytes: int = 2 * 1024**3) -> None:
        self.folder = Path(folder)
        self.max_bytes = max_bytes

    def get(self, key: str) -> dict[str, FloatArray] | None:
        """Return the arrays kept under `key`, or None if there is no whole and genuine file."""
        path = self._path(key)
        try:
            # Not a pipe, which would block, nor anything larger than was ever written.
            if not path.is_file() or path.stat().st_size > self.max_bytes:
                return None
            data = path.read_bytes()
        except OSError as error:
            _LOG.debug("piece %s cannot be read: %s", path, error)
            return None
        arrays = _unpack(key, data)
        if arrays is None:
            _LOG.debug("piece %s is damaged or foreign; ignored", path)
        return arrays

    def put(self, key: str, arrays: Mapping[str, FloatArray]) -> None:
        """Keep `arrays` under `key`; where that fails, keep nothing and go on."""
        data = _pack(key, arrays)
        if len(data) > self.max_bytes:
            _LOG.debug("piece %s: %d bytes are more than the cache may hold", key, len(data))
            return
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            self._write(self._path(key), data)
            self._tidy(self._path(key))
        except OSError as error:
            _LOG.debug("piece %s not kept in %s: %s", key, self.folder, error)

    def _path(self, key: str) -> Path:
        # Hashed, so that any text may be a key; the key itself is under the checksum.
        return self.folder / (hashlib.sha256(key.encode()).hexdigest() + _SUFFIX)

    def _write(self, path: Path, data: bytes) -> None:
        descriptor, temporary = tempfile.mkstemp(suffix=_TEMPORARY_SUFFIX, dir=self.folder)
        try:
            with os.fdopen(descriptor, "wb") as file:
                file.write(data)
                file.flush()
                os.fsync(file.fileno())
            os.replace(temporary, path)
        except BaseException:  # an interrupt, too, must not leave a temporary file
            Path(temporary).unlink(missing_ok=True)
            raise

    def _tidy(self, newest: Path) -> None:
        """Remove left-over temporary files, and the oldest pieces beyond the size allowed."""
        total = newest.stat().st_size
        others: list[tuple[int, str, int]] = []
        with os.scandir(self.folder) as entries:
            for entry in entries:
                with contextlib.suppress(OSError):  # removed by another process meanwhile
                    status = entry.stat(follow_symlinks=False)
                    if entry.name.endswith(_SUFFIX) and entry.name != newest.name:
                        others.append((status.st_mtime_ns, entry.path, status.st_size))
                        total += status.st_size
                    elif entry.name.endswith(_TEMPORARY_SUFFIX):
                        if time.time() - status.st_mtime > _DAY_S:
                            os.unlink(entry.path)
        for _, path, size in sorted(others):
            if total <= self.max_bytes:
                break
            with contextlib.suppress(OSError):
                os.unlink(path)
                total -= size


class ResultFolder(FolderPieces):
    """Pieces that are results and no cache: none is ever removed, and none is lost in silence.

    Parameters
    ----------
    folder : Path or str
        Made on the first :meth:`put`.
    """

    def __init__(self, folder: Path | str) -> None:
        super().__init__(folder, sys.maxsize)
        with contextlib.suppress(OSError):  # no such folder yet, or removed by another process
            for left_over in self.folder.glob("*" + _TEMPORARY_SUFFIX):
                if time.time() - left_over.stat().st_mtime > _DAY_S:
                    left_over.unlink()

    def put(self, key: str, arrays: Mapping[str, FloatArray]) -> None:
        """Keep `arrays` under `key`; InputError, with its cause, where that cannot be done."""
        path = self._path(key)
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            self._write(path, _pack(key, arrays))
        except OSError as error:
            reason = error.strerror or str(error)
            # The file itself where something else has taken its place.
            where = path if path.is_dir() else self.folder
            raise InputError(f"{where}: cannot be written: {reason}") from error


def text_array(text: str) -> FloatArray:
    """Text as an array that a piece can hold: the bytes of its UTF-8."""
    return np.frombuffer(text.encode(), np.uint8).astype(np.float64)


def array_text(array: FloatArray) -> str:
    """Undo :func:`text_array`; ValueError for what it never gave."""
    if array.ndim != 1 or not np.all((array >= 0.0) & (array < 256.0)):
        raise ValueError("no text")
    return array.astype(np.uint8).tobytes().decode()


def default_cache_folder() -> Path:
    """Folder of the cache: LEVELNET_CACHE, else XDG_CACHE_HOME/levelnet, else ~/.cache/levelnet.

    Notes
    -----
    An empty variable counts as unset, and so does a relative XDG_CACHE_HOME (XDG Base Directory
    Specification 0.8). Without a home the answer is a folder that can never be made: no cache.
    """
    if chosen := os.environ.get("LEVELNET_CACHE"):
        return Path(os.path.expanduser(chosen))
    base = Path(os.environ.get("XDG_CACHE_HOME", ""))
    if not base.is_absolute():
        base = Path(os.path.expanduser("~")) / ".cache"
    return base / "levelnet" if base.is_absolute() else Path(os.devnull) / "levelnet"


@functools.cache
def code_digest(package_parts: tuple[str, ...]) -> str:
    """Digest of the source text of parts of levelnet, to be a part of a cache key.

    Parameters
    ----------
    package_parts : tuple of str
        Subpackages ("kernels", "atomic") or modules ("constants") of levelnet.

    Returns
    -------
    str
        SHA-256, hexadecimal; the same in every process that runs the same source text.

    Raises
    ------
    FileNotFoundError
        If a part has no source text.

    Notes
    -----
    A file changed after this process was started may differ from the code that runs; then the
    digest is one that no other process will ever have.
    """
    digest = hashlib.sha256()
    for part in package_parts:
        files = sorted((_PACKAGE / part).rglob("*.py")) or [_PACKAGE / f"{part}.py"]
        for file in files:
            text = file.read_bytes()
            digest.update(_framed(file.relative_to(_PACKAGE).as_posix().encode()) + _framed(text))
            if file.stat().st_mtime > _LOADED_AT_S:
                digest.update(os.urandom(_DIGEST_BYTES))
    return digest.hexdigest()


def content_key(*parts: object) -> str:
    """Key made of names and numbers, exact to the last bit.

    Parameters
    ----------
    *parts : str, bool, int, float, None, ndarray, or tuples and lists of these
        What the kept content depends on. 1, 1.0 and True are three different parts.

    Returns
    -------
    str
        SHA-256, hexadecimal.

    Raises
    ------
    TypeError
        If a part is of another type.
    """
    return hashlib.sha256(_exact(parts)).hexdigest()


def _exact(part: object) -> bytes:
    """Write `part` as bytes so that different parts never give the same."""
    if part is None or isinstance(part, bool | np.bool_):
        return _framed(f"b{part}".encode())
    if isinstance(part, str):
        return _framed(b"s" + part.encode())
    if isinstance(part, numbers.Integral):
        return _framed(f"i{int(part)}".encode())
    if isinstance(part, float):
        return _framed(b"f" + float(part).hex().encode())
    if isinstance(part, tuple | list):
        return _framed(b"t" + b"".join(_exact(one) for one in part))
    if isinstance(part, np.ndarray) and part.dtype.kind in "biuf" and part.itemsize <= 8:
        kind = f"a{part.dtype.str}{part.shape}".encode()
        return _framed(_framed(kind) + np.ascontiguousarray(part).tobytes())
    raise TypeError(f"a part of a key cannot be of type {type(part).__name__}")


def _framed(data: bytes) -> bytes:
    return str(len(data)).encode() + b":" + data


def _pack(key: str, arrays: Mapping[str, FloatArray]) -> bytes:
    """Write header, checksum and arrays as one string of bytes, the same for the same content."""
    buffer = io.BytesIO()
    # zipfile by hand: numpy.savez takes names as keywords ("file"), and stamps the time.
    with zipfile.ZipFile(buffer, "w") as archive:
        for name, array in arrays.items():
            if "\0" in name:  # zip would cut the name there
                raise ValueError(f"array name {name!r}: a NUL character is not allowed")
            with archive.open(zipfile.ZipInfo(name + ".npy"), "w", force_zip64=True) as member:
                npy.write_array(member, np.asarray(array, np.float64), allow_pickle=False)
    content = buffer.getvalue()
    return _HEADER + _checksum(key, content) + content


def _unpack(key: str, data: bytes) -> dict[str, FloatArray] | None:
    """Undo :func:`_pack`; None unless every byte is as written for this key."""
    start = len(_HEADER) + _DIGEST_BYTES
    content = data[start:]
    if data[:start] != _HEADER + _checksum(key, content):
        return None
    try:
        return _arrays(content)
    except Exception as error:  # zipfile and numpy raise nearly anything over nonsense
        _LOG.debug("a piece with a right checksum, and not as levelnet packs it: %s", error)
        return None


def _arrays(content: bytes) -> dict[str, FloatArray]:
    """Take arrays out of an archive; ValueError for what :func:`_pack` never makes."""
    arrays: dict[str, FloatArray] = {}
    with zipfile.ZipFile(io.BytesIO(content)) as archive:
        members = archive.infolist()
        # Neither compressed nor overlapping: nothing grows beyond the size of the file.
        plain = all(one.compress_type == zipfile.ZIP_STORED for one in members)
        if not plain or sum(one.file_size for one in members) > len(content):
            raise ValueError("compressed, or larger inside than outside")
        for one in members:
            with archive.open(one) as file:
                array = npy.read_array(file, allow_pickle=False)
            if array.dtype != np.float64:
                raise ValueError(f"{one.filename} holds {array.dtype}")
            arrays[one.filename.removesuffix(".npy")] = array
    return arrays


def _checksum(key: str, content: bytes) -> bytes:
    return hashlib.sha256(_framed(key.encode()) + content).digest()
