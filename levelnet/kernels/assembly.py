"""From line strengths and occupation numbers to the scaled symmetric blocks of one network."""

import math

from .compile import kernel


@kernel
def symmetric_blocks(
    n_max,
    first_n,
    strength,
    strength_start,
    geometric,
    stretch,
    start,
    coupling_start,
    root_weight,
    shift,
    idle,
    sink,
    upward,
    downward,
    diagonal,
    coupling,
):
    """Fill the coupling buffer B, the total outflow D and the outflow to the block below.

    Block l holds the levels n = first_n[l] .. n_max of angular momentum l.

    Parameters
    ----------
    strength : A sqrt(g_u/g_l) in s^-1, block l at strength_start[l], rows n = l+1.., columns n' = l+2..
    geometric, stretch : shape (n_max + 1, n_max + 1), indexed by (n, n'): 1/(2 sinh(x/2)) and
        coth(x/2)/2, x = non-relativistic transition energy over kT.
    root_weight : square root of the Boltzmann weight of each level.
    shift : energy of each level above its non-relativistic energy, over kT.
    idle : True for a level that takes no part; its sink must be positive.
    sink : outflow of each level from the network, s^-1.
    upward, downward : work space; on exit `downward` is the outflow to block l - 1, scaled.
    diagonal : D, total outflow of each level, s^-1.
    coupling : B = S / sqrt(D D'), S the geometric mean of the two directions of each line.
    """
    n_blocks = first_n.shape[0]
    upward[:] = 0.0
    downward[:] = 0.0
    for l in range(n_blocks - 1):
        columns = n_max - l - 1
        above = n_max + 1 - first_n[l + 1]
        for n in range(first_n[l], n_max + 1):
            i = start[l] + n - first_n[l]
            row = strength_start[l] + (n - l - 1) * columns - (l + 2)
            out = coupling_start[l] + (n - first_n[l]) * above - first_n[l + 1]
            total = 0.0
            for other in range(first_n[l + 1], n_max + 1):
                j = start[l + 1] + other - first_n[l + 1]
                # e^-a to third order in a, the effect of fine structure on the occupation number.
                a = stretch[n, other] * (shift[i] - shift[j])
                if n < other:
                    a = -a
                value = strength[row + other] * geometric[n, other] * ((2.0 - a) / (2.0 + a))
                if idle[i] or idle[j]:
                    value = 0.0
                coupling[out + other] = value
                total += value * root_weight[j]
                downward[j] += value * root_weight[i]
            upward[i] = total
    for i in range(diagonal.shape[0]):
        diagonal[i] = (upward[i] + downward[i]) / root_weight[i] + sink[i]
        upward[i] = 1.0 / math.sqrt(diagonal[i])
        downward[i] *= upward[i]
    for l in range(n_blocks - 1):
        above = n_max + 1 - first_n[l + 1]
        for i in range(n_max + 1 - first_n[l]):
            scale = upward[start[l] + i]
            out = coupling_start[l] + i * above
            for j in range(above):
                coupling[out + j] *= scale * upward[start[l + 1] + j]
