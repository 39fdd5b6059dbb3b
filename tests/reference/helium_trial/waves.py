"""Wave functions and cross sections of the helium trial, in atomic units unless said otherwise."""

import numpy as np
import scipy.constants as sc
from scipy.special import gammaln

from tests.reference.helium_trial.background import BOHR_AREA, Array


def hydrogen_dipoles(n: int, m: int) -> dict[tuple[int, int], float]:
    """Radial integrals <n l|r|m l'> of hydrogen, n > m, keyed (l, l'): Infeld & Hull 1951, Rev.
    Mod. Phys. 23, 21."""

    def a(k: int, l: int) -> float:
        return float(np.sqrt(max(k * k - l * l, 0)) / (k * l))

    log_start = (
        (m + 2) * np.log(4 * n * m) + (n - m - 2) * np.log(n - m) - (n + m + 2) * np.log(n + m)
    )
    log_start += 0.5 * (gammaln(n + m + 1) - gammaln(2 * m) - gammaln(n - m)) - np.log(4)
    up = {m: float(np.exp(log_start))}  # <n l|r|m l-1>
    down = {m: 0.0}  # <n l-1|r|m l>
    for l in range(m - 1, 0, -1):
        up[l] = ((2 * l + 1) * a(n, l + 1) * up[l + 1] + a(m, l + 1) * down[l + 1]) / (
            2 * l * a(m, l)
        )
        down[l] = ((2 * l + 1) * a(m, l + 1) * down[l + 1] + a(n, l + 1) * up[l + 1]) / (
            2 * l * a(n, l)
        )
    table = {(l, l - 1): value for l, value in up.items()}
    table.update({(l - 1, l): value for l, value in down.items() if l < m})
    return table


def coulomb_waves(nstar: Array, l: Array, x: Array) -> Array:
    """Bates-Damgaard functions v(x) with r = x^2, u = sqrt(x) v, integrated inward from the
    asymptotic Whittaker series.

    Inside the inner turning point the wave is dropped below its smallest magnitude, where the
    irregular part takes over.
    """
    step = x[1] - x[0]

    def start(at: float) -> Array:
        z = 2 * at**2 / nstar
        term = total = np.ones_like(nstar)
        for j in range(1, 40):
            term = term * ((l + 0.5) ** 2 - (nstar - j + 0.5) ** 2) / (j * z)
            total = total + term
        log_norm = 0.5 * (2 * np.log(nstar) + gammaln(nstar + l + 1) + gammaln(nstar - l))
        return total * np.exp(-z / 2 + nstar * np.log(z) - log_norm) / np.sqrt(at)

    q = (4 * l * (l + 1) + 0.75) / x[:, None] ** 2 - 8 + 4 * x[:, None] ** 2 / nstar**2
    weight = 1 - step**2 / 12 * q
    v = np.zeros((x.size, nstar.size))
    v[-1], v[-2] = start(x[-1]), start(x[-2])
    for i in range(x.size - 2, 0, -1):
        v[i - 1] = ((12 - 10 * weight[i]) * v[i] - weight[i + 1] * v[i + 1]) / weight[i - 1]
    for j, orbital in enumerate(l):
        inner = x**2 < 0.4 * orbital * (orbital + 1)
        cut = np.argmin(np.abs(np.sqrt(x[inner]) * v[inner, j])) if inner.any() else 0
        v[: max(cut, np.searchsorted(x**2, 0.05)), j] = 0.0
    return v


def burgess(n: int, kappa2: Array) -> Array:
    """Photoionization areas sigma_nl of hydrogen in cm^2, shape (n, kappa2), Burgess 1965; kappa2
    in rydberg."""
    k = np.sqrt(kappa2)
    s = np.arange(1, n + 1)[:, None]
    log_g = 0.5 * np.log(np.pi / 2) - 0.5 * gammaln(2 * n) + np.log(4) + n * np.log(4 * n)
    log_g = log_g + 0.5 * (np.log1p(s**2 * kappa2).sum(0) - np.log(-np.expm1(-2 * np.pi / k)))
    log_g = log_g - 2 / k * np.arctan(n * k) - (n + 2) * np.log1p(n * n * kappa2)
    up, down = np.zeros((n, k.size)), np.zeros((n, k.size))  # g(n, l; k, l + 1), g(n, l; k, l - 1)
    big = 1 + n * n * kappa2
    up[n - 1] = np.exp(log_g)
    if n > 1:
        up[n - 2] = 0.5 * np.sqrt((2 * n - 1) * big) * up[n - 1]
        down[n - 1] = np.sqrt(big / (1 + (n - 1) ** 2 * kappa2)) / (2 * n) * up[n - 1]
    if n > 2:
        down[n - 2] = (
            (4 + (n - 1) * big)
            / (2 * n)
            * np.sqrt((2 * n - 1) / (1 + (n - 2) ** 2 * kappa2))
            * down[n - 1]
        )
    for l in range(n - 1, 1, -1):
        right = (4 * n * n - 4 * l * l + l * (2 * l - 1) * big) * up[l - 1]
        right -= 2 * n * np.sqrt((n * n - l * l) * (1 + (l + 1) ** 2 * kappa2)) * up[l]
        up[l - 2] = right / (2 * n * np.sqrt((n * n - (l - 1) ** 2) * (1 + l * l * kappa2)))
    for l in range(n - 2, 1, -1):
        right = (4 * n * n - 4 * l * l + l * (2 * l + 1) * big) * down[l]
        right -= 2 * n * np.sqrt((n * n - (l + 1) ** 2) * (1 + l * l * kappa2)) * down[l + 1]
        down[l - 1] = right / (2 * n * np.sqrt((n * n - l * l) * (1 + (l - 1) ** 2 * kappa2)))
    l_all = np.arange(n)[:, None]
    strength = ((l_all + 1) * up**2 + l_all * down**2) / (2 * l_all + 1)
    return 4 * np.pi * sc.alpha * BOHR_AREA / 3 * n * n * big * strength


def panels() -> tuple[Array, Array]:
    edges = np.concatenate([[0.0], np.geomspace(1e-5, 4.0, 30)])
    node, weight = np.polynomial.legendre.leggauss(5)
    half = np.diff(edges)[:, None] / 2
    return (edges[:-1, None] + half * (1 + node)).ravel(), (half * weight).ravel()
