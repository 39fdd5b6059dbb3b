"""Whatever rates are overridden, equilibrium, detailed balance and conservation hold."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants as codata

from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.atomic.overrides import Rates
from levelnet.background.conditions import Conditions
from levelnet.escape.family import TREATMENTS
from levelnet.escape.two_photon import with_two_photon
from levelnet.history.atom import lyman_lines
from levelnet.network.assembly import factor_interior, rate_matrix
from levelnet.network.coupling import with_line_factors
from levelnet.network.ladder import Ladder, hydrogen_ladder
from levelnet.network.populations import populations
from levelnet.network.solve import log_boltzmann_populations
from tests.tolerances import CONSERVATION, EQUILIBRIUM

LYMAN = ((2, 0), (2, 1), (3, 1), (4, 1))
KELVIN_PER_EV = codata.e / codata.k
SELECTORS = ("bound_bound,*p,*s", "bound_bound,*,3-*d", "bound_free,2-4,", "bound_free,5-*f,")

factors = st.tuples(*[st.floats(1e-3, 1e3)] * len(SELECTORS))
temperatures = st.floats(60.0, 6000.0)


def overridden(values: tuple[float, ...]) -> Ladder:
    rows = [f"{one},{value!r},,x" for one, value in zip(SELECTORS, values, strict=True)]
    return hydrogen_ladder(9, "measured", LYMAN, overrides=Rates(rows=tuple(rows)).network)


@given(factors, temperatures)
@settings(max_examples=25)
def test_every_level_is_in_equilibrium(values: tuple[float, ...], kelvin: float) -> None:
    ladder = overridden(values)
    at = Conditions(kelvin, kelvin, 1.0, 1e-14, 1e-3, 1e-3, 1.0)
    kept = ladder.kept
    log_kept = np.log(1e-6) + log_saha_factor(
        kept.statistical_weight, kept.ionization_energy_ev, kelvin
    )
    found = populations(factor_interior(ladder, kelvin), log_kept, at)
    assert np.max(np.abs(found.log_departure[1:])) < EQUILIBRIUM


@given(factors, temperatures, st.floats(0.1, 1.0))
@settings(max_examples=25)
def test_atoms_are_conserved(values: tuple[float, ...], kelvin: float, ratio: float) -> None:
    ladder = overridden(values)
    at = Conditions(kelvin, ratio * kelvin, 1.0, 1e-14, 0.1, 0.1, 0.9)
    interior = factor_interior(ladder, kelvin)
    found = populations(interior, np.linspace(-30.0, -33.0, len(LYMAN)), at)
    assert found.conservation_error < CONSERVATION
    fates = interior.fates(np.vstack([interior.to_kept, interior.photoionization]))
    sums = fates[:, ~ladder.interior.idle].sum(axis=0)
    np.testing.assert_allclose(sums, 1.0, rtol=CONSERVATION)


@given(factors)
@settings(max_examples=10)
def test_every_pair_is_in_detailed_balance(values: tuple[float, ...]) -> None:
    # Einstein 1917, Phys. Z. 18, 121: w_i R_ij = w_j R_ji, w = g exp(-E / kT).
    ladder, kelvin = overridden(values), 2500.0
    levels = ladder.levels
    rates = -rate_matrix(ladder, kelvin).toarray()
    up, down = np.nonzero(np.triu(rates, 1))
    weight = levels.statistical_weight[1:]
    energy = levels.energy_ev[1:] * KELVIN_PER_EV / kelvin
    # rates[j, i] goes from i to j.
    error = np.log(rates[up, down] * weight[down]) - energy[down]
    error -= np.log(rates[down, up] * weight[up]) - energy[up]
    assert np.max(np.abs(error)) < 1e-9  # constants of scipy: 1e-11 of E/kT


@pytest.mark.parametrize("treatment", TREATMENTS, ids=lambda one: one.name)
def test_escape_factors_leave_the_blackbody_in_balance(treatment: object) -> None:
    ladder = hydrogen_ladder(6, "measured", LYMAN)
    at = Conditions(3000.0, 2990.0, 264.0, 4.9e-14, 0.15, 0.15, 0.85)
    lines = lyman_lines(ladder)
    coupled = treatment.couple(lines, ladder.kept, at)
    scaled = with_line_factors(coupled, lines.upper, np.array([3.0, 0.2, 1.0]))
    coupling = with_two_photon(scaled, ladder.kept, at, 8.2246, "spontaneous")
    boltzmann = np.exp(log_boltzmann_populations(ladder.kept, 3000.0, at.ground_fraction))
    net = coupling.loss @ boltzmann - coupling.source
    assert np.max(np.abs(net)) <= 1e-14 * np.max(np.abs(coupling.source))
    assert not scaled.excess_source.any()
