"""Solutions of the radial Coulomb equation at any energy, by Taylor series from panel to panel.

u'' = [l(l+1)/r^2 - 2/r + kappa] u, in atomic units, with kappa = 1/nu^2 below the threshold and
-k^2 above it. About r0, with t = r - r0 and u = sum of c_m t^m,

    r0^2 (m+2)(m+1) c_(m+2) = -2 r0 (m+1) m c_(m+1)
        + [l(l+1) - m(m-1) - 2 r0 + kappa r0^2] c_m + (2 kappa r0 - 2) c_(m-1) + kappa c_(m-2).

The series converges for |t| < r0; with panels of at most a quarter of r0 and a few units of phase
the terms kept are exact to rounding.
"""

import numpy as np
from numpy.typing import NDArray

from .compile import kernel

FloatArray = NDArray[np.float64]

TERMS = 36


@kernel
def _taylor(kappa: float, ll: float, r0: float, series: FloatArray) -> None:
    """Continue series[0], series[1] (value and slope at r0) to all TERMS coefficients."""
    inverse = 1.0 / (r0 * r0)
    here = ll - 2.0 * r0 + kappa * r0 * r0
    before = 2.0 * kappa * r0 - 2.0
    for m in range(TERMS - 2):
        value = (here - m * (m - 1.0)) * series[m] - 2.0 * r0 * (m + 1.0) * m * series[m + 1]
        if m > 0:
            value += before * series[m - 1]
        if m > 1:
            value += kappa * series[m - 2]
        series[m + 2] = value * inverse / ((m + 2.0) * (m + 1.0))


@kernel
def _value(series: FloatArray, t: float) -> float:
    total = 0.0
    for m in range(TERMS - 1, -1, -1):
        total = total * t + series[m]
    return total


@kernel
def _slope(series: FloatArray, t: float) -> float:
    total = 0.0
    for m in range(TERMS - 1, 0, -1):
        total = total * t + m * series[m]
    return total


@kernel
def follow(
    kappa: float,
    ll: float,
    edges: FloatArray,
    nodes: FloatArray,
    first: int,
    last: int,
    state: FloatArray,
    trace: FloatArray,
    values: FloatArray,
) -> None:
    """Follow a solution from edge `first` to edge `last`, inwards or outwards.

    Parameters
    ----------
    kappa, ll : float
        Minus twice the energy; l (l + 1).
    edges : ndarray, shape (n_panels + 1,)
        Ends of the panels, ascending.
    nodes : ndarray, shape (n_panels, n_nodes)
        Where in each panel the solution is wanted.
    first, last : int
        Edges where it starts and ends.
    state : ndarray, shape (2,)
        Value and slope at the first edge; on return, at the last.
    trace : ndarray, shape (n_panels + 1, 2)
        Value and slope at every edge passed.
    values : ndarray, shape (n_panels, n_nodes)
        The solution on the nodes of the panels passed; the others are left alone.
    """
    series = np.empty(TERMS)
    step = 1 if last > first else -1
    trace[first, 0], trace[first, 1] = state[0], state[1]
    for edge in range(first, last, step):
        panel = edge if step > 0 else edge - 1
        series[0], series[1] = state[0], state[1]
        _taylor(kappa, ll, edges[edge], series)
        for q in range(nodes.shape[1]):
            values[panel, q] = _value(series, nodes[panel, q] - edges[edge])
        t = edges[edge + step] - edges[edge]
        state[0], state[1] = _value(series, t), _slope(series, t)
        trace[edge + step, 0], trace[edge + step, 1] = state[0], state[1]


@kernel
def power_series(kappa: FloatArray, l: int, a: FloatArray, b: FloatArray) -> None:
    """Coefficients of f and of what y has beside the logarithm, about the nucleus.

    f = r^(l+1) sum of a_k r^k, y = f ln r + r^(-l) sum of b_k r^k with b_(2l+1) = 0.

    Parameters
    ----------
    kappa : ndarray, shape (n_states,)
        Minus twice the energies.
    l : int
        Angular momentum.
    a, b : ndarray, shape (n_powers, n_states)
        Coefficients, written; n_powers above 2l + 1.
    """
    log_power = 2 * l + 1
    for i in range(len(kappa)):
        a[0, i], b[0, i] = 1.0, 1.0
        for k in range(1, len(a)):
            value = -2.0 * a[k - 1, i]
            if k > 1:
                value += kappa[i] * a[k - 2, i]
            a[k, i] = value / (k * (k + log_power))
        for k in range(1, len(b)):
            value = -2.0 * b[k - 1, i]
            if k > 1:
                value += kappa[i] * b[k - 2, i]
            if k == log_power:
                # The equation of this power fixes the scale of all before it.
                for j in range(k):
                    b[j, i] *= log_power / value
                b[k, i] = 0.0
            else:
                if k > log_power:
                    value -= (2.0 * (k - l) - 1.0) * a[k - log_power, i]
                b[k, i] = value / (k * (k - log_power))
