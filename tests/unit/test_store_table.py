"""Files of tables and of distilled histories: equal to the bit, sealed, refused when not ours.

Files are opened by h5py and xarray alone, without the project's reader; what is expected of damaged
and foreign files is the project's own contract.
"""

from __future__ import annotations

import dataclasses
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import xarray

import levelnet
from levelnet.distilled.certificate import Certificate
from levelnet.distilled.history import FastHistory, history_from_table
from levelnet.distilled.table import EffectiveTable
from levelnet.errors import FileFormatError, InputError
from levelnet.store import (
    DISTILLED_LAYOUT,
    LAYOUT_VERSION,
    TABLE_LAYOUT,
    describe_table_layout,
    read_attributes,
    read_table,
    write_distilled,
    write_distilled_csv,
)
from levelnet.store.digest import content_digest, seal
from levelnet.store.read import read_content
from levelnet.store.write import content_of, save
from tests.invented_history import invented_history
from tests.same_records import assert_same
from tests.small_runs import COSMOLOGY
from tests.small_tables import small_table

REDSHIFTS = np.geomspace(1600.0, 20.0, 40)


def invented_certificate(table: EffectiveTable) -> Certificate:
    """Figures of no measurement."""
    names = ("recombination 2s", "exchange 2p-2s")
    redshift = np.array([1600.0, 300.0, 20.0])
    errors = np.array([[1e-9, -2e-9, 3e-9], [np.nan, np.nan, np.nan]])
    return Certificate(7, 512, names, np.array([3e-9, 1e-9]), np.array([1e-9, 2e-10]),
                       ("setup", "invented: far \u03c9"), redshift, errors)  # fmt: skip


def certified() -> EffectiveTable:
    table = small_table(lyman=2, two_photon="stimulated")
    return dataclasses.replace(table, certificate=invented_certificate(table))


@pytest.fixture(scope="module")
def stored(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("table") / "table.h5"
    levelnet.write(certified(), path)
    return path


@pytest.mark.parametrize("with_certificate", [True, False])
def test_table_comes_back_to_the_bit(with_certificate: bool, tmp_path: Path) -> None:
    table = certified() if with_certificate else small_table()
    levelnet.write(table, tmp_path / "t.h5")
    again = levelnet.read(tmp_path / "t.h5")
    assert_same(table, again)
    levelnet.write(again, tmp_path / "u.h5")
    assert (tmp_path / "t.h5").read_bytes() == (tmp_path / "u.h5").read_bytes()
    t = np.array([30.0, 3000.0])
    given, back = table.effective_rates(t, t), again.effective_rates(t, t)
    assert given.log_recombination.tobytes() == back.log_recombination.tobytes()


def test_changed_constants_come_back(tmp_path: Path) -> None:
    table = small_table().with_constants(0.01, -0.02)
    levelnet.write(table, tmp_path / "t.h5")
    assert_same(table, levelnet.read(tmp_path / "t.h5"))


def test_file_holds_what_its_layout_says(stored: Path) -> None:
    text = describe_table_layout()
    with h5py.File(stored) as file:
        assert file.attrs["layout"] == "levelnet effective rates"
        assert file.attrs["layout_version"] == 1
        assert set(file.attrs) == set(TABLE_LAYOUT.attributes)
        for group in TABLE_LAYOUT.optional:
            assert f"group {group.name}:" in text
        certificate = TABLE_LAYOUT.optional[0]
        assert set(file) == {one.name for one in (*TABLE_LAYOUT.required, certificate)}
        for group in (*TABLE_LAYOUT.required, certificate):
            assert f"group {group.name}:" in text
            assert set(file[group.name]) == {one.name for one in group.variables}
            for one in group.variables:
                assert file[group.name][one.name].ndim == len(one.dimensions)


def test_series_can_be_evaluated_from_the_file_alone(stored: Path) -> None:
    # As the description of the group says, with xarray and numpy only.
    with xarray.open_dataset(stored, engine="h5netcdf", group="table") as file:
        n_x = file.sizes["cell"]
        low, high = float(file.log_low), float(file.log_high)
        y_low, y_high = float(file.ratio_low), float(file.ratio_high)
        x, y = np.log(2500.0), np.log(0.7)
        place = (x - low) / (high - low) * n_x
        place_y = (y - y_low) / (y_high - y_low) * file.sizes["ratio_cell"]
        t, u = 2.0 * (place % 1.0) - 1.0, 2.0 * (place_y % 1.0) - 1.0
        power = t ** np.arange(file.sizes["power"])
        equilibrium = file.equilibrium.values[int(place)] @ power
        cell = file.departure.values[int(place), int(place_y)]
        departure = np.einsum("kpq,p,q->k", cell, power, u ** np.arange(len(power)))
    rates = certified().effective_rates(2500.0, 0.7 * 2500.0)
    assert equilibrium + y * departure == pytest.approx(rates.log_recombination, abs=1e-12)


def test_certificate_opens_in_xarray(stored: Path) -> None:
    with xarray.open_dataset(stored, engine="h5netcdf", group="certificate") as file:
        assert list(file.rate.values) == ["recombination 2s", "exchange 2p-2s"]
        assert float(file.history_error.sel(cosmology="setup", redshift=300.0)) == -2e-9
        assert "relative error of x_e" in file.history_error.attrs["long_name"]


def rewritten(path: Path, target: Path, change: Any) -> Path:
    """The same content changed, with digest and seal made right again."""
    content = read_content(path)
    change(content)
    content.attributes["digest"] = content_digest(content)
    with open(target, "w+b") as raw:
        save(content, raw)
        seal(raw)
    return target


def test_other_layout_version_is_refused(stored: Path, tmp_path: Path) -> None:
    def newer(content: Any) -> None:
        content.attributes["layout_version"] = 2

    path = rewritten(stored, tmp_path / "newer.h5", newer)
    with pytest.raises(FileFormatError, match=r"newer\.h5: layout version 2 is newer than 1"):
        levelnet.read(path)


def test_history_under_the_name_of_a_table_is_refused(stored: Path, tmp_path: Path) -> None:
    def renamed(content: Any) -> None:
        content.attributes["layout"] = "levelnet history"
        assert LAYOUT_VERSION == 1

    path = rewritten(stored, tmp_path / "renamed.h5", renamed)
    with pytest.raises(FileFormatError, match=r"renamed\.h5: damaged"):
        levelnet.read(path)


def test_missing_variable_is_damage(stored: Path, tmp_path: Path) -> None:
    def spoil(content: Any) -> None:
        del content.variables["table/tolerance"]

    path = rewritten(stored, tmp_path / "spoilt.h5", spoil)
    with pytest.raises(FileFormatError, match=r"spoilt\.h5: damaged: table/tolerance is missing"):
        levelnet.read(path)


def test_levels_that_are_not_those_of_the_table(stored: Path, tmp_path: Path) -> None:
    def spoil(content: Any) -> None:
        for name in ("level", "n", "l", "statistical_weight", "energy", "ionization_energy"):
            whole = content.variables[f"levels/{name}"]
            cut = dataclasses.replace(whole, values=whole.values[:2])
            content.variables[f"levels/{name}"] = cut

    path = rewritten(stored, tmp_path / "spoilt.h5", spoil)
    with pytest.raises(FileFormatError, match=r"spoilt\.h5: levels: their number differs"):
        levelnet.read(path)


def test_one_flipped_bit_is_seen(stored: Path, tmp_path: Path) -> None:
    data = bytearray(stored.read_bytes())
    random = np.random.default_rng(5)
    for place in random.integers(0, len(data), 20):
        data[place] ^= 4
        (tmp_path / "bad.h5").write_bytes(data)
        with pytest.raises(FileFormatError, match=r"bad\.h5"):
            levelnet.read(tmp_path / "bad.h5")
        data[place] ^= 4


def test_table_is_not_taken_for_a_history_nor_the_other_way(tmp_path: Path) -> None:
    levelnet.write(invented_history(), tmp_path / "h.h5")
    with pytest.raises(FileFormatError, match=r"h\.h5: holds a history, not a table"):
        read_table(tmp_path / "h.h5")
    levelnet.write(small_table(), tmp_path / "t.h5")
    assert_same(read_table(tmp_path / "t.h5"), small_table())


def test_attributes_name_setup_and_versions(stored: Path) -> None:
    said = read_attributes(stored)
    assert said["setup_digest"] == certified().setup.digest
    assert said["levelnet_version"] == levelnet.__version__
    assert "outcome" not in said


def small_fast_history(observables: bool) -> FastHistory:
    return history_from_table(
        small_table(), COSMOLOGY, redshifts=REDSHIFTS, observables=observables
    )


@pytest.mark.parametrize("observables", [True, False])
def test_distilled_history_comes_back_to_the_bit(observables: bool, tmp_path: Path) -> None:
    history, setup = small_fast_history(observables), small_table().setup
    write_distilled(history, setup, tmp_path / "h.h5")
    assert_same(history, levelnet.read(tmp_path / "h.h5"))
    with xarray.open_dataset(tmp_path / "h.h5", engine="h5netcdf", group="history") as file:
        near = file.free_electron_fraction.sel(redshift=1100.0, method="nearest")
        assert 0.01 < float(near) < 0.9
    with h5py.File(tmp_path / "h.h5") as file:
        assert set(file.attrs) == set(DISTILLED_LAYOUT.attributes)
        assert ("observables" in file) == observables


def test_distilled_history_as_text(tmp_path: Path) -> None:
    history = small_fast_history(False)
    write_distilled_csv(history, small_table().setup, tmp_path / "h.csv")
    rows = np.loadtxt(tmp_path / "h.csv", delimiter=",")
    assert rows[:, 0].tobytes() == history.redshift.tobytes()
    assert rows[:, 1].tobytes() == history.free_electron_fraction.tobytes()
    assert (tmp_path / "h.csv").read_text(encoding="ascii").startswith("# ionization history")
    with pytest.raises(InputError, match="already exists"):
        write_distilled_csv(history, small_table().setup, tmp_path / "h.csv")


def test_content_of_a_table_is_stable() -> None:
    assert content_of(certified()).attributes == content_of(certified()).attributes
