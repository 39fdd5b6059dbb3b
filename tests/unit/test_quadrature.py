"""Panels in ln a: exact on polynomials, and good on a power of a from the beginning."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.polynomial import Polynomial

from levelnet.background.quadrature import Place, early_quadrature, quadrature, root
from tests.small_runs import COSMOLOGY

GRID = quadrature(COSMOLOGY, -8.1, -3.0)
# The rule of eight nodes is exact to degree 15, the polynomial through them to degree 7.
SEVENTH = Polynomial([1.0, -2.0, 0.5, 0.3, -0.2, 0.1, 0.03, -0.01], domain=[-8.1, -3.0])
EXACT = 1e-11


def test_panels_are_fine_while_hydrogen_recombines() -> None:
    low, high = (math.log(COSMOLOGY.cmb_temperature_k / k) for k in (5500.0, 1600.0))
    width, centre = np.diff(GRID.edges), 0.5 * (GRID.edges[1:] + GRID.edges[:-1])
    fine = (centre > low) & (centre < high)
    assert np.all(width[fine] <= 0.03 + 1e-12)
    assert np.all(width <= 0.1 + 1e-12)
    assert (GRID.edges[0], GRID.edges[-1]) == (-8.1, -3.0)
    assert np.all(np.diff(GRID.points) > 0.0)


@pytest.mark.parametrize("s", [-8.1, -7.3, -6.95, -6.0, -3.01, -3.0])
def test_weights_are_exact_on_polynomials(s: float) -> None:
    values, whole = SEVENTH(GRID.points), SEVENTH.integ(lbnd=-8.1)
    place = GRID.place(s)
    assert place is not None
    assert GRID.log_scale(place) == pytest.approx(s, abs=1e-14)
    at = np.array([s])
    for order in (0, 1, 2):
        expected = SEVENTH.deriv(order)(s) if order else SEVENTH(s)
        within = {"rel": EXACT * 1e3**order, "abs": EXACT * 1e3**order}
        assert GRID.at(place, order) @ values == pytest.approx(expected, **within)
        assert GRID.curve(values, at, order)[0] == pytest.approx(expected, **within)
        function = GRID.function(values, place.panel, order)
        assert function(place.x) == pytest.approx(expected, **within)
    until, rest = whole(s), whole(-3.0) - whole(s)
    assert GRID.until(place) @ values == pytest.approx(until, rel=EXACT, abs=EXACT)
    assert GRID.after(place) @ values == pytest.approx(rest, rel=EXACT, abs=EXACT)
    assert GRID.to_end_from(values, at)[0] == pytest.approx(rest, rel=EXACT, abs=EXACT)


def test_whole_panels() -> None:
    values, whole = SEVENTH(GRID.points), SEVENTH.integ()
    expected = np.diff(whole(GRID.edges))
    np.testing.assert_allclose(GRID.panels(values), expected, rtol=1e-12, atol=1e-14)
    np.testing.assert_allclose(GRID.to_end(values)[0], expected.sum(), rtol=1e-12)
    left, right = GRID.edge_values(values)
    np.testing.assert_allclose(left, SEVENTH(GRID.edges[:-1]), atol=EXACT)
    np.testing.assert_allclose(right, SEVENTH(GRID.edges[1:]), atol=EXACT)


@pytest.mark.parametrize("power", [1.0, 2.0, 4.0])
def test_integrals_from_the_beginning(power: float) -> None:
    # int_0 a^p dln a = a^p/p: closed form.
    s, weights = early_quadrature(COSMOLOGY, -8.1)
    found = np.exp(power * s) @ weights
    assert found == pytest.approx(math.exp(-8.1 * power) / power, rel=1e-12)


def test_places_outside_are_none() -> None:
    assert GRID.place(-8.1001) is None
    assert GRID.place(-2.9999) is None
    assert GRID.place(math.nan) is None
    assert isinstance(GRID.place(-5.0), Place)


def test_root_at_an_end() -> None:
    assert root(lambda x: x - 0.25) == pytest.approx(0.25, abs=1e-15)
    assert root(lambda x: x - 1.0) == 1.0
    # To rounding beyond an end: the end itself.
    assert root(lambda x: x - 1.0 - 1e-13) == 1.0
    assert root(lambda x: x + 1.0 + 1e-13) == -1.0
