"""Nothing is lost or made by the network, nothing is negative, and every pair of rates balances."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants as codata

from levelnet.background.conditions import Conditions
from levelnet.network.assembly import factor_interior, interior_photoionization, rate_matrix
from levelnet.network.ladder import hydrogen_ladder
from levelnet.network.populations import populations
from levelnet.network.reduction import all_fates
from levelnet.network.tabulation import live_reduction
from tests.tolerances import CONSERVATION

KELVIN_PER_EV = codata.e / codata.k
TEMPERATURES = (2.7, 20.0, 27.5, 30.0, 100.0, 300.0, 1000.0, 2500.0, 3000.0, 6000.0)
TWO = ((2, 0), (2, 1))
LYMAN = ((2, 0), (2, 1), (3, 1), (4, 1))
GAP = ((2, 0), (2, 1), (4, 1), (5, 3))


def lost_fate(n_max: int, kept: Any, kelvin: float) -> float:
    """|sum of fates over all exits - 1|, the largest of all levels; every fate is a chance."""
    ladder = hydrogen_ladder(n_max, "measured", kept)
    interior = factor_interior(ladder, kelvin)
    exits = np.vstack([interior.to_kept, interior.photoionization])
    fates = interior.fates(exits)[:, ~ladder.interior.idle]
    assert np.all(fates >= 0.0)
    return float(np.max(np.abs(fates.sum(axis=0) - 1.0)))


def lost_atoms(n_max: int, kept: Any, kelvin: float, ratio: float) -> float:
    """P7: |outflow / inflow - 1| of the populations, fed by recombination and the kept levels."""
    ladder = hydrogen_ladder(n_max, "measured", kept)
    at = Conditions(kelvin, ratio * kelvin, 1.0, 1e-14, 0.1, 0.1, 0.9)
    log_kept = np.linspace(-30.0, -33.0, len(kept))
    found = populations(factor_interior(ladder, kelvin), log_kept, at)
    assert np.all(np.isfinite(found.log_population))
    return found.conservation_error


@pytest.mark.parametrize("kept", [TWO, LYMAN], ids=str)
@pytest.mark.parametrize("n_max", [3, 10, 30, 60, 100])
def test_fates_add_up_to_one(n_max: int, kept: Any) -> None:
    kept = tuple(level for level in kept if level[0] <= n_max)
    for kelvin in TEMPERATURES:
        assert lost_fate(n_max, kept, kelvin) < CONSERVATION, kelvin


@pytest.mark.parametrize("n_max", [3, 10, 30, 60, 100])
def test_atoms_are_conserved(n_max: int) -> None:
    for kelvin in TEMPERATURES:
        for ratio in (1.0, 0.2):
            assert lost_atoms(n_max, TWO, kelvin, ratio) < CONSERVATION, kelvin


@pytest.mark.slow
@pytest.mark.parametrize("n_max", [200, 300])
def test_large_atoms(n_max: int) -> None:
    for kelvin in (20.0, 30.0, 100.0, 1000.0, 2500.0, 6000.0):
        assert lost_fate(n_max, TWO, kelvin) < CONSERVATION, kelvin
        assert lost_atoms(n_max, TWO, kelvin, 0.3) < CONSERVATION, kelvin


@given(st.floats(2.7, 20_000.0), st.floats(0.05, 1.0))
@settings(max_examples=40)
def test_any_temperature(kelvin: float, ratio: float) -> None:
    assert lost_fate(12, GAP, kelvin) < CONSERVATION
    assert lost_atoms(12, TWO, kelvin, ratio) < CONSERVATION


def test_own_fate_of_kept_levels() -> None:
    ladder = hydrogen_ladder(8, "measured", LYMAN)
    fates = all_fates(factor_interior(ladder, 2000.0))
    np.testing.assert_array_equal(fates[:, ladder.kept_position], np.eye(4))
    assert np.all((fates >= 0.0) & (fates <= 1.0))


@given(st.floats(28.0, 20_000.0), st.floats(0.05, 2.0))
@settings(max_examples=20)
def test_reduced_rates_are_never_negative(kelvin: float, ratio: float) -> None:
    rates = live_reduction(hydrogen_ladder(7, "measured", GAP)).rates(kelvin, ratio * kelvin)
    assert np.all(rates.recombination > 0.0)
    assert np.all(rates.exchange >= 0.0)
    assert np.all(np.isfinite(rates.log_photoionization))


@pytest.mark.parametrize("energies", ["measured", "nonrelativistic"])
@pytest.mark.parametrize("n_max", [2, 5, 30])
def test_exported_matrix_is_in_detailed_balance(n_max: int, energies: str) -> None:
    # Einstein 1917, Phys. Z. 18, 121: w_i R_ij = w_j R_ji, w = g exp(-E / kT), pair by pair.
    ladder = hydrogen_ladder(n_max, energies, TWO)
    levels = ladder.levels
    for kelvin in (30.0, 300.0, 3000.0, 6000.0):
        matrix = rate_matrix(ladder, kelvin).tocoo()
        off = matrix.row != matrix.col
        source, target, rate = matrix.col[off] + 1, matrix.row[off] + 1, -matrix.data[off]
        assert np.all(rate >= 0.0)
        dense = np.zeros((len(levels), len(levels)))
        dense[source, target] = rate
        back = dense[target, source]
        real = (rate > 1e-290) & (back > 1e-290)
        difference = levels.energy_ev[source] - levels.energy_ev[target]
        weights = levels.statistical_weight[source] / levels.statistical_weight[target]
        log_ratio = np.log(weights[real]) - difference[real] * KELVIN_PER_EV / kelvin
        # Both exponents are rounded, and the constants are those of scipy: 1e-11 of E/kT at most.
        rounding = 1e-13 + 1e-11 * np.abs(difference[real]) * KELVIN_PER_EV / kelvin
        error = np.abs(np.log(back[real] / rate[real]) - log_ratio)
        assert np.all(error < rounding)
        assert len(error) > 0 or n_max == 2


@pytest.mark.parametrize("kelvin", [30.0, 3000.0])
def test_columns_of_the_exported_matrix_sum_to_the_sinks(kelvin: float) -> None:
    ladder = hydrogen_ladder(20, "measured", TWO)
    matrix = rate_matrix(ladder, kelvin)
    sums = np.asarray(matrix.sum(axis=0)).ravel()
    photo = interior_photoionization(ladder, kelvin)[1:]
    np.testing.assert_allclose(sums, photo, rtol=0, atol=1e-14 * matrix.diagonal().max())
