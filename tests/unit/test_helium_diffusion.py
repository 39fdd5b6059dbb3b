"""Escape of photons that diffuse in a line: an independent solution of the equation, limits."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.linalg import solve_banded
from scipy.special import voigt_profile

from levelnet.escape import helium_profile
from levelnet.escape.helium_profile import continuum_escape, diffusive_escape
from levelnet.kernels.diffusive_escape import escape_with_diffusion

# tau, c, a, p of 584 A near z = 2500, 2300, 2000, 1850, 1750.
ON_THE_WAY = (
    (5.6e6, 3.9e-4, 1.58e-3, 4.9e-3),
    (1.04e7, 2.2e-3, 1.65e-3, 4.0e-3),
    (2.06e7, 5.87e-2, 1.76e-3, 2.9e-3),
    (2.87e7, 0.462, 1.83e-3, 2.45e-3),
    (3.17e7, 2.26, 1.88e-3, 2.19e-3),
)


def by_differences(
    depth: float, continuum: float, damping: float, incoherent: float, moves: bool
) -> float:
    """P by plain upwind and central differences on 40000 cells, scipy's profile and solver."""
    scale, edge, count = 1.5, 1e5, 40000
    end = math.asinh(edge / scale)
    edges = scale * np.sinh(np.linspace(-end, end, count + 1))
    centre, width = 0.5 * (edges[1:] + edges[:-1]), np.diff(edges)
    phi = voigt_profile(centre, math.sqrt(0.5), damping)
    phi /= np.sum(phi * width)
    sink = incoherent * depth * phi * width
    swap = np.zeros(count + 1)
    if moves:
        inner = voigt_profile(edges[1:-1], math.sqrt(0.5), damping)
        swap[1:-1] = 0.5 * (1.0 - incoherent) * depth * inner / np.diff(centre)
    banded = np.zeros((3, count))
    banded[0, 1:] = -(1.0 + swap[1:-1])
    banded[1] = 1.0 + swap[1:] + swap[:-1] + sink + continuum * width
    banded[2, :-1] = -swap[1:-1]
    e = solve_banded((1, 1), banded, sink)
    lost = e[0] + np.sum(continuum * e * width)
    plain = lost / (incoherent * depth)
    return incoherent * plain / (1.0 - (1.0 - incoherent) * plain)


@pytest.mark.parametrize("line", ON_THE_WAY)
def test_it_solves_the_equation(line: tuple[float, float, float, float]) -> None:
    # Both are of first order in the cell where photons no longer diffuse: 1e-3 together.
    found, _ = diffusive_escape(*line)
    assert found.value == pytest.approx(by_differences(*line, moves=True), rel=1.5e-3)


@pytest.mark.parametrize("line", ON_THE_WAY)
def test_without_shifts_coherent_wings_are_those_of_the_scaled_profile(
    line: tuple[float, float, float, float],
) -> None:
    # What redistribution = "partial" rests on: 0.1 per cent where the continuum is thin across
    # the core, 5 per cent where c is 2.
    depth, continuum, damping, incoherent = line
    scaled = continuum_escape(depth, continuum, damping * incoherent).value
    coherent = by_differences(*line, moves=False)
    print(f"c = {continuum:g}: coherent over scaled {coherent / scaled:.4f}")
    assert coherent == pytest.approx(scaled, rel=1.5e-3 + 0.025 * continuum)


def test_diffusion_lets_more_photons_go() -> None:
    gain = [
        diffusive_escape(t, c, a, p)[0].value / continuum_escape(t, c, a * p).value
        for t, c, a, p in ON_THE_WAY
    ]
    print("P with diffusion over P without:", np.round(gain, 3))
    assert np.all(np.diff(gain) > 0.0)
    assert gain[0] == pytest.approx(1.0, abs=3e-3)
    # Figures that the treatment states.
    assert gain[2] == pytest.approx(1.14, abs=0.01)
    assert gain[3] == pytest.approx(1.44, abs=0.01)


@pytest.mark.parametrize("depth", [1e7, 1e9])
def test_without_continuum_a_thick_line_lets_go_one_photon_in_its_depth(depth: float) -> None:
    found, _ = diffusive_escape(depth, 0.0, 2e-3, 3e-3)
    # Photon number: all that is made leaves; 1/(p tau) is the difference of f_L and f_o.
    expected = 1.0 / depth / (1.0 - (1.0 - 3e-3) / (3e-3 * depth))
    assert found.value == pytest.approx(expected, rel=3e-5)


@pytest.mark.parametrize("line", ON_THE_WAY)
def test_derivatives_are_those_of_the_value(line: tuple[float, float, float, float]) -> None:
    found, by_incoherent = diffusive_escape(*line)
    step = 1e-4
    slopes = []
    for k in range(4):
        high, low = (
            [one * math.exp(d * (j == k)) for j, one in enumerate(line)] for d in (step, -step)
        )
        difference = diffusive_escape(*high)[0].value - diffusive_escape(*low)[0].value
        slopes.append(difference / (2.0 * step))
    given = (
        found.by_depth,
        found.by_continuum,
        found.by_damping * line[2],
        by_incoherent * line[3],
    )
    # Of the difference itself, step^2/6, and a jump of 1e-12 where the end of the grid moves.
    np.testing.assert_allclose(given, slopes, rtol=1e-7)


def test_the_kernel_refuses_what_does_not_fit() -> None:
    cells, out = helium_profile._cells(36), np.empty(5)
    line = np.array([1e6, 0.1, 1e-3, 1e-2])
    assert escape_with_diffusion(line, 10, cells, np.empty((8, 19)), out) == 1
