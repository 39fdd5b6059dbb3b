"""Escape from a line inside which a continuum absorbs, compiled: one march across the profile.

With y the frequency from line centre in Doppler widths, tau the depth of the line, c that of the
continuum per Doppler width and h = (f_L - f)/(f_L - f_bb),

    dh/dy = (tau phi + c) h - c    from h = 1 at y = inf,    P = int phi h dy.

In each cell phi is constant and h the exact exponential, so that c = 0 gives (1 - e^-tau)/tau on
any grid whose masses sum to 1.
"""

import math

import numpy as np
from numpy.typing import NDArray

from .compile import kernel

FloatArray = NDArray[np.float64]


# The grid ends where the wing beyond has this depth, and not before so many Doppler widths; with a
# continuum, this factor beyond where it takes over; and never farther than the last.
_TAIL_DEPTH, _NEAREST, _FAR, FARTHEST = 1e-5, 30.0, 300.0, 1e12
# y = SCALE sinh(u) on cells uniform in u.
SCALE = 2.0


@kernel
def reach_of_line(depth: float, continuum: float, damping: float) -> float:
    """Doppler widths to where nothing changes any more.

    There the wing beyond is thin; or the continuum, which has long forgotten the blue side, is so
    much thicker than the line that h = 1.
    """
    wing = damping * depth / math.pi  # tau phi y^2
    reach = wing / _TAIL_DEPTH
    if continuum > 0.0:
        reach = min(reach, _FAR * max(math.sqrt(wing / continuum), 1.0 / continuum))
    return min(max(reach, _NEAREST), FARTHEST)


@kernel
def cells_to(reach: float, per_unit: int) -> int:
    """Cells on each side, in whole units of u, so that the end of the grid rarely moves."""
    return math.ceil(math.asinh(reach / SCALE)) * per_unit


@kernel
def _decay(depth: float) -> tuple[float, float, float]:
    """Give e^-D, q = (1 - e^-D)/D and dq/dD."""
    if depth < 1e-3:
        q = 1.0 - depth * (0.5 - depth * (1.0 / 6.0 - depth / 24.0))
        q_by = -0.5 + depth * (1.0 / 3.0 - depth * (0.125 - depth / 30.0))
        return 1.0 - depth * q, q, q_by
    lost = -math.expm1(-depth)
    q = lost / depth
    return 1.0 - lost, q, (1.0 - lost - q) / depth


@kernel
def _mass(row: FloatArray, a: float) -> tuple[float, float]:
    """Profile times cell width at damping a, and its derivative by a."""
    value = row[1] + a * (row[2] + a * (row[3] + a * row[4]))
    return value, row[2] + a * (2.0 * row[3] + a * 3.0 * row[4])


@kernel
def _cell(depths: FloatArray, mass: float, mass_by: float, h: FloatArray, out: FloatArray) -> None:
    """Carry h and its derivatives across one cell; add what escapes there."""
    tau, line, continuum = depths[0], depths[0] * mass, depths[1]
    total = line + continuum
    share = continuum / total if total > 0.0 else 0.0
    turn = share * (line / total) if total > 0.0 else 0.0
    decay, q, q_by = _decay(total)
    over = h[0] - share
    mean = share + over * q
    # By ln tau, ln c and a: of the share and of the depth.
    turn_by = share * (tau * mass_by / total) if share > 0.0 else 0.0
    shares = (-turn, turn, -turn_by)
    totals = (line, continuum, tau * mass_by)
    out[0] += mass * mean
    for k in range(3):
        mean_by = shares[k] * (1.0 - q) + h[k + 1] * q + over * q_by * totals[k]
        out[k + 1] += mass * mean_by
        h[k + 1] = shares[k] * (1.0 - decay) + h[k + 1] * decay - over * decay * totals[k]
    out[3] += mass_by * mean
    h[0] = share + over * decay


@kernel
def escape_with_continuum(
    tau: float, c: float, a: float, half: int, cells: FloatArray, out: FloatArray
) -> int:
    """Escape probability and its derivatives.

    Parameters
    ----------
    tau, c, a : float, dimensionless
        Depth of the line; of the continuum per Doppler width; damping.
    half : int
        Cells to use on each side of line centre.
    cells : ndarray, shape (>= half, 5)
        For y > 0, ascending: cell width; the coefficients of 1, a, a^2 and a^3 of phi times it.
    out : ndarray, shape (4,)
        P, dP/d ln tau, dP/d ln c, dP/da.

    Returns
    -------
    int
        0; 1 if `half` is not within the cells.
    """
    if half < 1 or half > cells.shape[0]:
        return 1
    # Beyond the last cell, its edge taken as the sum of widths: phi = a/(pi y^2).
    edge = 0.0
    total, total_by = 0.0, 0.0
    for i in range(half):
        edge += cells[i, 0]
        mass, by = _mass(cells[i], a)
        total += 2.0 * mass
        total_by += 2.0 * by
    tail_by = 1.0 / (math.pi * edge)
    total += 2.0 * a * tail_by
    total_by += 2.0 * tail_by
    h = np.zeros(4)
    h[0] = 1.0
    out[:] = 0.0
    depths = np.array([tau, c * edge])
    for step in range(-1, 2 * half + 1):
        if step == -1 or step == 2 * half:
            mass, by = a * tail_by, tail_by
            depths[1] = c * edge
        else:
            i = half - 1 - step if step < half else step - half
            mass, by = _mass(cells[i], a)
            depths[1] = c * cells[i, 0]
        mass /= total
        _cell(depths, mass, by / total - mass * total_by / total, h, out)
    return 0


@kernel
def escape_of_lines(
    columns: FloatArray, per_unit: int, coarse: FloatArray, fine: FloatArray, out: FloatArray
) -> int:
    """Escape probability of each line: from two grids, extrapolated from order 2 to order 4.

    Parameters
    ----------
    columns : ndarray, shape (n_lines, 3), dimensionless
        tau, c and a of each line.
    per_unit : int
        Cells of the coarse grid in a unit of u; the fine grid has twice as many.
    coarse, fine : ndarray, shape (n_cells, 5)
        As for :func:`escape_with_continuum`.
    out : ndarray, shape (n_lines, 4)
        As there.

    Returns
    -------
    int
        0; 1 if one of a line's numbers is none, negative or infinite; 2 if it reaches beyond the
        cells.
    """
    wide = np.empty(4)
    for line in range(columns.shape[0]):
        tau, c, a = columns[line, 0], columns[line, 1], columns[line, 2]
        if not (0.0 <= tau < np.inf and 0.0 <= c < np.inf and a >= 0.0):
            return 1
        half = cells_to(reach_of_line(tau, c, a), per_unit)
        if escape_with_continuum(tau, c, a, half, coarse, wide):
            return 2
        if escape_with_continuum(tau, c, a, 2 * half, fine, out[line]):
            return 2
        for k in range(4):
            out[line, k] = (4.0 * out[line, k] - wide[k]) / 3.0
    return 0
