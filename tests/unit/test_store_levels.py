"""Files of studies of levels: equal to the bit, open in xarray, refused when damaged."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest
import xarray

import levelnet
from levelnet.errors import FileFormatError, InputError, Outcome
from levelnet.store import LEVEL_LAYOUT, describe_level_layout, read_table
from levelnet.studies.level_records import LevelStudy
from tests.same_records import assert_same
from tests.small_levels import RUNGS, small_study


def variants() -> dict[str, LevelStudy]:
    study = small_study()
    return {
        "with a check": study,
        "without": dataclasses.replace(study, held_out=None),
        "resolved": dataclasses.replace(study, resolved=study.rungs),
        "not ok": dataclasses.replace(study, outcome=Outcome.TABLE_TOO_COARSE),
    }


@pytest.fixture(scope="module")
def stored(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("study") / "study.h5"
    levelnet.write(small_study(), path)
    return path


@pytest.mark.parametrize("variant", ["with a check", "without", "resolved", "not ok"])
def test_study_comes_back_to_the_bit(variant: str, tmp_path: Path) -> None:
    study = variants()[variant]
    levelnet.write(study, tmp_path / "a.h5")
    back = levelnet.read(tmp_path / "a.h5")
    assert isinstance(back, LevelStudy)
    assert_same(study, back)
    assert back.notes == study.notes
    levelnet.write(back, tmp_path / "b.h5")
    assert (tmp_path / "a.h5").read_bytes() == (tmp_path / "b.h5").read_bytes()
    with pytest.raises(InputError, match="already exists"):
        levelnet.write(study, tmp_path / "a.h5")


def test_opens_in_xarray(stored: Path) -> None:
    study = small_study()
    with xarray.open_dataset(stored, engine="h5netcdf", group="rungs") as rungs:
        assert rungs["n_max"].values.tolist() == list(RUNGS)
        assert np.array_equal(rungs["free_electron_fraction"], study.rungs.free_electron_fraction)
        assert rungs["free_electron_fraction"].dims == ("rung", "redshift")
        assert rungs["matter_temperature_k"].attrs["units"] == "K"
        # Each observable has a unit of its own.
        assert "units" not in rungs["observable_value"].attrs
        assert tuple(rungs["observable"].values) == study.observable_names
        assert tuple(rungs["observable_unit"].values) == study.observable_units
    with xarray.open_dataset(stored, engine="h5netcdf", group="limit") as limit:
        value = limit["free_electron_fraction_value"]
        assert np.array_equal(value, study.limit.free_electron_fraction.value)
    with xarray.open_dataset(stored, engine="h5netcdf", group="held_out") as held:
        assert held["n_max"].values.tolist() == [RUNGS[-1]]


def test_damage_is_found(stored: Path, tmp_path: Path) -> None:
    data = bytearray(stored.read_bytes())
    data[len(data) // 2] ^= 1
    (tmp_path / "bad.h5").write_bytes(data)
    with pytest.raises(FileFormatError, match="damaged"):
        levelnet.read(tmp_path / "bad.h5")


def test_is_no_table(stored: Path) -> None:
    with pytest.raises(FileFormatError, match="holds a study of levels, not a table"):
        read_table(stored)


def test_layout_names_everything() -> None:
    text = describe_level_layout()
    for group in (*LEVEL_LAYOUT.required, *LEVEL_LAYOUT.optional):
        for variable in group.variables:
            assert f" {variable.name}" in text
