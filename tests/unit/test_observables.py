"""Optical depth and visibility against scipy's quadrature on an analytic history."""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
import pytest
from scipy import constants as si
from scipy.integrate import quad
from scipy.optimize import brentq, minimize_scalar

from levelnet.background.quadrature import Quadrature, quadrature
from levelnet.history.observables import milestones, optical_depth
from levelnet.history.result import Milestones
from tests.small_runs import COSMOLOGY
from tests.tolerances import published

MPC_M = 1e6 * si.parsec
LOW, HIGH = 30.0, 1900.0
# What the panels are built for.
SAME = 1e-8
# scipy's Thomson cross section is of the same CODATA edition, and agrees to 1e-10.


def fraction(redshift: float) -> float:
    """A smooth step from 2e-4 to 1, half way at about z = 1270."""
    return 2e-4 + (1.0 - 2e-4) / (1.0 + math.exp(-(redshift - 1270.0) / 90.0))


def slope(redshift: float) -> float:
    """d tau/d eta per comoving Mpc: n_e sigma_T/(1 + z) (Hu & Sugiyama 1996, ApJ 471, 542)."""
    electrons = COSMOLOGY.hydrogen_density_cm3(redshift) * 1e6 * fraction(redshift)
    return electrons * si.value("Thomson cross section") / (1.0 + redshift) * MPC_M


@lru_cache(maxsize=4096)
def depth(redshift: float) -> float:
    """tau = int c sigma_T n_e dt from LOW up, over conformal time in Mpc: d eta = c dz/H."""

    def integrand(z: float) -> float:
        return slope(z) * si.c / (COSMOLOGY.hubble_rate_per_s(z) * MPC_M)

    edges = [z for z in (100.0, 300.0, 600.0, 900.0, 1200.0, 1500.0) if LOW < z < redshift]
    return quad(integrand, LOW, redshift, points=edges or None, epsrel=1e-11, limit=400)[0]


def shine(redshift: float) -> float:
    return slope(redshift) * math.exp(-depth(redshift))


def panels(low: float = LOW, high: float = HIGH) -> tuple[Quadrature, np.ndarray]:
    """Panels between two redshifts, and the electron fraction at their points."""
    grid = quadrature(COSMOLOGY, -math.log1p(high), -math.log1p(low))
    return grid, np.array([fraction(z) for z in np.expm1(-grid.points).tolist()])


def marks(low: float = LOW, high: float = HIGH) -> Milestones:
    return milestones(COSMOLOGY, *panels(low, high))


def test_optical_depth_point_by_point() -> None:
    z = np.array([31.0, 200.0, 700.0, 1000.0, 1100.0, 1400.0, 1899.0])
    found = optical_depth(COSMOLOGY, *panels(), z)
    np.testing.assert_allclose(found, [depth(one) for one in z.tolist()], rtol=SAME)
    assert optical_depth(COSMOLOGY, *panels(), np.array([LOW]))[0] == pytest.approx(0.0, abs=1e-15)
    np.testing.assert_allclose(optical_depth(COSMOLOGY, *panels(), z, 1.5), 1.5 * found, rtol=1e-12)


def test_milestones_against_general_solvers() -> None:
    found = marks()
    last = brentq(lambda z: depth(z) - 1.0, 900.0, 1300.0, xtol=1e-9)
    assert found.last_scattering_redshift == pytest.approx(last, rel=SAME)
    assert found.half_ionized_redshift == pytest.approx(
        brentq(lambda z: fraction(z) - 0.5, 1000.0, 1500.0, xtol=1e-10), rel=SAME
    )
    peak = minimize_scalar(
        lambda z: -math.log(shine(z)), bracket=(950.0, last, 1300.0), options={"xtol": 1e-9}
    ).x
    # A maximum is found to the square root of the rounding only, here by scipy.
    assert found.visibility_peak_redshift == pytest.approx(peak, rel=1e-6)
    half = 0.5 * shine(peak)
    low = brentq(lambda z: shine(z) - half, 600.0, peak, xtol=1e-9)
    high = brentq(lambda z: shine(z) - half, peak, 1600.0, xtol=1e-9)
    assert found.visibility_width == pytest.approx(high - low, rel=1e-6)
    assert found.last_scattering_time_s == COSMOLOGY.cosmic_time_s(found.last_scattering_redshift)


def test_events_that_the_range_does_not_reach_are_no_numbers() -> None:
    late = marks(LOW, 400.0)
    for name in late.__dataclass_fields__:
        assert math.isnan(getattr(late, name)), name
    early = marks(1500.0, HIGH)
    assert math.isnan(early.half_ionized_redshift)
    assert math.isnan(early.visibility_peak_redshift)


def test_a_peak_without_both_flanks_has_no_width() -> None:
    for low, high in ((1060.0, HIGH), (LOW, 1130.0)):
        found = marks(low, high)
        assert math.isfinite(found.visibility_peak_redshift)
        assert math.isnan(found.visibility_width)


def test_half_ionized_twice_takes_the_first_from_above() -> None:
    grid, _ = panels()
    electrons = 0.5 - 0.4 * np.cos(-grid.points * 8.0 * np.pi / math.log1p(HIGH))
    found = milestones(COSMOLOGY, grid, electrons)
    # Rising through 1/2 at 9/16 and 13/16 of ln(1 + z) of the start.
    expected = math.expm1(13.0 / 16.0 * math.log1p(HIGH))
    assert found.half_ionized_redshift == pytest.approx(expected, rel=published(8))
