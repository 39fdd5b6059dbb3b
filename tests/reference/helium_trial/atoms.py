"""H I, He I and He II as plain level lists, computed independently of `levelnet`.

Nothing here imports the package: the comparison in `tests/whole` is worth something only because
the two sides share no code. Energies of He I: NIST levels for n = 2, quantum-defect series above
(Drake, Springer Handbook of AMO Physics; Drake & Martin 1998, Can. J. Phys. 76, 679; coefficients
from memory, they reproduce the NIST levels to 0.2 cm^-1). Rates: NIST where listed, Coulomb
approximation (Bates & Damgaard 1949, Phil. Trans. R. Soc. A 242, 101) for l <= 2, hydrogenic
above. Photoionization of excited levels: hydrogenic (Burgess 1965, Mem. R. Astron. Soc. 69, 1) at
the true threshold, crude for s levels, which x_e hardly feels.
"""

from dataclasses import dataclass

import numpy as np
import scipy.constants as sc

from tests.reference.helium_trial.background import (
    ATOMIC_TIME,
    M_E,
    MASS_HE,
    RYDBERG,
    WAVENUMBER,
    Array,
)
from tests.reference.helium_trial.waves import burgess, coulomb_waves, hydrogen_dipoles, panels

HE_LIMIT, HE_RYDBERG = 198310.666, 109722.273  # cm^-1
HE_N2 = {
    (0, 0): 166277.440,
    (0, 1): 159855.974,
    (1, 0): 171134.897,
    (1, 1): 169086.910,
}  # (l, S): cm^-1, NIST
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
# (n, l) upper, (n, l) lower, spin: A in s^-1, NIST; from 2 1P and 3 1P to 2 1S, from 4 1D and 4 3D
# from memory
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


def _bound_free(
    labels: list[tuple[int, int, int]], binding: Array, charge: int, mass_ratio: float
) -> tuple[Array, Array]:
    kappa2, weight = panels()
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
    lines = [
        GroundLine(f"{n}p", position[n, 1], resonance[n], 1.0, energy * (1 - 1 / n**2), True, n)
        for n in resonance
    ]
    lines.append(GroundLine("2s", position[2, 0], two_photon, 1.0, 0.75 * energy, False))
    photon, area = _bound_free(labels, binding, charge, mass_ratio)
    weight = np.array([2.0 * (2 * l + 1) for _, l, _ in labels])
    reduced = M_E * mass_ratio
    return Atom(
        labels,
        weight,
        binding,
        a,
        photon,
        area,
        energy,
        2.0,
        1.0,
        reduced,
        nucleus_mass + M_E,
        lines,
    )


def helium_binding(n: int, l: int, spin: int) -> float:
    """Energy of a He I level below the limit in cm^-1; quantum-defect series iterated to
    convergence."""
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
            rate = (
                4
                / 3
                * sc.alpha**3
                * omega**3
                / ATOMIC_TIME
                * mass_ratio
                * max(l, k)
                / (2 * l + 1)
                * radial**2
            )
            a[i, j] = HE_PUBLISHED.get(((n, l), (m, k), spin), rate)
    binding = inverse_cm * WAVENUMBER
    position = {label: i for i, label in enumerate(labels)}
    lines = []
    for n in range(2, n_max + 1):
        i = position[n, 1, 0]
        energy = HE_LIMIT - inverse_cm[i]
        i4 = position[min(n_max, 4), 1, 0]
        scaled = (
            HE_RESONANCE[min(n_max, 4)]
            * (nstar[i4] / nstar[i]) ** 3
            * (energy / (HE_LIMIT - inverse_cm[i4])) ** 2
        )
        rate = HE_RESONANCE.get(n, scaled)
        lines.append(GroundLine(f"{n}1P", i, rate, 1.0, energy * WAVENUMBER, True, n))
    triplet = position[2, 1, 1]
    lines.append(GroundLine("23P1", triplet, intercombination, 3 / 9, 169086.843 * WAVENUMBER))
    lines.append(GroundLine("23P2", triplet, 0.324, 5 / 9, 169086.766 * WAVENUMBER))
    lines.append(GroundLine("23S", position[2, 0, 1], 1.272e-4, 1.0, 159855.974 * WAVENUMBER))
    lines.append(
        GroundLine("21S", position[2, 0, 0], two_photon, 1.0, 166277.440 * WAVENUMBER, False)
    )
    photon, area = _bound_free(labels, binding, 1, mass_ratio)
    reduced = M_E * mass_ratio
    return Atom(
        labels,
        weight,
        binding,
        a,
        photon,
        area,
        HE_LIMIT * WAVENUMBER,
        1.0,
        2.0,
        reduced,
        MASS_HE,
        lines,
    )
