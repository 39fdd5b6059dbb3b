"""A history against an integration of the same physics written from scratch, in this file.

Nothing of the network, the reduction, the equations or the stepping is used. Every level is an
unknown of a sparse matrix solved by scipy's general LU (SuperLU) at each evaluation; scipy's Radau
integrates x_p and T_m. Line rates come from `einstein_a`, cross sections from
`photoionization_cross_section` (both held elsewhere against exact arithmetic); recombination and
photoionization are integrated here, each on its own, so that detailed balance is not put in.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import pytest
from scipy import constants as si
from scipy import sparse
from scipy.integrate import solve_ivp
from scipy.optimize import brentq
from scipy.sparse.linalg import splu

from levelnet.atomic.bound_bound import einstein_a
from levelnet.atomic.bound_free import photoionization_cross_section
from levelnet.history.run import solve
from tests.small_runs import small_setup
from tests.tolerances import HISTORY

MASS_RATIO = si.value("electron-proton mass ratio")
REDUCED_KG = si.m_e / (1.0 + MASS_RATIO)
CHI_J = si.h * si.c * si.value("Rydberg constant") / (1.0 + MASS_RATIO)
TWO_PHOTON = 8.2246


@dataclass(frozen=True)
class Universe:
    """The universe of the other tests, written out in SI."""

    h: float = 0.68
    baryons: float = 0.0224
    matter: float = 0.142
    today_k: float = 2.7255
    helium: float = 0.245
    neutrinos: float = 3.046

    @property
    def per_100(self) -> float:
        """100 km/s/Mpc in s^-1."""
        return 1e5 / (1e6 * si.parsec)

    @property
    def helium_ratio(self) -> float:
        # Atomic masses 4.002603 and 1.007825 u (AME 2020; from memory).
        return self.helium / (4.002603 / 1.007825 * (1.0 - self.helium))

    def hydrogen(self, z: float) -> float:
        """Nuclei per m^3; the mass of an atom is m_p + m_e."""
        critical = 3.0 * self.per_100**2 / (8.0 * math.pi * si.G)
        return self.baryons * critical * (1 - self.helium) / (si.m_p + si.m_e) * (1 + z) ** 3

    def hubble(self, z: float) -> float:
        energy = 4.0 * si.Stefan_Boltzmann / si.c * self.today_k**4 / si.c**2
        photons = energy * 8.0 * math.pi * si.G / (3.0 * self.per_100**2)
        radiation = photons * (1.0 + self.neutrinos * 7.0 / 8.0 * (4.0 / 11.0) ** (4.0 / 3.0))
        vacuum = self.h**2 - self.matter - radiation
        a = 1.0 + z
        return self.per_100 * math.sqrt(radiation * a**4 + self.matter * a**3 + vacuum)


def occupation(x: np.ndarray) -> np.ndarray:
    """Photons per mode of a blackbody at h nu/kT = x; underflows to 0."""
    return np.exp(-x) / -np.expm1(-x)


class Atom:
    """Every level of hydrogen above the ground state as one sparse system."""

    def __init__(self, n_max: int) -> None:
        self.levels = [(n, l) for n in range(2, n_max + 1) for l in range(n)]
        self.place = {level: k for k, level in enumerate(self.levels)}
        lines = [
            (self.place[n, l], self.place[m, k], n, l, m, k)
            for n, l in self.levels
            for m in range(2, n)
            for k in (l - 1, l + 1)
            if 0 <= k < m
        ]
        self.upper, self.lower, n, l, m, k = (np.array(x) for x in zip(*lines, strict=True))
        self.a = einstein_a(n, l, m, k)
        self.energy = CHI_J * (1.0 / m**2 - 1.0 / n**2)
        self.ratio = (2.0 * l + 1.0) / (2.0 * k + 1.0)
        self.n, self.l = (np.array(x) for x in zip(*self.levels, strict=True))
        self.a_alpha = float(einstein_a(2, 1, 1, 0))

    @cached_property
    def continuum(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Electron energies over chi, weights, and cross sections in m^2, (level, energy)."""
        # Twelve Gauss-Legendre nodes on panels that double: kT_m/chi runs from 4e-5 to 0.05.
        edges = np.concatenate([[0.0], 4e-6 * 1.9 ** np.arange(21)])
        x, w = np.polynomial.legendre.leggauss(12)
        half = 0.5 * np.diff(edges)[:, None]
        energy = (edges[:-1, None] + half * (1.0 + x)).ravel()
        n, l = self.n[:, None], self.l[:, None]
        return energy, (half * w).ravel(), 1e-4 * photoionization_cross_section(n, l, energy)

    def bound_free(self, radiation_k: float, matter_k: float) -> tuple[np.ndarray, np.ndarray]:
        """Recombination in m^3/s with its stimulated part, and photoionization in s^-1."""
        energy, weight, sigma = self.continuum
        photon = CHI_J * (1.0 / self.n[:, None] ** 2 + energy)
        # One mode's worth per unit frequency: 8 pi nu^2/c^2 sigma d nu.
        mode = 8.0 * math.pi / (si.c**2 * si.h**3) * photon**2 * sigma * CHI_J * weight
        f = occupation(photon / (si.k * radiation_k))
        ionization = (mode * f).sum(axis=1)
        maxwell = np.exp(-energy * (CHI_J / (si.k * matter_k)))
        wave = si.h / math.sqrt(2.0 * math.pi * REDUCED_KG * si.k * matter_k)
        # Milne: alpha n_e n_p = (g/2)(lambda^3) int mode (1 + f) e^(-E/kT), g = 2(2l + 1).
        recombination = (2 * self.l + 1) * wave**3 * (mode * (1.0 + f) * maxwell).sum(axis=1)
        return recombination, ionization

    def net_flow(self, t_r: float, t_m: float, density: float, hubble: float, x: float) -> float:
        """Net transitions to the ground state per nucleus and second, all levels solved for."""
        f = occupation(self.energy / (si.k * t_r))
        down, up = self.a * (1.0 + f), self.a * f * self.ratio
        alpha, beta = self.bound_free(t_r, t_m)
        size, s2, p2 = len(self.levels), self.place[2, 0], self.place[2, 1]
        loss = beta.copy()
        loss += np.bincount(self.upper, down, size) + np.bincount(self.lower, up, size)
        ground = 1.0 - x
        wavelength = si.h * si.c / (0.75 * CHI_J)
        tau = 3.0 * self.a_alpha * wavelength**3 * density * ground / (8.0 * math.pi * hubble)
        f_alpha = float(occupation(np.array(0.75 * CHI_J / (si.k * t_r))))
        # Net flow per channel: rate times (x_u - x_u in Boltzmann equilibrium with 1s).
        rates = np.zeros(size)
        rates[s2] = TWO_PHOTON
        rates[p2] = self.a_alpha * -math.expm1(-tau) / tau * (1.0 + f_alpha)
        rest = np.zeros(size)
        rest[[s2, p2]] = ground * math.exp(-0.75 * CHI_J / (si.k * t_r)) * np.array([1.0, 3.0])
        rows = np.concatenate([self.lower, self.upper, np.arange(size)])
        columns = np.concatenate([self.upper, self.lower, np.arange(size)])
        values = np.concatenate([-down, -up, loss + rates])
        matrix = sparse.csc_array((values, (rows, columns)), shape=(size, size))
        source = alpha * density * x * x + rates * rest
        # Columns scaled to like size: the populations span many decades.
        scale = 1.0 / (loss + rates)
        solution = scale * splu(sparse.csc_array(matrix @ sparse.diags_array(scale))).solve(source)
        return float(rates @ (solution - rest))


def integrate(n_max: int, redshift: np.ndarray, tolerance: float) -> tuple[np.ndarray, np.ndarray]:
    """x_p and T_m at descending redshifts, from Saha equilibrium well above the first."""
    atom, universe = Atom(n_max), Universe()
    start = 1900.0

    def saha(z: float) -> float:
        t = universe.today_k * (1.0 + z)
        volume = (2.0 * math.pi * REDUCED_KG * si.k * t / si.h**2) ** 1.5
        s = volume / universe.hydrogen(z) * math.exp(-CHI_J / (si.k * t))
        return float(brentq(lambda x: x * x - s * (1.0 - x), 0.0, 1.0, xtol=1e-15))

    def rate(s: float, y: np.ndarray) -> list[float]:
        z, x, t_m = math.expm1(-s), float(y[0]), float(y[1])
        t_r, hubble = universe.today_k * (1.0 + z), universe.hubble(z)
        flow = atom.net_flow(t_r, t_m, universe.hydrogen(z), hubble, x)
        energy = 4.0 * si.Stefan_Boltzmann / si.c * t_r**4
        compton = 8.0 * si.value("Thomson cross section") * energy / (3.0 * si.m_e * si.c)
        compton *= x / (1.0 + universe.helium_ratio + x)
        return [-flow / hubble, -2.0 * t_m + compton / hubble * (t_r - t_m)]

    found = solve_ivp(
        rate,
        (-math.log1p(start), -math.log1p(redshift[-1])),
        [saha(start), universe.today_k * (1.0 + start)],
        method="Radau",
        t_eval=-np.log1p(redshift),
        rtol=tolerance,
        atol=[1e-13, 1e-10],
        first_step=1e-5,
    )
    assert found.success
    return found.y[0], found.y[1]


def compare(n_max: int, tolerance: float) -> None:
    redshift = np.expm1(np.linspace(math.log1p(1600.0), math.log1p(20.0), 25))
    redshift[[0, -1]] = 1600.0, 20.0
    history = solve(
        small_setup(
            n_max,
            hydrogen={"energies": "nonrelativistic", "two_photon_rate_per_s": TWO_PHOTON},
            grid={
                "redshift_start": 1600.0,
                "redshift_end": 20.0,
                "redshifts": tuple(redshift.tolist()),
            },
            accuracy={"relative": 3e-8},
        )
    )
    fraction, temperature = integrate(n_max, redshift, tolerance)
    errors = [
        float(np.max(np.abs(ours / theirs - 1.0)))
        for ours, theirs in (
            (history.free_electron_fraction, fraction),
            (history.matter_temperature_k, temperature),
        )
    ]
    print(f"n_max = {n_max}: largest difference x_e {errors[0]:.1e}, T_m {errors[1]:.1e}")
    assert max(errors) < HISTORY, errors


def test_every_level_of_a_small_atom_solved_at_each_evaluation() -> None:
    compare(8, 1e-8)


@pytest.mark.slow
def test_every_level_up_to_n_30_solved_at_each_evaluation() -> None:
    compare(30, 2e-9)
