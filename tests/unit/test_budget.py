"""The error budget against sums by hand, its files, and every refusal."""

from __future__ import annotations

import dataclasses
import re
from pathlib import Path

import numpy as np
import pytest

import atomic_tables
from levelnet.errors import InputError, TableError
from levelnet.studies import budget as room
from levelnet.studies.budget import (
    derivatives,
    error_budget,
    load_uncertainties,
    uncertainties_in,
)
from levelnet.studies.budget_record import Contribution
from levelnet.tables import read_table
from tests.invented_weighing import plain_weighing, with_helium
from tests.small_runs import small_setup

HEADER = "process,upper,lower,sigma,group,source"
WEIGHED = plain_weighing()
LEVELS = WEIGHED.levels


@pytest.fixture
def table(tmp_path: Path):
    """Write rows below the header and read them."""

    def make(*rows: str):
        file = tmp_path / "sigmas.csv"
        file.write_text("\n".join([HEADER, *rows]) + "\n", encoding="utf-8")
        return load_uncertainties(file)

    return make


def test_one_row_is_sigma_times_the_summed_derivative(table) -> None:
    for row, expected in (
        ("two_photon,2s,,0.01,,x", WEIGHED.two_photon),
        ("compton,,,0.01,,x", WEIGHED.compton),
        ("escape,3p,,0.01,,x", WEIGHED.escape[:, 1]),
        ("escape,*,,0.01,,x", WEIGHED.escape.sum(axis=1)),
        ("bound_free,*,,0.01,,x", WEIGHED.bound_free[:, 1:].sum(axis=1)),
        ("bound_free,3d,,0.01,,x", WEIGHED.bound_free[:, LEVELS.index(3, 2)]),
        ("bound_bound,*,*,0.01,,x", WEIGHED.bound_bound.sum(axis=1)),
        (
            "bound_bound,4,2p,0.01,,x",
            WEIGHED.bound_bound[
                :, (LEVELS.n[WEIGHED.upper] == 4) & (WEIGHED.lower == LEVELS.index(2, 1))
            ].sum(axis=1),
        ),
    ):
        found = error_budget(WEIGHED, table(row))
        np.testing.assert_allclose(found.contribution[:, 0], 0.01 * expected, rtol=1e-15)
        np.testing.assert_allclose(found.sigma, 0.01 * np.abs(expected), rtol=1e-15)


def test_rows_of_their_own_add_in_squares(table) -> None:
    # By hand, for x_e(900): 0.01 x 0.56 and 0.04 x 0.25.
    found = error_budget(WEIGHED, table("two_photon,2s,,0.01,,a", "escape,2p,,0.04,,b"))
    assert found.sigma[0] == pytest.approx((0.0056**2 + 0.01**2) ** 0.5, rel=1e-14)
    assert found.groups == ("two_photon 2s (row 1)", "escape 2p (row 2)")
    assert found.sources == ("a", "b")


def test_rows_of_a_group_add_with_their_signs(table) -> None:
    rows = table("bound_bound,*,*,0.01,theory,a", "compton,,,0.5,,b", "bound_free,*,,0.02,theory,a")
    found = error_budget(WEIGHED, rows)
    both = 0.01 * WEIGHED.bound_bound.sum(axis=1) + 0.02 * WEIGHED.bound_free[:, 1:].sum(axis=1)
    np.testing.assert_allclose(found.contribution, np.stack([both, 0.5 * WEIGHED.compton], axis=1))
    np.testing.assert_allclose(found.sigma, np.hypot(both, 0.5 * WEIGHED.compton), rtol=1e-14)
    assert found.groups == ("theory", "compton (row 2)")
    assert found.sources == ("a", "b")  # each source once


def test_correlated_rows_are_one_row_of_the_summed_derivative(table) -> None:
    split = error_budget(WEIGHED, table("bound_bound,*,2,0.03,one,x", "bound_bound,*,3,0.03,one,y"))
    whole = error_budget(WEIGHED, table("bound_bound,*,2-3,0.03,,x"))
    np.testing.assert_allclose(split.sigma, whole.sigma, rtol=1e-14)
    apart = error_budget(WEIGHED, table("bound_bound,*,2,0.03,,x", "bound_bound,*,3,0.03,,y"))
    assert np.all(apart.sigma < whole.sigma)  # all derivatives have one sign here
    assert split.sources == ("x; y",)


def test_rows_of_helium_are_sigma_times_its_derivatives(table) -> None:
    weighed = with_helium(WEIGHED)
    helium, ion = weighed.helium, weighed.helium_ion
    assert helium is not None and ion is not None
    levels = helium.levels
    to_2p = helium.lower == levels.index(2, 1, 0)
    from_3 = levels.n[helium.upper] == 3
    for row, expected in (
        ("bound_bound,He I 2 3P1,1 1S,0.01,,x", helium.strength[:, 2]),
        ("bound_bound,He I 2 3P,1 1S,0.01,,x", helium.strength[:, 1:3].sum(axis=1)),
        ("bound_bound,He I *,He I 1 1S,0.01,,x", helium.strength.sum(axis=1)),
        ("escape,He I * 1P,,0.01,,x", helium.escape[:, 3]),
        ("two_photon,He I 2 1S,,0.01,,x", helium.two_photon),
        ("absorption,,,0.01,,x", helium.absorption),
        ("bound_bound,He I 3,2 1P,0.01,,x", helium.bound_bound[:, to_2p & from_3].sum(axis=1)),
        ("bound_free,He I 3 3D,,0.01,,x", helium.bound_free[:, levels.index(3, 2, 1)]),
        ("bound_free,He I 2-* 1,,0.01,,x", helium.bound_free[:, levels.spin == 0].sum(axis=1)),
        ("two_photon,He II,,0.01,,x", ion.two_photon),
        ("escape,He II 2p,,0.01,,x", ion.escape),
        ("bound_bound,He II *,*,0.01,,x", ion.bound_bound.sum(axis=1)),
        ("bound_free,He II 2s,,0.01,,x", ion.bound_free[:, 1]),
    ):
        found = error_budget(weighed, table(row))
        np.testing.assert_allclose(found.contribution[:, 0], 0.01 * expected, rtol=1e-12)


@pytest.mark.parametrize(
    ("row", "complaint"),
    [
        ("two_photon,He I 2 1S,,0.01,,x", "helium was inert"),
        ("escape,He II 2p,,0.01,,x", "helium was inert"),
        ("absorption,,,0.01,,x", "matches nothing"),
    ],
)
def test_rows_of_helium_that_was_not_weighed(table, row: str, complaint: str) -> None:
    with pytest.raises(InputError, match=complaint) as caught:
        error_budget(WEIGHED, table(row))
    assert "\n" not in str(caught.value)


def test_a_budget_is_ranked_by_size(table) -> None:
    found = error_budget(
        WEIGHED, table("compton,,,1,,a", "two_photon,2s,,0.5,,b", "escape,2p,,0.5,,c")
    )
    assert [one.group for one in found.ranked("x_e(900)")] == [
        "two_photon 2s (row 2)",
        "escape 2p (row 3)",
        "compton (row 1)",
    ]
    assert found.ranked("T_m(200)")[0] == Contribution("compton (row 1)", 0.5, "a")
    with pytest.raises(InputError, match=r'target "z_\*": in the budget are x_e\(900\)'):
        found.ranked("z_*")


def test_the_band_holds_x_e_alone_in_descending_redshift(table) -> None:
    found = error_budget(WEIGHED, table("two_photon,2s,,0.01,,x"))
    band = found.band()
    assert band.redshift.tolist() == [1100.0, 900.0]
    assert band.free_electron_fraction.tolist() == [0.14, 0.02]
    np.testing.assert_allclose(band.sigma, [0.0051, 0.0056], rtol=1e-14)
    np.testing.assert_allclose(band.contribution, [[-0.0051], [-0.0056]], rtol=1e-14)


def test_arrays_are_read_only_and_shapes_checked(table) -> None:
    found = error_budget(WEIGHED, table("two_photon,2s,,0.01,,x"))
    for name in ("value", "sigma", "contribution"):
        assert not getattr(found, name).flags.writeable
    assert found.contribution.shape == (3, 1)


def test_the_default_table() -> None:
    every = load_uncertainties()
    rows = [
        one
        for one in every
        if one.where.partition(",")[0].endswith("hydrogen/rate_uncertainties.csv")
    ]
    assert 6 <= len(rows) <= 10
    assert {one.selector.process for one in rows} == {
        *("two_photon", "bound_bound", "bound_free", "escape", "compton")
    }
    for one in every:
        assert re.match(r"(published|estimate): .*((19|20)\d\d|NIST ASD)", one.source), one.source
    of_helium = {one.selector.species for one in every[len(rows) :]}
    assert of_helium == {"He I", "He II", "H I"}  # the last is absorption inside its lines
    found = error_budget(WEIGHED, rows)
    assert np.all(np.isfinite(found.sigma))
    assert np.all(found.sigma > 0.0)


def test_default_sigmas_follow_from_the_numbers_that_their_sources_name() -> None:
    """Arithmetic on the published numbers that stand in the column source."""
    sigma = read_table(room.DEFAULT_TABLES[0]).numbers["sigma"].tolist()
    # CODATA 2022, 6.6524587051(62)e-29 m^2 (from memory).
    assert sigma[0] == pytest.approx(6.2e-38 / 6.6524587051e-29, rel=5e-3)
    # 5 kT/(m_e c^2): k = 8.617e-5 eV/K, m_e c^2 = 511 keV.
    assert sigma[1] == pytest.approx(5 * 8.617e-5 * 3000 / 511e3, rel=2e-2)
    alpha_squared = 137.036**-2
    assert sigma[2] == pytest.approx(alpha_squared, rel=1e-2)
    assert sigma[3] == pytest.approx(2 * alpha_squared, rel=4e-2)
    assert sigma[4] == pytest.approx(0.5 * (8.2290 - 8.2206) / 8.2246, rel=2e-2)
    assert sigma[5:] == [
        pytest.approx(0.0022 / 0.25, rel=3e-2),
        pytest.approx(0.006 / 0.25, rel=2e-2),
        pytest.approx(0.016 / 0.195, rel=3e-2),
    ]


def test_default_sigmas_of_helium_follow_from_the_numbers_that_their_sources_name() -> None:
    """Arithmetic on the published numbers that stand in the column source."""
    rows = {one.selector.text: one.sigma for one in load_uncertainties()}
    expected = {
        "absorption": 2 * 137.036**-2,
        "two_photon He II 2s": 4 * 3.5e-5,
        "bound_bound He II * He II *": 4 * 137.036**-2,
        "bound_free He II *": 8 * 137.036**-2,
        "two_photon He I 2 1S": 51.3 / 51.02 - 1.0,
        "bound_bound He I 2 3P1 1 1S": 1.0 - 176.4 / 177.6,
        "bound_bound He I 2 3P2 1 1S": 0.016 / 0.324,
        "bound_bound He I 2 3S 1 1S": 510.0 / 7870.0,
        "escape He I 2 1P": 0.0028 / 0.0119,
    }
    for text, sigma in expected.items():
        assert rows[text] == pytest.approx(sigma, rel=4e-2), text


def test_damage_to_the_default_table_is_seen(tmp_path: Path, monkeypatch) -> None:
    (tmp_path / "hydrogen").mkdir()
    real = atomic_tables.path("")
    for name in ("sources.toml", f"{room.DEFAULT_TABLES[0]}.csv"):
        (tmp_path / name).write_bytes((real / name).read_bytes() + b"\n")
    monkeypatch.setattr(atomic_tables, "path", lambda name: tmp_path / name)
    with pytest.raises(TableError, match="checksum differs"):
        load_uncertainties()


@pytest.mark.parametrize(
    ("row", "complaint"),
    [
        (
            "two_photon,2s,,-0.01,,x",
            "sigma = -0.01: allowed are relative uncertainties from 0 to 1",
        ),
        ("two_photon,2s,,1.5,,x", "sigma = 1.5: allowed"),
        ("two_photon,2s,,,,x", 'sigma = "" is no finite number'),
        ("two_photon,2s,,nan,,x", 'sigma = "nan" is no finite number'),
        ("two_photon,2s,,1 %,,x", 'sigma = "1 %" is no finite number'),
        ("two_photon,2s,,0.01,,", "source is empty"),
        ("collisions,2s,,0.01,,x", 'process "collisions": allowed are'),
        ("bound_bound,3p,1s,0.01,,x", "use process escape"),
        ("two_photon,2s,,0.01,x", "5 cells, 6 are needed"),
    ],
)
def test_rows_refused(table, row: str, complaint: str) -> None:
    with pytest.raises(InputError, match=re.escape(complaint)) as caught:
        table("compton,,,0.01,,x", row)
    assert re.search(r"sigmas\.csv, row 2: ", str(caught.value))
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("content", "complaint"),
    [
        ("", "empty"),
        (f"{HEADER}\n", "no rows below the header"),
        ("process,upper,lower,factor,value_per_s,source\n", 'column "factor" is unknown'),
    ],
)
def test_files_refused(tmp_path: Path, content: str, complaint: str) -> None:
    (tmp_path / "a.csv").write_text(content)
    with pytest.raises(InputError, match=complaint):
        load_uncertainties(tmp_path / "a.csv")
    with pytest.raises(InputError, match=r"none\.csv: cannot be read"):
        load_uncertainties(tmp_path / "none.csv")


@pytest.mark.parametrize("selector", ["bound_bound,9,2p", "bound_free,*[l=5],", "escape,4p,"])
def test_a_selector_that_matches_nothing_is_refused(table, selector: str) -> None:
    rows = table("compton,,,0.01,,x", f"{selector},0.01,,x")
    text = " ".join(selector.replace(",", " ").split())
    with pytest.raises(InputError, match=re.escape(f'row 2: selector "{text}" matches nothing')):
        error_budget(WEIGHED, rows)
    assert derivatives(WEIGHED, rows[0]) is WEIGHED.compton


def test_no_rows_are_refused() -> None:
    with pytest.raises(InputError, match="uncertainties: empty"):
        error_budget(WEIGHED, ())


def test_rows_that_an_atom_has_not(tmp_path: Path) -> None:
    small = small_setup(2)
    kept = {one.selector.process for one in uncertainties_in(small)}
    assert "bound_bound" not in kept and {"bound_free", "two_photon", "escape"} <= kept
    closed = uncertainties_in(small_setup(2, lines={"hydrogen": "closed"}))
    assert "escape" not in {one.selector.process for one in closed}
    # Where there is no helium no row of it applies, whatever levels it would have: hydrogen's stay.
    none = dataclasses.replace(small.cosmology, helium_mass_fraction=0.0)
    hydrogen = uncertainties_in(small)
    for lines in ({}, {"helium": "continuum", "helium_continuum": {"redistribution": "partial"}}):
        without = small_setup(2, cosmology=none, helium={"n_max": 4}, lines=lines)
        assert uncertainties_in(without) == hydrogen
    path = tmp_path / "mine.csv"
    path.write_text("process,upper,lower,sigma,group,source\nabsorption,,,0.1,,test\n")
    with pytest.raises(InputError, match="acts where helium recombines"):
        uncertainties_in(without, path)
    path.write_text("process,upper,lower,sigma,group,source\nbound_bound,3d,2p,0.1,,test\n")
    with pytest.raises(InputError, match=r"row 1: selector .* matches nothing in hydrogen"):
        uncertainties_in(small, path)
