"""Read a file of levelnet: checked against layout and digest, then made into records again."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..atomic.helium_levels import HeliumLevels
from ..atomic.levels import LevelSet
from ..errors import FileFormatError, InputError
from ..history.helium_record import HeliumFigures, HeliumLineFigures
from ..history.line_figures import LineFigures
from ..history.result import (
    Channels,
    Diagnostics,
    History,
    Milestones,
    RadiationField,
    SpeciesPopulations,
)
from ..texts import opened
from . import layout
from .apart import identity, load_apart
from .digest import content_digest, seal_fault
from .escape_layout import ESCAPE_LAYOUT
from .hdf5 import Damage
from .level_layout import LEVEL_LAYOUT
from .parts import (
    all_fields,
    check_positions,
    check_together,
    fields_of,
    merge,
    outcome_of,
    setup_of,
)
from .schema import Content, Layout
from .study_makers import escape_study_of, level_study_of, weighing_of
from .sweep_layout import SWEEP_LAYOUT, sweep_of
from .table_layout import DISTILLED_LAYOUT, TABLE_LAYOUT
from .weighing_layout import WEIGHING_LAYOUT

if TYPE_CHECKING:
    from ..distilled.fast import FastHistory
    from ..distilled.table import EffectiveTable
    from ..studies.escape_records import EscapeStudy
    from ..studies.level_records import LevelStudy
    from ..studies.sweep_record import Sweep
    from ..studies.weighing import Weighing

    Record = History | EffectiveTable | FastHistory | Weighing | LevelStudy | EscapeStudy | Sweep

_HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"


def read(path: str | Path) -> Record:
    """Read a history, a table of effective rates, a history made from one, a study, or a sweep.

    Parameters
    ----------
    path : str or Path
        A file that :func:`levelnet.write` or ``levelnet history`` wrote.

    Returns
    -------
    History, EffectiveTable, FastHistory, Weighing, LevelStudy, EscapeStudy or Sweep
        Equal to what was written, to the bit.

    Raises
    ------
    FileFormatError
        If the file is missing, foreign, damaged or of a newer layout; one line that names it.
    """
    return _record(path, read_content(path))


def read_with_attributes(path: str | Path) -> tuple[Record, dict[str, str | int]]:
    """Read a record with what its file says of itself, in one pass; as :func:`read`."""
    content = read_content(path)
    return _record(path, content), content.attributes


def _record(path: str | Path, content: Content) -> Record:
    kind, make = _MAKERS[str(content.attributes["layout"])]
    try:
        return make(content)
    except FileFormatError as error:
        raise FileFormatError(f"{path}: {error}") from None
    except (InputError, ValueError, TypeError) as error:
        # The digest was right, so the file is as written: by hand, or by another version.
        raise FileFormatError(f"{path}: does not make {kind.record}: {_line(error)}") from error


def read_table(path: str | Path) -> EffectiveTable:
    """Read a table; FileFormatError also where the file holds something else of levelnet."""
    content = read_content(path)
    kind = _MAKERS[str(content.attributes["layout"])][0]
    if kind is not TABLE_LAYOUT:
        raise FileFormatError(f"{path}: holds {kind.record}, not {TABLE_LAYOUT.record}")
    table: Any = _record(path, content)
    made: EffectiveTable = table
    return made


def read_attributes(path: str | Path) -> dict[str, str | int]:
    """Versions, setup text, table checksums and outcome of a file, after all checks of `read`."""
    return read_content(path).attributes


def read_content(path: str | Path) -> Content:
    """Read all that a file says and hold it against seal, layout and digest."""
    place = Path(path)
    checked = _check_bytes(place)
    try:
        content = load_apart(place, checked)
    except Damage as error:
        raise FileFormatError(f"{path}: damaged: {_line(error)}") from None
    except FileFormatError as error:
        raise FileFormatError(f"{path}: {_line(error)}") from None
    except MemoryError:
        raise FileFormatError(f"{path}: larger than the memory of this machine") from None
    if content.attributes["digest"] != content_digest(content):
        raise FileFormatError(f"{path}: damaged: the content does not have the digest it states")
    return content


def _line(error: Exception) -> str:
    """Text of an error as one line; names in a damaged file can be long and hold any bytes."""
    text = " ".join(str(error).split()) or type(error).__name__
    return "".join(letter if letter.isprintable() else "?" for letter in text[:300])


def _check_bytes(path: Path) -> list[int]:
    """Refuse what is no file, not HDF5 or damaged, without handing it to HDF5; return which."""
    try:
        with opened(path) as raw:
            is_hdf5 = raw.read(len(_HDF5_SIGNATURE)) == _HDF5_SIGNATURE
            fault = seal_fault(raw) if is_hdf5 else "not an HDF5 file"
            checked = identity(os.fstat(raw.fileno()))
    except InputError as error:
        raise FileFormatError(str(error)) from None
    except OSError as error:
        raise FileFormatError(f"{path}: cannot be read: {error.strerror or error}") from None
    if fault:
        raise FileFormatError(f"{path}: {fault}")
    return checked


def history_of(content: Content) -> History:
    """Make the records that :func:`levelnet.store.write.content_of` took apart."""
    species = tuple(given["species"] for given in content.groups.values() if "species" in given)
    parts: dict[str, Any] = {}
    populations = []
    given = (part.name in content.groups for part in (layout.FIELD, layout.HELIUM))
    for group in layout.groups_of(species, *given):
        fields = fields_of(content, group)
        own = fields.pop("species", None)
        if own is not None:
            levels = _levels_of(group.species, own.pop("levels"))
            populations.append(SpeciesPopulations(name=group.species, levels=levels, **own))
        merge(parts, fields)
    field, helium = parts.pop("field", None), parts.pop("helium", None)
    return History(
        setup=setup_of(content),
        outcome=outcome_of(content),
        species=tuple(populations),
        channels=Channels(**parts.pop("channels")),
        lines=LineFigures(**parts.pop("lines")),
        milestones=Milestones(**parts.pop("milestones")),
        diagnostics=Diagnostics(**parts.pop("diagnostics")),
        field=None if field is None else RadiationField(**field),
        helium=None if helium is None else _helium_of(helium),
        **parts,
    )


def _helium_of(given: dict[str, Any]) -> HeliumFigures:
    return HeliumFigures(lines=HeliumLineFigures(**given.pop("lines")), **given)


def _levels_of(species: str, given: dict[str, Any]) -> LevelSet | HeliumLevels:
    if species != "He I":
        return LevelSet(**given)
    return HeliumLevels(n_max=int(given["n"].max()), nuclear_charge=2, **given)


def distilled_of(content: Content) -> FastHistory:
    """Make the history that :func:`levelnet.store.write.write_distilled` took apart."""
    from ..distilled.fast import FastHelium, FastHistory
    from ..distilled.observables import Observables

    parts = all_fields(content, DISTILLED_LAYOUT)
    seen, field = parts.pop("observables", None), parts.pop("field", None)
    helium = parts.pop("helium", None)
    return FastHistory(
        outcome=outcome_of(content),
        observables=None if seen is None else Observables(**seen),
        field=None if field is None else RadiationField(**field),
        helium=None if helium is None else FastHelium(**helium),
        **parts,
    )


def table_of(content: Content) -> EffectiveTable:
    """Make the table that :func:`levelnet.store.write.content_of` took apart."""
    from ..distilled.certificate import Certificate
    from ..distilled.helium_escape import LineTable
    from ..distilled.stage import StageTable
    from ..distilled.table import EffectiveTable
    from ..network.reduced import KeptLevels

    parts = all_fields(content, TABLE_LAYOUT)
    kept = KeptLevels(**parts.pop("kept"))
    if parts["equilibrium"].shape[1] != len(kept):
        raise FileFormatError("levels: their number differs from that of the table")
    check_positions(parts, ("lower", "upper"), len(kept))
    certificate, lines = parts.pop("certificate", None), parts.pop("helium_lines", None)
    helium, ion = parts.pop("helium", None), parts.pop("helium_ion", None)
    _check_helium(helium, ion, lines)
    return EffectiveTable(
        setup=setup_of(content),
        kept=kept,
        certificate=None if certificate is None else Certificate(**certificate),
        helium=None if helium is None else StageTable(**helium),
        helium_ion=None if ion is None else StageTable(**ion),
        helium_lines=None if lines is None else LineTable(**lines),
        **parts,
    )


def _check_helium(
    helium: dict[str, Any] | None, ion: dict[str, Any] | None, lines: dict[str, Any] | None
) -> None:
    """Refuse parts of helium without the others, and places in them that are none."""
    check_together({"helium": helium, "helium_lines": lines}, ("helium", "helium_lines"), "helium")
    if helium is None or lines is None:
        if ion is not None:
            raise FileFormatError("helium: helium is missing")
        return
    for stage in (helium, ion):
        if stage is not None:
            check_positions(stage, ("lower", "upper"), len(stage["n"]))
    check_positions(lines, ("upper",), len(helium["n"]))
    if not 0 <= lines["decay"] < len(helium["n"]):
        raise FileFormatError("decay: names a level that is not in the file")
    if not (lines["lit_by"] < len(lines["names"])).all():
        raise FileFormatError("lit_by: names a line that is not in the file")
    if lines["absorbs"] and min(lines["escape"].shape[1:]) < 4:  # a cubic has four coefficients
        raise FileFormatError("escape: 4 coefficients at least are needed along each axis")


_MAKERS: dict[str, tuple[Layout, Callable[[Content], Record]]] = {
    layout.LAYOUT_NAME: (layout.HISTORY_LAYOUT, history_of),
    TABLE_LAYOUT.name: (TABLE_LAYOUT, table_of),
    DISTILLED_LAYOUT.name: (DISTILLED_LAYOUT, distilled_of),
    WEIGHING_LAYOUT.name: (WEIGHING_LAYOUT, weighing_of),
    LEVEL_LAYOUT.name: (LEVEL_LAYOUT, level_study_of),
    ESCAPE_LAYOUT.name: (ESCAPE_LAYOUT, escape_study_of),
    SWEEP_LAYOUT.name: (SWEEP_LAYOUT, sweep_of),
}
