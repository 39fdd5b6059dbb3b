"""Histories of hydrogen and helium from z = 3500 with each treatment of the He I lines.

He III -> He II is held in Saha equilibrium, and the run starts from the Saha equilibrium of every
ion, which He I leaves near z = 2800.
"""

from __future__ import annotations

import functools
import math

import numpy as np
from scipy.optimize import brentq

from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.atomic.helium_ground import INTERCOMBINATION_PER_S
from levelnet.escape.helium_lines import HigherLines
from levelnet.escape.helium_past import HeliumPast
from levelnet.escape.helium_treatment import HeliumTreatment
from levelnet.escape.treatment import Sobolev
from levelnet.history.atom import resonance_lines
from levelnet.history.equations import SlowEquations
from levelnet.history.helium import HeliumEquations
from levelnet.history.ion_network import Around, NeutralHelium
from levelnet.network.helium import HeliumReduction, tabulate_helium
from levelnet.network.ladder import hydrogen_ladder
from levelnet.network.tabulation import TabulatedReduction, tabulate
from levelnet.numerics.stepping import Trajectory, integrate
from tests.small_helium_lines import small_ladders, small_lines
from tests.small_runs import COSMOLOGY

REDSHIFTS = tuple(range(2900, 1590, -10))
HE_II_EV = 54.4153  # a held stage of which nothing is left here


@functools.cache
def _hydrogen() -> TabulatedReduction:
    return tabulate(hydrogen_ladder(10, "measured", ((2, 0), (2, 1))), 1400.0, 12000.0, 1e-8)


@functools.cache
def _helium(higher: HigherLines, n_max: int) -> HeliumReduction:
    return tabulate_helium(small_ladders(higher, n_max), 1400.0, 12000.0, 1e-8)


def helium_equations(
    treatment: HeliumTreatment,
    feedback: bool = False,
    higher: HigherLines = "closed",
    rate_per_s: float = INTERCOMBINATION_PER_S,
    n_max: int = 4,
) -> SlowEquations:
    """Equations of H (n_max 10, Sobolev) and He I with a treatment of its lines."""
    lines = small_lines(feedback, higher, rate_per_s, n_max)
    ladders, kept = small_ladders(higher, n_max), _hydrogen().kept
    decay = ladders.kept_position.tolist().index(ladders.levels.index(2, 0, 0))
    # 2 1S decays at 51.02 s^-1 (Derevianko & Johnson 1997, from memory).
    first = NeutralHelium(_helium(higher, n_max), lines, treatment, decay, 51.02)
    energies = float(ladders.levels.ionization_energy_ev[0]), HE_II_EV
    past = HeliumPast.of(lines) if lines.fed else None
    helium = HeliumEquations(first, None, energies, past)
    lyman = resonance_lines(kept, 1)
    return SlowEquations(
        COSMOLOGY, _hydrogen(), lyman, Sobolev(), 8.2246, "spontaneous", helium=helium
    )


def saha_state(equations: SlowEquations, redshift: float) -> np.ndarray:
    """State with every ion in Saha equilibrium at T_r."""
    around, ratio = equations.background(-math.log1p(redshift)), COSMOLOGY.helium_ratio()
    kept, helium = equations.reduced.kept, equations.helium
    ionization_ev = float(kept.energy_ev[0] + kept.ionization_energy_ev[0])
    assert helium is not None
    kelvin, density = around.radiation_temperature_k, around.hydrogen_density_cm3

    def state(electrons: float) -> np.ndarray:
        u = -float(log_saha_factor(2.0, ionization_ev, kelvin)) - math.log(density * electrons)
        seen = Around(
            kelvin,
            kelvin,
            ratio * density,
            around.hubble_rate_per_s,
            electrons / ratio,
            around.hubble_slope,
        )
        once, twice = helium.saha_log_ratio(0, seen), helium.saha_log_ratio(1, seen)
        return np.array([u, 0.0, once + np.logaddexp(0.0, twice), twice])

    found = brentq(lambda e: equations.electron_fraction(state(e)) - e, 1e-6, 1.5, xtol=1e-14)
    return state(float(found))


def run(equations: SlowEquations) -> Trajectory:
    """From Saha equilibrium at z = 3500 through REDSHIFTS."""
    assert equations.helium is not None
    start = -math.log1p(3500.0)
    state = saha_state(equations, 3500.0)
    equations.remember(start, state)
    return integrate(
        equations.rate,
        equations.slopes,
        start,
        state,
        [-math.log1p(z) for z in REDSHIFTS],
        1e-7,
        first_step=1e-4,
        max_steps=20000,
        on_step=equations.remember,
        longest_step=equations.longest_step,
    )


@functools.cache
def history(
    treatment: HeliumTreatment,
    feedback: bool = False,
    higher: HigherLines = "closed",
    rate_per_s: float = INTERCOMBINATION_PER_S,
    n_max: int = 10,
) -> tuple[np.ndarray, np.ndarray]:
    """x_e and x_HeII per helium nucleus at REDSHIFTS."""
    equations = helium_equations(treatment, feedback, higher, rate_per_s, n_max)
    found = run(equations)
    assert found.outcome.ok
    assert equations.helium is not None
    here = [int(np.argmin(abs(found.time + math.log1p(z)))) for z in REDSHIFTS]
    states = found.state[here]
    np.testing.assert_allclose(found.time[here], -np.log1p(REDSHIFTS), atol=1e-12)
    electrons = np.array([equations.electron_fraction(one) for one in states])
    single = np.array([equations.helium.fractions(one[2:]).single for one in states])
    return electrons, single
