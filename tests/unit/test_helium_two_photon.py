"""Two-photon decay of 2 1S of He I against the published distribution and direct integrals."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from levelnet import constants as const
from levelnet.atomic import helium_two_photon as module
from levelnet.atomic.helium_two_photon import (
    helium_two_photon_factor,
    helium_two_photon_profile,
    helium_two_photon_slope,
    transition_energy_ev,
)
from levelnet.atomic.species import TWO_PHOTON_PER_S
from levelnet.errors import RangeError
from levelnet.tables import read_table


def test_profile_against_the_published_values() -> None:
    # Derevianko & Johnson 1997, Phys. Rev. A 56, 1288: 5 decimals; the form meets them to 1e-4.
    numbers = read_table("helium/two_photon_distribution").numbers
    got = helium_two_photon_profile(numbers["y"])
    np.testing.assert_allclose(got, numbers["distribution"], atol=1e-4)


def test_form_normalizes_itself() -> None:
    # The fit knows nothing of the normalization, and only half of its range: that the published
    # values, continued by the form, integrate to 1 is a check of the half that is not published.
    assert module._total() == pytest.approx(1.0, abs=1e-4)


def test_form_predicts_what_it_was_not_shown(monkeypatch: pytest.MonkeyPatch) -> None:
    # Without the values at y = 0.20 and 0.25, those are met to 2e-4.
    numbers = read_table("helium/two_photon_distribution").numbers
    w, published = numbers["y"] * (1 - numbers["y"]), numbers["distribution"]
    amplitude = np.sqrt(published / w**3)
    weight = (2 * published / amplitude)[:6]
    found = np.linalg.lstsq(module._poles(w[:6]) * weight[:, None], amplitude[:6] * weight)[0]
    predicted = w**3 * (module._poles(w) @ found) ** 2
    np.testing.assert_allclose(predicted[6:], published[6:], rtol=2e-4)


def test_profile_is_symmetric_and_normalized() -> None:
    y = np.linspace(0.0, 1.0, 41)
    np.testing.assert_allclose(
        helium_two_photon_profile(y), helium_two_photon_profile(1 - y), rtol=1e-9, atol=1e-12
    )
    assert quad(helium_two_photon_profile, 0, 0.5)[0] == pytest.approx(1.0, rel=1e-10)
    assert helium_two_photon_profile(0.0) == 0.0
    assert np.all(np.diff(helium_two_photon_profile(y[:21])) > 0)


def test_energy_and_rate() -> None:
    # 0.757481 hartree, 601.512 Angstrom (Derevianko & Johnson 1997; calculated, 1.8e-4 off the
    # measured 601.404 Angstrom, 166277.44 cm^-1).
    assert transition_energy_ev() == pytest.approx(0.757481 * 2 * const.RYDBERG_EV, rel=2e-4)
    planck = const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S * 1e8
    assert planck / transition_energy_ev() == pytest.approx(601.404, abs=1e-3)
    # Lifetime of 2 1S: 19.7 +- 1.0 ms, measured (Van Dyck, Johnson & Shugart 1971, Phys. Rev. A 4,
    # 1327; from memory). Another calculation: 51.3 per s, 0.6 per cent off (Drake, Victor &
    # Dalgarno 1969; from memory).
    assert abs(1e3 / TWO_PHOTON_PER_S - 19.7) < 1.0
    assert pytest.approx(51.3, rel=0.006) == TWO_PHOTON_PER_S


@pytest.mark.parametrize("temperature_k", [500.0, 5000.0, 2e4, 1e5])
def test_stimulated_factor_against_the_direct_integral(temperature_k: float) -> None:
    u = transition_energy_ev() / (const.BOLTZMANN_EV_K * temperature_k)

    def direct(y: float) -> float:
        stimulated = 1 / (np.expm1(-u * y) * np.expm1(-u * (1 - y)))
        return float(helium_two_photon_profile(y) * stimulated)

    expected = quad(direct, 0, 0.5, epsabs=1e-13, epsrel=1e-12, limit=200)[0]
    assert helium_two_photon_factor(temperature_k) == pytest.approx(expected, rel=1e-8)


def test_slope_is_the_derivative() -> None:
    for temperature in (3000.0, 2e4):
        step = 1e-3
        up, down = (
            np.log(helium_two_photon_factor(temperature * np.exp(side * step))) for side in (1, -1)
        )
        slope = helium_two_photon_slope(temperature)
        assert slope == pytest.approx((up - down) / (2 * step), rel=1e-5)


def test_limits_of_temperature() -> None:
    assert helium_two_photon_factor(1.0) == pytest.approx(1.0, abs=1e-12)
    with pytest.raises(RangeError, match="temperature_k = 1e"):
        helium_two_photon_factor(1e7)
    with pytest.raises(RangeError, match=r"y = -0\.1"):
        helium_two_photon_profile(-0.1)
