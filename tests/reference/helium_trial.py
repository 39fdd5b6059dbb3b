"""Ionization history of H I + He I (+ He III in Saha equilibrium) from whole dense rate matrices, independent of `levelnet`.

T_m = T_r throughout: Compton scattering holds them together to 1e-5 above z = 1000. The blackbody makes every process a conductance
between two departures from Saha equilibrium with the continuum, b = x/(S n_e x_ion), S = g lambda^3 e^{I/kT}/(2 g_ion); the excited
levels are quasi-steady, recombination straight to the ground state is left out.
"""

from dataclasses import dataclass, field

import numpy as np
import scipy.constants as sc
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from tests.reference.helium_trial_atom import C, H_PLANCK, K_B, MASS_H, MASS_HE, Atom, GroundLine, burgess, hydrogenic, neutral_helium
from tests.reference.helium_trial_lines import line_escape, sobolev_escape

Array = NDArray[np.float64]
GRAVITY = sc.G * 1e3
RADIATION = 8 * np.pi**5 * K_B**4 / (15 * H_PLANCK**3 * C**3)
HUNDRED = 1e7 / (sc.parsec * 1e2 * 1e6)  # 100 km/s/Mpc in s^-1


@dataclass(frozen=True)
class Cosmology:
    """Flat, massless neutrinos."""

    h: float
    omega_b: float
    omega_cdm: float
    t0: float
    y_p: float
    n_eff: float = 3.046

    @property
    def helium_ratio(self) -> float:
        return self.y_p / (1 - self.y_p) * MASS_H / MASS_HE

    def hydrogen_density(self, z: float) -> float:
        critical = 3 * HUNDRED**2 / (8 * np.pi * GRAVITY)
        return float((1 - self.y_p) * self.omega_b * critical / MASS_H * (1 + z) ** 3)

    def hubble(self, z: float) -> float:
        critical = 3 * HUNDRED**2 / (8 * np.pi * GRAVITY) * C**2
        photons = RADIATION * self.t0**4 / critical
        radiation = photons * (1 + 7 / 8 * (4 / 11) ** (4 / 3) * self.n_eff)
        matter = self.omega_b + self.omega_cdm
        rest = self.h**2 - matter - radiation
        return float(HUNDRED * np.sqrt(matter * (1 + z) ** 3 + radiation * (1 + z) ** 4 + rest))


def saha_log(atom_reduced_mass: float, weight_ratio: float, binding: float, temperature: float) -> float:
    """ln S with n_upper... n_bound/(n_e n_ion) = S in cm^3; weight_ratio = g_bound/(2 g_ion)."""
    thermal = H_PLANCK**2 / (2 * np.pi * atom_reduced_mass * K_B * temperature)
    return float(np.log(weight_ratio) + 1.5 * np.log(thermal) + binding / (K_B * temperature))


class Ladder:
    """Excited levels of one atom at one temperature: everything that does not depend on the densities."""

    def __init__(self, atom: Atom, temperature: float) -> None:
        kt = K_B * temperature
        self.atom = atom
        self.saha = np.exp(
            [saha_log(atom.reduced_mass, g / (2 * atom.ion_weight), e, temperature) for g, e in zip(atom.weight, atom.binding, strict=True)]
        )
        gap = (atom.binding[None, :] - atom.binding[:, None]) / kt  # [upper, lower]
        stimulated = 1 / -np.expm1(-np.where(atom.einstein_a > 0, gap, 1.0))
        self.down = atom.einstein_a * stimulated
        one_way = self.down * self.saha[:, None]
        self.conductance = one_way + one_way.T
        occupation = 1 / np.expm1(atom.photon / kt)
        self.ionization = np.sum(8 * np.pi / (H_PLANCK**3 * C**2) * atom.photon**2 * atom.area * occupation, axis=1)
        self.ground_log = saha_log(atom.reduced_mass, atom.ground_weight / (2 * atom.ion_weight), atom.ground_binding, temperature)

    def other_exits(self, level: int) -> float:
        """Every rate out of a level that does not end in the ground state, s^-1."""
        up = self.down[:, level] @ self.saha / self.saha[level]
        return float(self.down[level].sum() + up + self.ionization[level])

    def recombination(self, line_rates: dict[str, float], extra: dict[str, float], away: float) -> tuple[float, Array]:
        """Net recombination per n_e x_ion and the b - 1 of all levels, from the ground's b - 1 = `away`.

        `line_rates` per whole level and `extra`, absorption beyond that of a blackbody, in s^-1: the flow down a line is
        S n_e x_ion [rate (b - b_ground) - extra b_ground].
        """
        to_ground, lit = np.zeros((2, self.saha.size))
        for line in self.atom.lines:
            to_ground[line.level] += line_rates[line.name] * self.saha[line.level]
            lit[line.level] += extra.get(line.name, 0.0) * self.saha[line.level] * (1 + away)
        to_continuum = self.ionization * self.saha
        matrix = np.diag(self.conductance.sum(1) + to_ground + to_continuum) - self.conductance
        excess = np.linalg.solve(matrix, to_ground * away + lit)
        return -float(to_continuum @ excess), excess


@dataclass
class Trial:
    """One history. `higher` = "closed" or "free" (n 1P, n >= 3, each by Sobolev); `wings` = None (Sobolev), "doppler", "complete",
    "partial": the H I continuum inside 584 A and 591 A, with the damping part of the profile left out, whole, or scaled by the
    incoherent fraction (all rates out of 2 1P but the one to the ground, over all)."""

    cosmology: Cosmology
    n_max: int
    hydrogen_n_max: int = 10
    higher: str = "closed"
    wings: str | None = None
    reach: float = 0.2
    feedback_rounds: int = 0
    intercombination: float = 177.6
    two_photon: float = 51.02
    two_photon_hydrogen: float = 8.2246
    photoionization_factor: dict[tuple[int, int, int], float] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.sent: tuple[Array, Array] | None = None
        self.log_hydrogen: tuple[Array, Array] = (np.zeros(1), np.zeros(1))
        self.hydrogen = hydrogenic(1, MASS_H - 9.1093837e-28, self.hydrogen_n_max, self.two_photon_hydrogen)
        self.helium = neutral_helium(self.n_max, self.intercombination, self.two_photon)
        for label, factor in self.photoionization_factor.items():
            self.helium.area[self.helium.index(*label)] *= factor

    def sobolev_depth(self, line: GroundLine, atom: Atom, x_ground: float, z: float) -> float:
        """g_u/g_l A lambda^3 n_l/(8 pi H), g_u of the sublevels that radiate."""
        weights = line.share * atom.weight[line.level] / atom.ground_weight
        density = x_ground * self.cosmology.hydrogen_density(z)
        wavelength = H_PLANCK * C / line.energy
        return float(weights * line.rate * wavelength**3 * density / (8 * np.pi * self.cosmology.hubble(z)))

    def line_rates(self, ladder: Ladder, x_ground: float, x_hi: float, z: float) -> dict[str, float]:
        """Rate per whole level with the blackbody's stimulation, escape included."""
        rates = {}
        temperature = self.cosmology.t0 * (1 + z)
        for line in ladder.atom.lines:
            escape = 1.0
            if line.thick:
                depth = self.sobolev_depth(line, ladder.atom, x_ground, z)
                escape = sobolev_escape(depth)
                if line.resonance_n > 2 and self.higher == "closed":
                    escape = 0.0
                elif ladder.atom is self.helium and self.wings:
                    escape = self.escape_with_continuum(line, ladder, depth, x_hi, z)
            stimulated = 1 / -np.expm1(-line.energy / (K_B * temperature)) if line.thick else 1.0
            rates[line.name] = line.rate * line.share * escape * stimulated
        return rates

    def escape_with_continuum(self, line: GroundLine, ladder: Ladder, depth: float, x_hi: float, z: float) -> float:
        temperature = self.cosmology.t0 * (1 + z)
        doppler = np.sqrt(2 * K_B * temperature / MASS_HE) / C
        others = ladder.other_exits(line.level)
        incoherent = {"doppler": 0.0, "complete": line.rate + others, "partial": others}[str(self.wings)]
        if not line.resonance_n:
            incoherent = 0.0  # tau ~ 1 at most: the wing is thin
        damping = incoherent * H_PLANCK / (4 * np.pi * line.energy)
        return line_escape(depth, self.continuum_depth(line.energy, x_hi, z), float(doppler), damping, self.reach)

    def continuum_depth(self, energy: float, x_hi: float, z: float) -> float:
        """n_HI sigma c/H, per unit ln nu."""
        kappa2 = np.array([energy / self.hydrogen.ground_binding - 1])
        return float(burgess(1, kappa2)[0, 0] * x_hi * self.cosmology.hydrogen_density(z) * C / self.cosmology.hubble(z))

    def charges(self, z: float, state: Array) -> tuple[float, float, float, float]:
        """x_e, x_HI, x_HeI, x_HeII from (ln x_HI/x_HII, ln x_HeI/(f - x_HeI))."""
        f = self.cosmology.helium_ratio
        x_hi, x_hei = 1 / (1 + np.exp(-state[0])), f / (1 + np.exp(-state[1]))
        x_hii, ionized = 1 / (1 + np.exp(state[0])), f / (1 + np.exp(state[1]))
        temperature = self.cosmology.t0 * (1 + z)
        binding = 4 * self.hydrogen.ground_binding
        s = np.exp(-saha_log(self.helium.reduced_mass, 1.0, binding, temperature)) / self.cosmology.hydrogen_density(z)
        x_e = x_hii + ionized
        for _ in range(40):  # x_HeIII/x_HeII = s/x_e
            x_e = x_hii + ionized * (1 + 2 * s / x_e) / (1 + s / x_e)
        return float(x_e), float(x_hi), float(x_hei), float(ionized / (1 + s / x_e))

    def slope(self, ln_a: float, state: Array) -> Array:
        z = float(np.expm1(-ln_a))
        x_e, x_hi, x_hei, x_heii = self.charges(z, state)
        f = self.cosmology.helium_ratio
        temperature = self.cosmology.t0 * (1 + z)
        n_e = x_e * self.cosmology.hydrogen_density(z)
        out = np.zeros(2)
        for slot, atom, bound, ion, total in ((0, self.hydrogen, x_hi, 1 - x_hi, 1.0), (1, self.helium, x_hei, x_heii, f)):
            ladder = Ladder(atom, temperature)
            away = float(np.expm1(np.log(bound / ion) - ladder.ground_log - np.log(n_e)))
            rates = self.line_rates(ladder, bound, x_hi, z)
            extra = self.extra_absorption(ladder, bound, x_hi, z) if slot else {}
            gain, _ = ladder.recombination(rates, extra, away)
            out[slot] = gain * n_e * ion * total / (bound * (total - bound)) / self.cosmology.hubble(z)
        return out

    def extra_absorption(self, ladder: Ladder, x_hei: float, x_hi: float, z: float) -> dict[str, float]:
        """What 591 A absorbs of the photons that left 584 A earlier, hydrogen absorbing on the way."""
        if self.sent is None:
            return {}
        line = next(line for line in self.helium.lines if line.name == "23P1")
        ln_ratio = np.log(self.helium.lines[0].energy / line.energy)
        past = np.log1p(z) + ln_ratio
        excess = float(np.interp(past, *self.sent))
        if self.wings:  # by the trapezium rule: n_HI changes by a fifth on the way
            there = np.exp(past) - 1
            energies = (self.helium.lines[0].energy, line.energy)
            ends = [self.continuum_depth(e, x, at) for e, x, at in zip(energies, (self.neutral(past), x_hi), (there, z), strict=True)]
            excess *= float(np.exp(-0.5 * (ends[0] + ends[1]) * ln_ratio))
        temperature = self.cosmology.t0 * (1 + z)
        escape = sobolev_escape(self.sobolev_depth(line, self.helium, x_hei, z))
        stimulated = 1 / -np.expm1(-line.energy / (K_B * temperature))
        return {"23P1": line.rate * line.share * escape * stimulated * excess}

    def light(self, ln_z: Array, states: Array) -> None:
        """Keep b(2 1P)/b(1 1S) - 1, the excess that 584 A sends on, of a finished history, and its hydrogen."""
        excess = np.zeros(ln_z.size)
        for k, state in enumerate(states):
            z = float(np.expm1(ln_z[k]))
            x_e, x_hi, x_hei, x_heii = self.charges(z, state)
            ladder = Ladder(self.helium, self.cosmology.t0 * (1 + z))
            away = float(np.expm1(np.log(x_hei / x_heii) - ladder.ground_log - np.log(x_e * self.cosmology.hydrogen_density(z))))
            extra = self.extra_absorption(ladder, x_hei, x_hi, z)
            _, above = ladder.recombination(self.line_rates(ladder, x_hei, x_hi, z), extra, away)
            excess[k] = (above[self.helium.lines[0].level] - away) / (1 + away)
        self.sent = (ln_z, excess)
        self.log_hydrogen = (ln_z, states[:, 0])

    def neutral(self, ln_z: float) -> float:
        return float(1 / (1 + np.exp(-np.interp(ln_z, *self.log_hydrogen))))

    def solve(self, redshifts: Array, start: float = 4200.0, tolerance: float = 1e-7) -> dict[str, Array]:
        temperature = self.cosmology.t0 * (1 + start)
        state = np.array([-20.0, -10.0])
        for _ in range(100):
            n_e = self.charges(start, state)[0] * self.cosmology.hydrogen_density(start)
            x_iii = 1 - self.charges(start, state)[3] / self.cosmology.helium_ratio  # of helium, neutral part negligible here
            logs = [
                saha_log(a.reduced_mass, a.ground_weight / (2 * a.ion_weight), a.ground_binding, temperature) for a in (self.hydrogen, self.helium)
            ]
            state = np.array(logs) + np.log(n_e) + np.array([0.0, np.log1p(-x_iii)])
        ln_z = np.log1p(np.asarray(redshifts))
        fine = np.linspace(np.log1p(start), ln_z[-1], 400)
        wanted = np.unique(np.concatenate([ln_z, fine]))[::-1]
        for _ in range(1 + self.feedback_rounds):
            solution = solve_ivp(
                self.slope, (-wanted[0], -wanted[-1]), state, method="Radau", t_eval=-wanted, rtol=tolerance, atol=tolerance
            )
            if self.feedback_rounds:
                self.light(wanted[::-1], solution.y.T[::-1])
        at = np.searchsorted(-wanted, -ln_z)
        rows = np.array([self.charges(z, column) for z, column in zip(redshifts, solution.y.T[at], strict=True)])
        return dict(zip(("x_e", "x_HI", "x_HeI", "x_HeII"), rows.T, strict=True)) | {"evaluations": np.array(solution.nfev)}
