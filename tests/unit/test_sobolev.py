"""Sobolev escape against mpmath, and the optical depth against the oscillator strength."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest
from scipy import constants as si

from levelnet.atomic.bound_bound import einstein_a
from levelnet.errors import InputError
from levelnet.escape.sobolev import escape_probability, escape_slope, sobolev_optical_depth
from tests.tolerances import ROUND_OFF

DEPTHS = np.concatenate([[1e-300, 9.9e-9, 1.01e-8], np.logspace(-20, 12, 129)])
# Constants of the same CODATA edition, through the classical electron radius: agree to 1e-9.
CODATA_RADIUS = 2e-9


def test_escape_probability_against_mpmath() -> None:
    with mpmath.workdps(40):
        exact = [float(-mpmath.expm1(-mpmath.mpf(t)) / mpmath.mpf(t)) for t in DEPTHS.tolist()]
    np.testing.assert_allclose(escape_probability(DEPTHS), exact, rtol=ROUND_OFF)


def test_slope_against_mpmath() -> None:
    # d ln P / d ln tau = tau/(e^tau - 1) - 1.
    with mpmath.workdps(40):
        exact = [float(mpmath.mpf(t) / mpmath.expm1(t) - 1) for t in DEPTHS.tolist()]
    # Absolute: the slope goes into sums with numbers of order 1.
    np.testing.assert_allclose(escape_slope(DEPTHS), exact, rtol=0.0, atol=ROUND_OFF)


def test_limits_and_bounds() -> None:
    assert escape_probability(np.array([0.0]))[0] == 1.0
    assert escape_slope(np.array([0.0]))[0] == 0.0
    chance = escape_probability(DEPTHS)
    assert np.all((chance > 0.0) & (chance <= 1.0))
    order = np.argsort(DEPTHS)
    assert np.all(np.diff(chance[order]) <= 0.0)
    thick = np.array([50.0, 1e6, 1e300])
    np.testing.assert_allclose(escape_probability(thick) * thick, 1.0, rtol=ROUND_OFF)
    np.testing.assert_allclose(escape_slope(thick), -1.0, atol=ROUND_OFF)


@pytest.mark.parametrize("depth", [-1e-300, -1.0, math.nan])
def test_impossible_depths(depth: float) -> None:
    with pytest.raises(InputError, match="optical_depth"):
        escape_probability(np.array([1.0, depth]))


@pytest.mark.parametrize(("n", "strength"), [(2, 2**13 / 3**9), (3, 3**4 / 2**10)])
def test_optical_depth_from_the_oscillator_strength(n: int, strength: float) -> None:
    # tau = pi r_e c f lambda n_l / H (Gunn & Peterson 1965, Astrophys. J. 142, 1633; from memory)
    # with f(1s-2p) = 2^13/3^9 and f(1s-3p) = 3^4/2^10 exactly (Bethe & Salpeter 1957) and the
    # electron's mass over the reduced mass: f ~ omega r^2 ~ 1/mu.
    mass = 1.0 + si.value("electron-proton mass ratio")
    wavelength = 1.0 / (si.value("Rydberg constant") / mass * (1.0 - 1.0 / n**2))  # m
    density, hubble = 264.0e6, 4.9e-14  # m^-3, s^-1
    radius = si.value("classical electron radius")
    expected = math.pi * radius * si.c * strength * mass * wavelength * density / hubble
    depth = sobolev_optical_depth(
        np.array([einstein_a(n, 1, 1, 0)]),
        np.array([100.0 * wavelength]),
        np.array([3.0]),
        1e-6 * density,
        hubble,
    )
    assert depth[0] == pytest.approx(expected, rel=CODATA_RADIUS)
    assert 1e7 < depth[0] < 1e10
