"""Closed forms of the hydrogenic radial integrals with the highest angular momentum.

They start the recurrence in :mod:`levelnet.kernels.radial`. Both are products of factorials and
high powers; with Stirling's series the large parts cancel on paper, so that more digits survive
than with rounded logarithms of factorials.
"""

import numpy as np
from scipy.special import gammaln

from ..arrays import FloatArray, IntArray

# From here on seven terms of Stirling's series are exact to 1e-16.
_SERIES_FROM = 12
# Factors per partial product: each is above 1e-8 for n k < 1e4, so that none underflows.
_FACTORS_PER_PRODUCT = 16


def stirling_tail(n_max: int) -> FloatArray:
    """Return ln n! - [(n + 1/2) ln n - n + ln(2 pi)/2] for n = 0..n_max; element 0 is unused (0).

    Notes
    -----
    1/(12 n) - 1/(360 n^3) + ... (Stirling's series, Abramowitz & Stegun 1964, sec. 6.1); below
    n = 12 by subtraction, where the terms are small. Good to 4e-15.
    """
    n = np.arange(1.0, n_max + 1.0)
    inverse_square = n**-2
    tail = np.zeros_like(n)
    for denominator in (-360360.0 / 691.0, 1188.0, -1680.0, 1260.0, -360.0, 12.0):
        tail = tail * inverse_square + 1.0 / denominator
    tail /= n
    few = n[: _SERIES_FROM - 1]
    tail[: len(few)] = gammaln(few + 1) - (few + 0.5) * np.log(few) + few - 0.5 * np.log(2 * np.pi)
    return np.concatenate([[0.0], tail])


def bound_start(upper: IntArray, lower: IntArray) -> FloatArray:
    """Radial integral <n, m | r | m, m-1> of upper n > lower m >= 1, in Bohr radii for charge 1.

    Parameters
    ----------
    upper, lower : ndarray of int, one shape, dimensionless
        Principal quantum numbers.

    Returns
    -------
    ndarray, same shape, Bohr radii
        Relative error below 1e-13 up to n = 1000.

    Notes
    -----
    (1/4) (4nm)^(m+2) (n-m)^(n-m-2) / (n+m)^(n+m+2) sqrt[(n+m)! / ((2m-1)! (n-m-1)!)], the one-term
    case of Gordon's formula. With Stirling's series for (n+m)!/((2m)! (n-m)!), all that is left of
    the powers is (2n/(n+m))^2m ((n-m)/(n+m))^(n-m).

    References
    ----------
    Gordon 1929, Ann. Phys. 394, 1031 (from memory; checked against exact rational arithmetic).
    """
    total, twice, gap = upper + lower, 2 * lower, upper - lower
    tail = stirling_tail(int(np.max(total, initial=1)))
    # The smaller of the two quotients carries the smaller rounding error.
    small_twice = twice < gap
    decay = np.where(
        small_twice,
        np.log1p(-np.where(small_twice, twice, 0) / total),
        np.log(gap / total),
    )
    exponent = twice * np.log1p(gap / total) + gap * decay
    exponent += tail[total] - tail[twice] - tail[gap]
    binomial = np.sqrt(total / (2.0 * np.pi * twice * gap))
    power = (4.0 * upper * lower / total) ** 2 / (4.0 * gap)
    integral: FloatArray = power * np.sqrt(twice / gap * binomial) * np.exp(0.5 * exponent)
    return integral


def log_continuum_start(n: int, electron_energy: FloatArray) -> FloatArray:
    """Return ln of n^2 (1 + n^2 k^2) g(n, n-1; k, n)^2, the start of the bound-free recurrence.

    Parameters
    ----------
    n : int, dimensionless
        Principal quantum number.
    electron_energy : ndarray, shape (n_energies,), dimensionless
        k^2 in units of chi, from 0 (threshold) to (1e4/n)^2.

    Notes
    -----
    g(n, n-1; 0, n) = sqrt(pi / (2 (2n-1)!)) 4 (4n)^n e^(-2n) and

    g(n, n-1; k, n) = sqrt(prod_{s=1}^{n} (1 + s^2 k^2) / (1 - e^(-2 pi/k)))
    e^(2n - (2/k) arctan(nk)) / (1 + n^2 k^2)^(n+2) g(n, n-1; 0, n).

    References
    ----------
    Burgess 1965, Mem. R. Astron. Soc. 69, 1 (from memory; checked against Coulomb wave functions).
    """
    k = np.sqrt(electron_energy)
    z = n * k
    moving = z > 0.0
    phase = np.divide(np.arctan(z), z, out=np.ones_like(z), where=moving)
    barrier = np.exp(-np.divide(2.0 * np.pi, k, out=np.full_like(k, np.inf), where=moving))
    s = np.arange(1.0, n + 1.0)[:, None]
    ratios = (1.0 + s**2 * electron_energy) / (1.0 + z**2)
    products = np.multiply.reduceat(ratios, np.arange(0, n, _FACTORS_PER_PRODUCT), axis=0)
    at_threshold = 2 * n * (np.log(2.0) - 1.0) + np.log(8.0 * np.sqrt(np.pi * n) * n**2)
    at_threshold -= stirling_tail(2 * n)[-1]
    rise = np.log(products).sum(axis=0) - np.log1p(-barrier) + 4.0 * n * (1.0 - phase)
    log_start: FloatArray = at_threshold + rise - (n + 3.0) * np.log1p(z**2)
    return log_start
