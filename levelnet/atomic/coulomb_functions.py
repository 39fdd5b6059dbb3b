"""Radial Coulomb functions at any energy: what an electron does outside a core of charge 1.

Outside the core only the Coulomb field acts, so the function follows from its energy: the one that
decays at infinity (bound), or the one whose phase is shifted by the quantum defect (free). Both are
combinations, analytic in the energy, of the solution f that is regular at the nucleus and of one
that is not, y.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import factorial

import numpy as np
from scipy.special import psi

from ..arrays import FloatArray
from ..kernels import coulomb

CORE_RADIUS = (0.0, 0.05, 0.22, 0.22)
"""For l = 0 to 3, the radius in Bohr radii inside which only the regular part f is kept (whole
panels: the last edge inside counts).

The functions are those outside the core. Continued to the nucleus, the tiny part y of the higher l
rises as r^(-l), and means nothing there: it would add 1 to 4 per cent to lines between d and f.
Twice the radius changes those by up to 0.3 per cent, other lines by 0.1.
"""

_NODES_PER_PANEL = 10
_PANEL_RATIO = 4.0 / 3.0
_INNERMOST = 0.05 * _PANEL_RATIO**-11  # Bohr radii; 0.0021, so that 0.05 is an edge
_PANEL_STEP = 1.1  # panels outside: this times sqrt(r), 1.6 of phase
# Bound functions start where they have decayed by exp(-40) from their turning point.
_DECAY = 40.0
_MATCH_AT = 1.6  # Bohr radii; the power series lose two digits there, and gain none further in
_PHASE_AT_START = 3.0  # of a fast free electron, where its power series still lose little
_POWERS = 60


@dataclass(frozen=True, slots=True, eq=False)
class RadialGrid:
    """Panels of Gauss-Legendre nodes, dense enough for products of two functions.

    Attributes
    ----------
    edges : ndarray, shape (n_panels + 1,), Bohr radii
        Ends of the panels, from 0.0021; one is 0.05.
    nodes, weights : ndarray, shape (n_panels, n_nodes), Bohr radii
        The rule.
    """

    edges: FloatArray
    nodes: FloatArray
    weights: FloatArray

    def count_inside(self, radius: float) -> int:
        """Count the panels that end inside a radius, or on it but for rounding."""
        return int(np.searchsorted(self.edges[1:], radius * (1.0 + 1e-9), side="right"))


def radial_grid(highest_effective_n: float, highest_k: float = 0.0) -> RadialGrid:
    """Grid for bound functions up to an effective n, and free ones up to a wave number.

    Parameters
    ----------
    highest_effective_n : float, dimensionless
        The grid ends where its bound function has vanished.
    highest_k : float, inverse Bohr radii
        Panels are short enough for it; 0: bound functions only.
    """
    edges = [_INNERMOST]
    while _decay_action(edges[-1], highest_effective_n) < _DECAY:
        r = edges[-1]
        longest = min((_PANEL_RATIO - 1.0) * r, _PANEL_STEP * np.sqrt(r))
        edges.append(r + min(longest, _PANEL_STEP * np.sqrt(2.0) / max(highest_k, 1e-300)))
    ends = np.array(edges)
    x, w = np.polynomial.legendre.leggauss(_NODES_PER_PANEL)
    half, middle = 0.5 * np.diff(ends)[:, None], 0.5 * (ends[1:] + ends[:-1])[:, None]
    return RadialGrid(ends, middle + half * x, half * w)


def bound_functions(effective_n: FloatArray, l: int, grid: RadialGrid) -> FloatArray:
    """Bound functions u(r) = r R(r) that vanish at infinity, on the nodes of a grid.

    Parameters
    ----------
    effective_n : ndarray, shape (n_states,), dimensionless
        Effective quantum numbers nu > l, not above what the grid was made for.
    l : int, dimensionless
        0 to 3.
    grid : RadialGrid
        The nodes.

    Returns
    -------
    ndarray, shape (n_states, n_panels * n_nodes), inverse square root of Bohr radii
        W_{nu,l+1/2}(2r/nu) / sqrt(nu^2 Gamma(nu+l+1) Gamma(nu-l)), positive at large r: the
        normalization of a function that differs from this one in the core alone. Relative error
        1e-11 of its largest value for nu up to 100.

    References
    ----------
    Hartree 1928, Proc. Camb. Phil. Soc. 24, 426; Bates & Damgaard 1949, Phil. Trans. R. Soc. A 242,
    101 (from memory; verified against mpmath).
    """
    match = int(np.searchsorted(grid.edges, _MATCH_AT))
    kappa = effective_n**-2.0
    regular, irregular = _bound_parts(effective_n, l)
    f, y = _near_nucleus(kappa, l, grid.edges[match])
    value, slope = regular * f + irregular * y
    functions = np.zeros((len(effective_n), *grid.nodes.shape))
    trace = np.zeros((len(grid.edges), 2))
    for i, nu in enumerate(effective_n):
        first = int(np.argmax(_decay_action(grid.edges, nu) >= _DECAY)) or len(grid.edges) - 1
        state = _decaying(kappa[i], l, grid.edges[first])
        coulomb.follow(
            kappa[i], l * (l + 1.0), grid.edges, grid.nodes, first, 0, state, trace, functions[i]
        )
        u, du = trace[match]
        functions[i] *= (value[i] * u + slope[i] * du) / (u * u + du * du)
    _keep_regular(functions, regular, kappa, l, grid)
    return functions.reshape(len(effective_n), -1)


def free_function(k_squared: float, l: int, defect: float, grid: RadialGrid) -> FloatArray:
    """Free function of unit energy density with a phase shift, on the nodes of a grid.

    Parameters
    ----------
    k_squared : float, in units of chi
        Energy of the electron, above 0, not above what the grid was made for.
    l : int, dimensionless
        Angular momentum.
    defect : float, dimensionless
        Quantum defect; the phase shift over pi.
    grid : RadialGrid
        The nodes.

    Returns
    -------
    ndarray, shape (n_panels * n_nodes,), hartree^(-1/2) Bohr radii^(-1/2)
        sqrt(2/(pi k)) [F_l cos(pi defect) + G_l sin(pi defect)].

    References
    ----------
    Seaton 1983, Rep. Prog. Phys. 46, 167 (quantum-defect theory; from memory, Coulomb functions
    verified against mpmath).
    """
    kappa, k = np.array([-k_squared]), np.sqrt(k_squared)
    # From the middle both ways: inside the barrier f dies inwards and y outwards.
    start = int(np.searchsorted(grid.edges, min(_MATCH_AT, _PHASE_AT_START / k)))
    f, y = _near_nucleus(kappa, l, grid.edges[start])
    opening = np.sqrt(-np.expm1(-2.0 * np.pi / k))
    shift = np.pi * defect
    regular = _norm(kappa, l) * np.cos(shift) / opening
    combined = regular * f - _norm(kappa, l) * np.sin(shift) * opening * y
    function, trace = np.zeros((1, *grid.nodes.shape)), np.zeros((len(grid.edges), 2))
    for end in (0, len(grid.edges) - 1):
        state = combined[:, 0].copy()
        coulomb.follow(
            kappa[0], l * (l + 1.0), grid.edges, grid.nodes, start, end, state, trace, function[0]
        )
    _keep_regular(function, regular, kappa, l, grid)
    return function.ravel()


def _decay_action(r: float | FloatArray, nu: float) -> FloatArray:
    # Integral of sqrt(1/nu^2 - 2/r) from the turning point 2 nu^2 out to r, and 0 inside it.
    y = np.maximum(np.asarray(r) / (2.0 * nu * nu), 1.0)
    action: FloatArray = 2.0 * nu * (np.sqrt(y * (y - 1.0)) - np.arccosh(np.sqrt(y)))
    return action


def _decaying(kappa: float, l: int, r: float) -> FloatArray:
    # Any small start serves: what is not the decaying solution dies out inwards.
    square = l * (l + 1.0) / r**2 - 2.0 / r + kappa
    start: FloatArray = np.array([1.0, -np.sqrt(square)]) * np.exp(-_DECAY)
    return start


def _bound_parts(nu: FloatArray, l: int) -> tuple[FloatArray, FloatArray]:
    # The factors of f and y; cos and sin by the distance to the nearest integer, which is exact.
    nearest = np.round(nu)
    sign = np.where((nearest.astype(int) + l + 1) % 2, -1.0, 1.0)
    phase = np.pi * (nu - nearest)
    size = sign * nu**-1.5 * _norm(nu**-2.0, l)
    return size * np.cos(phase), size * np.sin(phase)


def _keep_regular(
    functions: FloatArray, regular: FloatArray, kappa: FloatArray, l: int, grid: RadialGrid
) -> None:
    inside = grid.count_inside(CORE_RADIUS[l])
    powers = grid.nodes[:inside, :, None] ** (np.arange(_POWERS + 1) + l + 1.0)
    f = powers @ _power_series(kappa, l)[0]
    functions[:, :inside] = regular[:, None, None] * np.moveaxis(f, -1, 0)


def _norm(kappa: FloatArray, l: int) -> FloatArray:
    norm = np.full_like(kappa, 2.0 ** (l + 1) / factorial(2 * l + 1))
    for p in range(1, l + 1):
        norm = norm * np.sqrt(1.0 - p * p * kappa)
    return norm


def _near_nucleus(kappa: FloatArray, l: int, r: float) -> tuple[FloatArray, FloatArray]:
    """Value and slope, shape (2, n), of f and of y/pi at r, by their power series.

    f = r^(l+1) (1 + ...) is regular, y = f (ln r + B) + r^(-l) sum of b_k r^k with b_(2l+1) = 0;
    that W is a combination of both by cos and sin of pi nu fixes B (from the logarithmic case of
    Tricomi's function, DLMF 13.2.9).
    """
    a, b = _power_series(kappa, l)
    k = np.arange(_POWERS + 1)
    power = r ** (k - l)
    power_slope = (k - l) * r ** (k - l - 1.0)
    regular = r ** (k + l + 1.0)
    regular_slope = (k + l + 1.0) * r ** (k + float(l))
    f = np.array([regular @ a, regular_slope @ a])
    logarithm = np.log(r) + _logarithmic_constant(kappa, l)
    y = np.array([f[0] * logarithm + power @ b, f[1] * logarithm + f[0] / r + power_slope @ b])
    return f, y / np.pi


def _power_series(kappa: FloatArray, l: int) -> tuple[FloatArray, FloatArray]:
    a, b = np.empty((2, _POWERS + 1, len(kappa)))
    coulomb.power_series(kappa, l, a, b)
    return a, b


def _logarithmic_constant(kappa: FloatArray, l: int) -> FloatArray:
    # Even in nu but for parts that cancel; for imaginary nu, above the threshold, its real part.
    n = 2 * l + 1
    nu = 1.0 / np.sqrt(kappa.astype(np.complex128))
    total = np.zeros_like(nu)
    for k in range(1, n + 1):
        term = factorial(k - 1) / factorial(n - k) * (-0.5) ** k / factorial(k)
        product = np.ones_like(nu)
        for j in range(n - k):
            product = product * (nu - l + k + j)
        total = total + term * product
    denominator = np.ones_like(nu)
    for j in range(n):
        denominator = denominator * (j - l - nu)
    constant = np.log(2.0 / nu) + psi(nu - l) + factorial(n) * total / denominator
    real: FloatArray = np.real(constant) - psi(1.0) - psi(n + 1.0)
    return real
