"""Damaged and hostile files: one clear line, never a wrong number, never a crash of HDF5.

Damage by accident breaks the seal, so that HDF5 never sees it. Files made to harm carry a right
seal here, so that every later check is met too. `test_fuzz_files.py` does both by the thousand.
"""

from __future__ import annotations

import dataclasses
import re
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from levelnet.cli.main import main
from levelnet.errors import FileFormatError
from levelnet.store import layout, read, write
from levelnet.store.digest import content_digest, seal
from levelnet.store.read import read_content
from levelnet.store.schema import Content, Stored
from tests.invented_history import history_with_field, invented_history
from tests.invented_weighing import invented_weighing
from tests.small_tables import small_table

WRITE = sys.modules[write.__module__]  # its name in the package is that of the function
SEAL_LENGTH = 82  # a line feed, "levelnet sha256 ", 64 digits, a line feed


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("damage")


@pytest.fixture(scope="module")
def whole(folder: Path) -> bytes:
    write(history_with_field(), folder / "whole.h5")
    return (folder / "whole.h5").read_bytes()


def refusal(path: Path) -> str:
    """Read `path`, which must give one line that names it; return the rest of the line."""
    with pytest.raises(FileFormatError) as caught:
        read(path)
    message = str(caught.value)
    assert message.startswith(f"{path}: ")
    assert message.isprintable()
    return message.removeprefix(f"{path}: ")


# ---- damage by accident


@given(place=st.floats(0.0, 1.0, exclude_max=True), bit=st.integers(0, 7))
@example(place=0.0, bit=0)
@example(place=1.0 - 1e-9, bit=0)
@example(place=1.0 - 40.0 / 125_000.0, bit=3)
def test_any_flipped_bit_is_found(place: float, bit: int, whole: bytes, folder: Path) -> None:
    data = bytearray(whole)
    data[int(place * len(data))] ^= 1 << bit
    (folder / "flipped.h5").write_bytes(data)
    refusal(folder / "flipped.h5")


@given(place=st.floats(0.0, 1.0, exclude_max=True))
@example(place=1.0 - 1e-9)
def test_any_cut_is_found(place: float, whole: bytes, folder: Path) -> None:
    (folder / "cut.h5").write_bytes(whole[: int(place * len(whole))])
    assert "cut off" in refusal(folder / "cut.h5") or place < 1e-4


@pytest.mark.parametrize("extra", [b"\0", b"x" * SEAL_LENGTH, b"\nlevelnet sha256 "])
def test_bytes_added_at_the_end_are_found(extra: bytes, whole: bytes, folder: Path) -> None:
    (folder / "longer.h5").write_bytes(whole + extra)
    refusal(folder / "longer.h5")


# ---- the digest covers everything


def all_variables() -> list[str]:
    groups = layout.groups_of(("H I",), with_field=True)
    return [f"{group.name}/{one.name}" for group in groups for one in group.variables]


@pytest.fixture(scope="module")
def content(whole: bytes, folder: Path) -> Content:
    return read_content(folder / "whole.h5")


def changed(content: Content, path: str, **parts: Any) -> Content:
    stored = dataclasses.replace(content.variables[path], **parts)
    return dataclasses.replace(content, variables=content.variables | {path: stored})


def flip_last_bit(stored: Stored) -> Any:
    if isinstance(stored.values, tuple):
        return (*stored.values[:-1], stored.values[-1] + "\0")
    data = bytearray(stored.values.tobytes())
    data[-1] ^= 1
    return np.frombuffer(bytes(data), stored.values.dtype).reshape(stored.values.shape)


@pytest.mark.parametrize("path", all_variables())
def test_digest_covers_each_variable(path: str, content: Content) -> None:
    right, stored = content_digest(content), content.variables[path]
    assert right == content.attributes["digest"]
    others = [
        changed(content, path, values=flip_last_bit(stored)),
        changed(content, path, dimensions=("other", *stored.dimensions[1:])),
        changed(content, path, attributes=stored.attributes | {"long_name": "x"}),
        changed(content, path, attributes=stored.attributes | {"comment": ""}),
        dataclasses.replace(
            content,
            variables={("x" if key == path else key): v for key, v in content.variables.items()},
        ),
        dataclasses.replace(
            content, variables={k: v for k, v in content.variables.items() if k != path}
        ),
    ]
    if not isinstance(stored.values, tuple) and stored.values.size > 1:
        others.append(changed(content, path, values=stored.values.reshape(-1, 1)))
        others.append(changed(content, path, values=stored.values.astype("<f4")))
    digests = [content_digest(one) for one in others]
    assert right not in digests
    assert len(set(digests)) == len(digests)


@pytest.mark.parametrize("name", sorted(set(layout.ROOT_ATTRIBUTES) - {"digest"}))
def test_digest_covers_each_attribute(name: str, content: Content) -> None:
    value = content.attributes[name]
    others: list[str | int] = [f"{value}.", str(value) if isinstance(value, int) else ""]
    for other in others:
        attributes = content.attributes | {name: other}
        assert (
            content_digest(dataclasses.replace(content, attributes=attributes))
            != (content.attributes["digest"])
        )


def test_digest_covers_groups(content: Content) -> None:
    groups = content.groups | {"hydrogen": content.groups["hydrogen"] | {"species": "He II"}}
    assert (
        content_digest(dataclasses.replace(content, groups=groups)) != content.attributes["digest"]
    )


def test_digest_knows_where_one_text_ends(content: Content) -> None:
    first = changed(content, "notes/note", values=("ab", "c"))
    second = changed(content, "notes/note", values=("a", "bc"))
    assert content_digest(first) != content_digest(second)


# ---- files made to harm


def taken_out(file: h5py.File, path: str) -> dict[str, str]:
    """Delete a dataset, with no reference to it left, and return its attributes of text."""
    old = file[path]
    for axis, scales in enumerate(old.dims):
        for scale in scales.values():
            old.dims[axis].detach_scale(scale)
    texts = {name: old.attrs[name] for name in ("units", "long_name") if name in old.attrs}
    del file[path]
    return texts


def replaced(file: h5py.File, path: str, **options: Any) -> h5py.Dataset:
    """Put another dataset in the place of `path`, with the attributes of the old one."""
    texts = taken_out(file, path)
    new = file.create_dataset(path, **options)
    new.attrs.update(texts)
    return new


def external_link(file: h5py.File) -> None:
    del file["lines"]
    file["lines"] = h5py.ExternalLink("elsewhere.h5", "/lines")


def soft_link(file: h5py.File) -> None:
    del file["hydrogen/n"]
    file["hydrogen/n"] = h5py.SoftLink("/hydrogen/l")


def virtual(file: h5py.File) -> None:
    plan = h5py.VirtualLayout(shape=(12,), dtype="<f8")
    plan[:] = h5py.VirtualSource("elsewhere.h5", "x", shape=(12,))
    texts = taken_out(file, "history/visibility")
    file.create_virtual_dataset("history/visibility", plan).attrs.update(texts)


def reference(file: h5py.File) -> None:
    replaced(file, "history/visibility", shape=(12,), dtype=h5py.ref_dtype)


def text_bomb(file: h5py.File) -> None:
    """Make 40,000 notes that all point at one text of 2 MB."""
    text = h5py.string_dtype()
    one = file.create_dataset("bomb", data=np.array(["y" * 2_000_000], object), dtype=text)
    file.flush()
    with open(file.filename, "r+b") as raw:
        raw.seek(one.id.get_offset())
        entry = raw.read(16)
        many = replaced(file, "notes/note", data=np.full(40_000, "", object), dtype=text)
        many.make_scale("note")
        file.flush()
        raw.seek(many.id.get_offset())
        raw.write(entry * 40_000)
    del file["bomb"]


HOSTILE: dict[str, tuple[Callable[[h5py.File], Any], str]] = {
    "foreign": (lambda f: f.attrs.__setitem__("layout", "other"), "not a file of levelnet"),
    "no layout": (lambda f: f.attrs.__delitem__("layout"), "not a file of levelnet"),
    "newer": (lambda f: f.attrs.__setitem__("layout_version", 2), "version 2 is newer than 1"),
    "older": (lambda f: f.attrs.__setitem__("layout_version", 0), "is no version"),
    "version as text": (lambda f: f.attrs.__setitem__("layout_version", "1"), "is no version"),
    "version as array": (lambda f: f.attrs.__setitem__("layout_version", [1, 1]), "neither"),
    "missing dataset": (lambda f: f.__delitem__("hydrogen/n"), "hydrogen/n is missing"),
    "missing group": (lambda f: f.__delitem__("lines"), "lines is missing"),
    "missing part of the field": (
        lambda f: f.__delitem__("field/log_distortion"),
        "field/log_distortion is missing",
    ),
    "field of a wrong length": (
        lambda f: replaced(f, "field/log_distortion", data=np.zeros((5, 3))),
        r"shape \(5, 3\), expected \(5, \d+\)",
    ),
    "energies without units": (
        lambda f: f["field/photon_energy"].attrs.__delitem__("units"),
        "missing or unknown: units",
    ),
    "missing diagnostic": (
        lambda f: f.__delitem__("diagnostics/photon_number_error"),
        "diagnostics/photon_number_error is missing",
    ),
    "group for dataset": (
        lambda f: (f.__delitem__("hydrogen/n"), f.create_group("hydrogen/n")),
        "damaged",
    ),
    "dataset for group": (
        lambda f: (f.__delitem__("notes"), f.create_dataset("notes", data=1.0)),
        "damaged",
    ),
    "extra dataset": (lambda f: f.__setitem__("history/x", 1.0), "more members than"),
    "renamed dataset": (lambda f: f.move("history/visibility", "history/x"), "x is not in the"),
    "extra group": (lambda f: f.create_group("other"), "/other is not in the layout"),
    "extra attribute": (lambda f: f.attrs.__setitem__("x", 1), "missing or unknown: x"),
    "missing attribute": (lambda f: f.attrs.__delitem__("digest"), "missing or unknown: digest"),
    "units": (lambda f: f["history/cosmic_time_s"].attrs.__setitem__("units", "h"), "units of"),
    "number": (lambda f: f["history/redshift"].__setitem__(3, 1.0), "digest"),
    "species": (lambda f: f["hydrogen"].attrs.__setitem__("species", "He I"), "attribute species"),
    "outcome": (lambda f: f.attrs.__setitem__("outcome", "SINGULAR"), "digest"),
    "not UTF-8": (
        lambda f: f.attrs.create("outcome", b"\xff", dtype=h5py.string_dtype()),
        "digest",
    ),
    "wrong length": (
        lambda f: replaced(f, "history/visibility", data=np.zeros(11)),
        r"shape \(11,\), expected \(12,\)",
    ),
    "wrong rank": (
        lambda f: replaced(f, "history/visibility", data=np.zeros((12, 1))),
        r"shape \(12, 1\)",
    ),
    "no shape": (
        lambda f: replaced(f, "history/visibility", data=h5py.Empty("<f8")),
        "shape None",
    ),
    "wrong type": (
        lambda f: replaced(f, "history/visibility", data=np.zeros(12, "<f4")),
        "holds float32, expected float64",
    ),
    "other byte order": (
        lambda f: replaced(f, "history/visibility", data=np.zeros(12, ">f8")),
        "holds >f8",
    ),
    "text for numbers": (
        lambda f: replaced(f, "history/visibility", data=["x"] * 12),
        "holds object",
    ),
    "numbers for text": (
        lambda f: replaced(f, "lines/line", data=np.zeros(2)),
        "holds float64, expected text",
    ),
    "references": (reference, "holds object"),
    "external link": (external_link, "link to elsewhere"),
    "soft link": (soft_link, "link to elsewhere"),
    "virtual": (virtual, "another file"),
    "external storage": (
        lambda f: replaced(
            f, "history/visibility", shape=(12,), dtype="<f8", external=[("/dev/zero", 0, 96)]
        ),
        "another file",
    ),
    "huge and empty": (
        lambda f: replaced(f, "history/redshift", shape=(1 << 40,), dtype="<f8", chunks=(1024,)),
        "more than its 0 stored",
    ),
    "huge chunk": (
        lambda f: replaced(
            f, "history/redshift", shape=(12,), dtype="<f8", chunks=(1 << 27,), maxshape=(None,)
        ),
        "more than its 0 stored",
    ),
    "other filter": (
        lambda f: replaced(f, "history/visibility", data=np.zeros(12), compression="lzf"),
        "uses a filter",
    ),
    "no dimension name": (
        lambda f: replaced(f, "history/visibility", data=np.zeros(12)),
        "dimension 0 is not named redshift",
    ),
    "wrong dimension": (
        lambda f: (
            f["lines/optical_depth"].dims[0].detach_scale(f["lines/redshift"]),
            f["lines/optical_depth"].dims[0].attach_scale(f["history/redshift"]),
        ),
        "dimension 0 is not named redshift",
    ),
    "no coordinate": (
        lambda f: replaced(f, "history/redshift", data=np.zeros(12)),
        "does not name its dimension",
    ),
    "text bomb": (text_bomb, "more text than the file is long"),
}


@pytest.mark.parametrize("name", HOSTILE)
def test_hostile_file_is_refused(name: str, whole: bytes, folder: Path) -> None:
    change, reason = HOSTILE[name]
    path = folder / "hostile.h5"
    path.write_bytes(whole[:-SEAL_LENGTH])
    with h5py.File(path, "r+") as file:
        change(file)
    with open(path, "r+b") as raw:
        seal(raw)
    message = refusal(path)
    assert re.search(reason, message), message


def test_reader_takes_a_file_that_was_only_sealed_again(whole: bytes, folder: Path) -> None:
    """Opening for change and sealing alone is no reason to refuse: the cases above are not."""
    path = folder / "again.h5"
    path.write_bytes(whole[:-SEAL_LENGTH])
    with h5py.File(path, "r+"):
        pass
    with open(path, "r+b") as raw:
        seal(raw)
    assert read(path).setup == invented_history().setup


# ---- right digest, wrong meaning


def save_with_right_digest(content: Content, path: Path) -> None:
    content.attributes["digest"] = content_digest(content)
    with open(path, "w+b") as raw:
        WRITE.save(content, raw)
        seal(raw)


@pytest.mark.parametrize(
    ("name", "value", "reason"),
    [
        ("outcome", "FINE", 'outcome "FINE" is not known'),
        ("setup", "not TOML at all =", "stored setup: not valid TOML"),
        ("setup", "[cosmology]\n", "stored setup: "),
        ("setup", "", "stored setup: "),
        ("setup", '[rates]\noverrides = "/etc/passwd"\n', "rates.overrides: names a file"),
        ("setup", '[cosmology]\nexpansion_table = "x"\n', "expansion_table: names a file"),
    ],
)
def test_attribute_of_no_meaning(name: str, value: str, reason: str, folder: Path) -> None:
    content = WRITE.content_of(invented_history())
    content.attributes[name] = value
    save_with_right_digest(content, folder / "meaning.h5")
    assert reason in refusal(folder / "meaning.h5")


def test_groups_must_have_one_redshift(folder: Path) -> None:
    content = WRITE.content_of(invented_history())
    stored = content.variables["lines/redshift"]
    shifted = dataclasses.replace(stored, values=np.nextafter(stored.values, np.inf))
    content.variables["lines/redshift"] = shifted
    save_with_right_digest(content, folder / "redshift.h5")
    assert "redshift of group lines differs" in refusal(folder / "redshift.h5")


@pytest.mark.parametrize("name", ["redshift", "photon_energy"])
def test_field_must_be_in_order(name: str, folder: Path) -> None:
    content = WRITE.content_of(history_with_field())
    stored: Any = content.variables[f"field/{name}"]
    turned = dataclasses.replace(stored, values=stored.values[::-1].copy())
    content.variables[f"field/{name}"] = turned
    save_with_right_digest(content, folder / "order.h5")
    assert "does not make a history: RadiationField: redshift must" in refusal(folder / "order.h5")


def test_records_must_fit_together(folder: Path) -> None:
    """Lines over another number of redshifts than the rest: found when the records are made."""
    content = WRITE.content_of(invented_history())
    other = WRITE.content_of(invented_history(9))
    for path in content.variables:
        if path.startswith("lines/"):
            content.variables[path] = other.variables[path]
    save_with_right_digest(content, folder / "fit.h5")
    assert "redshift of group lines differs" in refusal(folder / "fit.h5")


@pytest.mark.parametrize(
    ("make", "path", "value", "reason"),
    [
        (small_table, "pairs/lower", -(2**63), "lower: names levels that are not in the file"),
        (small_table, "pairs/upper", 99, "upper: names levels that are not in the file"),
        (invented_weighing, "weighing/line_upper", -1, "line_upper: names levels that are not"),
    ],
)
def test_positions_must_be_those_of_levels(
    make: Callable[[], Any], path: str, value: int, reason: str, folder: Path
) -> None:
    content = WRITE.content_of(make())
    path = next(one for one in content.variables if one.endswith(path.split("/")[1]))
    stored: Any = content.variables[path]
    numbers = np.full_like(stored.values, value)
    content.variables[path] = dataclasses.replace(stored, values=numbers)
    save_with_right_digest(content, folder / "positions.h5")
    assert reason in refusal(folder / "positions.h5")


def test_what_a_terminal_could_obey_is_shown_and_not_sent(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    notes = ("\x1b]0;owned\x07\x1b[2J", "\u202egpj.exe")
    write(dataclasses.replace(invented_history(), notes=notes), folder / "notes.h5")
    assert main(["show", str(folder / "notes.h5")]) == 0
    out = capsys.readouterr().out
    assert "\\x1b]0;owned\\x07" in out
    assert all(letter.isprintable() or letter == "\n" for letter in out)
