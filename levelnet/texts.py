"""Text files that a user hands in: read whole, within bounds, refused in one line."""

from __future__ import annotations

import os
import re
import stat
import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any, BinaryIO

from .errors import InputError, cut_short

MOST_TOML = 20_000_000
"""Longest TOML text, characters: the largest response or expansion table may stand inside."""
MOST_PARTS = 32
"""Most parts of a dotted key, and most tables and lists that stand one inside the other."""
# No file needs more than a hundred keys; the parser takes a kilobyte for a table, a microsecond or
# two for a mark (a number in a list has up to three), and a hundred bytes for a letter of a number.
_MOST_KEYS, _MOST_MARKS, _LONGEST_WORD = 10_000, 2_000_000, 1000
# What decides how TOML nests: marks outside strings and comments; words that are too long. Each
# pattern sees a letter once and gives nothing back.
_MARKS = re.compile(
    r"""\"{3}|'{3}|["']|\#[^\n]*|[].=,\n[{}]"""
    rf"|(?<![\w-])[\w-]{{{_LONGEST_WORD}}}"
)
# What may end a string, by what begins it; a letter behind a backslash does not.
_ENDS = {
    '"""': re.compile(r"\\.|\"{3,5}", re.DOTALL),
    "'''": re.compile(r"'{3,5}"),
    '"': re.compile(r'\\.|["\n]', re.DOTALL),
    "'": re.compile(r"['\n]"),
}
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


def read_text(path: str | Path, most_bytes: int, encoding: str = "utf-8-sig") -> str:
    """Read a plain text file; as :func:`read_bytes`, and InputError if it is no text.

    A byte-order mark at its start is left out.
    """
    try:
        return read_bytes(path, most_bytes).decode(encoding)
    except UnicodeDecodeError:
        name = "plain ASCII" if encoding == "ascii" else "UTF-8"
        raise InputError(f"{path}: not {name} text") from None


def parse_toml(text: str, where: str) -> dict[str, Any]:
    """Read TOML under bounds of time and memory, with the numbers that TOML 1.0 demands.

    Parameters
    ----------
    text : str
        At most :data:`MOST_TOML` characters.
    where : str
        File, for the complaint.

    Raises
    ------
    InputError
        If it is no TOML, is too long, has too many keys, nests deeper than :data:`MOST_PARTS`, or
        holds a whole number of over 64 bits; one line that names `where`.
    """
    if len(text) > MOST_TOML:
        raise InputError(f"{where}: over {MOST_TOML} characters of TOML")
    # Before the parser sees it: its time and memory grow with the square of the parts of a key.
    _check_marks(text, where)
    try:
        values = tomllib.loads(text)
    except ValueError as error:  # TOMLDecodeError is one; huge numbers raise plain ones
        raise InputError(f"{where}: not valid TOML: {cut_short(str(error), 200)}") from None
    for key, value in values.items():
        _check_value(value, f"{where}: {cut_short(key)}", 1)
    return values


def _marks(text: str) -> Iterator[tuple[int, str]]:
    """Marks outside strings, with their places, up to a string that has no end."""
    found = _MARKS.search(text)
    while found:
        start, end = found.span()
        yield start, found[0]
        if found[0] in _ENDS:
            after = _end_of_string(text, end, found[0])
            if after is None:
                return  # the parser will complain of it
            end = after
        found = _MARKS.search(text, end)


def _end_of_string(text: str, start: int, quotes: str) -> int | None:
    """Where what begins with `quotes` is over; None where it is not on its line, or never."""
    for found in _ENDS[quotes].finditer(text, start):
        if found[0] == "\n":
            return None
        if not found[0].startswith("\\"):
            return found.end()
    return None


def _check_marks(text: str, where: str) -> None:
    """Refuse TOML that nests too deeply or is too much, as far as the parser will get."""
    dots = depth = keys = 0
    for count, (start, mark) in enumerate(_marks(text)):
        if mark == ".":
            dots += 1
        elif mark[0].isalnum() or mark[0] in "_-":
            word = cut_short(mark)
            raise InputError(f"{where}: {word}: over {_LONGEST_WORD} characters in a key or number")
        elif mark[0] not in "\"'#":  # a part of a key may be quoted
            dots = 0
            depth += (mark in "[{") - (mark in "]}")
            keys += mark == "=" or (mark == "[" and depth == 1)
        if dots < MOST_PARTS >= depth and keys <= _MOST_KEYS and count < _MOST_MARKS:
            continue
        line = f"{where}: line {1 + text.count(chr(10), 0, start)}"
        if count >= _MOST_MARKS:
            raise InputError(f"{line}: over {_MOST_MARKS} points, commas, lines and brackets")
        if keys > _MOST_KEYS:
            raise InputError(f"{line}: over {_MOST_KEYS} keys, tables and lists")
        raise InputError(
            f"{line}: nested too deeply; at most {MOST_PARTS} parts of a key, tables or lists "
            "one inside the other are allowed"
        )


def _check_value(value: object, where: str, depth: int) -> None:
    if depth > MOST_PARTS:
        raise InputError(f"{where}: tables and lists nested over {MOST_PARTS} deep")
    if isinstance(value, dict):
        for key, inner in value.items():
            _check_value(inner, f"{where}.{cut_short(key)}", depth + 1)
    elif isinstance(value, list):
        for inner in value:
            _check_value(inner, where, depth + 1)
    elif isinstance(value, int) and not -(2**63) <= value < 2**63:
        raise InputError(f"{where}: a whole number of over 64 bits")


def _size(count: int) -> str:
    unit, name = next(one for one in _UNITS if count >= one[0])
    return f"{count / unit:g} {name}"
