"""Chebyshev series against numpy.polynomial.chebyshev."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.polynomial import Chebyshev
from numpy.polynomial import chebyshev as reference

from levelnet.errors import RangeError
from levelnet.numerics.chebyshev import ChebyshevSeries, chebyshev_nodes
from tests.tolerances import ROUND_OFF

LOW, HIGH = 3.4, 8.7


def test_nodes_are_those_of_numpy() -> None:
    for count in (1, 2, 7, 40):
        nodes = chebyshev_nodes(-1.0, 1.0, count)
        np.testing.assert_allclose(nodes, reference.chebpts1(count), rtol=0, atol=ROUND_OFF)
        assert np.all(np.diff(nodes) > 0.0)
    np.testing.assert_allclose(
        chebyshev_nodes(LOW, HIGH, 5), 6.05 + 2.65 * reference.chebpts1(5), rtol=ROUND_OFF
    )


def fitted(count: int, n_functions: int, seed: int) -> tuple[ChebyshevSeries, list[Chebyshev]]:
    """Fit random polynomials that the series must reproduce, and numpy's form of them."""
    rng = np.random.default_rng(seed)
    coefficients = rng.normal(size=(count, n_functions))
    exact = [Chebyshev(c, domain=[LOW, HIGH]) for c in coefficients.T]
    nodes = chebyshev_nodes(LOW, HIGH, count)
    return ChebyshevSeries.fit(LOW, HIGH, np.array([one(nodes) for one in exact]).T), exact


@given(st.integers(1, 40), st.integers(0, 2**32), st.floats(LOW, HIGH))
def test_values_and_slopes_of_polynomials(count: int, seed: int, x: float) -> None:
    series, exact = fitted(count, 3, seed)
    np.testing.assert_allclose(
        series.coefficients, np.array([one.coef for one in exact]).T, rtol=0, atol=100 * ROUND_OFF
    )
    value, slope = series.evaluate(x)
    np.testing.assert_allclose(value, [one(x) for one in exact], rtol=0, atol=1e3 * ROUND_OFF)
    # T_k' grows as k^2 at the ends, so rounding does too; relative to the largest possible slope.
    largest = max(1.0, np.sum(np.arange(count) ** 2.0) * 2.0 / (HIGH - LOW))
    expected = [one.deriv()(x) for one in exact]
    np.testing.assert_allclose(slope, expected, rtol=0, atol=1e3 * ROUND_OFF * largest)


@pytest.mark.parametrize("end", [LOW, HIGH])
def test_both_ends(end: float) -> None:
    series, exact = fitted(12, 4, 5)
    inside = 1.0 if end == LOW else -1.0
    # The exact end, where the slope is a limit, and on both sides of the switch to that limit.
    for distance in (0.0, 1e-15, 1e-13, 1e-11, 1e-8):
        x = end + inside * distance * (HIGH - LOW)
        value, slope = series.evaluate(x)
        np.testing.assert_allclose(value, [one(end) for one in exact], rtol=0, atol=1e-5)
        np.testing.assert_allclose(slope, [one.deriv()(x) for one in exact], rtol=1e-6, atol=1e-6)
    value, slope = series.evaluate(end)
    np.testing.assert_allclose(value, [one(end) for one in exact], rtol=0, atol=1e-12)
    np.testing.assert_allclose(slope, [one.deriv()(end) for one in exact], rtol=1e-12)


def test_exact_at_the_nodes() -> None:
    nodes = chebyshev_nodes(LOW, HIGH, 33)
    values = np.exp(np.outer(nodes, [-1.0, 0.3, 2.0]))
    series = ChebyshevSeries.fit(LOW, HIGH, values)
    for node, expected in zip(nodes, values, strict=True):
        scale = values.max(axis=0)
        np.testing.assert_allclose(series.evaluate(node)[0] / scale, expected / scale, atol=1e-13)


def test_error_falls_geometrically_for_a_smooth_function() -> None:
    # Bernstein's bound: 1/(x - pole) converges as rho^-n, rho = s + sqrt(s^2 - 1), s the pole in
    # units of the half interval (Trefethen 2013, Approximation Theory and Approximation Practice).
    pole = HIGH + 1.0
    s = (pole - 0.5 * (LOW + HIGH)) / (0.5 * (HIGH - LOW))
    rate = np.log(s + np.sqrt(s * s - 1.0))
    points = np.linspace(LOW, HIGH, 301)
    counts = np.arange(8, 25, 4)
    errors = []
    for count in counts.tolist():
        values = 1.0 / (pole - chebyshev_nodes(LOW, HIGH, count))
        series = ChebyshevSeries.fit(LOW, HIGH, values[:, None])
        errors.append(max(abs(series.evaluate(x)[0][0] - 1.0 / (pole - x)) for x in points))
    assert -np.polyfit(counts, np.log(errors), 1)[0] == pytest.approx(rate, rel=0.02)


def test_outside_is_an_error_not_an_extrapolation() -> None:
    series, _ = fitted(6, 1, 0)
    for x in (LOW - 1e-6, HIGH + 1e-6, -np.inf, 100.0):
        with pytest.raises(RangeError, match=r"outside the interpolated range 3\.4 to 8\.7"):
            series.evaluate(x)
    # Rounding of the end itself is inside.
    series.evaluate(LOW * (1 - 1e-15))
    series.evaluate(HIGH * (1 + 1e-15))


def test_not_a_number_is_outside() -> None:
    series, _ = fitted(6, 1, 0)
    with pytest.raises(RangeError):
        series.evaluate(float("nan"))


def test_weights_of_the_node_values() -> None:
    draw = np.random.default_rng(5)
    values = draw.normal(size=(9, 3))
    series = ChebyshevSeries.fit(-1.0, 2.5, values)
    np.testing.assert_allclose(series.values_at_nodes, values, rtol=1e-13, atol=1e-13)
    np.testing.assert_array_equal(series.nodes, chebyshev_nodes(-1.0, 2.5, 9))
    places = np.array([-1.0, 0.3, 2.5])
    expected = [series.evaluate(x)[0] for x in places.tolist()]
    weights = series.interpolation_weights(places)
    np.testing.assert_allclose(weights @ values, expected, atol=1e-13)
    np.testing.assert_allclose(weights.sum(axis=1), 1.0, rtol=1e-13)
