"""H I, He I and He II as plain level lists, computed independently of `levelnet`.

Nothing here imports the package: the comparison in `tests/history` is worth something only because the two sides share no code.
Energies of He I: NIST levels for n = 2, quantum-defect series above (Drake, Springer Handbook of AMO Physics; Drake & Martin 1998,
Can. J. Phys. 76, 679; coefficients from memory, they reproduce the NIST levels to 0.2 cm^-1). Rates: NIST where listed, Coulomb
approximation (Bates & Damgaard 1949, Phil. Trans. R. Soc. A 242, 101) for l <= 2, hydrogenic above. Photoionization of excited levels:
hydrogenic (Burgess 1965, Mem. R. Astron. Soc. 69, 1) at the true threshold, crude for s levels, which x_e hardly feels.
"""

from dataclasses import dataclass

import numpy as np
import scipy.constants as sc
from numpy.typing import NDArray
from scipy.special import gammaln

Array = NDArray[np.float64]

C = sc.c * 1e2
H_PLANCK = sc.h * 1e7
K_B = sc.k * 1e7
M_E = sc.m_e * 1e3
AMU = sc.atomic_mass * 1e3
WAVENUMBER = H_PLANCK * C  # erg per cm^-1
RYDBERG = sc.Rydberg * 1e-2 * WAVENUMBER  # erg, infinite mass
BOHR_AREA = (sc.physical_constants["Bohr radius"][0] * 1e2) ** 2
ATOMIC_TIME = sc.physical_constants["atomic unit of time"][0]
MASS_H, MASS_HE = 1.00782503 * AMU, 4.00260325 * AMU

HE_LIMIT, HE_RYDBERG = 198310.666, 109722.273  # cm^-1
HE_N2 = {(0, 0): 166277.440, (0, 1): 159855.974, (1, 0): 171134.897, (1, 1): 169086.910}  # (l, S): cm^-1, NIST
HE_DEFECTS = {
    (0, 0): (0.139718064, 0.027835737, 0.0165227),
    (0, 1): (0.296656487, 0.038296666, 0.0075131),
    (1, 0): (-0.012141803, 0.0075195, 0.0139780),
    (1, 1): (0.068328002, -0.0186419, -0.0123316),
    (2, 0): (0.0021133784, -0.0030877, 0.0),
    (2, 1): (0.0028857, -0.0063577, 0.0),
    (3, 0): (0.00044029, -0.0016894, 0.0),
    (3, 1): (0.00044859, -0.0017269, 0.0),
}
# (n, l) upper, (n, l) lower, spin: A in s^-1, NIST (2 1P, 3 1P - 2 1S, 4 1D, 4 3D - n = 2 from memory)
HE_PUBLISHED = {
    ((2, 1), (2, 0), 0): 1.9746e6,
    ((3, 1), (2, 0), 0): 1.3372e7,
    ((3, 0), (2, 1), 0): 1.8299e7,
    ((3, 2), (2, 1), 0): 6.3705e7,
    ((4, 2), (2, 1), 0): 1.9863e7,
    ((2, 1), (2, 0), 1): 1.0216e7,
    ((3, 1), (2, 0), 1): 9.4746e6,
    ((3, 0), (2, 1), 1): 2.7853e7,
    ((3, 2), (2, 1), 1): 7.0708e7,
    ((4, 2), (2, 1), 1): 2.4578e7,
}
HE_RESONANCE = {2: 1.7989e9, 3: 5.6634e8, 4: 2.4356e8}  # n 1P - 1 1S, s^-1, NIST


@dataclass
class GroundLine:
    """A way from an excited level to the ground state."""

    name: str
    level: int
    rate: float  # s^-1 for the sublevels that radiate
    share: float  # of the level's population that radiates
    energy: float  # erg
    thick: bool = True
    resonance_n: int = 0


@dataclass
class Atom:
    """Excited levels of one ion with all their rates; energies in erg below the limit."""

    labels: list[tuple[int, int, int]]  # n, l, S
    weight: Array
    binding: Array
    einstein_a: Array  # [upper, lower]
    photon: Array  # [level, node] erg
    area: Array  # [level, node] cm^2 times the quadrature weight in erg
    ground_binding: float
    ground_weight: float
    ion_weight: float
    reduced_mass: float
    mass: float
    lines: list[GroundLine]

    def index(self, n: int, l: int, spin: int = 0) -> int:
        return self.labels.index((n, l, spin))


def hydrogen_dipoles(n: int, m: int) -> dict[tuple[int, int], float]:
    """Radial integrals <n l|r|m l'> of hydrogen, n > m, keyed (l, l'): Infeld & Hull 1951, Rev. Mod. Phys. 23, 21."""

    def a(k: int, l: int) -> float:
        return float(np.sqrt(max(k * k - l * l, 0)) / (k * l))

    log_start = (m + 2) * np.log(4 * n * m) + (n - m - 2) * np.log(n - m) - (n + m + 2) * np.log(n + m)
    log_start += 0.5 * (gammaln(n + m + 1) - gammaln(2 * m) - gammaln(n - m)) - np.log(4)
    up = {m: float(np.exp(log_start))}  # <n l|r|m l-1>
    down = {m: 0.0}  # <n l-1|r|m l>
    for l in range(m - 1, 0, -1):
        up[l] = ((2 * l + 1) * a(n, l + 1) * up[l + 1] + a(m, l + 1) * down[l + 1]) / (2 * l * a(m, l))
        down[l] = ((2 * l + 1) * a(m, l + 1) * down[l + 1] + a(n, l + 1) * up[l + 1]) / (2 * l * a(n, l))
    table = {(l, l - 1): value for l, value in up.items()}
    table.update({(l - 1, l): value for l, value in down.items() if l < m})
    return table


def coulomb_waves(nstar: Array, l: Array, x: Array) -> Array:
    """Bates-Damgaard functions v(x) with r = x^2, u = sqrt(x) v, integrated inward from the asymptotic Whittaker series.

    Inside the inner turning point the wave is dropped below its smallest magnitude, where the irregular part takes over.
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
    """Photoionization areas sigma_nl of hydrogen in cm^2, shape (n, kappa2), Burgess 1965; kappa2 in rydberg."""
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
        down[n - 2] = (4 + (n - 1) * big) / (2 * n) * np.sqrt((2 * n - 1) / (1 + (n - 2) ** 2 * kappa2)) * down[n - 1]
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


def _panels() -> tuple[Array, Array]:
    edges = np.concatenate([[0.0], np.geomspace(1e-5, 4.0, 30)])
    node, weight = np.polynomial.legendre.leggauss(5)
    half = np.diff(edges)[:, None] / 2
    return (edges[:-1, None] + half * (1 + node)).ravel(), (half * weight).ravel()


def _bound_free(labels: list[tuple[int, int, int]], binding: Array, charge: int, mass_ratio: float) -> tuple[Array, Array]:
    kappa2, weight = _panels()
    per_rydberg = charge**2 * RYDBERG * mass_ratio
    shells = {n: burgess(n, kappa2) for n in {label[0] for label in labels}}
    area = np.array([shells[n][l] for n, l, _ in labels]) / charge**2 / mass_ratio**2
    return binding[:, None] + kappa2 * per_rydberg, area * weight * per_rydberg


def hydrogenic(charge: int, nucleus_mass: float, n_max: int, two_photon: float) -> Atom:
    """H I (charge 1) or He II (charge 2) with every (n, l), 2 <= n <= n_max."""
    mass_ratio = nucleus_mass / (nucleus_mass + M_E)
    energy = charge**2 * RYDBERG * mass_ratio
    labels = [(n, l, 0) for n in range(2, n_max + 1) for l in range(n)]
    binding = np.array([energy / n**2 for n, _, _ in labels])
    a = np.zeros((len(labels), len(labels)))
    position = {label[:2]: i for i, label in enumerate(labels)}
    resonance = {}
    for n in range(2, n_max + 1):
        for m in range(1, n):
            omega = 0.5 * (1 / m**2 - 1 / n**2)
            scale = 4 / 3 * sc.alpha**3 * omega**3 / ATOMIC_TIME * mass_ratio * charge**4
            for (l, k), radial in hydrogen_dipoles(n, m).items():
                rate = scale * max(l, k) / (2 * l + 1) * radial**2
                if m == 1:
                    resonance[n] = rate
                else:
                    a[position[n, l], position[m, k]] = rate
    lines = [GroundLine(f"{n}p", position[n, 1], resonance[n], 1.0, energy * (1 - 1 / n**2), True, n) for n in resonance]
    lines.append(GroundLine("2s", position[2, 0], two_photon, 1.0, 0.75 * energy, False))
    photon, area = _bound_free(labels, binding, charge, mass_ratio)
    weight = np.array([2.0 * (2 * l + 1) for _, l, _ in labels])
    reduced = M_E * mass_ratio
    return Atom(labels, weight, binding, a, photon, area, energy, 2.0, 1.0, reduced, nucleus_mass + M_E, lines)


def helium_binding(n: int, l: int, spin: int) -> float:
    """Energy of a He I level below the limit in cm^-1; quantum-defect series iterated to convergence."""
    if n == 2:
        return HE_LIMIT - HE_N2[l, spin]
    delta = 0.0
    d0, d2, d4 = HE_DEFECTS.get((l, spin), (0.0, 0.0, 0.0))
    for _ in range(50):
        delta = d0 + d2 / (n - delta) ** 2 + d4 / (n - delta) ** 4
    return HE_RYDBERG / (n - delta) ** 2


def neutral_helium(n_max: int, intercombination: float = 177.6, two_photon: float = 51.02) -> Atom:
    """He I, singlets and triplets, every (n, l, S) with 2 <= n <= n_max; 2 3P is one level."""
    labels = [(n, l, spin) for spin in (0, 1) for n in range(2, n_max + 1) for l in range(n)]
    inverse_cm = np.array([helium_binding(*label) for label in labels])
    weight = np.array([(2.0 * spin + 1) * (2 * l + 1) for _, l, spin in labels])
    mass_ratio = HE_RYDBERG / (sc.Rydberg * 1e-2)
    nstar = np.sqrt(HE_RYDBERG / inverse_cm)
    orbital = np.array([float(l) for _, l, _ in labels])
    x = np.arange(0.1, np.sqrt(2.0 * n_max**2 + 40 * n_max + 60), 0.006)
    low = np.flatnonzero(orbital <= 3)
    wave = np.zeros((x.size, len(labels)))
    wave[:, low] = coulomb_waves(nstar[low], orbital[low], x)
    a = np.zeros((len(labels), len(labels)))
    for i, (n, l, spin) in enumerate(labels):
        for j, (m, k, other) in enumerate(labels):
            omega = 0.5 * (inverse_cm[j] - inverse_cm[i]) / HE_RYDBERG
            if spin != other or abs(l - k) != 1 or omega <= 0:
                continue
            if min(l, k) <= 2:
                radial = 2 * np.sum(x**4 * wave[:, i] * wave[:, j]) * 0.006
            elif n > m:
                radial = hydrogen_dipoles(n, m)[l, k]
            else:
                continue  # within one shell, hydrogenic: no energy difference
            rate = 4 / 3 * sc.alpha**3 * omega**3 / ATOMIC_TIME * mass_ratio * max(l, k) / (2 * l + 1) * radial**2
            a[i, j] = HE_PUBLISHED.get(((n, l), (m, k), spin), rate)
    binding = inverse_cm * WAVENUMBER
    position = {label: i for i, label in enumerate(labels)}
    lines = []
    for n in range(2, n_max + 1):
        i = position[n, 1, 0]
        energy = HE_LIMIT - inverse_cm[i]
        i4 = position[min(n_max, 4), 1, 0]
        scaled = HE_RESONANCE[min(n_max, 4)] * (nstar[i4] / nstar[i]) ** 3 * (energy / (HE_LIMIT - inverse_cm[i4])) ** 2
        rate = HE_RESONANCE.get(n, scaled)
        lines.append(GroundLine(f"{n}1P", i, rate, 1.0, energy * WAVENUMBER, True, n))
    triplet = position[2, 1, 1]
    lines.append(GroundLine("23P1", triplet, intercombination, 3 / 9, 169086.843 * WAVENUMBER))
    lines.append(GroundLine("23P2", triplet, 0.324, 5 / 9, 169086.766 * WAVENUMBER))
    lines.append(GroundLine("23S", position[2, 0, 1], 1.272e-4, 1.0, 159855.974 * WAVENUMBER))
    lines.append(GroundLine("21S", position[2, 0, 0], two_photon, 1.0, 166277.440 * WAVENUMBER, False))
    photon, area = _bound_free(labels, binding, 1, mass_ratio)
    reduced = M_E * mass_ratio
    return Atom(labels, weight, binding, a, photon, area, HE_LIMIT * WAVENUMBER, 1.0, 2.0, reduced, MASS_HE, lines)
