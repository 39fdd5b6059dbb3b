"""H and He histories against `tests/reference/helium_trial`.

That trial was computed independently in the repository and shares no code with the package: plain
level lists, whole rate matrices, scipy's Radau. Wanted of x_e: 5e-4 with Sobolev's lines, 3e-3 with
the continuum of H I inside them. The bounds here are tighter, a few times the largest difference
seen, which stands beside each.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import numpy as np
import pytest

from levelnet.background import cosmology as package
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from levelnet.pieces import MemoryPieces
from tests.reference.helium_trial.atoms import HE_PUBLISHED, neutral_helium
from tests.reference.helium_trial.background import Array, Cosmology
from tests.reference.helium_trial.history import Trial
from tests.reference.helium_trial.ion import electrons_of_helium_ion
from tests.reference.helium_trial.lines import line_escape
from tests.reference.helium_trial.waves import burgess, hydrogen_dipoles

# Two invented universes: h, Omega_b h^2, Omega_cdm h^2, T_0 in K, Y_p, N_eff.
COSMOLOGIES = {
    "plain": Cosmology(0.68, 0.0224, 0.1196, 2.7255, 0.245, 3.046),
    "heavy": Cosmology(0.72, 0.0265, 0.105, 2.70, 0.265, 3.5),
}
REDSHIFTS = np.array(
    [3500.0, 3000.0, *np.arange(2800.0, 2050.0, -100.0), *np.arange(2000.0, 1590.0, -50.0)]
)
ION_REDSHIFTS = np.array([7000.0, 6500.0, 6200.0, 6000.0, 5800.0, 5600.0, 5400.0, 5000.0, 4500.0])
_PIECES = MemoryPieces()


def electrons(name: str, n_max: int, redshifts: Array, **lines: Any) -> Array:
    """x_e of the package at descending redshifts."""
    one = COSMOLOGIES[name]
    setup = Setup(
        cosmology=package.Cosmology(
            hubble_km_s_mpc=100.0 * one.h,
            baryon_density_h2=one.omega_b,
            matter_density_h2=one.omega_b + one.omega_cdm,
            cmb_temperature_k=one.t0,
            helium_mass_fraction=one.y_p,
            effective_neutrinos=one.n_eff,
        ),
        hydrogen={"n_max": 10, "energies": "nonrelativistic"},
        helium={"n_max": n_max},
        lines=lines,
        grid={
            "redshift_start": float(redshifts[0]),
            "redshift_end": float(redshifts[-1]),
            "redshifts": tuple(redshifts.tolist()),
        },
    )
    return solve(setup, pieces=_PIECES).free_electron_fraction


@lru_cache(maxsize=8)
def trial(name: str, n_max: int, **choices: Any) -> Array:
    return Trial(COSMOLOGIES[name], n_max, **choices).solve(REDSHIFTS)["x_e"]


@pytest.mark.slow
@pytest.mark.parametrize("name", COSMOLOGIES)
@pytest.mark.parametrize("n_max", [4, 10])
@pytest.mark.parametrize("higher", ["closed", "free"])
def test_sobolev_lines(name: str, n_max: int, higher: str) -> None:
    """Largest difference 8e-6."""
    found = electrons(name, n_max, REDSHIFTS, helium="sobolev", helium_higher_lines=higher)
    np.testing.assert_allclose(found, trial(name, n_max, higher=higher), rtol=3e-5)


@pytest.mark.slow
def test_bar_would_notice() -> None:
    """2 3P taken whole in place of its J = 1, a common mistake, is worth more than 5e-4 of x_e."""
    found = electrons("plain", 4, REDSHIFTS, helium="sobolev")
    wrong = trial("plain", 4, intercombination=3.0 * 177.6)
    assert np.max(np.abs(found / wrong - 1.0)) > 1e-3


@pytest.mark.slow
def test_feedback_with_sobolev_lines() -> None:
    """Largest difference 1.1e-4, of an effect of 6e-3; the trial repeats the history thrice."""
    found = electrons("plain", 4, REDSHIFTS, helium="sobolev_feedback")
    np.testing.assert_allclose(found, trial("plain", 4, feedback_rounds=3), rtol=3e-4)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("name", "n_max", "redistribution", "bound"),
    [
        ("plain", 4, "doppler", 1e-4),
        ("plain", 4, "partial", 1e-4),
        ("heavy", 4, "partial", 1e-4),
        ("plain", 10, "partial", 1e-4),
        ("plain", 4, "complete", 3e-3),
    ],
)
def test_continuum_inside_lines(name: str, n_max: int, redistribution: str, bound: float) -> None:
    """Largest differences 2e-5; with complete redistribution 2e-3, see the next test."""
    inside = {"redistribution": redistribution, "feedback": False}
    found = electrons(name, n_max, REDSHIFTS, helium="continuum", helium_continuum=inside)
    np.testing.assert_allclose(found, trial(name, n_max, wings=redistribution), rtol=bound)


@pytest.mark.slow
def test_complete_redistribution_differs_by_the_far_wings() -> None:
    """The trial ends them at 0.2 in ln nu, the package where they are thin; at 5: 8e-5."""
    inside = {"redistribution": "complete", "feedback": False}
    found = electrons("plain", 4, REDSHIFTS, helium="continuum", helium_continuum=inside)
    far = trial("plain", 4, wings="complete", reach=5.0)
    np.testing.assert_allclose(found, far, rtol=2e-4)


@pytest.mark.slow
def test_continuum_and_feedback() -> None:
    """Largest difference 2e-5, of an effect of 1.2e-3."""
    inside = {"redistribution": "partial", "feedback": True}
    found = electrons("plain", 4, REDSHIFTS, helium="continuum", helium_continuum=inside)
    both = trial("plain", 4, wings="partial", feedback_rounds=2)
    np.testing.assert_allclose(found, both, rtol=1e-4)


@pytest.mark.slow
@pytest.mark.parametrize("name", COSMOLOGIES)
def test_helium_ion(name: str) -> None:
    """Largest difference 2e-7, where Saha equilibrium is 2e-3 off."""
    wanted, equilibrium = electrons_of_helium_ion(COSMOLOGIES[name], 10, ION_REDSHIFTS)
    assert np.max(np.abs(equilibrium / wanted - 1.0)) > 1e-3
    np.testing.assert_allclose(electrons(name, 10, ION_REDSHIFTS), wanted, rtol=2e-6)


def test_trial_of_published_rates(monkeypatch: pytest.MonkeyPatch) -> None:
    """Published: A values of He I (NIST); the Coulomb approximation is within 4 per cent."""
    published = dict(HE_PUBLISHED)
    monkeypatch.setattr("tests.reference.helium_trial.atoms.HE_PUBLISHED", {})
    atom = neutral_helium(4)
    for (upper, lower, spin), rate in published.items():
        found = atom.einstein_a[atom.index(*upper, spin), atom.index(*lower, spin)]
        assert found == pytest.approx(rate, rel=0.04)


def test_trial_of_hydrogen() -> None:
    """Published closed forms: Stobbe 1930 (2s, 2p at threshold), Bethe & Salpeter 1957 (3d-2p)."""
    threshold = burgess(2, np.array([1e-9]))[:, 0]
    unit = 2.0**14 * np.pi**2 / 3.0 * np.exp(-8.0) * 7.2973525643e-3 * 5.29177210544e-9**2
    np.testing.assert_allclose(threshold, unit * np.array([4.0, 11.0 / 3.0]), rtol=1e-6)
    assert hydrogen_dipoles(3, 2)[2, 1] ** 2 == pytest.approx(2**22 * 3**8 / 5**13, rel=1e-12)


@pytest.mark.parametrize("tau", [0.1, 3.0, 1e3, 1e6])
def test_trial_without_continuum(tau: float) -> None:
    """Published: Sobolev's escape, (1 - e^-tau)/tau, on the grid with its wings."""
    assert line_escape(tau, 0.0, 1.6e-5, 3e-8) == pytest.approx(-np.expm1(-tau) / tau, rel=1e-9)
