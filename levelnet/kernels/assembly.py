"""From line strengths and occupation numbers to couplings, outflows and scales of one network."""

import math

import numpy as np
from numpy.typing import NDArray

from .compile import kernel

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@kernel
def _fill(
    strength: FloatArray,
    geometric: FloatArray,
    stretch: FloatArray,
    rise: float,
    own_shift: float,
    shift: FloatArray,
    own_factor: float,
    factor: FloatArray,
    weight: float,
    downward: FloatArray,
    out: FloatArray,
) -> None:
    """Couplings of one level to a run of levels, all above (rise = -1) or all below it (rise = 1).

    1/(2 sinh(x/2)) is e^(-x/2) / (1 - e^-x); with fine structure x grows by d, the level's own
    shift less the other's. Both factors together are e^(-d/2), exact, or 0; the rest is expanded.
    No branches, and one array written in each loop: the compiler gives up vector registers where it
    would have to tell more than eight pairs of arrays apart.
    """
    for j in range(out.shape[0]):
        # What fine structure does to 1/(1 - e^-x): e^-a, a^3 and more left out. Shifts are 1e-4 of
        # the distance to the next shell or less, and a no larger.
        a = rise * stretch[j] * (own_shift - shift[j])
        expanded = 1.0 - a * (1.0 - 0.5 * a)
        out[j] = strength[j] * geometric[j] * (own_factor * factor[j]) * expanded
    for j in range(out.shape[0]):
        downward[j] += out[j] * weight


@kernel
def _dot(a: FloatArray, b: FloatArray) -> float:
    """Scalar product in four sums, which need not wait for each other."""
    first, second, third, fourth = 0.0, 0.0, 0.0, 0.0
    whole = len(a) - len(a) % 4
    for j in range(0, whole, 4):
        first += a[j] * b[j]
        second += a[j + 1] * b[j + 1]
        third += a[j + 2] * b[j + 2]
        fourth += a[j + 3] * b[j + 3]
    for j in range(whole, len(a)):
        first += a[j] * b[j]
    return (first + second) + (third + fourth)


@kernel
def geometric_means(
    top: int,
    first_n: IntArray,
    strength: FloatArray,
    strength_start: IntArray,
    geometric: FloatArray,
    stretch: FloatArray,
    start: IntArray,
    coupling_start: IntArray,
    root_weight: FloatArray,
    shift: FloatArray,
    live: FloatArray,
    upward: FloatArray,
    downward: FloatArray,
    coupling: FloatArray,
) -> None:
    """Geometric mean S of the two directions of every line, and what it sums to.

    Arguments as for :func:`symmetric_blocks`; on exit `coupling` holds S, `upward` and `downward`
    the sums of S times the root weight of the partners in the block above and below.
    """
    n_blocks = first_n.shape[0]
    upward[:] = 0.0
    downward[:] = 0.0
    # What leans a line up or down: e^(-d/2) of one end times that of the other, 0 for idle levels.
    down = np.exp(-0.5 * shift) * live
    up = np.exp(0.5 * shift) * live
    for l in range(n_blocks - 1):
        low, columns = first_n[l + 1], top - l - 1
        above = top + 1 - low
        first = start[l + 1]
        for n in range(first_n[l], top + 1):
            i = start[l] + n - first_n[l]
            row = strength_start[l] + (n - l - 1) * columns + low - l - 2
            begin = coupling_start[l] + (n - first_n[l]) * above
            middle = min(max(n - low, 0), above)
            for a, b, rise in ((0, middle, 1.0), (middle, above, -1.0)):
                _fill(
                    strength[row + a : row + b],
                    geometric[n, low + a : low + b],
                    stretch[n, low + a : low + b],
                    rise,
                    shift[i],
                    shift[first + a : first + b],
                    down[i] if rise > 0.0 else up[i],
                    (up if rise > 0.0 else down)[first + a : first + b],
                    root_weight[i],
                    downward[first + a : first + b],
                    coupling[begin + a : begin + b],
                )
            upward[i] = _dot(coupling[begin : begin + above], root_weight[first : first + above])


@kernel
def symmetric_blocks(
    top: int,
    first_n: IntArray,
    strength: FloatArray,
    strength_start: IntArray,
    geometric: FloatArray,
    stretch: FloatArray,
    start: IntArray,
    coupling_start: IntArray,
    root_weight: FloatArray,
    shift: FloatArray,
    live: FloatArray,
    sink: FloatArray,
    scale: FloatArray,
    downward: FloatArray,
    diagonal: FloatArray,
    coupling: FloatArray,
) -> None:
    """Fill the coupling buffer, the total outflow D and the outflow to the block below.

    Block l holds the levels n = first_n[l] .. top of angular momentum l; n_unknowns in all. Whole
    shells, above `top`, have no place here: what goes to them is in `sink`.

    Parameters
    ----------
    top : int
        Highest n resolved in l.
    first_n : ndarray of int, shape (top,)
        Lowest n of each block.
    strength : ndarray
        A sqrt(g_u/g_l) in s^-1; block l at strength_start[l], rows n = l+1.., columns n' = l+2...
    strength_start, start, coupling_start : ndarray of int
        Where blocks begin in `strength`, in vectors, and in `coupling`.
    geometric, stretch : ndarray, shape (n_max + 1, n_max + 1)
        1/(2 sinh(x/2)) and 1/(e^x - 1) by (n, n'), x the non-relativistic line energy over kT;
        n_max is the highest n of all, at least `top`.
    root_weight, shift, live, sink : ndarray, shape (n_unknowns,)
        Square root of the Boltzmann weight; energy above the non-relativistic one over kT; 0 for
        a level that takes no part, else 1; outflow to kept levels, whole shells and the continuum
        in s^-1, positive where live is 0.
    scale : ndarray, shape (n_unknowns,)
        On exit 1 / sqrt(D).
    downward : ndarray, shape (n_unknowns,)
        On exit the outflow to block l - 1, scaled.
    diagonal : ndarray, shape (n_unknowns,)
        D, total outflow of each level, s^-1.
    coupling : ndarray
        S, the geometric mean of the two directions of each line, s^-1; scaled from both sides it is
        the B of :mod:`levelnet.numerics.block_cholesky`, which scales it where it is used.
    """
    geometric_means(
        top,
        first_n,
        strength,
        strength_start,
        geometric,
        stretch,
        start,
        coupling_start,
        root_weight,
        shift,
        live,
        scale,
        downward,
        coupling,
    )
    for i in range(diagonal.shape[0]):
        diagonal[i] = (scale[i] + downward[i]) / root_weight[i] + sink[i]
        scale[i] = 1.0 / math.sqrt(diagonal[i])
        downward[i] *= scale[i]


@kernel
def shell_means(
    shell_n: IntArray,
    shell_shift: FloatArray,
    n: IntArray,
    position: IntArray,
    shift: FloatArray,
    live: FloatArray,
    strength: FloatArray,
    geometric: FloatArray,
    stretch: FloatArray,
    out: FloatArray,
) -> None:
    """Fill the geometric means of both directions of every line from a whole shell down.

    Parameters
    ----------
    shell_n, shell_shift : ndarray, shape (n_shells,)
        Principal quantum number; energy above the non-relativistic one over kT.
    n, position, shift, live : ndarray, shape (n_lower,)
        The same of the levels below, where they stand in `strength`, and 0 for one that takes no
        part, else 1.
    strength : ndarray, shape (n_shells, n_levels)
        A sqrt(g_u/g_l) in s^-1.
    geometric, stretch : ndarray, shape (n_max + 1, n_max + 1)
        As for :func:`symmetric_blocks`, with the same expansion in the fine structure.
    out : ndarray, shape (n_shells, n_lower)
        The means, s^-1.
    """
    root = np.exp(0.5 * shift) * live
    for s in range(shell_n.shape[0]):
        own, lean = shell_shift[s], math.exp(-0.5 * shell_shift[s])
        for i in range(n.shape[0]):
            a = stretch[shell_n[s], n[i]] * (own - shift[i])
            mean = strength[s, position[i]] * geometric[shell_n[s], n[i]] * lean * root[i]
            out[s, i] = mean * ((2.0 - a) / (2.0 + a))


@kernel
def pair_weights(
    top: int,
    first_n: IntArray,
    strength_start: IntArray,
    start: IntArray,
    coupling_start: IntArray,
    root_weight: FloatArray,
    coupling: FloatArray,
    feed: FloatArray,
    fate: FloatArray,
    out: FloatArray,
) -> None:
    """Add net flow times difference of fates to every line, summed over the kept levels.

    Parameters
    ----------
    top, first_n, strength_start, start, coupling_start, root_weight
        As for :func:`symmetric_blocks`.
    coupling : ndarray
        S, from :func:`geometric_means`: R_ij w_i = R_ji w_j = S times both root weights.
    feed : ndarray, shape (n_sets, n_kept, n_unknowns)
        Populations over their weights, x / w, of each set.
    fate : ndarray, shape (n_kept, n_unknowns)
        Chance to reach each kept level first.
    out : ndarray, shape (n_sets, n_strengths)
        Added to, in the order of `strength`: (R_ij x_i - R_ji x_j) (fate_j - fate_i).
    """
    n_sets, n_kept = feed.shape[0], feed.shape[1]
    for l in range(first_n.shape[0] - 1):
        low, columns = first_n[l + 1], top - l - 1
        above = top + 1 - low
        first = start[l + 1]
        for n in range(first_n[l], top + 1):
            i = start[l] + n - first_n[l]
            row = strength_start[l] + (n - l - 1) * columns + low - l - 2
            begin = coupling_start[l] + (n - first_n[l]) * above
            for s in range(n_sets):
                for k in range(n_kept):
                    own_feed, own_fate = feed[s, k, i], fate[k, i]
                    for j in range(above):
                        flow = coupling[begin + j] * root_weight[i] * root_weight[first + j]
                        flow *= own_feed - feed[s, k, first + j]
                        out[s, row + j] += flow * (fate[k, first + j] - own_fate)
