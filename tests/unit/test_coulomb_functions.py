"""Radial Coulomb functions against mpmath, at energies on both sides of the threshold."""

from __future__ import annotations

from typing import Any

import mpmath
import numpy as np
import pytest

from levelnet.atomic.coulomb_functions import (
    CORE_RADIUS,
    bound_functions,
    free_function,
    radial_grid,
)
from levelnet.kernels import coulomb

# Of the largest value of a function: what the docstring promises.
OF_THE_LARGEST = 1e-11


def whittaker(nu: float, l: int, r: float) -> Any:
    """Bound function by Whittaker's W (DLMF 13.14), normalized as Hartree 1928."""
    n = mpmath.mpf(nu)
    norm = mpmath.sqrt(n**2 * mpmath.gamma(n + l + 1) * mpmath.gamma(n - l))
    return mpmath.whitw(n, l + mpmath.mpf(0.5), 2 * mpmath.mpf(r) / n) / norm


@pytest.mark.parametrize("l", [0, 1, 2, 3])
def test_bound_functions_against_whittaker(l: int) -> None:
    grid = radial_grid(100.0)
    numbers = np.array([l + 1.0, l + 0.7, l + 1.3, 9.9, 30.0, 99.86])
    functions, r = bound_functions(numbers, l, grid), grid.nodes.ravel()
    outside = np.flatnonzero(r > max(CORE_RADIUS[l], 0.003) * 1.4)
    with mpmath.workdps(40):
        for function, nu in zip(functions, numbers, strict=True):
            largest = np.abs(function[outside]).max()
            for position in outside[:: len(outside) // 7]:
                if function[position] != 0.0:
                    exact = float(whittaker(nu, l, r[position]))
                    assert abs(function[position] - exact) < OF_THE_LARGEST * largest


@pytest.mark.parametrize("l", [0, 1, 2, 3])
def test_inside_the_core_only_the_regular_part_is_left(l: int) -> None:
    # u = cos(pi nu) f + sin(pi nu) y: f grows as r^(l+1), and for whole nu there is nothing else.
    grid = radial_grid(12.0)
    inside = grid.count_inside(CORE_RADIUS[l])
    assert grid.edges[inside] == pytest.approx(max(CORE_RADIUS[l], grid.edges[0]), rel=0.06)
    r = grid.nodes[:inside].ravel()
    whole, shifted = (bound_functions(np.array([nu]), l, grid)[0] for nu in (9.0, 8.8))
    if inside:
        np.testing.assert_allclose(
            whole[: len(r)], [float(whittaker(9.0, l, one)) for one in r], rtol=1e-11
        )
        slope = np.diff(np.log(np.abs(shifted[: len(r)]))) / np.diff(np.log(r))
        np.testing.assert_allclose(slope, l + 1.0, rtol=0.1)


def test_whole_effective_numbers_are_normalized_and_orthogonal() -> None:
    grid = radial_grid(40.0)
    for l in range(4):
        functions = bound_functions(np.arange(l + 1.0, 41.0), l, grid)
        overlap = (functions * grid.weights.ravel()) @ functions.T
        # The grid leaves out r < 0.0021, where u = 2r for l = 0 and n = 1.
        left_out = 4 / 3 * grid.edges[0] ** 3 if l == 0 else 0.0
        np.testing.assert_allclose(overlap, np.eye(len(functions)), atol=1e-11 + left_out)


@pytest.mark.parametrize("k_squared", [1e-4, 0.3, 4.0, 25.0])
@pytest.mark.parametrize("l", [0, 1, 3])
def test_free_functions_against_coulomb_functions(k_squared: float, l: int) -> None:
    k, defect = np.sqrt(k_squared), 0.3
    grid = radial_grid(5.0, float(k))
    r = grid.nodes.ravel()
    function = free_function(k_squared, l, defect, grid)
    outside = np.flatnonzero(r > 0.4)
    largest = np.abs(function[outside]).max()
    with mpmath.workdps(30):
        for position in outside[:: len(outside) // 5]:
            eta, rho = -1 / mpmath.mpf(k), mpmath.mpf(k) * mpmath.mpf(r[position])
            regular = mpmath.coulombf(l, eta, rho).real
            irregular = mpmath.coulombg(l, eta, rho).real
            exact = regular * mpmath.cospi(defect) + irregular * mpmath.sinpi(defect)
            exact *= mpmath.sqrt(2 / (mpmath.pi * k))
            assert abs(function[position] - float(exact)) < OF_THE_LARGEST * largest


def test_free_functions_join_bessel_functions_at_the_threshold() -> None:
    # sqrt(2r) J_(2l+1)(sqrt(8r)) (Seaton 1983; from memory); what is left is of order k^2 r^2.
    grid = radial_grid(3.0)
    r = grid.nodes.ravel()
    for l in (0, 1, 2):
        function = free_function(1e-13, l, 0.0, grid)
        for position in (200, 300, 380):
            exact = mpmath.sqrt(2 * r[position]) * mpmath.besselj(
                2 * l + 1, mpmath.sqrt(8 * r[position])
            )
            assert function[position] == pytest.approx(float(exact), rel=1e-9)


def test_bound_and_free_functions_are_one_function_of_energy() -> None:
    # nu^(3/2) u of a bound level and the free function, both near the threshold, with one defect.
    grid = radial_grid(100.0)
    near = grid.nodes.ravel() < 5.0
    for l, defect in ((0, 0.3), (1, 0.07), (2, 0.003)):
        nu = 100.0 - defect
        bound = nu**1.5 * bound_functions(np.array([nu]), l, grid)[0][near]
        free = free_function(1e-9, l, defect, grid)[near]
        # The signs at infinity differ by (-1)^(n - l - 1).
        sign = (-1.0) ** (100 - l - 1)
        np.testing.assert_allclose(sign * bound, free, atol=2e-3 * np.abs(free).max())


def test_kernels_against_their_own_source() -> None:
    grid = radial_grid(6.0)
    results = []
    for follow in (coulomb.follow, coulomb.follow.py_func):
        state, trace = np.array([1e-10, -1e-11]), np.zeros((len(grid.edges), 2))
        values = np.zeros_like(grid.nodes)
        follow(1 / 30.0, 2.0, grid.edges, grid.nodes, len(grid.edges) - 1, 0, state, trace, values)
        results.append(values)
    np.testing.assert_allclose(results[0], results[1], rtol=1e-9)
    series = np.empty((2, 2, 20, 1))
    for pair, run in zip(series, (coulomb.power_series, coulomb.power_series.py_func), strict=True):
        run(np.array([0.03]), 2, *pair)
    np.testing.assert_allclose(series[0], series[1], rtol=1e-12)
