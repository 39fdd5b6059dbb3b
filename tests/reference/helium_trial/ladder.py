"""All rates of one atom in a blackbody, and its quasi-steady excited levels."""

import numpy as np

from tests.reference.helium_trial.atoms import Atom
from tests.reference.helium_trial.background import H_PLANCK, K_B, Array, C, saha_log


class Ladder:
    """Excited levels of one atom at one temperature: everything that does not depend on the
    densities."""

    def __init__(self, atom: Atom, temperature: float) -> None:
        kt = K_B * temperature
        self.atom = atom
        self.saha = np.exp(
            [
                saha_log(atom.reduced_mass, g / (2 * atom.ion_weight), e, temperature)
                for g, e in zip(atom.weight, atom.binding, strict=True)
            ]
        )
        gap = (atom.binding[None, :] - atom.binding[:, None]) / kt  # [upper, lower]
        stimulated = 1 / -np.expm1(-np.where(atom.einstein_a > 0, gap, 1.0))
        self.down = atom.einstein_a * stimulated
        one_way = self.down * self.saha[:, None]
        self.conductance = one_way + one_way.T
        occupation = 1 / np.expm1(atom.photon / kt)
        self.ionization = np.sum(
            8 * np.pi / (H_PLANCK**3 * C**2) * atom.photon**2 * atom.area * occupation, axis=1
        )
        self.ground_log = saha_log(
            atom.reduced_mass,
            atom.ground_weight / (2 * atom.ion_weight),
            atom.ground_binding,
            temperature,
        )

    def other_exits(self, level: int) -> float:
        """Every rate out of a level that does not end in the ground state, s^-1."""
        up = self.down[:, level] @ self.saha / self.saha[level]
        return float(self.down[level].sum() + up + self.ionization[level])

    def recombination(
        self, line_rates: dict[str, float], extra: dict[str, float], away: float
    ) -> tuple[float, Array]:
        """Net recombination per n_e x_ion and the b - 1 of all levels, from the ground's b - 1 =
        `away`.

        `line_rates` per whole level and `extra`, absorption beyond that of a blackbody, in s^-1:
        the flow down a line is S n_e x_ion [rate (b - b_ground) - extra b_ground].
        """
        to_ground, lit = np.zeros((2, self.saha.size))
        for line in self.atom.lines:
            to_ground[line.level] += line_rates[line.name] * self.saha[line.level]
            lit[line.level] += extra.get(line.name, 0.0) * self.saha[line.level] * (1 + away)
        to_continuum = self.ionization * self.saha
        matrix = np.diag(self.conductance.sum(1) + to_ground + to_continuum) - self.conductance
        excess = np.linalg.solve(matrix, to_ground * away + lit)
        return -float(to_continuum @ excess), excess
