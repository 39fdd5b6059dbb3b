"""The file of a sweep: there and back to the bit, in xarray with the swept keys as coordinates."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray

import levelnet
from levelnet.errors import FileFormatError
from levelnet.history.result import HISTORY_ARRAYS
from levelnet.store.digest import content_digest, seal
from levelnet.store.sweep_layout import describe_sweep_layout, sealed_content
from levelnet.store.whole_file import whole_file
from levelnet.store.write import save
from levelnet.studies.sweep_record import Sweep
from tests.invented_sweep import invented
from tests.small_runs import small_setup


def assert_equal(one: Sweep, other: Sweep) -> None:
    for name in Sweep.__slots__:
        first, second = getattr(one, name), getattr(other, name)
        if isinstance(first, np.ndarray):
            assert first.tobytes() == second.tobytes() and first.shape == second.shape, name
        elif isinstance(first, dict):
            assert first.keys() == second.keys()
            assert all(first[key].tobytes() == second[key].tobytes() for key in first)
            assert not any(array.flags.writeable for array in second.values())
        else:
            assert str(first) == str(second), name


@pytest.mark.parametrize("apart", [False, True])
def test_there_and_back(apart: bool, tmp_path: Path) -> None:
    sweep = invented(apart)
    levelnet.write(sweep, tmp_path / "a.h5")
    again = levelnet.read(tmp_path / "a.h5")
    assert isinstance(again, Sweep)
    assert_equal(sweep, again)
    levelnet.write(again, tmp_path / "b.h5")
    assert (tmp_path / "a.h5").read_bytes() == (tmp_path / "b.h5").read_bytes()


def test_cases_that_all_failed_and_nothing_swept(tmp_path: Path) -> None:
    nothing = {name: np.empty((1, 0)) for name in HISTORY_ARRAYS}
    sweep = invented(
        swept=(),
        columns=(),
        setups=(small_setup(4).to_toml(),),
        outcome=("FAILED",),
        reason=("out of memory",),
        redshift=np.empty(0),
        arrays=nothing,
        observable=np.full((1, 2), np.nan),
    )
    levelnet.write(sweep, tmp_path / "a.h5")
    again = levelnet.read(tmp_path / "a.h5")
    assert isinstance(again, Sweep)
    assert_equal(sweep, again)


@pytest.mark.parametrize("apart", [False, True])
def test_xarray_sees_swept_keys_as_coordinates(apart: bool, tmp_path: Path) -> None:
    levelnet.write(invented(apart), tmp_path / "a.h5")
    with xarray.open_dataset(tmp_path / "a.h5", engine="h5netcdf", group="sweep") as found:
        assert {"hydrogen.n_max", "cosmology.curvature_density", "lines.hydrogen"} <= set(
            found.coords
        )
        x = found.free_electron_fraction
        assert x.dims == ("case", "output" if apart else "redshift")
        assert found["hydrogen.n_max"].values.tolist() == [4, 5, 6]
        assert found.matter_temperature_k.attrs["units"] == "K"
        if not apart:
            one = x.set_index(case="hydrogen.n_max").sel(case=5, redshift=1000.0)
            assert float(one) == 4.0
        assert found.observable_value.sel(observable="sound_horizon_mpc").values[0] == 144.0


@pytest.mark.parametrize("apart", [False, True])
def test_the_record_as_xarray(apart: bool) -> None:
    sweep = invented(apart)
    found = sweep.to_xarray()
    assert found["hydrogen.n_max"].values.tolist() == [4, 5, 6]
    assert found.sound_horizon_mpc.attrs["units"] == "Mpc"
    assert found.reason.values.tolist() == ["", "", "out of memory"]
    np.testing.assert_array_equal(found.redshift.values, sweep.redshift)
    np.testing.assert_array_equal(found.visibility.values, sweep.arrays["visibility"])


@pytest.mark.parametrize(
    "changes",
    [
        {"reason": ("",)},
        {"swept": ("hydrogen.n_max",)},
        {"redshift": np.zeros((2, 3))},
        {"observable": np.zeros((3, 1))},
        {"arrays": {name: np.zeros((3, 2)) for name in HISTORY_ARRAYS}},
        {"arrays": {}},
    ],
)
def test_parts_must_fit_together(changes: dict[str, Any]) -> None:
    with pytest.raises(ValueError, match="Sweep"):
        invented(**changes)


@pytest.mark.parametrize(
    ("name", "value", "reason"),
    [
        ("swept", "float64 a/b", "names no key"),
        ("swept", "complex hydrogen.n_max", "names no key"),
        ("swept", "int64 ../x", "names no key"),
        ("swept", "int64 outcome", "has the name of another variable"),
        ("swept", "int64 a\nint64 a", "one twice"),
        ("swept", "\n".join(f"int64 a{k}" for k in range(1001)), "too many keys"),
        ("outputs", "elsewhere", "neither shared nor by case"),
    ],
)
def test_attributes_that_name_no_layout(name: str, value: str, reason: str, tmp_path: Path) -> None:
    content = sealed_content(invented())
    content.attributes[name] = value
    content.attributes["digest"] = content_digest(content)
    with whole_file(tmp_path / "a.h5") as raw:
        save(content, raw)
        seal(raw)
    with pytest.raises(FileFormatError, match=f"a.h5: damaged: attribute .*{reason}"):
        levelnet.read(tmp_path / "a.h5")


def test_layout_is_described_with_units() -> None:
    text = describe_sweep_layout()
    assert "float64 free_electron_fraction(case, redshift) [1]: " in text
    assert "text    reason(case): " in text
