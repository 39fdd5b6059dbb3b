"""Photoionization and recombination against closed forms, wave functions and published tables."""

from __future__ import annotations

from functools import partial
from math import factorial
from typing import Any

import mpmath
import numpy as np
import pytest
from scipy import constants as codata
from scipy.integrate import quad
from scipy.special import gamma

from levelnet.arrays import FloatArray
from levelnet.atomic.bound_free import (
    bound_free,
    electron_grid,
    maxwell_factor,
    photoionization_cross_section,
    photoionization_rate,
    recombination_coefficient,
    recombination_weights,
    thermal_volume_cm3,
)
from levelnet.atomic.hydrogenic import log_continuum_start
from levelnet.atomic.radiation import planck_occupation
from levelnet.errors import InputError
from levelnet.kernels import radial
from tests.tolerances import CROSS_SECTION, ROUND_OFF, published

# What the rule over the electron energy is built for.
RECOMBINATION = 1e-10
PROTON_RATIO = codata.physical_constants["electron-proton mass ratio"][0]
ALPHA_RATIO = codata.physical_constants["alpha particle-electron mass ratio"][0]
REDUCED_MASS = 1 / (1 + PROTON_RATIO)  # of hydrogen, in electron masses
BOHR_RADIUS_CM = 100 * codata.physical_constants["Bohr radius"][0] / REDUCED_MASS
CHI_J = codata.Rydberg * codata.h * codata.c * REDUCED_MASS
SPEED_CM_S = 100 * codata.c


def stobbe(level: tuple[int, int], k: FloatArray) -> FloatArray:
    """Stobbe 1930, Ann. Phys. 7, 661 (from memory), in cm^2."""
    n = level[0]
    with np.errstate(divide="ignore", invalid="ignore"):
        phase = np.where(k > 0, np.arctan(n * k) / k, n)
        damping = np.exp(-4 * phase) / -np.expm1(-2 * np.pi / k)
    x = 1 / (1 + (n * k) ** 2)
    shape = {
        (1, 0): 2**9 * x**4,
        (2, 0): 2**14 * x**4 * (1 + 3 * x),
        (2, 1): 2**14 * x**5 * (1 + 8 * x / 3),
    }[level]
    return np.pi**2 / 3 * codata.fine_structure * BOHR_RADIUS_CM**2 * shape * damping


@pytest.mark.parametrize("level", [(1, 0), (2, 0), (2, 1)])
def test_closed_forms(level: tuple[int, int]) -> None:
    k = np.array([0.0, 1e-7, 1e-3, 0.3, 1.0, 3.0, 9.9])
    computed = photoionization_cross_section(*level, k**2)
    np.testing.assert_allclose(computed, stobbe(level, k), rtol=5 * ROUND_OFF)


@pytest.mark.parametrize(
    ("n", "l", "k"),
    [
        (1, 0, 0.3),
        (3, 1, 0.5),
        (4, 2, 0.2),
        pytest.param(2, 1, 1.0, marks=pytest.mark.slow),
        pytest.param(5, 4, 0.3, marks=pytest.mark.slow),
        pytest.param(6, 0, 0.4, marks=pytest.mark.slow),
    ],
)
def test_against_coulomb_wave_functions(n: int, l: int, k: float) -> None:
    # sigma = (4 pi^2 alpha/3) omega sum of l_>/(2l+1) |int P_nl r P_kl' dr|^2 a0^2 with P_kl'
    # normalized per Hartree (Bethe & Salpeter 1957; from memory), the wave functions from mpmath.
    norm = mpmath.sqrt(
        (mpmath.mpf(2) / n) ** 3 * mpmath.factorial(n - l - 1) / (2 * n * mpmath.factorial(n + l))
    )

    def integrand(other: int, r: Any) -> Any:
        rho = 2 * r / n
        bound = norm * mpmath.exp(-rho / 2) * rho**l * mpmath.laguerre(n - l - 1, 2 * l + 1, rho)
        free = mpmath.sqrt(2 / (mpmath.pi * k)) * mpmath.coulombf(other, -1 / mpmath.mpf(k), k * r)
        return bound * r**2 * free

    panels = list(np.linspace(0.0, 3.5 * n**2 + 35.0 * n, 2 * n + 3))
    strength = mpmath.mpf(0)
    for other in (l - 1, l + 1) if l else (1,):
        integral = mpmath.quad(partial(integrand, other), panels)
        strength += max(l, other) * integral**2 / (2 * l + 1)
    omega = (1 / n**2 + k**2) / 2
    expected = (
        4 * np.pi**2 * codata.fine_structure / 3 * omega * BOHR_RADIUS_CM**2 * float(strength)
    )
    # mpmath works with 15 digits here, and the integrands oscillate.
    assert photoionization_cross_section(n, l, k**2) == pytest.approx(expected, rel=1e-10)


def burgess(n: int, k: Any) -> list[Any]:
    """Cross sections of all l over 4 pi alpha a0^2/3, by Burgess 1965, Mem. R. Astron. Soc. 69, 1.

    Three-term recurrences in l (from memory), in mpmath, from the closed form of l = n - 1.
    """
    k, k2 = mpmath.mpf(k), mpmath.mpf(k) ** 2
    top = 1 + n**2 * k2
    root = mpmath.sqrt
    start = root(mpmath.pi / (2 * mpmath.factorial(2 * n - 1))) * 4 * mpmath.mpf(4 * n) ** n
    start *= mpmath.exp(-2 * mpmath.atan(n * k) / k) / top ** (n + 2)
    product = mpmath.fprod(1 + s**2 * k2 for s in range(1, n + 1))
    start *= root(product / (1 - mpmath.exp(-2 * mpmath.pi / k)))
    up = {n: mpmath.mpf(0), n - 1: start, n - 2: root((2 * n - 1) * top) * start / 2}
    down = {n - 1: root(top / (1 + (n - 1) ** 2 * k2)) * start / (2 * n)}
    down[n - 2] = (4 + (n - 1) * top) / (2 * n) * root((2 * n - 1) / (1 + (n - 2) ** 2 * k2))
    down[n - 2] *= down[n - 1]
    for l in range(n - 1, 1, -1):
        value = (4 * n**2 - 4 * l**2 + l * (2 * l - 1) * top) * up[l - 1]
        value -= 2 * n * root((n**2 - l**2) * (1 + (l + 1) ** 2 * k2)) * up[l]
        up[l - 2] = value / (2 * n * root((n**2 - (l - 1) ** 2) * (1 + l**2 * k2)))
    for l in range(n - 2, 1, -1):
        value = (4 * n**2 - 4 * l**2 + l * (2 * l + 1) * top) * down[l]
        value -= 2 * n * root((n**2 - (l + 1) ** 2) * (1 + l**2 * k2)) * down[l + 1]
        down[l - 1] = value / (2 * n * root((n**2 - l**2) * (1 + (l - 1) ** 2 * k2)))
    return [
        n**2 * top * ((l + 1) * up[l] ** 2 + (l * down[l] ** 2 if l else 0)) / (2 * l + 1)
        for l in range(n)
    ]


@pytest.mark.parametrize(
    ("n", "k", "tolerance"),
    [
        (20, 0.3, 1e-12),
        (100, 1e-4, 1e-12),
        (100, 3.0, 1e-11),
        (500, 1e-3, CROSS_SECTION),
        (500, 0.7, CROSS_SECTION),
        (1000, 0.002, CROSS_SECTION),
        (1000, 10.0, CROSS_SECTION),
    ],
)
def test_every_l_against_three_term_recurrences(n: int, k: float, tolerance: float) -> None:
    with mpmath.workdps(60):
        exact = np.array([float(value) for value in burgess(n, k)])
    exact *= 4 * np.pi / 3 * codata.fine_structure * BOHR_RADIUS_CM**2
    computed = photoionization_cross_section(n, np.arange(n), k * k)
    # Below 1e-300 (before the constant factor of 8e-19) the cross section is 0 by statement.
    seen = exact > 1e-310
    assert seen[0]
    np.testing.assert_allclose(computed[seen], exact[seen], rtol=tolerance)
    assert np.all(computed[~seen] < 1e-309)


def test_threshold_is_the_limit_of_small_energies() -> None:
    l = np.arange(500)
    threshold = photoionization_cross_section(500, l, 0.0)
    np.testing.assert_allclose(photoionization_cross_section(500, l, 1e-16), threshold, rtol=1e-8)
    assert np.all(threshold > 0.0)


@pytest.mark.parametrize("n", [30, 100, 400])
@pytest.mark.parametrize("u", [0.0, 1.0, 3.0])
def test_asymptotic_gaunt_factor(n: int, u: float) -> None:
    # Menzel & Pekeris 1935, MNRAS 96, 77 (from memory), with u = n^2 k^2; over the Kramers value
    # 64 pi alpha a0^2 n / (3 sqrt 3) (1 + u)^-3.
    l = np.arange(n)
    mean = np.sum((2 * l + 1) * photoionization_cross_section(n, l, u / n**2)) / n**2
    kramers = 64 * np.pi * codata.fine_structure * BOHR_RADIUS_CM**2 * n / (3 * np.sqrt(3))
    size = (n * (1 + u)) ** (-2 / 3)
    series = 1 + 0.1728 * (u - 1) * size - 0.0496 * (u * u + 4 * u / 3 + 1) * size**2
    # The neglected terms are of order 1/n^2, and the coefficients have four digits.
    neglected = 0.1 * size**3 * (1 + u) ** 3 + 5e-5 * size * (1 + u)
    assert mean / kramers * (1 + u) ** 3 == pytest.approx(series, abs=neglected)


def direct_recombination(n: int, l: int, kelvin: float, radiation: float | None) -> float:
    """Recombination coefficient by Gauss-Legendre panels in ln(energy), constants from scipy."""
    theta = codata.k * kelvin / CHI_J
    x, w = np.polynomial.legendre.leggauss(20)
    # The integrand has the scale kT, or that of the cross section, 1/n^2 to 1/n^3.
    edges = np.linspace(np.log(1e-14 * min(theta, 1 / n**3)), np.log(60 * theta), 61)
    half = np.diff(edges)[:, None] / 2
    energy = np.exp(edges[:-1, None] + half * (1 + x)).ravel()
    weight = (half * w).ravel() * energy
    nu = CHI_J / codata.h * (1 / n**2 + energy)
    enhancement = 1.0
    if radiation is not None:
        enhancement = 1 + 1 / np.expm1(codata.h * nu / (codata.k * radiation))
    sigma = photoionization_cross_section(n, l, energy)
    spectrum = 8 * np.pi * nu**2 / SPEED_CM_S**2 * sigma * enhancement * np.exp(-energy / theta)
    mass = codata.m_e * REDUCED_MASS
    volume = 1e6 * (codata.h**2 / (2 * np.pi * mass * codata.k * kelvin)) ** 1.5
    return float((2 * l + 1) * volume * np.sum(spectrum * weight) * CHI_J / codata.h)


@pytest.mark.parametrize("kelvin", [0.02, 1.0, 30.0, 3000.0, 3e4, 1e5])
@pytest.mark.parametrize(("n", "l"), [(1, 0), (2, 1), (20, 7), (100, 0), (500, 0), (500, 499)])
def test_the_rule_against_dense_quadrature(n: int, l: int, kelvin: float) -> None:
    for ratio in (None, 0.2, 1.0, 20.0):
        # A warm field over cold matter, and the other way round.
        radiation = None if ratio is None else max(ratio * kelvin, 0.02)
        if radiation is not None and 158e3 / n**2 / radiation > 600:
            continue  # no photons at all, and the reference would overflow
        expected = direct_recombination(n, l, kelvin, radiation)
        computed = recombination_coefficient(n, l, kelvin, radiation)
        assert computed == pytest.approx(expected, rel=RECOMBINATION)


def case_b(kelvin: float) -> float:
    """Sum over n >= 2, beyond n = 200 by the power law of the last shells."""
    top = 200
    n = np.repeat(np.arange(2, top + 1), np.arange(2, top + 1))
    l = np.concatenate([np.arange(k) for k in range(2, top + 1)])
    alpha = recombination_coefficient(n, l, kelvin)
    last, before = alpha[n == top].sum(), alpha[n == top - 20].sum()
    steepness = np.log(before / last) / np.log(top / (top - 20))
    return float(alpha.sum() + last * (top / (steepness - 1) - 0.5))


def test_case_b_against_the_published_table() -> None:
    # Hummer 1994, MNRAS 268, 109: sqrt(T) alpha_B in 1e-11 cm^3 s^-1 K^(1/2) (from memory), for
    # infinite nuclear mass: alpha(T) = (mu/m_e)^2 alpha_H(T mu/m_e), since lengths scale as 1/mu.
    table = {
        3.0: 4.700,
        3.2: 4.258,
        3.4: 3.823,
        3.6: 3.397,
        3.8: 2.983,
        4.0: 2.584,
        4.2: 2.204,
        4.4: 1.847,
    }
    for log_kelvin, expected in table.items():
        kelvin = 10.0**log_kelvin
        computed = case_b(kelvin * REDUCED_MASS) * REDUCED_MASS**2
        # Four published digits; the power-law tail is good to 1e-4 of the whole at 1000 K.
        assert np.sqrt(kelvin) * computed * 1e11 == pytest.approx(expected, rel=3e-4)


def test_textbook_coefficients_at_ten_thousand_kelvin() -> None:
    # Osterbrock & Ferland 2006, Astrophysics of Gaseous Nebulae, tables 2.1 and 2.7 (from memory).
    assert recombination_coefficient(2, 0, 1e4) == pytest.approx(2.34e-14, rel=published(3))
    assert recombination_coefficient(2, 1, 1e4) == pytest.approx(5.35e-14, rel=published(3))
    assert case_b(1e4) == pytest.approx(2.59e-13, rel=published(3))
    assert recombination_coefficient(1, 0, 1e4) == pytest.approx(1.58e-13, rel=published(3))


@pytest.mark.parametrize(
    ("n", "l", "kelvin"), [(1, 0, 2e4), (2, 0, 3000.0), (2, 1, 4000.0), (9, 4, 500.0)]
)
def test_photoionization_against_the_absorption_integral(n: int, l: int, kelvin: float) -> None:
    # The Milne relation: no second integral in the program, so here is one, by scipy.
    theta = codata.k * kelvin / CHI_J

    def integrand(x: float) -> float:
        nu = CHI_J / codata.h * (1 / n**2 + theta * x)
        sigma = photoionization_cross_section(n, l, theta * x)
        occupation = 1 / np.expm1(codata.h * nu / (codata.k * kelvin))
        return float(8 * np.pi * nu**2 / SPEED_CM_S**2 * sigma * occupation)

    parts = [quad(integrand, a, b, epsrel=1e-11, epsabs=0)[0] for a, b in ((0, 1), (1, 8), (8, 45))]
    expected = sum(parts) * theta * CHI_J / codata.h
    assert photoionization_rate(n, l, kelvin) == pytest.approx(expected, rel=RECOMBINATION)


def test_a_given_field_does_what_a_blackbody_does() -> None:
    def field(energy_ev: FloatArray) -> FloatArray:
        return planck_occupation(energy_ev, 3500.0)

    n, l = np.array([1, 2, 2, 30]), np.array([0, 0, 1, 12])
    np.testing.assert_allclose(
        photoionization_rate(n, l, occupation=field), photoionization_rate(n, l, 3500.0), rtol=1e-13
    )
    np.testing.assert_array_equal(
        recombination_coefficient(n, l, 900.0, occupation=field),
        recombination_coefficient(n, l, 900.0, 3500.0),
    )


@pytest.mark.parametrize("radiation", [None, 2800.0])
def test_whole_atom_gives_what_single_levels_give(radiation: float | None) -> None:
    atom = bound_free(12, charge=2)
    boltzmann = maxwell_factor(atom.grid, [50.0, 2500.0], charge=2)
    for n in (1, 5, 12):
        weight = 2.0 * np.arange(n)[:, None] + 1.0
        per_shell = recombination_weights(atom, radiation)[n - 1]
        spectrum = weight * atom.cross_section_cm2[n - 1] * per_shell
        whole = thermal_volume_cm3([50.0, 2500.0], charge=2)[:, None] * (boltzmann @ spectrum.T)
        single = recombination_coefficient(
            n, np.arange(n), np.array([[50.0], [2500.0]]), radiation, charge=2
        )
        # Sums of 100 terms in another order.
        np.testing.assert_allclose(whole, single, rtol=1e-13)
        assert not atom.cross_section_cm2[n - 1].flags.writeable


def test_scaling_with_charge() -> None:
    # Lengths as 1/(Z mu), energies as Z^2 mu: sigma as (Z mu)^-2, alpha as Z mu^-2 at equal kT/chi.
    ion, n, l = 1 / (1 + 1 / ALPHA_RATIO), np.array([1, 3, 40]), np.array([0, 2, 7])
    mass = ion / REDUCED_MASS
    np.testing.assert_allclose(
        photoionization_cross_section(n, l, 0.1, charge=2),
        photoionization_cross_section(n, l, 0.1) / (4 * mass**2),
        rtol=ROUND_OFF,
    )
    np.testing.assert_allclose(
        recombination_coefficient(n, l, 4 * mass * 5000.0, 4 * mass * 3000.0, charge=2),
        recombination_coefficient(n, l, 5000.0, 3000.0) * 2 / mass**2,
        rtol=1e-12,
    )


def test_stimulated_part_vanishes_with_the_field() -> None:
    n, l = np.array([1, 2, 50]), np.array([0, 1, 20])
    spontaneous = recombination_coefficient(n, l, 300.0)
    np.testing.assert_allclose(
        recombination_coefficient(n, l, 300.0, 0.02), spontaneous, rtol=1e-12
    )
    assert np.all(recombination_coefficient(n[2], l[2], 300.0, 3000.0) > 5 * spontaneous[2])


def test_the_rule_is_small_and_positive() -> None:
    grid = electron_grid()
    assert len(grid.energy) == len(grid.weight) == 100
    assert np.all(np.diff(grid.energy) > 0)
    assert np.all(grid.weight > 0)
    # int x^p exp(-x) dx = p!, in units of kT = 0.01 chi. The error of the trapezoid rule in ln(x)
    # is twice the Fourier transform of the integrand at the spacing, |Gamma(p + 1 + 2 pi i/h)|
    # (Trefethen & Weideman 2014, SIAM Rev. 56, 385).
    x = grid.energy / 0.01
    frequency = 2 * np.pi / np.log(x[1] / x[0])
    for power in range(4):
        total = np.sum(grid.weight / 0.01 * x**power * np.exp(-x))
        predicted = 2 * abs(gamma(power + 1 + 1j * frequency))
        assert abs(total - factorial(power)) < 1.01 * predicted + 1e-13 * factorial(power)
    assert 2 * abs(gamma(1 + 1j * frequency)) < RECOMBINATION


def test_kernel_against_its_own_source() -> None:
    energy = np.array([0.0, 1e-9, 0.04, 4.0, 100.0])
    kernel: Any = radial.bound_free_strengths
    for n in (1, 2, 40):
        one, other = np.empty((2, n, 5))
        kernel(n, energy, log_continuum_start(n, energy), one)
        kernel.py_func(n, energy, log_continuum_start(n, energy), other)
        # Compiled code may join a product and a sum in one rounding.
        np.testing.assert_allclose(one, other, rtol=5 * ROUND_OFF)


def test_broadcasting_and_scalars() -> None:
    assert isinstance(photoionization_cross_section(2, 1, 0.5), float)
    assert isinstance(recombination_coefficient(2, 1, 1e4), float)
    assert isinstance(photoionization_rate(2, 1, 1e4), float)
    assert photoionization_cross_section([[2], [3]], [0, 1], 0.5).shape == (2, 2)
    alpha = recombination_coefficient(np.array([2, 3])[:, None], 1, [100.0, 200.0, 300.0], 50.0)
    assert alpha.shape == (2, 3)
    assert alpha[1, 2] == pytest.approx(recombination_coefficient(3, 1, 300.0, 50.0), rel=ROUND_OFF)


@pytest.mark.parametrize(
    ("call", "said"),
    [
        (lambda: photoionization_cross_section(2, 2, 0.0), "0 <= l < n"),
        (lambda: photoionization_cross_section(1001, 2, 0.0), "1000"),
        (
            lambda: photoionization_cross_section(2, 1, -0.1),
            "electron_energy = -0.1: allowed are 0",
        ),
        (lambda: photoionization_cross_section(2, 1, [1.0, 101.0]), "electron_energy = 101"),
        (lambda: photoionization_cross_section(2, 1, np.nan), "electron_energy = nan"),
        (lambda: recombination_coefficient(2, 1, 0.0), "0 K: allowed are 0.02 to 100000 K"),
        (lambda: recombination_coefficient(2, 1, 2e5), "200000 K"),
        (lambda: recombination_coefficient(2, 1, 0.05, charge=2), "0.08 to 400000 K for charge 2"),
        (lambda: recombination_coefficient(2, 1, 100.0, -1.0), "temperature_k = -1"),
        (lambda: recombination_coefficient(2, 1, 9.0, 9.0, occupation=np.exp), "not both"),
        (lambda: photoionization_rate(2, 1), "one of them"),
        (lambda: photoionization_rate(2, 1, 9.0, occupation=np.exp), "one of them"),
        (lambda: bound_free(0), "allowed are 1 to 1000"),
    ],
)
def test_bad_input(call: Any, said: str) -> None:
    with pytest.raises(InputError, match=said):
        call()
