"""Read a result from HDF5: checked against layout and digest, then made into records again."""

from __future__ import annotations

import os
import stat
from pathlib import Path
from typing import Any

from ..atomic.levels import LevelSet
from ..errors import FileFormatError, InputError, LevelnetError, Outcome
from ..history.result import (
    Channels,
    Diagnostics,
    History,
    LineFigures,
    Milestones,
    SpeciesPopulations,
)
from ..history.setup import parse_setup
from . import layout
from .digest import content_digest, seal_fault
from .hdf5 import Damage, load
from .layout import Content, Group

_HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"


def read(path: str | Path) -> History:
    """Read a history that :func:`levelnet.store.write` wrote.

    Parameters
    ----------
    path : str or Path
        The file.

    Returns
    -------
    History
        Equal to what was written, to the bit.

    Raises
    ------
    FileFormatError
        If the file is missing, foreign, damaged or of a newer layout; one line that names it.
    """
    content = read_content(path)
    try:
        return history_of(content)
    except FileFormatError as error:
        raise FileFormatError(f"{path}: {error}") from None
    except (InputError, ValueError, TypeError) as error:
        # The digest was right, so the file is as written: by hand, or by another version.
        raise FileFormatError(f"{path}: does not make a history: {_line(error)}") from error


def read_attributes(path: str | Path) -> dict[str, str | int]:
    """Versions, setup text, table checksums and outcome of a file, after all checks of `read`."""
    return read_content(path).attributes


def read_content(path: str | Path) -> Content:
    """Read all that a file says and hold it against layout and digest."""
    place = Path(path)
    _check_bytes(place)
    try:
        content = load(place)
    except LevelnetError:
        raise
    except Damage as error:
        raise FileFormatError(f"{path}: damaged: {_line(error)}") from None
    except MemoryError:
        raise FileFormatError(f"{path}: larger than the memory of this machine") from None
    except Exception as error:
        # Over damaged bytes h5py raises nearly any kind of exception.
        raise FileFormatError(f"{path}: damaged: {_line(error)}") from error
    if content.attributes["digest"] != content_digest(content):
        raise FileFormatError(f"{path}: damaged: the content does not have the digest it states")
    return content


def _line(error: Exception) -> str:
    """Text of an error as one line; names in a damaged file can be long and hold any bytes."""
    text = " ".join(str(error).split()) or type(error).__name__
    return "".join(letter if letter.isprintable() else "?" for letter in text[:300])


def _check_bytes(path: Path) -> None:
    """Refuse what is no file, not HDF5 or damaged, without handing it to HDF5."""
    try:
        # Opening a pipe would wait for a writer, so the kind is asked first.
        if not stat.S_ISREG(os.stat(path).st_mode):
            raise FileFormatError(f"{path}: cannot be read: not a plain file")
        with open(path, "rb") as raw:
            is_hdf5 = raw.read(len(_HDF5_SIGNATURE)) == _HDF5_SIGNATURE
            fault = seal_fault(raw) if is_hdf5 else "not an HDF5 file"
    except (OSError, ValueError) as error:
        reason = (error.strerror if isinstance(error, OSError) else None) or str(error)
        raise FileFormatError(f"{path}: cannot be read: {reason}") from None
    if fault:
        raise FileFormatError(f"{path}: {fault}")


def history_of(content: Content) -> History:
    """Make the records that :func:`levelnet.store.write.content_of` took apart."""
    species = tuple(given["species"] for given in content.groups.values() if "species" in given)
    parts: dict[str, Any] = {}
    populations = []
    for group in layout.groups_of(species):
        fields = _fields(content, group)
        own = fields.pop("species", None)
        if own is not None:
            levels = LevelSet(**own.pop("levels"))
            populations.append(SpeciesPopulations(name=group.species, levels=levels, **own))
        parts |= fields
    outcome = str(content.attributes["outcome"])
    if outcome not in Outcome.__members__:
        raise FileFormatError(f'outcome "{outcome}" is not known to this levelnet')
    return History(
        setup=parse_setup(str(content.attributes["setup"]), "stored setup"),
        outcome=Outcome[outcome],
        species=tuple(populations),
        channels=Channels(**parts.pop("channels")),
        lines=LineFigures(**parts.pop("lines")),
        milestones=Milestones(**parts.pop("milestones")),
        diagnostics=Diagnostics(**parts.pop("diagnostics")),
        **parts,
    )


def _fields(content: Content, group: Group) -> dict[str, Any]:
    """Collect the fields of the records in one group: {"channels": {"names": ..., ...}, ...}."""
    fields: dict[str, Any] = {}
    redshift: Any = content.variables[f"{layout.HISTORY.name}/redshift"].values
    for variable in group.variables:
        stored: Any = content.variables[f"{group.name}/{variable.name}"].values
        if variable is layout.REDSHIFT and stored.tobytes() != redshift.tobytes():
            raise FileFormatError(f"redshift of group {group.name} differs from that of history")
        *outer, name = variable.field.split(".")
        inner = fields
        for key in outer:
            inner = inner.setdefault(key, {})
        inner[name] = stored if not hasattr(stored, "ndim") or stored.ndim else stored.item()
    fields.pop("", None)  # the position of a level is no field
    return fields
