"""Write a result as HDF5: whole or not at all, the same bytes for the same result."""

from __future__ import annotations

import math
import os
from collections.abc import Callable
from operator import attrgetter
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from ..errors import InputError, Outcome
from ..history.result import History, SpeciesPopulations
from ..history.setup import Setup
from . import layout
from .digest import content_digest, seal
from .escape_layout import ESCAPE_LAYOUT
from .level_layout import LEVEL_LAYOUT
from .provenance import provenance
from .schema import Content, Group, Layout, Stored, Variable, number_type
from .sweep_layout import sealed_content
from .table_layout import DISTILLED_LAYOUT, TABLE_LAYOUT
from .weighing_layout import WEIGHING_LAYOUT
from .whole_file import whole_file

if TYPE_CHECKING:
    import h5py

    from ..distilled.fast import FastHistory
    from ..distilled.table import EffectiveTable
    from ..studies.escape_records import EscapeStudy
    from ..studies.level_records import LevelStudy
    from ..studies.sweep_record import Sweep
    from ..studies.weighing import Weighing

    Storable = History | EffectiveTable | Weighing | LevelStudy | EscapeStudy | Sweep
    Record = Storable | FastHistory

# Chunks of at most 64 redshifts x 2048 levels (1 MiB), the size of HDF5's chunk cache.
_CHUNK = (64, 2048)
_CHUNK_ONE_DIMENSION = 16384


def write(result: Storable, path: str | Path, force: bool = False) -> None:
    """Write a history, a table of effective rates, a weighing, a study or a sweep as HDF5.

    Parameters
    ----------
    result : History, EffectiveTable, Weighing, LevelStudy, EscapeStudy or Sweep
        What to store, in the layout of :mod:`levelnet.store.layout`, or of the file beside it that
        is named after the record.
    path : str or Path
        The file; it appears whole or not at all.
    force : bool
        True allows an existing file to be replaced.

    Raises
    ------
    InputError
        If the file exists and `force` is False, or cannot be written.

    Notes
    -----
    No time is stored: the same result gives the same bytes with the same versions of the libraries.
    The file opens with ``xarray.open_dataset(path, engine="h5netcdf", group="history")``.
    """
    content = content_of(result)
    with whole_file(path, force) as raw:
        save(content, raw)
        seal(raw)


def write_distilled(
    history: FastHistory, setup: Setup, path: str | Path, force: bool = False
) -> None:
    """Write a history made from a table; as :func:`write`.

    Parameters
    ----------
    history : FastHistory
        What to store; its derivatives are left out.
    setup : Setup
        The setup of the table, with the cosmology, lines and constants of this history.
    path : str or Path
        The file; it appears whole or not at all.
    force : bool
        True allows an existing file to be replaced.
    """
    content = _content(DISTILLED_LAYOUT, history, setup)
    content.attributes["digest"] = content_digest(content)
    with whole_file(path, force) as raw:
        save(content, raw)
        seal(raw)


def content_of(result: Storable) -> Content:
    """Everything a file says about a record, with the digest over all of it."""
    from ..distilled.table import EffectiveTable
    from ..studies.escape_records import EscapeStudy
    from ..studies.level_records import LevelStudy
    from ..studies.sweep_record import Sweep
    from ..studies.weighing import Weighing

    if isinstance(result, Sweep):
        return sealed_content(result)
    if isinstance(result, History):
        content = _history_content(result)
    elif isinstance(result, EffectiveTable):
        content = _content(TABLE_LAYOUT, result, result.setup)
    elif isinstance(result, Weighing):
        content = _content(WEIGHING_LAYOUT, result, result.setup)
    elif isinstance(result, LevelStudy):
        content = _content(LEVEL_LAYOUT, result, result.setup)
    elif isinstance(result, EscapeStudy):
        content = _content(ESCAPE_LAYOUT, result, result.setup)
    else:
        raise InputError(
            f"write: a {type(result).__name__} cannot be stored; a History, an EffectiveTable, "
            "a Weighing, a LevelStudy, an EscapeStudy or a Sweep can"
        )
    content.attributes["digest"] = content_digest(content)
    return content


def _history_content(history: History) -> Content:
    content = Content(attributes=_root_attributes(layout.HISTORY_LAYOUT, history.setup))
    _add_outcome(content, history.outcome)
    species = {one.name: one for one in history.species}
    unknown = sorted(set(species) - set(layout.SPECIES_GROUPS))
    if unknown or len(species) < len(history.species):
        allowed = ", ".join(layout.SPECIES_GROUPS)
        raise InputError(f"species {unknown or 'given twice'}: allowed, each once: {allowed}")
    parts = history.field is not None, history.helium is not None
    for group in layout.groups_of(tuple(species), *parts):
        _add_group(content, group, history, species.get(group.species))
    return content


def _content(kind: Layout, record: Record, setup: Setup) -> Content:
    """Content of a file whose groups are fixed, but for parts that the record may lack."""
    content = Content(attributes=_root_attributes(kind, setup))
    outcome = getattr(record, "outcome", None)
    if outcome is not None:
        _add_outcome(content, outcome)
    optional = [group for group in kind.optional if _holds(record, group)]
    for group in (*kind.required, *optional):
        _add_group(content, group, record, None)
    return content


def _holds(record: Record, group: Group) -> bool:
    """Whether the record has what an optional group is made of; it may lie in another part."""
    part: Any = record
    for name in group.part:
        part = getattr(part, name)
        if part is None:
            return False
    return True


def _add_outcome(content: Content, outcome: Outcome) -> None:
    content.attributes["outcome"] = outcome.name
    content.attributes["outcome_text"] = outcome.value


def _root_attributes(kind: Layout, setup: Setup) -> dict[str, str | int]:
    return {
        "layout": kind.name,
        "layout_version": kind.version,
        "setup": setup.to_toml(),
        "setup_digest": setup.digest,
        **provenance(),
    }


def _add_group(
    content: Content,
    group: Group,
    record: Record,
    species: SpeciesPopulations | None,
) -> None:
    content.groups[group.name] = group.attributes
    lengths: dict[str, int] = {}
    values = {}
    for variable in group.variables:
        if variable.field:
            values[variable.name] = _values(variable, record, species)
            lengths |= zip(variable.dimensions, np.shape(values[variable.name]), strict=True)
    for variable in group.variables:
        # A variable that is no field counts along its dimension.
        counted = np.arange(lengths.get(variable.name, 0), dtype=number_type("int64"))
        stored = values.get(variable.name, counted)
        content.variables[f"{group.name}/{variable.name}"] = Stored(
            variable.dimensions, variable.attributes, stored
        )


def _values(
    variable: Variable, record: Record, species: SpeciesPopulations | None
) -> tuple[str, ...] | NDArray[Any]:
    """Take one variable out of the record."""
    start, _, rest = variable.field.partition(".")
    values = attrgetter(rest)(species) if start == "species" else attrgetter(variable.field)(record)
    if variable.kind == "text":
        return tuple(values)
    return np.asarray(values, dtype=number_type(variable.kind))


class _Sink:
    """The file as HDF5 sees it: after a failure it takes everything and keeps nothing.

    HDF5 that cannot write cannot close its file either; it tries again when Python ends, and then
    crashes. So it is never told: the first error (an interrupt included) is kept for :func:`save`
    to raise. The position is kept here, since seeking in a buffered file writes.
    """

    def __init__(self, raw: BinaryIO) -> None:
        self._raw = raw
        self._position = 0
        self._length = 0
        self.error: BaseException | None = None

    def _attempt(self, action: Callable[..., object], *arguments: object) -> object:
        if self.error is None:
            try:
                self._raw.seek(self._position)
                return action(*arguments)
            except BaseException as error:
                self.error = error
        return None

    def write(self, data: Any) -> int:
        self._attempt(self._raw.write, data)
        self._position += len(data)
        self._length = max(self._length, self._position)
        return len(data)

    def read(self, size: int) -> object:
        data = self._attempt(self._raw.read, size)
        self._position += size
        return data if isinstance(data, bytes) and len(data) == size else bytes(size)

    def truncate(self, size: int) -> int:
        self._attempt(self._raw.truncate, size)
        self._length = size
        return size

    def flush(self) -> None:
        self._attempt(self._raw.flush)

    def seek(self, offset: int, whence: int = os.SEEK_SET) -> int:
        start = {os.SEEK_SET: 0, os.SEEK_CUR: self._position, os.SEEK_END: self._length}[whence]
        self._position = start + offset
        return self._position

    def tell(self) -> int:
        return self._position

    def check(self) -> None:
        """Raise what went wrong, if anything."""
        if self.error is not None:
            raise self.error


def save(content: Content, raw: BinaryIO) -> None:
    """Encode `content` as HDF5 into an empty binary file, open for reading and writing."""
    import h5py

    sink = _Sink(raw)
    # The oldest structures that hold the data, so that older readers can open the file.
    with h5py.File(sink, "w", libver=("earliest", "v110")) as file:
        for name, value in content.attributes.items():
            file.attrs[name] = np.int64(value) if isinstance(value, int) else value
        for name, attributes in content.groups.items():
            group = file.create_group(name)
            group.attrs.update(attributes)
        for path, stored in content.variables.items():
            _save_variable(file, path, stored)
            sink.check()
        for path, stored in content.variables.items():
            _attach_dimensions(file, path, stored)
    sink.check()


def _save_variable(file: h5py.File, path: str, stored: Stored) -> None:
    import h5py

    if isinstance(stored.values, tuple):
        kind = h5py.string_dtype()
        data = np.array(stored.values, dtype=object)
        dataset = file.create_dataset(path, data=data, dtype=kind, track_times=False)
    else:
        options = _storage(stored.shape)
        dataset = file.create_dataset(path, data=stored.values, track_times=False, **options)
    dataset.attrs.update(stored.attributes)


def _storage(shape: tuple[int, ...]) -> dict[str, Any]:
    # A single number, or no number at all, cannot be cut into chunks.
    if not shape or 0 in shape:
        return {}
    limits: tuple[int, ...] = (_CHUNK_ONE_DIMENSION,) if len(shape) == 1 else _CHUNK
    if len(shape) > len(_CHUNK):  # a series or patch per cell stays in one piece
        limits = (max(1, math.prod(_CHUNK) // math.prod(shape[1:])), *shape[1:])
    chunks = tuple(min(length, limit) for length, limit in zip(shape, limits, strict=True))
    # The filters that every netCDF and HDF5 reader has.
    return {"chunks": chunks, "compression": "gzip", "shuffle": True, "fletcher32": True}


def _attach_dimensions(file: h5py.File, path: str, stored: Stored) -> None:
    group, _, name = path.rpartition("/")
    if stored.dimensions == (name,):
        if not file[path].is_scale:
            file[path].make_scale(name)
        return
    for axis, dimension in enumerate(stored.dimensions):
        scale = file[f"{group}/{dimension}"]
        if not scale.is_scale:
            scale.make_scale(dimension)
        file[path].dims[axis].attach_scale(scale)
