"""He III to He II by the hydrogenic levels of He II, independent of `levelnet`."""

import numpy as np
from scipy.integrate import solve_ivp

from tests.reference.helium_trial.atoms import hydrogenic
from tests.reference.helium_trial.background import H_PLANCK, M_E, MASS_HE, Array, C, Cosmology
from tests.reference.helium_trial.ladder import Ladder
from tests.reference.helium_trial.lines import sobolev_escape

TWO_PHOTON = 64 * 8.22935  # s^-1, Z^6 times the non-relativistic rate of 2s (Klarsfeld 1969)


def electrons_of_helium_ion(
    cosmology: Cosmology, n_max: int, redshifts: Array, start: float = 8000.0
) -> tuple[Array, Array]:
    """x_e at `redshifts`, descending, and x_e in Saha equilibrium; hydrogen is all ionized.

    One open line, 2p-1s by Sobolev, and the two-photon decay of 2s.
    """
    atom, f = hydrogenic(2, MASS_HE - 2 * M_E, n_max, TWO_PHOTON), cosmology.helium_ratio
    lyman_alpha = atom.lines[0]

    def electrons(log_ratio: float | Array) -> float | Array:
        return 1 + f + f / (1 + np.exp(-log_ratio))

    def slope(ln_a: float, state: Array) -> Array:
        z, log_ratio = float(np.expm1(-ln_a)), float(state[0])  # ln x_HeIII/x_HeII
        ladder = Ladder(atom, cosmology.temperature(z))
        density, hubble = cosmology.hydrogen_density(z), cosmology.hubble(z)
        n_e = electrons(log_ratio) * density
        column = density * f / (1 + np.exp(log_ratio)) / (8 * np.pi * hubble)
        depth = 3 * lyman_alpha.rate * (H_PLANCK * C / lyman_alpha.energy) ** 3 * column
        rates = dict.fromkeys((line.name for line in atom.lines), 0.0)
        rates |= {"2p": lyman_alpha.rate * sobolev_escape(float(depth)), "2s": TWO_PHOTON}
        away = float(np.expm1(-log_ratio - ladder.ground_log - np.log(n_e)))
        flow = ladder.recombination(rates, {}, away)[0]
        return np.array([-flow * n_e * (1 + np.exp(log_ratio)) / hubble])

    def saha(z: float) -> float:
        log_ratio = 0.0
        for _ in range(60):
            n_e = electrons(log_ratio) * cosmology.hydrogen_density(z)
            log_ratio = float(-Ladder(atom, cosmology.temperature(z)).ground_log - np.log(n_e))
        return log_ratio

    times = -np.log1p(redshifts)
    solution = solve_ivp(
        slope,
        (-np.log1p(start), times[-1]),
        [saha(start)],
        method="Radau",
        t_eval=times,
        rtol=1e-7,
        atol=1e-7,
    )
    equilibrium = np.array([electrons(saha(z)) for z in redshifts])
    return np.asarray(electrons(solution.y[0])), equilibrium
