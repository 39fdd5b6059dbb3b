"""Records as pieces: results of long runs, kept so that a study that was killed goes on.

A record is taken apart by its own type hints: arrays, texts, outcomes, and records of these.
"""

from __future__ import annotations

import types
import typing
from collections.abc import Callable, Mapping
from enum import Enum
from typing import Any, TypeVar

import numpy as np

from ..arrays import FloatArray
from ..pieces import Pieces, array_text, text_array

Record = TypeVar("Record")


def recalled(
    pieces: Pieces | None, key: str, kind: type[Record], compute: Callable[[], Record]
) -> Record:
    """Give the record kept under `key`, or compute and keep it; the same bits either way.

    Parameters
    ----------
    pieces : Pieces or None
        Where records are kept; None: nowhere.
    key : str
        Content name of the record; see :func:`levelnet.history.level_pieces.setup_key`.
    kind : type
        Its type: a named tuple or dataclass of arrays, texts, tuples of texts, outcomes, and such
        records, any of them optional.
    compute : callable
        Makes it.
    """
    if pieces is None:
        return compute()
    piece = pieces.get(key)
    if piece is not None:
        try:
            found: Record = _whole(kind, piece, "")
            return found
        except (KeyError, ValueError, TypeError):
            pass  # of another kind: computed again, and replaced
    made = compute()
    pieces.put(key, dict(_parts(kind, made, "")))
    return made


def _parts(kind: Any, value: Any, path: str) -> typing.Iterator[tuple[str, FloatArray]]:
    """Arrays of a value of a kind, by their path in it."""
    if value is None:
        return
    if isinstance(value, np.ndarray):
        yield path, value
    elif isinstance(value, str):
        yield path, text_array(value)
    elif isinstance(value, Enum):
        yield path, text_array(value.name)
    elif typing.get_origin(kind) is tuple:
        yield path, text_array("\0".join(value))
        yield f"{path}#", np.array([float(len(value))])
    else:
        for name, inner in _fields(kind).items():
            yield from _parts(inner, getattr(value, name), f"{path}/{name}")


def _whole(kind: Any, piece: Mapping[str, FloatArray], path: str) -> Any:
    """Undo :func:`_parts`; KeyError, ValueError or TypeError for another record."""
    if typing.get_origin(kind) in {typing.Union, types.UnionType}:
        kind = next(one for one in typing.get_args(kind) if one is not type(None))
        if not any(name == path or name.startswith((f"{path}/", f"{path}#")) for name in piece):
            return None
    if typing.get_origin(kind) is np.ndarray:
        return piece[path]
    if typing.get_origin(kind) is tuple:
        texts = array_text(piece[path]).split("\0")
        return tuple(texts) if piece[f"{path}#"][0] else ()
    if kind is str:
        return array_text(piece[path])
    if isinstance(kind, type) and issubclass(kind, Enum):
        return kind[array_text(piece[path])]
    inner = _fields(kind)
    return kind(**{name: _whole(one, piece, f"{path}/{name}") for name, one in inner.items()})


def _fields(kind: Any) -> dict[str, Any]:
    """Type of each field of a record; an optional one as the record itself."""
    for one in typing.get_args(kind):
        if typing.get_origin(kind) in {typing.Union, types.UnionType} and one is not type(None):
            return _fields(one)
    return typing.get_type_hints(kind)
