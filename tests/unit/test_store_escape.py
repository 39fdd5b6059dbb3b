"""Files of studies of the escape: equal to the bit, open in xarray, refused when damaged."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest
import xarray

import levelnet
from levelnet.errors import FileFormatError, InputError, Outcome
from levelnet.history.result import RadiationField
from levelnet.store import ESCAPE_LAYOUT, describe_escape_layout, read_table
from levelnet.studies.escape_records import EscapeStudy
from levelnet.studies.level_records import Question
from tests.invented_escape import cheap_study
from tests.same_records import assert_same


def variants() -> dict[str, EscapeStudy]:
    study = cheap_study()
    energy = np.linspace(5.1, 13.6, 7)
    field = RadiationField(study.redshift[3:5], energy, np.array([energy, -energy]))
    asked = Question(1e-3, 300.0, 1500.0, ("[observables]", '"x_e(900)" = 1e-3'))
    return {
        "as it is": study,
        "with a field": dataclasses.replace(study, field=field),
        "asked": dataclasses.replace(study, question=asked),
        "not ok": dataclasses.replace(study, outcome=Outcome.TABLE_TOO_COARSE),
    }


@pytest.fixture(scope="module")
def stored(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("study") / "study.h5"
    levelnet.write(variants()["with a field"], path)
    return path


@pytest.mark.parametrize("variant", ["as it is", "with a field", "asked", "not ok"])
def test_study_comes_back_to_the_bit(variant: str, tmp_path: Path) -> None:
    study = variants()[variant]
    levelnet.write(study, tmp_path / "a.h5")
    back = levelnet.read(tmp_path / "a.h5")
    assert isinstance(back, EscapeStudy)
    assert_same(study, back)
    assert back.notes == study.notes
    levelnet.write(back, tmp_path / "b.h5")
    assert (tmp_path / "a.h5").read_bytes() == (tmp_path / "b.h5").read_bytes()
    with pytest.raises(InputError, match="already exists"):
        levelnet.write(study, tmp_path / "a.h5")


def test_opens_in_xarray(stored: Path) -> None:
    study = cheap_study()
    with xarray.open_dataset(stored, engine="h5netcdf", group="variants") as found:
        assert tuple(found["variant"].values) == study.variants.name
        assert found["free_electron_fraction"].dims == ("variant", "redshift")
        assert np.array_equal(found["observable_value"], study.variants.observable, equal_nan=True)
        assert tuple(found["channel"].values) == study.channels.names
    with xarray.open_dataset(stored, engine="h5netcdf", group="switches") as found:
        assert tuple(found["switch"].values) == ("stimulated", "feedback")
        assert found["alone"].values.tolist() == [2, 3]
    with xarray.open_dataset(stored, engine="h5netcdf", group="field") as found:
        assert found["log_distortion"].dims == ("redshift", "photon_energy")


def test_damage_is_found(stored: Path, tmp_path: Path) -> None:
    data = bytearray(stored.read_bytes())
    data[len(data) // 2] ^= 1
    (tmp_path / "bad.h5").write_bytes(data)
    with pytest.raises(FileFormatError, match="damaged"):
        levelnet.read(tmp_path / "bad.h5")


def test_positions_beyond_the_variants_are_refused(tmp_path: Path) -> None:
    study = cheap_study()
    with pytest.raises(ValueError, match="must be 0 to 4"):
        dataclasses.replace(study, reference=5)


def test_is_no_table(stored: Path) -> None:
    with pytest.raises(FileFormatError, match="holds a study of the escape, not a table"):
        read_table(stored)


def test_layout_names_everything() -> None:
    text = describe_escape_layout()
    for group in (*ESCAPE_LAYOUT.required, *ESCAPE_LAYOUT.optional):
        for variable in group.variables:
            assert f" {variable.name}" in text
