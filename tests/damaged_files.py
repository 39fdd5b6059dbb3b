"""Ways to damage a file: of its bytes, of what HDF5 says, and of lines of text.

All of them work on whatever a file holds and know no names of it.
"""

from __future__ import annotations

import random
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from levelnet.store.digest import seal

SEAL_LENGTH = 82  # a line feed, "levelnet sha256 ", 64 digits, a line feed


def sealed_again(path: Path) -> None:
    """Give a file without seal the right one, as a hostile hand can."""
    with path.open("r+b") as raw:
        seal(raw)


# ---- bytes


def flips(data: bytearray, at: random.Random) -> None:
    for _ in range(at.choice((1, 1, 1, 2, 20))):
        data[at.randrange(len(data))] ^= 1 << at.randrange(8)


def flipped_in_use(data: bytearray, at: random.Random) -> None:
    """Hit a byte that is not zero, as most of the structure is."""
    places = [at.randrange(len(data)) for _ in range(50)]
    place = next((one for one in places if data[one]), places[0])
    data[place] ^= 1 << at.randrange(8)


def truncation(data: bytearray, at: random.Random) -> None:
    del data[at.randrange(len(data)) :]


def splice(data: bytearray, at: random.Random) -> None:
    """Move or copy a part to elsewhere."""
    start, length = at.randrange(len(data)), 1 + at.randrange(4096)
    part, to = data[start : start + length], at.randrange(len(data))
    if at.random() < 0.5:
        data[to : to + len(part)] = part
    else:
        data[to:to] = part


def hole(data: bytearray, at: random.Random) -> None:
    """Set a run to zero, or to ones, as a bad block of a disk gives."""
    start, length = at.randrange(len(data)), at.choice((8, 8, 512, 4096))
    length = min(length, len(data) - start)
    data[start : start + length] = bytes([at.choice((0, 0, 255))]) * length


def noise(data: bytearray, at: random.Random) -> None:
    start, length = at.randrange(len(data)), at.choice((1, 2, 4, 8))
    data[start : start + length] = at.randbytes(length)


def loss(data: bytearray, at: random.Random) -> None:
    start = at.randrange(len(data))
    del data[start : start + 1 + at.randrange(4096)]


BYTES: tuple[Callable[[bytearray, random.Random], None], ...] = (
    *(flips, flipped_in_use, flipped_in_use, truncation, splice, hole, hole, noise, noise, loss),
)


def damaged_bytes(whole: bytes, at: random.Random) -> bytes:
    """Return other bytes than `whole`, of any length."""
    data = bytearray(whole)
    while data == whole:
        at.choice(BYTES)(data, at)
        data = data or bytearray(b"\0")
    return bytes(data)


# ---- text

_ODD = (
    *("nan", "inf", "-inf", "1e999", "-0", "9" * 5000, "0x10", "1_000", "true", '""', '"""', "'"),
    *("[" * 3000, "{a={a=1}}", "a.b.c.d = 1", "[[x]]", "\ufeff", "\0", "\x1b[31m", "\u2028", "\r"),
    *(".".join("a" * 2000) + " = 1", f"[{'.'.join('a' * 2000)}]", "{a=" * 500, "0x" + "f" * 5000),
    *("../../etc/passwd", "/dev/zero", "file://x", "__import__('os')", "%s%n", "{0.__class__}"),
    *("2026-12-01", "1e-320", "1e308", "-1", "0", "\N{EM DASH}", "#", ",", "\n", '"\\uD800"'),
)


def damaged_text(whole: bytes, at: random.Random) -> bytes:
    """Damage text as text: other numbers, lines lost, doubled or exchanged; or as bytes."""
    if at.random() < 0.4:
        return damaged_bytes(whole, at)
    lines = whole.decode().split("\n")
    place = at.randrange(len(lines))
    way = at.randrange(6)
    if way == 0:
        del lines[place]
    elif way == 1:
        lines.insert(at.randrange(len(lines)), lines[place])
    elif way == 2:
        other = at.randrange(len(lines))
        lines[place], lines[other] = lines[other], lines[place]
    elif way == 3:
        lines[place] = lines[place].replace("=", at.choice(("==", "", "= =")))
    elif way == 4:
        mark = at.choice(("=", ",", ".", " "))
        head, sep, _ = lines[place].rpartition(mark)
        lines[place] = f"{head}{sep}{at.choice(_ODD)}"
    else:
        lines[place] += at.choice(_ODD)
    return "\n".join(lines).encode("utf-8", "surrogatepass")


# ---- HDF5, changed by its own library


def _named(file: h5py.File, kind: type) -> list[str]:
    found: list[str] = []
    file.visititems(lambda name, one: found.append(name) if isinstance(one, kind) else None)
    return found


def _groups(file: h5py.File) -> list[str]:
    return ["/", *_named(file, h5py.Group)]


def _any(file: h5py.File, at: random.Random) -> str:
    return at.choice([*_groups(file), *_named(file, h5py.Dataset)])


def _dataset(file: h5py.File, at: random.Random) -> str:
    return at.choice(_named(file, h5py.Dataset))


def _free(file: h5py.File, path: str) -> dict[str, Any]:
    """Take a dataset out, with no reference to it left; return its attributes that are text."""
    old = file[path]
    for axis, scales in enumerate(old.dims):
        for scale in scales.values():
            old.dims[axis].detach_scale(scale)
    texts = {name: old.attrs[name] for name in ("units", "long_name") if name in old.attrs}
    del file[path]
    return texts


def _with_attribute(file: h5py.File, at: random.Random) -> tuple[Any, str]:
    holders = [one for one in (*_groups(file), *_named(file, h5py.Dataset)) if file[one].attrs]
    holder = file[at.choice(holders)]
    return holder, at.choice(sorted(holder.attrs))


def attribute_renamed(file: h5py.File, at: random.Random) -> None:
    holder, name = _with_attribute(file, at)
    other = at.choice(("x", name.upper(), name + "\0", "\u2028", "../x", "y" * 60_000))
    if other.encode() in [one.encode() for one in holder.attrs] or "\0" in other:
        del holder.attrs[name]
    else:
        h5py.h5a.rename(holder.id, name.encode(), other.encode())


def attribute_of_another_value(file: h5py.File, at: random.Random) -> None:
    holder, name = _with_attribute(file, at)
    text = at.choice(("K", "s", "km", "1e3 K", "", "\x1b[2J", "\n", "x" * 50_000))
    holder.attrs[name] = text


def attribute_no_text(file: h5py.File, at: random.Random) -> None:
    """Bytes that are no UTF-8 where text stands."""
    holder, name = _with_attribute(file, at)
    holder.attrs.create(name, b"\xff\xfe", dtype=h5py.string_dtype())


def attribute_of_another_type(file: h5py.File, at: random.Random) -> None:
    holder, name = _with_attribute(file, at)
    kinds: tuple[Any, ...] = (
        *(1.5, 7, -1, np.float32(1), np.int8(1), np.uint64(2**63), True, np.void(b"\x80\x04N.")),
        *(np.zeros(3), np.zeros((2, 2)), ["a", "b"], np.bytes_(b"K"), h5py.Empty("f8"), 1j),
        np.zeros(2, [("a", "i4"), ("b", "f8")]),
    )
    holder.attrs[name] = at.choice(kinds)


def attribute_of_references(file: h5py.File, at: random.Random) -> None:
    holder, name = _with_attribute(file, at)
    del holder.attrs[name]
    path = _dataset(file, at)
    if at.random() < 0.5:
        holder.attrs.create(name, file[path].ref, dtype=h5py.ref_dtype)
    else:
        region = file[path].regionref[...]
        holder.attrs.create(name, region, dtype=h5py.regionref_dtype)


def attribute_of_sequences(file: h5py.File, at: random.Random) -> None:
    holder, name = _with_attribute(file, at)
    del holder.attrs[name]
    values = np.empty(2, object)
    values[:] = [np.zeros(4), np.zeros(9)]
    holder.attrs.create(name, values, dtype=h5py.vlen_dtype(np.dtype("f8")))


def attribute_added(file: h5py.File, at: random.Random) -> None:
    file[_any(file, at)].attrs[at.choice(("x", "__reduce__", "\u202e"))] = "added"


def attributes_by_the_hundred(file: h5py.File, at: random.Random) -> None:
    holder = file[_any(file, at)]
    for one in range(300):
        holder.attrs[f"a{one}"] = "y" * 100


def attribute_lost(file: h5py.File, at: random.Random) -> None:
    holder, name = _with_attribute(file, at)
    del holder.attrs[name]


def value_changed(file: h5py.File, at: random.Random) -> None:
    one = file[_dataset(file, at)]
    if one.size == 0:
        return
    place = tuple(at.randrange(length) for length in one.shape)
    if h5py.check_string_dtype(one.dtype):
        one[place] = at.choice(("", "x", "\u03b1" * 1000))
    else:
        one[place] = at.choice((0, 1, -1, 2**31, one[place] + 1))


def rescaled(file: h5py.File, at: random.Random) -> None:
    """Other units, with the numbers to match."""
    one = file[_dataset(file, at)]
    if "units" in one.attrs:
        one.attrs["units"] = f"1e3 {one.attrs['units']}"
        one[...] = one[...] // 1000 if one.dtype.kind == "i" else one[...] * 1e-3


def another_type(file: h5py.File, at: random.Random) -> None:
    path = _dataset(file, at)
    shape, values = file[path].shape, file[path][()]
    texts = _free(file, path)
    kind = at.choice(("<f4", ">f8", "<i4", "<i8", "<f8", "u1", "c16", "S3", "bool"))
    number = values if np.asarray(values).dtype.kind in "if" else np.zeros(shape)
    with np.errstate(invalid="ignore"):  # numbers too large for the other type
        other = np.asarray(number).astype(kind)
    file.create_dataset(path, data=other).attrs.update(texts)


def another_shape(file: h5py.File, at: random.Random) -> None:
    path = _dataset(file, at)
    shape, kind = file[path].shape, file[path].dtype
    texts = _free(file, path)
    shapes = ((), (0,), (1,), (*shape, 1), tuple(one + 1 for one in shape), (1,) * 30, shape[::-1])
    file.create_dataset(path, shape=at.choice(shapes), dtype=kind).attrs.update(texts)


def huge(file: h5py.File, at: random.Random) -> None:
    """Declare far more than there is."""
    path = _dataset(file, at)
    rank, kind = max(1, file[path].ndim), file[path].dtype
    texts = _free(file, path)
    shape = (at.choice((1 << 30, 1 << 45, 2**62)), *(1,) * (rank - 1))
    one = file.create_dataset(path, shape=shape, dtype=kind, chunks=(1024, *(1,) * (rank - 1)))
    one.attrs.update(texts)


def bomb(file: h5py.File, at: random.Random) -> None:
    """Compress nothing much: a thousand times its size comes out."""
    path = _dataset(file, at)
    rank = max(1, file[path].ndim)
    texts = _free(file, path)
    one = file.create_dataset(
        path, data=np.zeros((1 << 21, *(1,) * (rank - 1))), compression="gzip", compression_opts=9
    )
    one.attrs.update(texts)
    if rank == 1:
        one.make_scale(path.rpartition("/")[2])


def other_filter(file: h5py.File, at: random.Random) -> None:
    path = _dataset(file, at)
    texts = _free(file, path)
    options: dict[str, Any] = at.choice(
        ({"compression": "lzf"}, {"scaleoffset": 4}, {"compression": 32001}, {"shuffle": True})
    )
    try:
        one = file.create_dataset(path, data=np.zeros(12), chunks=(12,), **options)
    except (ValueError, OSError):  # the filter is not there
        one = file.create_dataset(path, data=np.zeros(12))
    one.attrs.update(texts)


def link(file: h5py.File, at: random.Random) -> None:
    """Put a link in the place of something."""
    path, target = _any(file, at), _any(file, at)
    if path == "/":
        path = "x"
    else:
        del file[path]
    kinds = (
        *(h5py.SoftLink(f"/{target}"), h5py.SoftLink("/nowhere"), h5py.SoftLink(f"/{path}")),
        *(h5py.ExternalLink("whole.h5", "/"), h5py.ExternalLink("../../etc/passwd", "/")),
        *(h5py.ExternalLink("/dev/zero", "/x"), h5py.ExternalLink(file.filename, "/")),
    )
    file[path] = at.choice(kinds)


def cycle(file: h5py.File, at: random.Random) -> None:
    """Make a group a member of itself or of a group within."""
    name = at.choice(_groups(file))
    groups = [one for one in _groups(file) if one.startswith(name.strip("/"))]
    inside = file[at.choice(groups)]
    members = list(inside)
    place = at.choice([*members, "again"])
    if place in members:
        del inside[place]
    inside[place] = file[name] if name in file else file["/"]


def one_for_another(file: h5py.File, at: random.Random) -> None:
    """Hard link: one dataset under the name of another."""
    path, other = _dataset(file, at), _dataset(file, at)
    if path != other:
        del file[path]
        file[path] = file[other]


def deep(file: h5py.File, at: random.Random) -> None:
    path = _any(file, at)
    if path != "/":
        del file[path]
    file.create_group(f"{path}{'/d' * at.choice((2, 200, 2000))}")


def lost(file: h5py.File, at: random.Random) -> None:
    path = _any(file, at)
    if path != "/":
        del file[path]


def renamed(file: h5py.File, at: random.Random) -> None:
    path = _any(file, at)
    if path != "/":
        file.move(path, at.choice(("x", f"{path}x", "a/../b", "\u202e", "..", f"{path}\n")))


def committed(file: h5py.File, at: random.Random) -> None:
    path = at.choice(("x", _any(file, at)))
    if path in {"/", ""}:
        path = "x"
    if path in file:
        del file[path]
    file[path] = np.dtype("f8")


def another_kind(file: h5py.File, at: random.Random) -> None:
    """A group for a dataset, or the other way round."""
    path = _any(file, at)
    if path == "/":
        return
    is_group = isinstance(file[path], h5py.Group)
    del file[path]
    if is_group:
        file.create_dataset(path, data=1.0)
    else:
        file.create_group(path)


def stored_elsewhere(file: h5py.File, at: random.Random) -> None:
    path = _dataset(file, at)
    shape = file[path].shape or (1,)
    texts = _free(file, path)
    if at.random() < 0.5:
        size = 8 * int(np.prod(shape))
        place = at.choice(("/dev/zero", "/etc/passwd", "../../x", "/dev/stdin"))
        file.create_dataset(path, shape=shape, dtype="<f8", external=[(place, 0, max(1, size))])
    else:
        plan = h5py.VirtualLayout(shape=shape, dtype="<f8")
        plan[...] = h5py.VirtualSource("elsewhere.h5", "x", shape=shape)
        file.create_virtual_dataset(path, plan)
    file[path].attrs.update(texts)


HDF5: tuple[Callable[[h5py.File, random.Random], None], ...] = (
    *(attribute_renamed, attribute_of_another_value, attribute_of_another_type, attribute_lost),
    *(attribute_of_references, attribute_of_sequences, attribute_added, attributes_by_the_hundred),
    attribute_no_text,
    *(value_changed, value_changed, rescaled, another_type, another_shape, huge, bomb, link, link),
    *(other_filter, cycle, one_for_another, deep, lost, renamed, committed, another_kind),
    stored_elsewhere,
)


def damage_hdf5(path: Path, at: random.Random) -> str:
    """Change an unsealed file by a random one of the ways; return its name."""
    way = at.choice(HDF5)
    with h5py.File(path, "r+") as file:
        way(file, at)
    return way.__name__
