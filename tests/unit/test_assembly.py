"""The assembled and factored interior against line-by-line rates and scipy's sparse LU."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants as codata

from levelnet.atomic.bound_bound import einstein_a
from levelnet.atomic.bound_free import photoionization_rate, recombination_coefficient
from levelnet.errors import SolveError
from levelnet.network import assembly
from levelnet.network.assembly import (
    COLD_K,
    Workspace,
    factor_interior,
    interior_photoionization,
    kept_line_rates,
    rate_matrix,
    recombination_coefficients,
)
from levelnet.network.ladder import Ladder, hydrogen_ladder
from levelnet.numerics.block_cholesky import BlockCholesky
from levelnet.numerics.block_lu import BlockLU
from tests.sparse_reference import factored, fates, sparse_network
from tests.tolerances import ELIMINATION, QUADRATURE

KELVIN_PER_EV = codata.e / codata.k
TWO = ((2, 0), (2, 1))
GAP = ((2, 0), (2, 1), (4, 1))
TEMPERATURES = (20.0, 27.3, 27.5, 30.0, 100.0, 300.0, 1000.0, 2500.0, 3000.0, 6000.0)


def planck_rates(ladder: Ladder, kelvin: float) -> np.ndarray:
    """Rates i -> j of all excited levels, from A and Planck (Einstein 1917, Phys. Z. 18, 121)."""
    n, l, energy = ladder.levels.n[1:], ladder.levels.l[1:], ladder.levels.energy_ev[1:]
    rates = np.zeros((len(n), len(n)))
    for i in range(len(n)):
        for j in range(len(n)):
            if n[i] > n[j] and abs(l[i] - l[j]) == 1:
                x = (energy[i] - energy[j]) * KELVIN_PER_EV / kelvin
                a = einstein_a(n[i], l[i], n[j], l[j])
                rates[i, j] = a / -np.expm1(-x)
                # 1/(e^x - 1) without overflow for the coldest field.
                rates[j, i] = a * np.exp(-x) / -np.expm1(-x) * (2 * l[i] + 1) / (2 * l[j] + 1)
    return rates


@pytest.mark.parametrize("energies", ["measured", "nonrelativistic"])
@pytest.mark.parametrize("kelvin", [30.0, 300.0, 3000.0, 6000.0])
def test_exported_matrix_against_line_by_line_rates(energies: str, kelvin: float) -> None:
    ladder = hydrogen_ladder(6, energies, TWO)
    rates = planck_rates(ladder, kelvin)
    photo = photoionization_rate(ladder.levels.n[1:], ladder.levels.l[1:], kelvin)
    expected = np.diag(rates.sum(axis=1) + photo) - rates.T
    # Expanded in the fine structure: (d/kT)^3/96, d up to 6e-5 eV; and rounding of E/kT.
    tolerance = 1e-12
    if energies == "measured":
        tolerance = 2e-9 + (6e-5 * KELVIN_PER_EV / kelvin) ** 3 / 96
    matrix = rate_matrix(ladder, kelvin)
    lines = matrix.toarray()
    np.fill_diagonal(lines, 0.0)
    np.testing.assert_allclose(lines, -rates.T, rtol=tolerance, atol=1e-300)
    # Photoionization is computed with the binding energy of the level, the reference with chi/n^2.
    loose = tolerance if energies == "nonrelativistic" else 1e-4
    np.testing.assert_allclose(matrix.diagonal(), np.diag(expected), rtol=loose, atol=1e-300)


def test_downward_lines_stay_exact_in_a_cold_field() -> None:
    # Without photons what is left is A itself, whatever the fine structure.
    ladder = hydrogen_ladder(5, "measured", TWO)
    lines = -rate_matrix(ladder, 2.7).toarray().T
    levels = ladder.levels
    for i in range(1, len(levels)):
        for j in range(1, len(levels)):
            if levels.n[i] > levels.n[j] and abs(levels.l[i] - levels.l[j]) == 1:
                a = einstein_a(levels.n[i], levels.l[i], levels.n[j], levels.l[j])
                assert lines[i - 1, j - 1] == pytest.approx(a, rel=1e-9)


@pytest.mark.parametrize("kelvin", [30.0, 1000.0, 6000.0])
def test_continuum_against_the_public_functions(kelvin: float) -> None:
    ladder = hydrogen_ladder(12, "nonrelativistic", TWO)
    n, l = ladder.levels.n, ladder.levels.l
    photo = interior_photoionization(ladder, kelvin)
    assert photo[0] == 0.0
    np.testing.assert_allclose(photo[1:], photoionization_rate(n[1:], l[1:], kelvin), rtol=1e-11)
    for matter in (kelvin, 0.2 * kelvin):
        alpha = recombination_coefficients(ladder, kelvin, matter)
        assert alpha[0] == 0.0
        expected = recombination_coefficient(n[1:], l[1:], matter, kelvin)
        np.testing.assert_allclose(alpha[1:], expected, rtol=QUADRATURE)


@pytest.mark.parametrize("kept", [TWO, GAP], ids=str)
@pytest.mark.parametrize("n_max", [3, 5, 10, 20, 40])
def test_fates_and_populations_against_sparse_lu(n_max: int, kept: Any) -> None:
    if n_max < 5 and kept is GAP:
        return
    for energies, kelvin in [("measured", t) for t in TEMPERATURES] + [("nonrelativistic", 2500.0)]:
        ladder = hydrogen_ladder(n_max, energies, kept)
        interior, network = factor_interior(ladder, kelvin), sparse_network(ladder, kelvin)
        live = ~ladder.interior.idle
        order = np.argsort(ladder.interior.position[live])
        assert np.array_equal(ladder.interior.position[live][order] - 1, network.inside)
        exits = np.vstack([interior.to_kept, interior.photoionization])
        ours = interior.fates(exits)[:, live][:, order]
        np.testing.assert_allclose(ours, fates(network), rtol=ELIMINATION, atol=1e-200)
        rng = np.random.default_rng(n_max)
        source = rng.uniform(0.1, 1.0, len(network.inside))
        log_source = np.full(len(live), -np.inf)
        log_source[np.flatnonzero(live)[order]] = np.log(source)
        found = interior.log_populations(log_source)[live][order]
        expected = np.log(factored(network).solve(source))
        np.testing.assert_allclose(found, expected, rtol=0, atol=ELIMINATION)


def test_the_path_follows_the_temperature() -> None:
    ladder = hydrogen_ladder(6, "measured", TWO)
    assert isinstance(factor_interior(ladder, COLD_K).solver, BlockCholesky)
    assert isinstance(factor_interior(ladder, COLD_K - 1e-6).solver, BlockLU)


@pytest.mark.parametrize("kelvin", [COLD_K, 60.0, 300.0, 2500.0, 6000.0])
@pytest.mark.parametrize(("n_max", "kept"), [(4, TWO), (12, GAP), (60, TWO)], ids=str)
def test_both_paths_give_the_same(
    n_max: int, kept: Any, kelvin: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    ladder = hydrogen_ladder(n_max, "measured", kept)
    live = ~ladder.interior.idle
    warm = factor_interior(ladder, kelvin)
    monkeypatch.setattr(assembly, "COLD_K", 1e9)
    cold = factor_interior(ladder, kelvin)
    assert isinstance(cold.solver, BlockLU)
    np.testing.assert_allclose(cold.diagonal, warm.diagonal, rtol=1e-12)
    exits = np.vstack([warm.to_kept, warm.photoionization])
    np.testing.assert_allclose(
        cold.fates(exits)[:, live], warm.fates(exits)[:, live], rtol=1e-11, atol=1e-290
    )
    log_source = np.where(live, np.linspace(-3.0, 2.0, len(live)), -np.inf)
    np.testing.assert_allclose(
        cold.log_populations(log_source)[live],
        warm.log_populations(log_source)[live],
        rtol=0,
        atol=1e-11,
    )


def test_nothing_jumps_where_the_path_changes() -> None:
    ladder = hydrogen_ladder(20, "measured", TWO)
    below, above = (factor_interior(ladder, COLD_K * (1.0 + s * 1e-9)) for s in (-1, 1))
    # The coldest rate goes as e^(-3.4 eV / kT), e^-1440 here: 3e-6 over the step of 2e-9.
    np.testing.assert_allclose(below.fates(below.to_kept), above.fates(above.to_kept), rtol=1e-5)
    source = np.zeros(len(below.diagonal))
    np.testing.assert_allclose(
        below.log_populations(source), above.log_populations(source), rtol=0, atol=1e-5
    )


@given(st.floats(28.0, 6000.0), st.integers(0, 2**32))
@settings(max_examples=30)
def test_adjoint_identity(kelvin: float, seed: int) -> None:
    # <w, A^-1 v> from fates, <A^-T w, v> from populations.
    ladder = hydrogen_ladder(9, "measured", TWO)
    interior = factor_interior(ladder, kelvin)
    v, w = np.random.default_rng(seed).uniform(0.1, 1.0, (2, len(interior.diagonal)))
    forward = w @ interior.fates(v[None])[0]
    backward = np.exp(interior.log_populations(np.log(w))) @ v
    assert forward == pytest.approx(backward, rel=1e-12)


@pytest.mark.parametrize("kelvin", [20.0, 40.0, 3000.0])
def test_feed_times_weight_are_populations(kelvin: float) -> None:
    # Closed form: x = weight * feed solves A^T x = source, as the populations do.
    interior = factor_interior(hydrogen_ladder(9, "measured", GAP, 6), kelvin)
    live = ~interior.ladder.interior.idle
    source = np.random.default_rng(4).uniform(0.1, 1.0, len(live)) * live
    assert interior.is_cold == (kelvin < COLD_K)
    filled = (interior.feed(source[None])[0] * interior.weight)[live]
    with np.errstate(divide="ignore"):
        expected = np.exp(interior.log_populations(np.log(source)))[live]
    np.testing.assert_allclose(filled, expected, rtol=1e-12)


def test_lines_of_kept_levels_are_those_of_the_matrix() -> None:
    ladder = hydrogen_ladder(9, "measured", GAP)
    matrix = rate_matrix(ladder, 1500.0).toarray()
    for kept, position in enumerate(ladder.kept_position.tolist()):
        lines = kept_line_rates(ladder, kept, 1500.0)
        np.testing.assert_allclose(
            np.exp(lines.log_out), -matrix[lines.position - 1, position - 1], rtol=1e-12
        )
        np.testing.assert_allclose(
            np.exp(lines.log_in), -matrix[position - 1, lines.position - 1], rtol=1e-12
        )


def test_a_workspace_changes_nothing() -> None:
    ladder = hydrogen_ladder(12, "measured", TWO)
    work = Workspace.of(ladder)
    for buffer in work.buffers():
        buffer[:] = np.nan
    for kelvin in (3000.0, 100.0, 20.0, 3000.0):
        fresh = factor_interior(ladder, kelvin)
        reused = factor_interior(ladder, kelvin, work)
        assert np.array_equal(fresh.fates(fresh.to_kept), reused.fates(reused.to_kept))


def test_a_workspace_gives_way_to_what_is_cold() -> None:
    ladder = hydrogen_ladder(6, "measured", TWO)
    work = Workspace.of(ladder)
    before = work.buffers()
    factor_interior(ladder, COLD_K, work)
    assert work.buffers() is before
    factor_interior(ladder, COLD_K - 1e-6, work)
    assert work.buffers() is not before


def test_nothing_inside() -> None:
    interior = factor_interior(hydrogen_ladder(2, "measured", TWO), 3000.0)
    assert interior.fates(interior.to_kept).shape == (2, 0)
    for kelvin in (3000.0, 20.0):
        matrix = rate_matrix(hydrogen_ladder(2, "measured", TWO), kelvin).toarray()
        assert matrix[0, 1] == matrix[1, 0] == 0.0


@pytest.mark.parametrize("kelvin", [20.0, 30.0])
def test_a_level_without_exit_is_singular(kelvin: float) -> None:
    # 2s alone inside: no line to 2p, and photoionization underflows (e^-1300 at 30 K).
    ladder = hydrogen_ladder(2, "measured", ((2, 1),))
    with pytest.raises(SolveError, match="rate matrix is singular"):
        factor_interior(ladder, kelvin)
