"""Sum rules over all final states, bound and free: they tie the lines to the continuum."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import constants as codata

from levelnet.arrays import FloatArray
from levelnet.atomic.bound_bound import einstein_a
from levelnet.atomic.bound_free import photoionization_cross_section

MASS = 1 / (1 + codata.physical_constants["electron-proton mass ratio"][0])
ALPHA = codata.fine_structure
BOHR_RADIUS_CM = 100 * codata.physical_constants["Bohr radius"][0] / MASS
TIME_S = codata.physical_constants["atomic unit of time"][0] / MASS
LEVELS = [(1, 0), (2, 0), (2, 1), (3, 1), (3, 2), (5, 4), (10, 3), (25, 12)]


def bound_strengths(n: int, l: int) -> tuple[FloatArray, FloatArray]:
    """Frequencies (a.u., negative downward) and oscillator strengths of every line from (n, l).

    A = 2 alpha^3 omega^2 (g_lower/g_upper) f (Bethe & Salpeter 1957; from memory). Strengths above
    n' = 1000 go as a n'^-3 + b n'^-5 and stand as one more entry at the series limit.
    """
    omega, strength = [], []
    for other in (l - 1, l + 1):
        if other < 0:
            continue
        up = np.arange(max(n, other) + 1, 1001)
        frequency = 0.5 / n**2 - 0.5 / up**2.0
        f = einstein_a(up, other, n, l) * (2 * other + 1) / (2 * l + 1)
        f *= TIME_S / (2 * ALPHA**3 * frequency**2)
        # f n'^3 = a + b/n'^2; sums beyond 1000 by the midpoint rule.
        cubed = f[[-1, -201]] * up[[-1, -201]] ** 3.0
        b = (cubed[0] - cubed[1]) / (1000.0**-2 - 800.0**-2)
        a = cubed[0] - b / 1000.0**2
        omega += [frequency, np.array([0.5 / n**2])]
        strength += [f, np.array([a / (2 * 1000.5**2) + b / (4 * 1000.5**4)])]
        down = np.arange(other + 1, n)
        if len(down):
            frequency = 0.5 / n**2 - 0.5 / down**2.0
            rate = einstein_a(n, l, down, other)
            omega.append(frequency)
            strength.append(-rate * TIME_S / (2 * ALPHA**3 * frequency**2))
    return np.concatenate(omega), np.concatenate(strength)


def free_strengths(n: int, l: int) -> tuple[FloatArray, FloatArray]:
    """Frequencies (a.u.) and oscillator strengths of the continuum.

    df = sigma d(omega)/(2 pi^2 alpha), with sigma in squared Bohr radii (Bethe & Salpeter 1957;
    from memory). Up to 100 chi by Gauss-Legendre panels in ln(energy); the rest, a power law, as
    one more entry.
    """
    x, w = np.polynomial.legendre.leggauss(20)
    edges = np.linspace(np.log(1e-12), np.log(100.0), 41)
    half = np.diff(edges)[:, None] / 2
    energy = np.exp(edges[:-1, None] + half * (1 + x)).ravel()
    width = (half * w).ravel() * energy / 2
    sigma = photoionization_cross_section(n, l, energy) / BOHR_RADIUS_CM**2
    last, before = photoionization_cross_section(n, l, np.array([100.0, 98.0])) / BOHR_RADIUS_CM**2
    steepness = np.log(before / last) / np.log(100 / 98)
    omega = np.append(0.5 / n**2 + energy / 2, 60.0)
    f = np.append(sigma * width, last * 50 / (steepness - 1)) / (2 * np.pi**2 * ALPHA)
    return omega, f


@pytest.mark.parametrize(("n", "l"), LEVELS)
def test_oscillator_strengths_sum_to_one(n: int, l: int) -> None:
    # Thomas-Reiche-Kuhn (Kuhn 1925, Z. Phys. 33, 408; Reiche & Thomas 1925, Z. Phys. 34, 510).
    total = bound_strengths(n, l)[1].sum() + free_strengths(n, l)[1].sum()
    # The power law above 100 chi is the weakest part: 2e-5 for 1s, good to 2 per cent of that.
    assert total == pytest.approx(1.0, abs=4e-7 if l == 0 else 1e-9)


@pytest.mark.parametrize(("n", "l"), LEVELS)
def test_squared_integrals_sum_to_the_mean_square_radius(n: int, l: int) -> None:
    # sum of l_>/(2l+1) R^2 = <r^2> = n^2 [5 n^2 + 1 - 3 l (l+1)]/2 (Bethe & Salpeter 1957; from
    # memory), with f = (2/3) omega l_>/(2l+1) R^2; the lines within the shell, n' = n, have no f
    # and R^2 = (9/4) n^2 (n^2 - l_>^2).
    total = 0.0
    for omega, strength in (bound_strengths(n, l), free_strengths(n, l)):
        total += 1.5 * np.sum(strength / omega)
    for larger in (l, l + 1):
        total += larger / (2 * l + 1) * 2.25 * n**2 * (n**2 - larger**2)
    expected = n**2 * (5 * n**2 + 1 - 3 * l * (l + 1)) / 2
    assert total == pytest.approx(expected, rel=1e-7 if l == 0 else 1e-10)


def test_bound_share_of_the_ground_state() -> None:
    # Sum of the Lyman oscillator strengths 0.5650 (Bethe & Salpeter 1957, sec. 61; from memory).
    assert bound_strengths(1, 0)[1].sum() == pytest.approx(0.5650, abs=5e-5)


@pytest.mark.parametrize("l", [0, 1, 4])
def test_continuum_joins_the_series(l: int) -> None:
    # The strength per unit of energy is continuous across the limit: df/d(omega) = f n'^3 as
    # n' -> infinity (Sugiura 1927, J. Phys. Radium 8, 113; from memory).
    n = l + 1
    below = 0.0
    for other in (l - 1, l + 1):
        if other >= 0:
            frequency = 0.5 / n**2 - 0.5 / 1000.0**2
            f = einstein_a(1000, other, n, l) * (2 * other + 1) / (2 * l + 1)
            below += f * TIME_S / (2 * ALPHA**3 * frequency**2) * 1000.0**3
    above = photoionization_cross_section(n, l, 0.0) / BOHR_RADIUS_CM**2 / (2 * np.pi**2 * ALPHA)
    # The energy 1/n'^2 below the limit is not 0: of order n^2/n'^2.
    assert below == pytest.approx(above, rel=10 * n**2 / 1000.0**2)
