"""Ionization history of H I, He I and He II from dense rate matrices, independent of `levelnet`.

T_m = T_r throughout: Compton scattering holds them together to 1e-4 above z = 1000. The blackbody
makes every process a conductance between two departures from Saha equilibrium with the continuum,
b = x/(S n_e x_ion), S = g lambda^3 e^{I/kT}/(2 g_ion); the excited levels are quasi-steady,
recombination straight to the ground state is left out. He III is in Saha equilibrium with He II.
"""

from dataclasses import dataclass

import numpy as np
from scipy.integrate import solve_ivp

from tests.reference.helium_trial.atoms import Atom, GroundLine, hydrogenic, neutral_helium
from tests.reference.helium_trial.background import (
    H_PLANCK,
    K_B,
    M_E,
    MASS_H,
    MASS_HE,
    Array,
    C,
    Cosmology,
    saha_log,
)
from tests.reference.helium_trial.ladder import Ladder
from tests.reference.helium_trial.lines import line_escape, sobolev_escape
from tests.reference.helium_trial.waves import burgess


@dataclass
class Trial:
    """One history.

    `higher`: "closed" or "free", lines n 1P - 1 1S with n from 3. `wings`: None for Sobolev lines;
    with the H I continuum inside the lines "doppler", "complete" or "partial", the damping part of
    the profile left out, whole, or scaled by the incoherent fraction (all rates out of n 1P but
    the one to the ground, over all). `feedback_rounds`: 0, or how often the history is repeated
    with 591 A lit by what 584 A sent in the one before; 3 reach 1e-4 with Sobolev's lines.
    """

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

    def __post_init__(self) -> None:
        self.hydrogen = hydrogenic(1, MASS_H - M_E, self.hydrogen_n_max, self.two_photon_hydrogen)
        self.helium = neutral_helium(self.n_max, self.intercombination, self.two_photon)
        self.sent: tuple[Array, Array] | None = None  # ln(1 + z), excess that 584 A sends on
        self.log_hydrogen: tuple[Array, Array] = (np.zeros(1), np.zeros(1))

    # Lines

    def sobolev_depth(self, line: GroundLine, atom: Atom, x_ground: float, z: float) -> float:
        """g_u/g_l A lambda^3 n_l/(8 pi H), g_u of the sublevels that radiate."""
        weights = line.share * atom.weight[line.level] / atom.ground_weight
        density = x_ground * self.cosmology.hydrogen_density(z)
        volume = (H_PLANCK * C / line.energy) ** 3
        return float(
            weights * line.rate * volume * density / (8 * np.pi * self.cosmology.hubble(z))
        )

    def continuum_depth(self, energy: float, x_hi: float, z: float) -> float:
        """n_HI sigma c/H, per unit ln nu."""
        area = burgess(1, np.array([energy / self.hydrogen.ground_binding - 1]))[0, 0]
        column = x_hi * self.cosmology.hydrogen_density(z) * C / self.cosmology.hubble(z)
        return float(area * column)

    def escape(
        self, line: GroundLine, ladder: Ladder, x_ground: float, x_hi: float, z: float
    ) -> float:
        depth = self.sobolev_depth(line, ladder.atom, x_ground, z)
        if line.resonance_n > 2 and self.higher == "closed":
            return 0.0
        if ladder.atom is self.hydrogen or self.wings is None:
            return sobolev_escape(depth)
        others = ladder.other_exits(line.level)
        width = {"doppler": 0.0, "complete": line.rate + others, "partial": others}[self.wings]
        if not line.resonance_n:
            width = 0.0  # tau ~ 1 at most: the wing is thin
        doppler = float(np.sqrt(2 * K_B * self.cosmology.temperature(z) / MASS_HE) / C)
        damping = width * H_PLANCK / (4 * np.pi * line.energy)
        continuum = self.continuum_depth(line.energy, x_hi, z)
        return line_escape(depth, continuum, doppler, damping, self.reach)

    def stimulated(self, line: GroundLine, z: float) -> float:
        """1 + f of the blackbody."""
        return float(1 / -np.expm1(-line.energy / (K_B * self.cosmology.temperature(z))))

    def line_rates(
        self, ladder: Ladder, x_ground: float, x_hi: float, z: float
    ) -> dict[str, float]:
        """Rate per whole level down every line, escape included, s^-1."""
        return {
            line.name: line.rate
            * line.share
            * (
                self.escape(line, ladder, x_ground, x_hi, z) * self.stimulated(line, z)
                if line.thick
                else 1.0
            )
            for line in ladder.atom.lines
        }

    # Feedback

    def extra_absorption(self, x_hei: float, x_hi: float, z: float) -> dict[str, float]:
        """What 591 A absorbs of the photons that left 584 A, hydrogen absorbing on the way."""
        if self.sent is None:
            return {}
        above = self.helium.lines[0]
        line = next(line for line in self.helium.lines if line.name == "23P1")
        way = np.log(above.energy / line.energy)
        left = np.log1p(z) + way
        excess = float(np.interp(left, *self.sent))
        if self.wings:  # by the trapezium rule: n_HI changes by a fifth on the way
            x_left = float(1 / (1 + np.exp(-np.interp(left, *self.log_hydrogen))))
            depth = self.continuum_depth(above.energy, x_left, float(np.expm1(left)))
            depth += self.continuum_depth(line.energy, x_hi, z)
            excess *= float(np.exp(-0.5 * depth * way))
        escape = sobolev_escape(self.sobolev_depth(line, self.helium, x_hei, z))
        return {line.name: line.rate * line.share * escape * self.stimulated(line, z) * excess}

    def light(self, ln_z: Array, states: Array) -> None:
        """Keep what 584 A sends on in a finished history, b(2 1P)/b(1 1S) - 1, and x_HI."""
        excess = np.zeros(ln_z.size)
        for k, state in enumerate(states):
            z = float(np.expm1(ln_z[k]))
            above, away = self.helium_flow(z, state)[1:]
            excess[k] = (above[self.helium.lines[0].level] - away) / (1 + away)
        self.sent, self.log_hydrogen = (ln_z, excess), (ln_z, states[:, 0])

    # History

    def charges(self, z: float, state: Array) -> tuple[float, float, float, float]:
        """x_e, x_HI, x_HeI, x_HeII from ln(x_HI/x_HII) and ln(x_HeI/(f - x_HeI))."""
        f = self.cosmology.helium_ratio
        x_hi, x_hei = 1 / (1 + np.exp(-state[0])), f / (1 + np.exp(-state[1]))
        x_hii, ionized = 1 / (1 + np.exp(state[0])), f / (1 + np.exp(state[1]))
        binding, kelvin = 4 * self.hydrogen.ground_binding, self.cosmology.temperature(z)
        log_saha = saha_log(self.helium.reduced_mass, 1.0, binding, kelvin)
        s = np.exp(-log_saha) / self.cosmology.hydrogen_density(z)
        x_e = x_hii + ionized
        for _ in range(40):  # x_HeIII/x_HeII = s/x_e
            x_e = x_hii + ionized * (1 + 2 * s / x_e) / (1 + s / x_e)
        return float(x_e), float(x_hi), float(x_hei), float(ionized / (1 + s / x_e))

    def helium_flow(self, z: float, state: Array) -> tuple[float, Array, float]:
        """Recombination to He I per n_e x_HeII; b - 1 of its levels, and of its ground state."""
        x_e, x_hi, x_hei, x_heii = self.charges(z, state)
        ladder = Ladder(self.helium, self.cosmology.temperature(z))
        n_e = x_e * self.cosmology.hydrogen_density(z)
        away = float(np.expm1(np.log(x_hei / x_heii) - ladder.ground_log - np.log(n_e)))
        rates = self.line_rates(ladder, x_hei, x_hi, z)
        flow, above = ladder.recombination(rates, self.extra_absorption(x_hei, x_hi, z), away)
        return flow, above, away

    def hydrogen_flow(self, z: float, state: Array) -> float:
        """Recombination to H I per n_e x_HII."""
        x_e, x_hi = self.charges(z, state)[:2]
        ladder = Ladder(self.hydrogen, self.cosmology.temperature(z))
        n_e = x_e * self.cosmology.hydrogen_density(z)
        away = float(np.expm1(state[0] - ladder.ground_log - np.log(n_e)))
        return ladder.recombination(self.line_rates(ladder, x_hi, x_hi, z), {}, away)[0]

    def slope(self, ln_a: float, state: Array) -> Array:
        z = float(np.expm1(-ln_a))
        x_e, x_hi, x_hei, x_heii = self.charges(z, state)
        n_e = x_e * self.cosmology.hydrogen_density(z)
        f = self.cosmology.helium_ratio
        hydrogen = self.hydrogen_flow(z, state) / x_hi
        helium = self.helium_flow(z, state)[0] * x_heii * f / (x_hei * (f - x_hei))
        return np.array([hydrogen, helium]) * n_e / self.cosmology.hubble(z)

    def saha(self, z: float) -> Array:
        state = np.array([-20.0, -10.0])
        ladders = [
            Ladder(atom, self.cosmology.temperature(z)) for atom in (self.hydrogen, self.helium)
        ]
        for _ in range(100):
            x_e, _, x_hei, x_heii = self.charges(z, state)
            state = np.array([ladder.ground_log for ladder in ladders])
            state += np.log(x_e * self.cosmology.hydrogen_density(z))
            state[1] += np.log(x_heii / (self.cosmology.helium_ratio - x_hei))
        return state

    def solve(
        self, redshifts: Array, start: float = 4200.0, tolerance: float = 1e-6
    ) -> dict[str, Array]:
        """Fractions at `redshifts`, descending; from Saha equilibrium at `start`."""
        ln_z = np.log1p(redshifts)
        wanted = np.unique(np.append(ln_z, np.linspace(np.log1p(start), ln_z[-1], 400)))[::-1]
        for round_ in range(1 + self.feedback_rounds):
            solution = solve_ivp(
                self.slope,
                (-wanted[0], -wanted[-1]),
                self.saha(start),
                method="Radau",
                t_eval=-wanted,
                rtol=tolerance,
                atol=tolerance,
            )
            if round_ < self.feedback_rounds:
                self.light(wanted[::-1], solution.y.T[::-1])
        states = solution.y.T[np.searchsorted(-wanted, -ln_z)]
        rows = [self.charges(z, state) for z, state in zip(redshifts, states, strict=True)]
        return dict(zip(("x_e", "x_HI", "x_HeI", "x_HeII"), np.array(rows).T, strict=True))
