"""Histories of hydrogen and helium together, from z = 10000 down."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from scipy import constants as si
from scipy.integrate import solve_ivp

import levelnet
from levelnet.errors import InputError, Outcome
from levelnet.history.course import electron_fraction_at, state_at
from levelnet.history.integrate import integrate_history
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from levelnet.report.departures import departure_map_figure
from levelnet.store import layout
from levelnet.store.read import read_content
from levelnet.studies.rung import observables_of
from tests.same_records import assert_same
from tests.small_helium import REDSHIFTS, helium_history, helium_setup
from tests.small_runs import COSMOLOGY

# Ionization energies of H I, He I and He II in eV (NIST Atomic Spectra Database), and the ratio of
# weights 2 g_ion/g_ground.
_IONS = {"H I": (13.598434, 1.0), "He I": (24.587389, 4.0), "He II": (54.417765, 1.0)}


def at(history: History, redshift: float) -> int:
    return int(np.flatnonzero(history.redshift == redshift)[0])


def saha_ratio(ion: str, temperature_k: float, electrons_cm3: float) -> float:
    """n_ion/n_ground by Saha's equation, with the constants of scipy."""
    energy_ev, weight = _IONS[ion]
    wave = 2.0 * math.pi * si.m_e * si.k * temperature_k / si.h**2
    boltzmann = math.exp(-energy_ev * si.e / (si.k * temperature_k))
    return weight * wave**1.5 * 1e-6 * boltzmann / electrons_cm3


@pytest.mark.parametrize(
    ("redshift", "ion"),
    [(9500.0, "He II"), (8000.0, "He II"), (4000.0, "He I"), (3500.0, "He I"), (2500.0, "H I")],
)
def test_ions_in_equilibrium(redshift: float, ion: str) -> None:
    """Published: NIST energies. Masses of nuclei move a factor (mu/m_e)^1.5 by 8e-4 at most."""
    history = helium_history()
    k = at(history, redshift)
    electrons = history.free_electron_fraction[k] * history.hydrogen_density_cm3[k]
    wanted = saha_ratio(ion, float(history.matter_temperature_k[k]), float(electrons))
    found = {
        "H I": history.ionized_hydrogen_fraction[k] / history.neutral_hydrogen_fraction[k],
        "He I": history.singly_ionized_helium_fraction[k] / history.neutral_helium_fraction[k],
        "He II": history.doubly_ionized_helium_fraction[k]
        / history.singly_ionized_helium_fraction[k],
    }
    assert found[ion] == pytest.approx(wanted, rel=1.2e-3)


def test_neutral_hydrogen_while_helium_recombines() -> None:
    """Published: x_HI near 1e-8 at z = 2500 (Switzer & Hirata 2008, Phys. Rev. D 77, 083006)."""
    history = helium_history()
    assert 1e-8 < history.neutral_hydrogen_fraction[at(history, 2500.0)] < 5e-8
    assert history.outcome is Outcome.CONVERGED


def test_second_ionization_by_levels_and_by_saha() -> None:
    """Published: He III recombines close to Saha equilibrium (Switzer & Hirata 2008).

    "Close" is 2e-3 of x_e (from memory); the levels can only lag behind.
    """
    network, saha = helium_history(), helium_history(ion="saha")
    change = network.free_electron_fraction / saha.free_electron_fraction - 1.0
    worst = int(np.argmax(change))
    assert 5e-4 < change[worst] < 2e-3
    assert 5000.0 <= network.redshift[worst] <= 6500.0
    assert np.abs(change[network.redshift <= 4000.0]).max() < 1e-8
    assert saha.helium is not None
    assert [one.name for one in saha.species] == ["H I", "He I"]


def test_first_ionization_ends_late_without_continuum() -> None:
    """Published: it ends near z = 1800 with hydrogen's continuum, much later without.

    Switzer & Hirata 2008, Phys. Rev. D 77, 083006.
    """
    history = helium_history()
    assert history.singly_ionized_helium_fraction[at(history, 1800.0)] > 0.2
    assert history.singly_ionized_helium_fraction[at(history, 1400.0)] < 2e-3


def test_intercombination_line() -> None:
    """Published: its uncertainty is 1e-3 of x_e (Switzer & Hirata 2008, Phys. Rev. D 77, 083008).

    Values in use went from 176.4 to 233 s^-1 (from memory).
    """
    usual, fast, off = (helium_history(intercombination_per_s=a) for a in (177.6, 233.0, 0.0))
    change = fast.free_electron_fraction / usual.free_electron_fraction - 1.0
    assert -2e-3 < change.min() < -5e-4
    k = at(usual, 1800.0)
    assert off.free_electron_fraction[k] / usual.free_electron_fraction[k] - 1.0 > 5e-3
    assert off.helium is not None
    assert "2 3P1-1 1S" not in off.helium.lines.names


def test_higher_lines_add_escape() -> None:
    closed, free = helium_history(), helium_history(higher="free")
    k = at(closed, 2200.0)
    assert free.free_electron_fraction[k] < closed.free_electron_fraction[k]
    assert free.helium is not None
    assert "5 1P-1 1S" in free.helium.lines.names


def test_charge_and_nuclei() -> None:
    """Closed form: sums of fractions are 1, electrons are what ions have lost."""
    history = helium_history()
    hydrogen = history.ionized_hydrogen_fraction + history.neutral_hydrogen_fraction
    single, double = history.singly_ionized_helium_fraction, history.doubly_ionized_helium_fraction
    helium = history.neutral_helium_fraction + single + double
    ratio = COSMOLOGY.helium_ratio()
    charge = history.ionized_hydrogen_fraction + ratio * (single + 2.0 * double)
    np.testing.assert_allclose(hydrogen, 1.0, rtol=4e-16)
    np.testing.assert_allclose(helium, 1.0, rtol=4e-16)
    np.testing.assert_allclose(charge, history.free_electron_fraction, rtol=4e-16)
    assert history.helium is not None
    assert history.helium.closure_error < 5e-16
    assert history.helium.conservation_error < 1e-12
    # Nothing is 0 by subtraction: fully neutral helium still tells its ions.
    assert (single > 0.0).all()
    assert single[-1] < 1e-20


def test_steps_refined() -> None:
    """What was asked holds for every fraction above 1e-9: 1e-6 against steps for 1e-7."""
    usual, fine = helium_history(), helium_history(relative=1e-7)
    for name in (
        "free_electron_fraction",
        "neutral_hydrogen_fraction",
        "neutral_helium_fraction",
        "singly_ionized_helium_fraction",
    ):
        # A rarer ion may err by more, as the square root of how rare it is.
        slack = np.sqrt(np.maximum(1.0, 1e-9 / getattr(fine, name)))
        error = getattr(usual, name) / getattr(fine, name) - 1.0
        assert np.abs(error / slack).max() < 1e-6, name


def test_against_another_integrator() -> None:
    """Computed here by scipy's Radau, from the same rates, through both ends of He I."""
    setup = helium_setup()
    integrated = integrate_history(setup, lambda *_: None)
    start, end = -math.log1p(3000.0), -math.log1p(1600.0)
    equations = integrated.equations
    other = solve_ivp(
        equations.rate,
        (start, end),
        state_at(integrated, start),
        "Radau",
        rtol=1e-10,
        atol=1e-10,
        jac=lambda s, y: equations.jacobian(s, y)[0],
    )
    np.testing.assert_allclose(other.y[:3, -1], state_at(integrated, end)[:3], atol=2e-6)
    # Between outputs n_e is as smooth as at them.
    middle = np.array([start, end])
    wanted = [equations.electron_fraction(state_at(integrated, s)) for s in middle]
    np.testing.assert_allclose(electron_fraction_at(integrated, middle), wanted, rtol=1e-9)


def test_hydrogen_late_is_as_without_helium() -> None:
    """Law: by z = 900 helium is neutral, and hydrogen has forgotten that it was not."""
    history = helium_history()
    inert = solve(helium_setup(helium={"n_max": 0}))
    k = at(history, 900.0)
    np.testing.assert_allclose(
        history.free_electron_fraction[k:], inert.free_electron_fraction[k:], rtol=2e-6
    )
    assert [one.name for one in inert.species] == ["H I"]
    assert inert.helium is None
    assert (inert.neutral_helium_fraction == 1.0).all()


def test_resolved_field_sees_the_electrons_of_helium() -> None:
    """A field of hydrogen's lines changes hydrogen; helium before it is as with Sobolev."""
    plain = helium_history(two_photon="stimulated")  # what "distorted" is to helium
    field = helium_history(hydrogen="transfer")
    early = plain.redshift >= 1800.0
    np.testing.assert_allclose(
        field.free_electron_fraction[early], plain.free_electron_fraction[early], rtol=1e-6
    )
    assert field.field is not None
    k = at(plain, 1100.0)
    change = field.free_electron_fraction[k] / plain.free_electron_fraction[k] - 1.0
    assert 1e-3 < abs(change) < 2e-2
    fed = helium_history(hydrogen="sobolev_feedback", two_photon="stimulated")
    np.testing.assert_allclose(
        fed.free_electron_fraction[early], plain.free_electron_fraction[early], rtol=1e-6
    )


def test_damping_scale_counts_the_electrons_of_helium() -> None:
    """About 0.5 per cent: the share of 1/k_D^2 from before z = 1800 (published definition)."""
    setup = helium_setup(grid={"redshift_start": 1800.0, "redshift_end": 20.0, "n_redshifts": 20})
    inert = helium_setup(
        grid={"redshift_start": 1800.0, "redshift_end": 20.0, "n_redshifts": 20},
        helium={"n_max": 0},
    )
    with_helium, without = observables_of(setup), observables_of(inert)
    k = with_helium.names.index("damping_per_mpc")
    assert 3e-3 < with_helium.value[k] / without.value[k] - 1.0 < 8e-3


# ---- files


def test_comes_back_from_a_file(tmp_path: Path) -> None:
    history = helium_history()
    levelnet.write(history, tmp_path / "helium.h5")
    again = levelnet.read(tmp_path / "helium.h5")
    assert isinstance(again, History)
    for one, other in zip(history.species, again.species, strict=True):
        assert_same(one, other)
    assert_same(history.helium, again.helium)
    assert again.setup == history.setup
    assert again.notes == history.notes
    for name in ("free_electron_fraction", "doubly_ionized_helium_fraction"):
        assert getattr(history, name).tobytes() == getattr(again, name).tobytes()


def test_names_in_the_file(tmp_path: Path) -> None:
    # The names that programs outside rely on.
    levelnet.write(helium_history(), tmp_path / "helium.h5")
    content = read_content(tmp_path / "helium.h5")
    for group in ("helium", "helium_ion"):
        names = {path.split("/")[1] for path in content.variables if path.startswith(f"{group}/")}
        wanted = {"n", "l", "statistical_weight", "energy", "population", "log_departure"}
        assert wanted <= names
        assert ("s" in names) == (group == "helium")
    groups = layout.groups_of(tuple(layout.SPECIES_GROUPS), with_helium=True)
    assert set(content.groups) == {group.name for group in groups}


def test_levels_of_helium() -> None:
    """Populations per hydrogen nucleus add up to the fractions; nothing is known in the cold."""
    history = helium_history()
    ratio = COSMOLOGY.helium_ratio()
    for name, fraction in (
        ("He I", history.neutral_helium_fraction),
        ("He II", history.singly_ionized_helium_fraction),
    ):
        total = history.populations(name).sum(axis=1)
        # Fractions count ground states; above, where there is next to no He I, many are excited.
        late = history.redshift <= 3500.0
        np.testing.assert_allclose(total[late], ratio * fraction[late], rtol=1e-6)
    cold = history.radiation_temperature_k < 1400.0
    assert np.isnan(history.log_departures("He I")[cold]).all()
    assert np.isfinite(history.log_departures("He I")[~cold]).all()
    assert set(history.levels("He I").spin.tolist()) == {0, 1}
    with pytest.raises(InputError, match="two levels for each n and l"):
        departure_map_figure(history, 2500.0, "He I")


# ---- wrong input


def test_no_helium_in_the_universe_is_hydrogen_alone() -> None:
    bare = levelnet.Cosmology(68.0, 0.0224, 0.142, helium_mass_fraction=0.0)
    grid = {"redshift_start": 3000.0, "redshift_end": 800.0, "n_redshifts": 6}
    with_levels, without = (
        solve(Setup(bare, {"n_max": 4}, {"n_max": n}, grid=grid)) for n in (4, 0)
    )
    assert with_levels.helium is None
    assert with_levels.notes[0] == "there is no helium: [helium] and its lines change nothing"
    assert without.notes[0] == "there is no helium"
    assert with_levels.free_electron_fraction.tobytes() == without.free_electron_fraction.tobytes()


@pytest.mark.parametrize(
    ("parts", "text"),
    [
        ({"helium": {"n_max": 1}}, "helium: n_max = 1: allowed: 0 .inert. or 2 to 100"),
        ({"helium": {"n_max": 101}}, "allowed: 0 .inert. or 2 to 100"),
        ({"helium": {"n_max": 0, "helium_ion": "saha"}}, "helium_ion: helium is inert"),
        (
            {"helium": {"n_max": 0}, "lines": {"helium": "sobolev"}},
            "lines.helium: helium is inert with helium.n_max = 0",
        ),
        (
            {"helium": {"n_max": 0}, "lines": {"helium_higher_lines": "free"}},
            "lines.helium_higher_lines: helium is inert",
        ),
        (
            {"lines": {"helium_continuum": {"feedback": True}}},
            'helium_continuum: only with helium = "continuum"',
        ),
        (
            {"helium": {"n_max": 2}, "lines": {"helium_higher_lines": "feedback"}},
            'helium_higher_lines = "feedback": with helium.n_max = 2 there is no line',
        ),
        (
            {"helium": {"n_max": 2}, "lines": {"helium_higher_lines": "free"}},
            'helium_higher_lines = "free": with helium.n_max = 2 .* allowed from helium.n_max = 3',
        ),
        ({"helium": {"two_photon_rate_per_s": -1.0}}, "two_photon_rate_per_s = -1.0"),
        ({"helium": {"intercombination_rate_per_s": math.nan}}, "intercombination_rate_per_s"),
        ({"helium": {"helium_ion": "levels"}}, "helium_ion = 'levels'"),
    ],
)
def test_wrong_setup_is_one_line(parts: dict[str, dict[str, object]], text: str) -> None:
    with pytest.raises(InputError, match=text) as caught:
        helium_setup(**parts)
    assert "\n" not in str(caught.value)


def test_helium_above_one_is_refused() -> None:
    with pytest.raises(InputError, match=r"helium_mass_fraction = 1.2"):
        levelnet.Cosmology(68.0, 0.0224, 0.142, helium_mass_fraction=1.2)


def test_every_output_was_delivered() -> None:
    assert helium_history().redshift.tolist() == sorted(REDSHIFTS, reverse=True)
