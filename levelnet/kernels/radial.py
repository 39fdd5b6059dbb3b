"""Hydrogenic radial integrals, bound-bound and bound-free, by one recurrence.

With N the upper state (bound, n > m, or continuum of energy k^2) and m the lower one, let

    X_l = <N, l | r | m, l-1>,    Y_l = <N, l-1 | r | m, l>,
    C(n, l) = sqrt(1/l^2 - 1/n^2) (bound),    C(k, l) = sqrt(1/l^2 + k^2) (continuum);

then, downward from Y_m = 0 and X_m in closed form (:mod:`levelnet.atomic.hydrogenic`),

    2l C(m, l) X_l = (2l+1) C(N, l+1) X_(l+1) + C(m, l+1) Y_(l+1),
    2l C(N, l) Y_l = (2l+1) C(m, l+1) Y_(l+1) + C(N, l+1) X_(l+1).

Every term is positive and downward is the growing direction, so no digits are lost. In the code
`low` is l C(m, l) and `high` is l C(N, l).

References
----------
Infeld & Hull 1951, Rev. Mod. Phys. 23, 21 (the ladder operators that give the recurrence).
"""

import math

import numpy as np
from numpy.typing import NDArray

from .compile import kernel

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

TILE = 8  # (m, N) pairs advance together in TILE x TILE tiles; eight float64 fill a cache line
RESCALE_EVERY = 8  # steps in l between checks; continuum integrals grow by less than 1e6 a step
LARGE = 1e50  # mantissas above this are rescaled, so that none exceeds 1e100


@kernel
def dipole_blocks(n_max: int, starts: FloatArray, offsets: IntArray, out: FloatArray) -> None:
    """Fill the symmetric line strengths of every pair (n, l) - (n', l+1), block after block.

    Parameters
    ----------
    n_max : int
        Highest principal quantum number, at least 2.
    starts : ndarray, shape (n_max + 1, n_max + 1)
        X_m at [m, N] times any factor that depends on m and N alone; read where N > m >= 1.
    offsets : ndarray of int, shape (n_max - 1,)
        Where block l starts in `out`; its rows are n = l+1..n_max, its columns n' = l+2..n_max.
    out : ndarray, shape (sum over l of (n_max-l)(n_max-l-1),)
        The blocks, each in C order: l_> / sqrt((2l+1)(2l+3)) times the squared integral (with the
        squared factor of `starts`); 0 where n = n'.

    Notes
    -----
    Loops: tiles of m, tiles of N, l downward, pairs of the tile. The tile stays in the first-level
    cache and is written in whole cache lines. Element (n = m, n' = N) of block l-1 is X_l^2, its
    mirror (n = N, n' = m) is Y_l^2, written second because on the diagonal X_l puts zeros there.
    """
    x, y = np.empty((TILE, TILE)), np.empty((TILE, TILE))
    low, low_next, low_inverse = np.empty(TILE), np.empty(TILE), np.empty(TILE)
    high, high_next, high_inverse = np.empty(TILE), np.empty(TILE), np.empty(TILE)
    for m_first in range(1, n_max + 1, TILE):
        m_count = min(TILE, n_max + 1 - m_first)
        for n_first in range(m_first, n_max + 1, TILE):
            n_count = min(TILE, n_max + 1 - n_first)
            x[:], y[:], low[:], high[:] = 0.0, 0.0, 0.0, 0.0
            for l in range(m_first + m_count - 1, 0, -1):
                for i in range(TILE):
                    # Coefficients, and with them the integrals, are 0 where n <= l.
                    m, n = m_first + i, n_first + i
                    low_next[i], high_next[i] = low[i] / (l + 1.0), high[i] / (l + 1.0)
                    low[i] = math.sqrt(max((m - l) * (m + l), 0)) / m
                    high[i] = math.sqrt(max((n - l) * (n + l), 0)) / n
                    low_inverse[i] = 0.5 / low[i] if m > l else 0.0
                    high_inverse[i] = 0.5 / high[i] if n > l else 0.0
                for i in range(TILE):
                    for j in range(TILE):
                        from_x, from_y = high_next[j] * x[i, j], low_next[i] * y[i, j]
                        x[i, j] = ((2.0 * l + 1.0) * from_x + from_y) * low_inverse[i]
                        y[i, j] = ((2.0 * l + 1.0) * from_y + from_x) * high_inverse[j]
                if l >= m_first:
                    for j in range(max(0, l + 1 - n_first), n_count):
                        x[l - m_first, j] = starts[l, n_first + j]
                # Element (n, n') of block l-1 stands at corner + n width + n'.
                width = n_max - l
                corner = offsets[l - 1] - l * width - l - 1
                weight = l / math.sqrt((2.0 * l - 1.0) * (2.0 * l + 1.0))
                for i in range(max(0, l - m_first), m_count):
                    row = corner + (m_first + i) * width + n_first
                    for j in range(max(0, l + 1 - n_first), n_count):
                        out[row + j] = weight * x[i, j] * x[i, j]
                for j in range(n_count):
                    row = corner + (n_first + j) * width + m_first
                    i_end = j if m_first == n_first else m_count
                    for i in range(max(0, l + 1 - m_first), i_end):
                        out[row + i] = weight * y[i, j] * y[i, j]


@kernel
def line_integrals(
    n_upper: IntArray, l_upper: IntArray, n_lower: IntArray, l_lower: IntArray, out: FloatArray
) -> None:
    """Turn the start values X_m in `out` into <n_upper l_upper | r | n_lower l_lower>.

    All arrays have shape (n_lines,); |l_upper - l_lower| = 1 and n_upper > n_lower. Loops: lines,
    and for each of them l downward.
    """
    for line in range(len(out)):
        n, m = float(n_upper[line]), float(n_lower[line])
        x, y = out[line], 0.0
        low, high = 0.0, math.sqrt((n - m) * (n + m)) / n
        for l in range(n_lower[line] - 1, max(l_upper[line], l_lower[line]) - 1, -1):
            from_x, from_y = high / (l + 1.0) * x, low / (l + 1.0) * y
            low = math.sqrt((m - l) * (m + l)) / m
            high = math.sqrt((n - l) * (n + l)) / n
            x = ((2.0 * l + 1.0) * from_x + from_y) / (2.0 * low)
            y = ((2.0 * l + 1.0) * from_y + from_x) / (2.0 * high)
        out[line] = x if l_upper[line] > l_lower[line] else y


@kernel
def bound_free_strengths(
    n: int, electron_energy: FloatArray, log_start: FloatArray, out: FloatArray
) -> None:
    """Fill n^2 (1 + n^2 k^2) sum over l' = l+-1 of l_> / (2l+1) g(n, l; k, l')^2, for every l < n.

    Parameters
    ----------
    n : int
        Principal quantum number.
    electron_energy : ndarray, shape (n_energies,), dimensionless
        k^2 >= 0 in units of chi; 0 is the threshold.
    log_start : ndarray, shape (n_energies,)
        ln of n^2 (1 + n^2 k^2) g(n, n-1; k, n)^2.
    out : ndarray, shape (n, n_energies)
        4 pi alpha a0^2 / 3 times it is the photoionization cross section; below 1e-300 it is 0.

    Notes
    -----
    Loops: l downward, energies. The integrals are amplitude x mantissa, and ln(amplitude) is
    carried apart: the start underflows (e^-9000 at n = 1000, k = 10), the low l do not.
    """
    x, y = np.ones_like(electron_energy), np.zeros_like(electron_energy)
    log_amplitude = 0.5 * log_start
    amplitude = np.exp(log_amplitude)
    low = 0.0
    for l in range(n - 1, 0, -1):
        low_next, low = low / (l + 1.0), math.sqrt(float((n - l) * (n + l))) / n
        square, inverse_next = float(l * l), 1.0 / ((l + 1.0) * (l + 1.0))
        to_upper, to_lower = (l + 1.0) / (2.0 * l + 1.0), l / (2.0 * l + 1.0)
        for e in range(len(electron_energy)):
            upper = amplitude[e] * x[e]
            high = math.sqrt(1.0 + square * electron_energy[e])
            from_x = math.sqrt(inverse_next + electron_energy[e]) * x[e]
            from_y = low_next * y[e]
            x[e] = ((2.0 * l + 1.0) * from_x + from_y) / (2.0 * low)
            y[e] = ((2.0 * l + 1.0) * from_y + from_x) / (2.0 * high)
            lower = amplitude[e] * y[e]
            out[l, e] = to_upper * upper * upper + to_lower * lower * lower
        if l % RESCALE_EVERY == 0:
            for e in range(len(electron_energy)):
                if x[e] > LARGE:
                    y[e] /= x[e]
                    log_amplitude[e] += math.log(x[e])
                    amplitude[e] = math.exp(log_amplitude[e])
                    x[e] = 1.0
    for e in range(len(electron_energy)):
        out[0, e] = (amplitude[e] * x[e]) ** 2
