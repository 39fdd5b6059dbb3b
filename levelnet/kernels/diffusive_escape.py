"""Escape from a line whose photons scatter coherently with small shifts, compiled.

A fraction p of what is absorbed in a line of depth tau is lost to other levels and comes back with
the whole profile phi; the rest scatters, shifted at random by one Doppler width (rms). With y the
frequency in Doppler widths, e = (f - f_bb)/(f_o - f_bb), f_o the source function of what comes from
other levels, and a continuum of depth c per Doppler width,

    de/dy + d/dy [D de/dy] + p tau phi (1 - e) - c e = 0,    D = (1 - p) tau phi / 2,

in cells whose exchange is the exact one at constant D (Scharfetter & Gummel 1969, IEEE Trans.
Electron Devices 16, 64; from memory). With l the chance that a photon made in a cell is never lost
to the line, what leaves is Q = sum of k l, k = p tau phi dy, and every derivative is a sum of
products of l, e and their differences.
"""

import math

import numpy as np
from numpy.typing import NDArray

from .compile import kernel

FloatArray = NDArray[np.float64]


@kernel
def _profile(damping: float, half: int, cells: FloatArray, work: FloatArray) -> None:
    """Masses of the cells from blue to red in row 0, derivatives by the damping in row 1."""
    total, total_by = 0.0, 0.0
    for i in range(half):
        row, a = cells[i], damping
        mass = row[1] + a * (row[2] + a * (row[3] + a * row[4]))
        by = row[2] + a * (2.0 * row[3] + a * 3.0 * row[4])
        work[0, half - 1 - i] = work[0, half + i] = mass
        work[1, half - 1 - i] = work[1, half + i] = by
        total += 2.0 * mass
        total_by += 2.0 * by
    for i in range(2 * half):
        work[0, i] /= total
        work[1, i] = work[1, i] / total - work[0, i] * total_by / total


@kernel
def _exchange(scatter: float, half: int, cells: FloatArray, work: FloatArray) -> None:
    """What each edge lets back to the blue, 1/(e^(h/D) - 1); its slopes by ln D; d ln D/da."""
    for i in range(2 * half - 1):
        blue = half - 1 - i if i < half else i - half
        red = half - 2 - i if i + 1 < half else i + 1 - half
        width, next_width = cells[blue, 0], cells[red, 0]
        phi = work[0, i] / width + work[0, i + 1] / next_width
        phi_by = work[1, i] / width + work[1, i + 1] / next_width
        inverse = 0.5 * (width + next_width)
        diffusion = 0.25 * scatter * phi
        ratio = inverse / diffusion if diffusion > 1e-3 * inverse else 1e3
        back = 1.0 / math.expm1(ratio) if ratio < 600.0 else 0.0
        work[2, i] = back
        work[3, i] = ratio * back * (1.0 + back)
        work[4, i] = phi_by / phi if phi > 0.0 else 0.0


@kernel
def escape_with_diffusion(
    line: FloatArray, half: int, cells: FloatArray, work: FloatArray, out: FloatArray
) -> int:
    """What leaves the line, and its derivatives.

    Parameters
    ----------
    line : ndarray, shape (4,), dimensionless
        tau; c; damping of the whole natural width; p, above 0 and below 1.
    half : int
        Cells on each side of line centre.
    cells : ndarray, shape (>= half, 5)
        For y > 0, ascending: cell width; the coefficients of 1, a, a^2 and a^3 of phi times it.
    work : ndarray, shape (8, >= 2 half)
        Workspace.
    out : ndarray, shape (5,)
        Q; its derivatives by ln tau, ln c, the damping and p.

    Returns
    -------
    int
        0; 1 if `half` does not fit.
    """
    if half < 1 or half > cells.shape[0] or 2 * half > work.shape[1]:
        return 1
    tau, c, p = line[0], line[1], line[3]
    count = 2 * half
    _profile(line[2], half, cells, work)
    _exchange((1.0 - p) * tau, half, cells, work)
    # Rows 5 and 6: e and l. Elimination from the blue; `stay` is what leaves a cell but not to the
    # red, a sum of positive terms, so that the large exchange is never subtracted from itself.
    stay = 0.0
    for i in range(count):
        width = cells[half - 1 - i if i < half else i - half, 0]
        source = p * tau * work[0, i]
        lost = c * width + (1.0 if i == count - 1 else 0.0)
        onward = work[2, i] + 1.0 if i < count - 1 else 1.0
        sinks = source + c * width
        if i > 0:
            back, exits = work[2, i - 1], work[7, i - 1]
            source += (1.0 + back) * work[5, i - 1] / exits
            lost += back * work[6, i - 1] / exits
            stay = sinks + back * stay / exits
        else:
            stay = sinks
        work[7, i], work[5, i], work[6, i] = onward + stay, source, lost
    for i in range(count - 1, -1, -1):
        if i < count - 1:
            work[5, i] += work[2, i] * work[5, i + 1]
            work[6, i] += (1.0 + work[2, i]) * work[6, i + 1]
        work[5, i] /= work[7, i]
        work[6, i] /= work[7, i]
    _gather(line, half, cells, work, out)
    return 0


@kernel
def _gather(
    line: FloatArray, half: int, cells: FloatArray, work: FloatArray, out: FloatArray
) -> None:
    """Sum what leaves, and its derivatives, from e and l."""
    tau, c, p = line[0], line[1], line[3]
    edge = 0.0
    for i in range(half):
        edge += cells[i, 0]
    # Beyond the cells phi = a/(pi y^2), and nothing is lost to the line.
    tail = 2.0 * p * tau / (math.pi * edge)
    out[0] = out[1] = tail * line[2]
    out[2], out[3], out[4] = 0.0, tail, tail * line[2] / p
    for i in range(2 * half):
        e, left = work[5, i], work[6, i]
        width = cells[half - 1 - i if i < half else i - half, 0]
        made = p * tau * work[0, i]
        out[0] += made * left
        net = left * (1.0 - e)
        out[1] += made * net
        out[2] += c * width * e * (1.0 - left)
        out[3] += p * tau * work[1, i] * net
        out[4] += tau * work[0, i] * net
        if i < 2 * half - 1:
            turn = work[3, i] * (work[6, i + 1] - left) * (e - work[5, i + 1])
            out[1] += turn
            out[3] += turn * work[4, i]
            out[4] -= turn / (1.0 - p)
