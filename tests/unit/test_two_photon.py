"""Two-photon decay 2s -> 1s against closed forms in mpmath and against published figures."""

import functools
import itertools

import mpmath as mp
import numpy as np
import pytest
from scipy.integrate import quad

from levelnet import constants as const
from levelnet.atomic import two_photon
from levelnet.atomic.levels import ionization_scale_ev, reduced_mass_ratio
from levelnet.errors import InputError, RangeError

ENERGY_EV = 0.75 * ionization_scale_ev()


# An independent road to the matrix element: the sum over bound p states and the integral over the
# continuum, with the dipole integrals in closed form (Bethe & Salpeter 1957, sec. 63 and 71, from
# memory), instead of a finite basis.


def _bound_product(n):
    """R(1s,np) R(np,2s) in Bohr radii squared, for n >= 3 (both positive)."""
    ground = 2**8 * n**7 * (n - 1) ** (2 * n - 5) / (n + 1) ** (2 * n + 5)
    excited = 2**17 * n**7 * (n**2 - 1) * (n - 2) ** (2 * n - 6) / (n + 2) ** (2 * n + 6)
    return mp.sqrt(ground * excited)


def _continuum_product(k):
    """The same per hartree at electron momentum k: the bound form continued to n = i/k."""
    angle = (mp.atan(k) + mp.atan(2 * k)) / k
    shape = mp.mpf(2) ** 12.5 / ((1 + k**2) ** 2 * (1 + 4 * k**2) ** 3)
    return shape * mp.exp(-2 * angle) / (1 - mp.exp(-2 * mp.pi / k))


@functools.cache
def _at_precision(function, argument, precision):
    """Keep the values that do not depend on y, apart for each working precision of mpmath."""
    del precision
    return function(argument)


def _profile(y):
    """Profile dA/dy in s^-1 for an infinitely heavy nucleus."""
    gap = mp.mpf(3) / 8

    def propagator(energy):
        excess = energy + mp.mpf(1) / 8
        return 1 / (excess + gap * y) + 1 / (excess + gap * (1 - y))

    def bound(n):
        return _at_precision(_bound_product, n, mp.mp.prec) * propagator(-1 / (2 * n**2))

    # R(1s,2p) = 128 sqrt(6)/243 and R(2p,2s) = -3 sqrt(3).
    first = -128 * mp.sqrt(6) / 243 * 3 * mp.sqrt(3) * propagator(-mp.mpf(1) / 8)
    rest = mp.nsum(bound, [3, mp.inf], method="euler-maclaurin")

    def ionized(k):
        return k * _at_precision(_continuum_product, k, mp.mp.prec) * propagator(k**2 / 2)

    matrix = first + rest + mp.quad(ionized, [0, 0.5, 1, 2, 6, mp.inf])
    scale = 8 / (27 * mp.pi) * mp.mpf(const.FINE_STRUCTURE) ** 6 / mp.mpf(const.ATOMIC_TIME_S)
    return scale * gap**7 * (y * (1 - y)) ** 3 * matrix**2


def test_profile_equals_the_explicit_sum_over_states():
    with mp.workdps(20):
        y = [mp.mpf(value) for value in ("0.001", "0.05", "0.3", "0.5", "0.9")]
        expected = np.array([float(_profile(one)) for one in y])
    got = two_photon.two_photon_profile(np.array([float(one) for one in y]))
    np.testing.assert_allclose(got, expected * reduced_mass_ratio(), rtol=1e-11)


def test_total_equals_the_explicit_sum_over_states():
    # Gauss-Legendre on half the symmetric profile; 16 and 12 points agree to 1e-11.
    with mp.workdps(20):
        nodes, weights = np.polynomial.legendre.leggauss(12)
        values = [float(_profile(mp.mpf(float(node + 1) / 4))) for node in nodes]
    total = 0.25 * float(weights @ values)
    assert two_photon.two_photon_rate() == pytest.approx(total * reduced_mass_ratio(), rel=1e-9)


def test_profile_integrates_to_twice_the_total():
    integral, _ = quad(two_photon.two_photon_profile, 0.0, 1.0, epsrel=1e-13)
    assert integral == pytest.approx(2.0 * two_photon.two_photon_rate(), rel=1e-12)


def test_published_totals():
    infinite_mass = two_photon.two_photon_rate() / reduced_mass_ratio()
    # Klarsfeld 1969, Phys. Lett. A 30, 382: 8.2293 (from memory).
    assert infinite_mass == pytest.approx(8.2293, abs=6e-5)
    # Spitzer & Greenstein 1951, ApJ 114, 407: 8.227 (from memory), by hand.
    assert two_photon.two_photon_rate() == pytest.approx(8.227, rel=5e-4)
    # Nussbaumer & Schmutz 1984, A&A 138, 495: 8.2249 (from memory).
    assert two_photon.two_photon_rate() == pytest.approx(8.2249, abs=6e-5)


def test_spitzer_greenstein_integral():
    # Spitzer & Greenstein 1951: A(y) = (9 alpha^6 c R/2^10) psi(y) with int psi dy = 3.770 (from
    # memory), for an infinitely heavy nucleus.
    scale = 9.0 / 2**10 * const.FINE_STRUCTURE**6
    scale *= const.SPEED_OF_LIGHT_CM_S * const.RYDBERG_PER_CM
    integral, _ = quad(two_photon.two_photon_profile, 0.0, 1.0)
    assert integral / reduced_mass_ratio() / scale == pytest.approx(3.770, abs=6e-4)


def test_nussbaumer_schmutz_fit():
    # Nussbaumer & Schmutz 1984, A&A 138, 495 (from memory): good to 0.5 %.
    y = np.linspace(0.01, 0.99, 99)
    u = y * (1.0 - y)
    fit = 202.0 * (u * (1.0 - (4.0 * u) ** 0.8) + 0.88 * u**1.53 * (4.0 * u) ** 0.8)
    got = two_photon.two_photon_profile(y) / reduced_mass_ratio()
    np.testing.assert_allclose(got, fit, rtol=5e-3)


def test_profile_is_symmetric_and_vanishes_at_the_ends():
    y = np.random.default_rng(1).uniform(0.0, 0.5, 200)
    got = two_photon.two_photon_profile(y)
    np.testing.assert_allclose(got, two_photon.two_photon_profile(1.0 - y), rtol=1e-13)
    assert np.all(got > 0.0)
    np.testing.assert_array_equal(two_photon.two_photon_profile(np.array([0.0, 1.0])), 0.0)


def test_small_y_slope():
    # Closed form: only the degenerate 2p counts, |R(1s,2p) R(2p,2s)|^2 = 32768/729.
    slope = 8 / (27 * np.pi) * const.FINE_STRUCTURE**6 * 0.375**5 * 32768 / 729
    slope *= reduced_mass_ratio() / const.ATOMIC_TIME_S
    assert two_photon.two_photon_profile(1e-12) / 1e-12 == pytest.approx(slope, rel=1e-10)


def test_profile_keeps_the_shape():
    assert two_photon.two_photon_profile(np.full((3, 2), 0.2)).shape == (3, 2)
    assert np.shape(two_photon.two_photon_profile(0.2)) == ()


@pytest.mark.parametrize("y", [-1e-9, 1.0000001, np.nan, np.inf])
def test_profile_refuses_y_outside_its_range(y):
    with pytest.raises(RangeError, match="from 0 to 1"):
        two_photon.two_photon_profile(np.array([0.5, y]))


def test_charge():
    # Scaling of the rate with nuclear charge: Z^6, and the reduced mass (Breit & Teller 1940).
    ratio = two_photon.two_photon_rate(2) / two_photon.two_photon_rate(1)
    assert ratio == pytest.approx(64.0 * reduced_mass_ratio(2) / reduced_mass_ratio(1), rel=1e-14)
    with pytest.raises(InputError, match="charge = 31"):
        two_photon.two_photon_rate(31)


def _factor_by_quadrature(temperature_k):
    """The definition as it stands, by scipy's adaptive quadrature."""
    ratio = ENERGY_EV / (const.BOLTZMANN_EV_K * temperature_k)

    def integrand(y):
        stimulated = 1.0 / -np.expm1(-ratio * y) / -np.expm1(-ratio * (1.0 - y))
        return float(two_photon.two_photon_profile(y)) * stimulated

    knee = min(0.25, 1.0 / ratio)
    edges = [0.0, knee, min(0.5, 10.0 * knee), min(0.5, 45.0 * knee), 0.5]
    parts = [quad(integrand, a, b, epsrel=1e-13)[0] for a, b in itertools.pairwise(edges)]
    return sum(parts) / two_photon.two_photon_rate()


@pytest.mark.parametrize(
    "temperature_k", [1.0, 2.7255, 100.0, 1000.0, 2950.0, 2965.0, 3000.0, 4600.0, 1e4, 3e4, 1e6]
)
def test_stimulated_factor_equals_its_definition(temperature_k):
    got = two_photon.stimulated_two_photon_factor(temperature_k, ENERGY_EV)
    assert got == pytest.approx(_factor_by_quadrature(temperature_k), rel=1e-12)


def test_stimulated_factor_in_a_cold_field():
    # Closed form for phi = slope y: the excess is slope (pi^2/6) (kT/E)^2/Lambda.
    slope = two_photon.two_photon_profile(1e-12) / 1e-12 / two_photon.two_photon_rate()
    expected = slope * np.pi**2 / 6.0 * (const.BOLTZMANN_EV_K * 1.0 / ENERGY_EV) ** 2
    excess = two_photon.stimulated_two_photon_factor(1.0, ENERGY_EV) - 1.0
    assert excess == pytest.approx(expected, rel=1e-4)
    assert two_photon.stimulated_two_photon_factor(1e-3, ENERGY_EV) == pytest.approx(1.0, abs=1e-14)


@pytest.mark.parametrize("temperature_k", [1.0, 30.0, 1500.0, 2957.0, 3000.0, 4600.0, 3e4, 1e6])
def test_stimulated_slope_is_the_derivative(temperature_k):
    # The derivative of the definition under the integral, by scipy's adaptive quadrature.
    ratio = ENERGY_EV / (const.BOLTZMANN_EV_K * temperature_k)

    def integrand(y):
        first, second = ratio * y, ratio * (1.0 - y)
        stimulated = 1.0 / -np.expm1(-first) / -np.expm1(-second)
        growth = first * np.exp(-first) / -np.expm1(-first)
        growth += second * np.exp(-second) / -np.expm1(-second)
        return float(two_photon.two_photon_profile(y)) * stimulated * growth

    knee = min(0.25, 1.0 / ratio)
    edges = [0.0, knee, min(0.5, 10.0 * knee), min(0.5, 45.0 * knee), 0.5]
    parts = [quad(integrand, a, b, epsrel=1e-13)[0] for a, b in itertools.pairwise(edges)]
    derivative = sum(parts) / two_photon.two_photon_rate()
    expected = derivative / two_photon.stimulated_two_photon_factor(temperature_k, ENERGY_EV)
    got = two_photon.stimulated_two_photon_slope(temperature_k, ENERGY_EV)
    assert got == pytest.approx(expected, rel=1e-10)


def test_stimulated_factor_over_an_array():
    temperature_k = np.array([[1.0, 300.0, 3000.0], [4000.0, 1e4, 3e4]])
    for function in (
        two_photon.stimulated_two_photon_factor,
        two_photon.stimulated_two_photon_slope,
    ):
        one_by_one = [[function(t, ENERGY_EV) for t in row] for row in temperature_k]
        np.testing.assert_allclose(function(temperature_k, ENERGY_EV), one_by_one, rtol=1e-14)


@pytest.mark.parametrize("temperature_k", [0.0, -5.0, 1e7, np.nan])
def test_stimulated_factor_refuses_bad_temperatures(temperature_k):
    with pytest.raises(RangeError, match="temperature_k"):
        two_photon.stimulated_two_photon_factor(temperature_k, ENERGY_EV)
    with pytest.raises(RangeError, match="temperature_k"):
        two_photon.stimulated_two_photon_slope(np.array([3000.0, temperature_k]), ENERGY_EV)


@pytest.mark.parametrize("energy_ev", [0.0, -10.2, np.nan, np.inf])
def test_stimulated_factor_refuses_bad_energies(energy_ev):
    with pytest.raises(RangeError, match="transition_energy_ev"):
        two_photon.stimulated_two_photon_factor(3000.0, energy_ev)
