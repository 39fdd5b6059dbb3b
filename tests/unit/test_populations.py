"""Populations of all levels against scipy's sparse LU on the whole network."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.background.conditions import Conditions
from levelnet.network.assembly import factor_interior, recombination_coefficients
from levelnet.network.ladder import Ladder, hydrogen_ladder
from levelnet.network.populations import LevelPopulations, populations
from tests.sparse_reference import factored, sparse_network
from tests.tolerances import CONSERVATION, ELIMINATION

TWO = ((2, 0), (2, 1))
LYMAN = ((2, 0), (2, 1), (3, 1), (4, 1))
GAP = ((2, 0), (2, 1), (4, 1), (5, 3))


def solved(ladder: Ladder, at: Conditions, log_kept: np.ndarray) -> LevelPopulations:
    return populations(factor_interior(ladder, at.radiation_temperature_k), log_kept, at)


@pytest.mark.parametrize("kept", [TWO, LYMAN, GAP], ids=str)
@pytest.mark.parametrize("n_max", [5, 20, 40])
@pytest.mark.parametrize("kelvin", [20.0, 27.5, 100.0, 1000.0, 3000.0, 6000.0])
def test_against_sparse_lu(n_max: int, kept: Any, kelvin: float) -> None:
    ladder = hydrogen_ladder(n_max, "measured", kept)
    at = Conditions(kelvin, 0.7 * kelvin, 10.0, 1e-14, 0.02, 0.01, 0.99)
    log_kept = np.linspace(-30.0, -34.0, len(kept))
    found = solved(ladder, at, log_kept)
    network = sparse_network(ladder, kelvin)
    alpha = recombination_coefficients(ladder, kelvin, at.matter_temperature_k)[1:]
    source = alpha[network.inside] * (10.0 * 0.02 * 0.01)
    source -= network.matrix[network.inside][:, network.kept] @ np.exp(log_kept)
    expected = np.log(factored(network).solve(source))
    np.testing.assert_allclose(
        found.log_population[1:][network.inside], expected, rtol=0, atol=ELIMINATION
    )
    np.testing.assert_array_equal(found.log_population[ladder.kept_position], log_kept)
    assert found.log_population[0] == np.log(0.99)
    assert found.conservation_error < CONSERVATION


def test_departures_are_relative_to_saha_at_the_matter_temperature() -> None:
    ladder = hydrogen_ladder(6, "measured", TWO)
    at = Conditions(2000.0, 1500.0, 100.0, 1e-13, 0.011, 0.010, 0.99)
    found = solved(ladder, at, np.array([-28.0, -27.0]))
    saha = log_saha_factor(
        ladder.levels.statistical_weight, ladder.levels.ionization_energy_ev, 1500.0
    )
    expected = found.log_population - saha - np.log(100.0 * 0.011 * 0.010)
    np.testing.assert_allclose(found.log_departure, expected, rtol=0, atol=1e-12)


@given(st.floats(2.7, 6000.0), st.floats(0.01, 1.0), st.floats(1e-6, 1.0), st.floats(-300.0, -20.0))
def test_finite_and_conserving_for_any_conditions(
    kelvin: float, ratio: float, ionized: float, log_kept: float
) -> None:
    ladder = hydrogen_ladder(10, "measured", TWO)
    at = Conditions(kelvin, ratio * kelvin, 1e-3 * kelvin, 1e-14, ionized, ionized, 1.0)
    found = solved(ladder, at, np.array([log_kept, log_kept - 1.0]))
    assert np.all(np.isfinite(found.log_population))
    assert np.all(np.isfinite(found.log_departure))
    assert found.conservation_error < CONSERVATION


@pytest.mark.parametrize("kelvin", [20.0, 1000.0])
def test_recombination_alone_fills_every_level(kelvin: float) -> None:
    # Kept levels empty: what arrives is what recombines.
    ladder = hydrogen_ladder(10, "measured", TWO)
    at = Conditions(kelvin, kelvin, 1.0, 1e-14, 0.1, 0.1, 0.9)
    found = solved(ladder, at, np.full(2, -np.inf))
    assert np.all(np.isfinite(found.log_population[3:]))
    assert found.conservation_error < CONSERVATION


def test_nothing_inside() -> None:
    ladder = hydrogen_ladder(2, "measured", TWO)
    at = Conditions(3000.0, 3000.0, 100.0, 1e-13, 0.5, 0.5, 0.5)
    found = solved(ladder, at, np.array([-25.0, -24.0]))
    np.testing.assert_array_equal(found.log_population, [np.log(0.5), -25.0, -24.0])
    assert found.conservation_error == 0.0


@pytest.mark.parametrize("kelvin", [20.0, 3000.0])
def test_a_kept_level_inside_a_block_takes_no_part(kelvin: float) -> None:
    # Warnings are errors here: a level that takes no part must not be a logarithm of zero.
    ladder = hydrogen_ladder(7, "measured", GAP)
    at = Conditions(kelvin, kelvin, 100.0, 1e-13, 0.5, 0.5, 0.5)
    found = solved(ladder, at, np.array([-25.0, -24.0, -26.0, -27.0]))
    assert np.all(np.isfinite(found.log_population))
