"""Files of weighings: equal to the bit, open in xarray, damage refused with one line.

Files are opened by h5py and xarray alone, without the project's reader; what is expected of damaged
and foreign files is the project's own contract.
"""

from __future__ import annotations

import dataclasses
import os
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import xarray

import levelnet
from levelnet.errors import FileFormatError, InputError
from levelnet.store import WEIGHING_LAYOUT, describe_weighing_layout, read_table
from levelnet.store.digest import content_digest, seal
from levelnet.store.read import read_content
from levelnet.store.schema import Content
from levelnet.store.write import content_of, save
from levelnet.studies.weighing import Weighing
from tests.invented_weighing import band_targets, invented_budget, invented_weighing, with_helium
from tests.same_records import assert_same

TARGETS = ("x_e(900)", "z_*")


def complete() -> Weighing:
    budget = invented_budget((*TARGETS, *band_targets(5)))
    return dataclasses.replace(with_helium(invented_weighing(TARGETS)), budget=budget)


CASES: dict[str, Callable[[], Weighing]] = {
    "with budget": complete,
    "without budget": lambda: invented_weighing(TARGETS),
    "no second ion": lambda: dataclasses.replace(
        with_helium(invented_weighing(TARGETS)), helium_ion=None
    ),
    "one target": lambda: invented_weighing(("z_*",)),
    "whole shells": lambda: invented_weighing(n_max=6, whole_from=4),
    "no transition": lambda: invented_weighing(n_max=2),
    "no notes": lambda: dataclasses.replace(invented_weighing(TARGETS), notes=()),
    "no open line": lambda: dataclasses.replace(
        invented_weighing(TARGETS), lines=(), line_upper=np.zeros(0, int), escape=np.zeros((2, 0))
    ),
    "target not reached": lambda: dataclasses.replace(
        invented_weighing(TARGETS), value=np.array([np.nan, -0.0])
    ),
}


@pytest.fixture(scope="module")
def stored(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("weighing") / "w.h5"
    levelnet.write(complete(), path)
    return path


@pytest.mark.parametrize("case", CASES)
def test_weighing_comes_back_to_the_bit(case: str, tmp_path: Path) -> None:
    weighing = CASES[case]()
    levelnet.write(weighing, tmp_path / "w.h5")
    again = levelnet.read(tmp_path / "w.h5")
    assert_same(weighing, again)
    levelnet.write(again, tmp_path / "v.h5")
    assert (tmp_path / "w.h5").read_bytes() == (tmp_path / "v.h5").read_bytes()


def test_file_holds_what_its_layout_says(stored: Path) -> None:
    text = describe_weighing_layout()
    with h5py.File(stored) as file:
        assert file.attrs["layout"] == "levelnet weighing"
        assert set(file.attrs) == set(WEIGHING_LAYOUT.attributes)
        for group in (*WEIGHING_LAYOUT.required, *WEIGHING_LAYOUT.optional):
            assert f"group {group.name}:" in text
            assert set(file[group.name]) == {one.name for one in group.variables}


def test_weights_open_in_xarray_by_name(stored: Path) -> None:
    weighing = complete()
    with xarray.open_dataset(stored, engine="h5netcdf", group="weighing") as file:
        by = file.bound_free.sel(target="z_*")
        place = weighing.levels.index(3, 2)
        chosen = by.values[(file.n.values == 3) & (file.l.values == 2)]
        assert chosen.tolist() == [weighing.bound_free[1, place]]
        assert {"n", "l"} <= set(file.bound_free.coords)
        ends = file.n.values[file.upper.values], file.n.values[file.lower.values]
        assert np.all(ends[0] > ends[1])
        slope = file.cosmology.sel(target="x_e(900)", parameter="baryon_density_h2")
        assert float(slope) == weighing.parameter[0, 1]
        assert float(file.escape.sel(target="z_*", line="2p-1s")) == weighing.escape[1, 0]
    helium = weighing.helium
    assert helium is not None
    with xarray.open_dataset(stored, engine="h5netcdf", group="helium") as file:
        by = file.line_strength.sel(target="z_*", line="2 3P1-1 1S")
        assert float(by) == helium.strength[1, 2]
        chosen = (file.n.values == 3) & (file.l.values == 2) & (file.spin.values == 1)
        place = helium.levels.index(3, 2, 1)
        assert file.bound_free.sel(target="z_*").values[chosen].tolist() == [
            helium.bound_free[1, place]
        ]
        assert np.all(file.energy.values[file.upper.values] > file.energy.values[file.lower.values])
    with xarray.open_dataset(stored, engine="h5netcdf", group="budget") as file:
        one = float(file.contribution.sel(target="x_e(1700)", group="two_photon"))
        assert one == weighing.budget.contribution[2, 0]
        assert str(file.source.sel(group="compton").values) == weighing.budget.sources[4]


def test_values_with_units_of_their_own_carry_none(stored: Path) -> None:
    with h5py.File(stored) as file:
        for group in ("weighing", "budget"):
            assert "units" not in file[group]["value"].attrs
            assert "unit" in file[group]
        assert file["budget"]["sigma"].attrs["units"] == "1"
        assert tuple(file["notes"]["note"].asstr()) == complete().notes


def test_weighing_is_no_table(stored: Path) -> None:
    with pytest.raises(FileFormatError, match=r"w\.h5: holds a weighing, not a table"):
        read_table(stored)


def test_what_cannot_be_stored_is_one_line(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"a dict cannot be stored; a History, an Eff.*Weighing"):
        levelnet.write({}, tmp_path / "x.h5")
    assert list(tmp_path.iterdir()) == []


def test_disk_that_fails_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", fail)
    with pytest.raises(InputError, match=r"w\.h5: cannot be written: No space left"):
        levelnet.write(complete(), tmp_path / "w.h5")
    assert list(tmp_path.iterdir()) == []


# ---- damage


def refusal(path: Path) -> str:
    """Read `path`, which must give one line that names it; return the rest of the line."""
    with pytest.raises(FileFormatError) as caught:
        levelnet.read(path)
    message = str(caught.value)
    assert message.startswith(f"{path}: ")
    assert message.isprintable()
    return message.removeprefix(f"{path}: ")


def test_any_flipped_bit_or_cut_is_found(stored: Path, tmp_path: Path) -> None:
    whole, random = stored.read_bytes(), np.random.default_rng(5)
    for place in random.integers(0, len(whole), 60):
        data = bytearray(whole)
        data[place] ^= 1 << int(random.integers(8))
        (tmp_path / "bad.h5").write_bytes(data)
        refusal(tmp_path / "bad.h5")
        (tmp_path / "cut.h5").write_bytes(whole[:place])
        refusal(tmp_path / "cut.h5")


def without(*paths: str) -> Callable[[Content], None]:
    def spoil(content: Content) -> None:
        for path in paths:
            del content.variables[path]

    return spoil


def with_values(path: str, change: Callable[[Any], Any]) -> Callable[[Content], None]:
    def spoil(content: Content) -> None:
        old = content.variables[path]
        content.variables[path] = dataclasses.replace(old, values=change(old.values))

    return spoil


def with_attribute(name: str, value: str | int) -> Callable[[Content], None]:
    def spoil(content: Content) -> None:
        content.attributes[name] = value

    return spoil


SPOILT: dict[str, tuple[Callable[[Content], None], str]] = {
    "no bound_free": (without("weighing/bound_free"), "damaged: weighing/bound_free is missing"),
    "no notes": (without("notes/note"), "damaged: notes/note is missing"),
    "half a budget": (without("budget/sigma"), "damaged: budget/sigma is missing"),
    "short value": (with_values("weighing/value", lambda x: x[:1]), "damaged"),
    "upper too high": (with_values("weighing/upper", lambda x: x + 10**6), "upper: names levels"),
    "lower negative": (with_values("weighing/lower", lambda x: x - 10**6), "lower: names levels"),
    "line too high": (
        with_values("weighing/line_upper", lambda x: x + 10**6),
        "line_upper: names levels",
    ),
    "outcome": (with_attribute("outcome", "FINE"), 'outcome "FINE" is not known'),
    "setup": (with_attribute("setup", "not TOML ="), "stored setup: not valid TOML"),
    "newer": (with_attribute("layout_version", 2), "layout version 2 is newer than 1"),
    "a history": (with_attribute("layout", "levelnet history"), "damaged"),
    "numbers as text": (
        with_values("weighing/bound_free", lambda x: x.astype("<f4")),
        "holds float32, expected float64",
    ),
}


@pytest.mark.parametrize("name", SPOILT)
def test_file_with_right_seal_but_wrong_content(name: str, stored: Path, tmp_path: Path) -> None:
    spoil, reason = SPOILT[name]
    content = read_content(stored)
    spoil(content)
    content.attributes["digest"] = content_digest(content)
    with open(tmp_path / "spoilt.h5", "w+b") as raw:
        save(content, raw)
        seal(raw)
    assert re.search(reason, refusal(tmp_path / "spoilt.h5"))


@pytest.mark.parametrize(
    "path",
    [
        f"{group.name}/{one.name}"
        for group in (*WEIGHING_LAYOUT.required, *WEIGHING_LAYOUT.optional)
        for one in group.variables
    ],
)
def test_digest_covers_each_variable(path: str) -> None:
    content = content_of(complete())
    right = content_digest(content)
    old = content.variables[path]
    if isinstance(old.values, tuple):
        other: Any = (*old.values[:-1], old.values[-1] + "x")
    else:
        other = old.values.copy()
        other.flat[-1] += 1
    content.variables[path] = dataclasses.replace(old, values=other)
    assert content_digest(content) != right
