"""Escape with a continuum inside the line: closed limits, scipy's Voigt profile and solve_ivp."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.special import voigt_profile

from levelnet.errors import InputError
from levelnet.escape import helium_profile
from levelnet.escape.helium_profile import continuum_escape, continuum_escapes
from levelnet.kernels.continuum_escape import escape_of_lines, escape_with_continuum

DEPTHS = (1e-12, 1e-3, 0.7, 2.0, 30.0, 1e4, 2e7, 1e12)
DAMPINGS = (0.0, 5e-6, 2e-3, 0.03)


@pytest.mark.parametrize(
    # Fourth power of the damping, which the series leaves out.
    ("damping", "tolerance"),
    [(0.0, 1e-12), (5e-6, 1e-12), (2e-3, 1e-9), (1e-2, 1e-6), (0.03, 1e-5)],
)
def test_profile_is_that_of_scipy(damping: float, tolerance: float) -> None:
    step = 1.0 / 36.0
    cells = helium_profile._cells(36)
    y = 2.0 * np.sinh((np.arange(len(cells)) + 0.5) * step)
    series = cells[:, 1:] @ damping ** np.arange(4) / cells[:, 0]
    expected = voigt_profile(y, math.sqrt(0.5), damping)
    seen = expected > 1e-290
    np.testing.assert_allclose(series[seen], expected[seen], rtol=tolerance)


@pytest.mark.parametrize("damping", DAMPINGS)
@pytest.mark.parametrize("depth", DEPTHS)
def test_without_continuum_it_is_sobolev(depth: float, damping: float) -> None:
    found = continuum_escape(depth, 0.0, damping)
    # Closed form; masses of up to 2000 cells sum to 1 by round-off.
    assert found.value == pytest.approx(-math.expm1(-depth) / depth, rel=1e-12)
    assert found.by_continuum == 0.0
    # P does not depend on the profile; at depth 1e12 and no damping its derivative is what is left
    # of terms 1e9 times larger.
    assert abs(found.by_damping) * 1e-3 < 1e-7 * found.value


@pytest.mark.parametrize("damping", DAMPINGS)
def test_limits(damping: float) -> None:
    for continuum in (0.0, 1e-3, 1e3):
        assert continuum_escape(0.0, continuum, damping).value == pytest.approx(1.0, abs=1e-13)
    # Everything is absorbed by hydrogen at once: P = <c/(tau phi + c)> -> 1 - tau <phi>/c.
    assert continuum_escape(30.0, 1e9, damping).value == pytest.approx(1.0, abs=3e-8)


def test_it_rises_with_continuum_and_damping_and_falls_with_depth() -> None:
    grid = np.array(
        [
            [[continuum_escape(t, c, a).value for a in DAMPINGS] for c in np.logspace(-6, 2, 17)]
            for t in np.logspace(-2, 9, 23)
        ]
    )
    assert np.all((grid > 0.0) & (grid < 1.0))
    assert np.all(np.diff(grid, axis=0) < 0.0)
    assert np.all(np.diff(grid, axis=1) > 0.0)
    assert np.all(np.diff(grid[6:], axis=2) > 0.0)  # optically thick: wings let photons go


@pytest.mark.parametrize(
    ("depth", "continuum", "damping"), [(2e7, 0.1, 2e-3), (2e8, 0.03, 2e-3), (1e9, 1.0, 0.02)]
)
def test_thick_wings_have_a_closed_form(depth: float, continuum: float, damping: float) -> None:
    # h = c/(tau phi + c) and phi = a/(pi y^2): P = sqrt(pi a c/tau), far in the wings and with a
    # short memory; next term by the width of the core over that of the thick wings.
    expected = math.sqrt(math.pi * damping * continuum / depth)
    thick = math.sqrt(damping * depth / (math.pi * continuum))
    found = continuum_escape(depth, continuum, damping).value
    assert found == pytest.approx(expected, rel=2.0 / thick**2 + 2e-4)


@pytest.mark.parametrize("damping", [1e-8, 5e-6, 2e-3])
@pytest.mark.parametrize("continuum", [1e-3, 0.1, 3.0])
@pytest.mark.parametrize("depth", [0.1, 2.0, 1e3, 2e7])
def test_it_solves_the_equation(depth: float, continuum: float, damping: float) -> None:
    found = continuum_escape(depth, continuum, damping).value
    # Stated accuracy; solve_ivp itself adds a few 1e-6 of its far wings.
    assert found == pytest.approx(
        by_solve_ivp(depth, continuum, damping), rel=3e-4 if continuum > 0.1 else 7e-5
    )


def by_solve_ivp(depth: float, continuum: float, damping: float) -> float:
    """Integrate h and P over asinh y with an adaptive implicit method and scipy's profile."""
    edge = max(1e3, 1e7 * damping * depth)

    def slopes(u: float, state: np.ndarray) -> list[float]:
        width = math.cosh(u)
        phi = float(voigt_profile(math.sinh(u), math.sqrt(0.5), damping))
        return [width * (continuum - (depth * phi + continuum) * state[0]), width * phi * state[0]]

    def jacobian(u: float, _: np.ndarray) -> list[list[float]]:
        width = math.cosh(u)
        phi = float(voigt_profile(math.sinh(u), math.sqrt(0.5), damping))
        return [[-width * (depth * phi + continuum), 0.0], [width * phi, 0.0]]

    beyond = damping / (math.pi * edge)
    end = math.asinh(edge)
    found = solve_ivp(
        slopes,
        (-end, end),
        [1.0, beyond],
        method="Radau",
        jac=jacobian,
        rtol=1e-8,
        atol=1e-13 / max(depth, 1.0),
    )
    return float(found.y[1, -1] + beyond * found.y[0, -1])


@pytest.mark.parametrize("damping", [5e-6, 2e-3])
@pytest.mark.parametrize("continuum", [1e-4, 0.1, 3.0])
@pytest.mark.parametrize("depth", [0.3, 2.0, 2e7])
def test_derivatives_are_those_of_the_value(depth: float, continuum: float, damping: float) -> None:
    found, e = continuum_escape(depth, continuum, damping), 1e-4
    up, down = math.exp(e), math.exp(-e)
    pairs = {
        "by_depth": ((depth * up, continuum, damping), (depth * down, continuum, damping)),
        "by_continuum": ((depth, continuum * up, damping), (depth, continuum * down, damping)),
    }
    for name, (high, low) in pairs.items():
        slope = (continuum_escape(*high).value - continuum_escape(*low).value) / (2.0 * e)
        assert getattr(found, name) == pytest.approx(slope, rel=1e-6, abs=1e-9 * found.value)
    more = continuum_escape(depth, continuum, damping * up).value
    less = continuum_escape(depth, continuum, damping * down).value
    slope = (more - less) / (2.0 * e * damping)
    # Small where the line is thin: there the difference is round-off and the end of the grid.
    assert found.by_damping == pytest.approx(slope, rel=1e-5, abs=1e-8 * found.value / damping)


@pytest.mark.parametrize(
    "wrong",
    [
        (-1.0, 0.0, 0.0),
        (math.nan, 0.0, 0.0),
        (1.0, math.inf, 0.0),
        (1.0, 0.0, 0.1),
        (1.0, 0.0, -1.0),
    ],
)
def test_wrong_input(wrong: tuple[float, float, float]) -> None:
    with pytest.raises(InputError, match=r"optical depth|damping"):
        continuum_escape(*wrong)


def test_the_kernel_refuses_more_cells_than_there_are() -> None:
    cells, out = helium_profile._cells(36), np.empty(4)
    assert escape_with_continuum(1.0, 0.0, 0.0, len(cells) + 1, cells, out) == 1


def test_many_lines_at_once_are_the_same_bits() -> None:
    lines = [(t, c, a) for t in DEPTHS for c in (0.0, 1e-6, 0.1, 30.0) for a in DAMPINGS]
    found = continuum_escapes(np.array(lines))
    np.testing.assert_array_equal(found, [continuum_escape(*one) for one in lines])


@pytest.mark.parametrize(
    ("place", "value"),
    [(0, math.nan), (1, math.nan), (2, math.nan), (0, -1.0), (1, -0.5), (0, math.inf), (2, -1e-3)],
)
def test_numbers_of_a_line_that_are_none_are_refused(place: int, value: float) -> None:
    columns = np.array([[1.0, 2.0, 1e-3], [1.0, 2.0, 1e-3]])
    columns[1, place] = value
    with pytest.raises(InputError, match="negative, infinite or not a number"):
        continuum_escapes(columns)


def test_lines_beyond_the_cells_are_told() -> None:
    cells, out = helium_profile._cells(36)[:50], np.empty((1, 4))
    line = np.array([[1e9, 1e-3, 1e-3]])
    assert escape_of_lines(line, 18, cells, cells, out) == 2
    assert escape_of_lines(-line, 18, cells, cells, out) == 1
