"""Take the content out of an HDF5 file that may be damaged or made to harm.

Nothing is read before its name, kind, type and size are found to be those of the layout. So no
link leads out of the file, no filter is loaded, no pickle or reference is followed, and no array is
larger than what the stored bytes can hold.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from typing import TYPE_CHECKING, Any, BinaryIO, NamedTuple

import numpy as np

from ..errors import FileFormatError
from .schema import Group, Layout, Variable, number_type

if TYPE_CHECKING:
    import h5py

# Deflate cannot shrink more than 1032 to 1 (RFC 1951: 258 bytes from two bits), and some room.
_MOST_COMPRESSED = 1100
_SLAB_BYTES = 1 << 24
# What HDF5 itself attaches to datasets with named dimensions.
_MACHINERY = frozenset({"CLASS", "NAME", "DIMENSION_LIST", "REFERENCE_LIST"})


class Piece(NamedTuple):
    """A part of the content of a file: what it is, fit for JSON, and its numbers as bytes."""

    head: dict[str, Any]
    numbers: Iterator[bytes] = iter(())


class Damage(Exception):
    """What is wrong with a file, for one line of text."""


def load(stream: BinaryIO, layouts: Iterable[Layout]) -> Iterator[Piece]:
    """Take everything a layout names out of an HDF5 file, piece by piece.

    Parameters
    ----------
    stream : binary file
        The file. It is read without HDF5's own locks: files are only ever replaced whole, locks
        fail on some network disks, and the file may be open in xarray in this very process.
    layouts : iterable of Layout
        Kinds of files that are known.

    Yields
    ------
    Piece
        The attributes of the file, then each group, then each of its variables.

    Raises
    ------
    FileFormatError
        If the file is of another kind or a newer layout; says so without a path.
    Damage
        If anything differs from the layout. HDF5's own complaints come through as they are.
    """
    import h5py

    with h5py.File(stream, "r") as file:
        chosen = _layout_of(file, layouts)
        attributes = _attributes(file, chosen.attributes, "")
        yield Piece({"attributes": attributes})
        chosen = _own_layout(chosen, attributes)
        known = {one.name: one for one in (*chosen.required, *chosen.optional)}
        required = [one.name for one in chosen.required]
        for name in _members(file, "", known, required):
            yield from _load_group(file, known[name])


def _layout_of(file: h5py.File, layouts: Iterable[Layout]) -> Layout:
    """Refuse what is not ours or too new, before anything else is looked at."""
    name = _attribute(file, "layout", "")
    chosen = next((one for one in layouts if one.name == name), None)
    if chosen is None:
        raise FileFormatError("HDF5, but not a file of levelnet")
    found = _attribute(file, "layout_version", "")
    if not isinstance(found, int) or found < 1:
        raise Damage(f"layout_version = {found!r} is no version")
    if found > chosen.version:
        raise FileFormatError(
            f"layout version {found} is newer than {chosen.version}, the newest that this levelnet "
            "reads; update levelnet"
        )
    return chosen


def _own_layout(chosen: Layout, attributes: dict[str, Any]) -> Layout:
    """The layout of this very file, where it depends on attributes."""
    if chosen.by_attributes is None:
        return chosen
    try:
        return chosen.by_attributes(attributes)
    except ValueError as error:
        raise Damage(str(error)) from None


def _load_group(file: h5py.File, group: Group) -> Iterator[Piece]:
    import h5py

    where = group.name
    # By the low level, since a link of a wrong kind must not be followed.
    handle = h5py.Group(h5py.h5g.open(file.id, where.encode()))
    given = _attributes(handle, group.attributes, where)
    yield Piece({"group": where, "attributes": _checked(given, group, where)})
    names = [one.name for one in group.variables]
    _members(handle, where, names, names)
    scales: dict[str, h5py.Dataset] = {}
    lengths: dict[str, int] = {}
    for one in sorted(group.variables, key=lambda variable: not variable.is_coordinate):
        path = f"{where}/{one.name}"
        dataset = h5py.Dataset(h5py.h5d.open(handle.id, one.name.encode()))
        _check_shape(dataset, one, path, lengths)
        _check_storage(dataset, path, _file_size(file))
        scales[one.name] = dataset
        _check_dimensions(dataset, one, path, scales)
        given = _attributes(dataset, one.attributes, path, _MACHINERY)
        head: dict[str, Any] = {"variable": path, "dimensions": one.dimensions}
        head["attributes"] = _checked(given, one, path)
        if one.kind == "text":
            yield Piece(head | {"texts": _text(dataset, path, file)})
        else:
            head |= {"type": dataset.dtype.str, "shape": dataset.shape}
            yield Piece(head, _numbers(dataset))


def _checked(given: dict[str, Any], wanted: Group | Variable, where: str) -> dict[str, str]:
    for name, value in wanted.attributes.items():
        if given[name] != value:
            raise Damage(f'attribute {name} of {where} is not "{value}"')
    return given


def _members(
    group: h5py.Group, where: str, known: Iterable[str], required: Iterable[str]
) -> list[str]:
    """Names of the members of a group, after a check that each is known and stands in the file."""
    import h5py

    known = list(known)
    if len(group) > len(known):
        raise Damage(f"{where or 'the file'} has more members than the layout names")
    found = list(group)
    for name in found:
        if name not in known:
            raise Damage(f"{where}/{name} is not in the layout")
        if not isinstance(group.get(name, getlink=True), h5py.HardLink):
            raise Damage(f"{where}/{name} is a link to elsewhere")
    for name in required:
        if name not in found:
            raise Damage(f"{where}/{name} is missing")
    return [name for name in known if name in found]


def _attributes(
    holder: Any, wanted: Iterable[str], where: str, ignored: frozenset[str] = frozenset()
) -> dict[str, Any]:
    wanted = set(wanted)
    if len(holder.attrs) > len(wanted) + len(_MACHINERY):
        raise Damage(f"{where or 'the file'} has more attributes than the layout names")
    found = set(holder.attrs) - ignored
    if found != wanted:
        names = ", ".join(sorted(found ^ wanted))
        raise Damage(f"attributes of {where or 'the file'}: missing or unknown: {names}")
    return {name: _attribute(holder, name, where) for name in sorted(wanted)}


def _attribute(holder: Any, name: str, where: str) -> str | int | None:
    """Read one attribute: text or a whole number; None where it is missing."""
    import h5py

    if name not in holder.attrs:
        return None
    identifier = holder.attrs.get_id(name)
    text = h5py.check_string_dtype(identifier.dtype)
    plain = identifier.shape == () and (
        (text is not None and text.length is None) or identifier.dtype == np.dtype("<i8")
    )
    if not plain:
        raise Damage(f"attribute {name} of {where or 'the file'} is neither text nor integer")
    value = holder.attrs[name]
    return value if isinstance(value, str) else int(value)


def _check_shape(
    dataset: h5py.Dataset, variable: Variable, path: str, lengths: dict[str, int]
) -> None:
    """Hold type and shape against the layout; a coordinate sets the length of its dimension."""
    import h5py

    if variable.kind == "text":
        text = h5py.check_string_dtype(dataset.dtype)
        right_type = text is not None and text.length is None
    else:
        right_type = dataset.dtype == number_type(variable.kind)
    if not right_type:
        raise Damage(f"{path} holds {dataset.dtype}, expected {variable.kind}")
    shape = dataset.shape
    if variable.is_coordinate and shape is not None and len(shape) == 1:
        lengths[variable.name] = shape[0]
    expected = tuple(lengths.get(one, -1) for one in variable.dimensions)
    if shape != expected:
        raise Damage(f"{path} has shape {shape}, expected {expected}")


def _check_storage(dataset: h5py.Dataset, path: str, file_size: int) -> None:
    """Refuse data that stand elsewhere, need foreign code, or cannot be as large as they say."""
    import h5py

    plan = dataset.id.get_create_plist()
    kinds = [plan.get_filter(i)[0] for i in range(plan.get_nfilters())]
    usual = {h5py.h5z.FILTER_DEFLATE, h5py.h5z.FILTER_SHUFFLE, h5py.h5z.FILTER_FLETCHER32}
    if plan.get_layout() == h5py.h5d.VIRTUAL or plan.get_external_count():
        raise Damage(f"{path} takes its data from another file")
    if not usual.issuperset(kinds) or len(set(kinds)) < len(kinds):
        raise Damage(f"{path} uses a filter that levelnet does not")
    stored = min(dataset.id.get_storage_size(), file_size)
    most = stored * (_MOST_COMPRESSED if h5py.h5z.FILTER_DEFLATE in kinds else 1)
    declared = dataset.size * dataset.dtype.itemsize
    chunk = int(np.prod(dataset.chunks or (0,), dtype=object)) * dataset.dtype.itemsize
    if max(declared, chunk) > most:
        raise Damage(f"{path} declares {declared} bytes, more than its {stored} stored can hold")


def _check_dimensions(
    dataset: h5py.Dataset, variable: Variable, path: str, scales: dict[str, h5py.Dataset]
) -> None:
    from h5py import h5ds

    if variable.is_coordinate:
        if not h5ds.is_scale(dataset.id) or h5ds.get_scale_name(dataset.id) != path_name(path):
            raise Damage(f"{path} does not name its dimension")
        return
    for axis, dimension in enumerate(variable.dimensions):
        if not h5ds.is_attached(dataset.id, scales[dimension].id, axis):
            raise Damage(f"{path}: dimension {axis} is not named {dimension}")


def path_name(path: str) -> bytes:
    """Last part of a path inside a file, as HDF5 has names."""
    return path.rpartition("/")[2].encode()


def _numbers(dataset: h5py.Dataset) -> Iterator[bytes]:
    """Read the numbers in order, not much more than `_SLAB_BYTES` at a time."""
    if dataset.size == 0:
        return
    if not dataset.shape:
        yield dataset[()].tobytes()
        return
    per_row = dataset.size // dataset.shape[0] * dataset.dtype.itemsize
    chunk = dataset.chunks[0] if dataset.chunks else 1
    rows = max(1, _SLAB_BYTES // (per_row * chunk)) * chunk  # whole chunks: each is read once
    for start in range(0, dataset.shape[0], rows):
        yield dataset[start : start + rows].tobytes()


def _text(dataset: h5py.Dataset, path: str, file: h5py.File) -> tuple[str, ...]:
    # One by one, because many entries may point at one long text.
    left, texts = _file_size(file), []
    for index in range(dataset.shape[0]):
        data = dataset[index]
        left -= len(data)
        if left < 0:
            raise Damage(f"{path} holds more text than the file is long")
        texts.append(data.decode())
    return tuple(texts)


def _file_size(file: h5py.File) -> int:
    return int(file.id.get_filesize())
