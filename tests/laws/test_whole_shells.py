"""A network with whole shells is the resolved one with l statistical inside shells, exactly."""

from __future__ import annotations

import dataclasses
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy import sparse
from scipy.sparse.linalg import splu

from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.background.conditions import Conditions
from levelnet.distilled.about import about_lines
from levelnet.distilled.build import distill
from levelnet.distilled.history import history_from_table
from levelnet.errors import InputError
from levelnet.escape.lines import Lines
from levelnet.history.run import solve
from levelnet.network.assembly import (
    factor_interior,
    interior_photoionization,
    rate_matrix,
    recombination_coefficients,
)
from levelnet.network.ladder import Ladder, hydrogen_ladder
from levelnet.network.populations import populations
from levelnet.network.reduction import all_fates
from levelnet.network.tabulation import live_reduction
from levelnet.pieces import FolderPieces
from levelnet.store import read, write
from tests.small_runs import small_setup
from tests.sparse_reference import (
    effective_photoionization,
    effective_recombination,
    exchange,
    fates,
    sparse_network,
)
from tests.tolerances import CONSERVATION, ELIMINATION, EQUILIBRIUM, HISTORY

TWO = ((2, 0), (2, 1))
GAP = ((2, 0), (2, 1), (4, 1), (5, 3))
TEMPERATURES = (30.0, 100.0, 300.0, 1000.0, 2500.0, 3000.0, 6000.0)
SIZES = [(8, 2), (12, 5), (30, 10), (30, 29), (60, 20)]


def membership(whole: Ladder, full: Ladder) -> sparse.csr_array:
    """1 where a resolved level (column) belongs to a level or shell (row); excited levels only."""
    rows = [
        whole.levels.index(n, l if n <= whole.resolve_l_to else -1) - 1
        for n, l in zip(full.levels.n[1:].tolist(), full.levels.l[1:].tolist(), strict=True)
    ]
    columns = np.arange(len(rows))
    return sparse.csr_array((np.ones(len(rows)), (rows, columns)))


def shares(whole: Ladder, full: Ladder) -> np.ndarray:
    """Part of its level or shell that each resolved level has by weight."""
    joined = membership(whole, full)
    weight = full.levels.statistical_weight[1:]
    return weight / (joined.T @ (joined @ weight))


@pytest.mark.parametrize(("n_max", "top"), SIZES)
@pytest.mark.parametrize("kelvin", [20.0, 300.0, 3000.0])
def test_aggregated_matrix(n_max: int, top: int, kelvin: float) -> None:
    # Brute force: populations of the resolved network by weight inside shells, rates out of them
    # summed. With degenerate energies this holds for every element of the matrix.
    full = hydrogen_ladder(n_max, "nonrelativistic", TWO)
    whole = hydrogen_ladder(n_max, "nonrelativistic", TWO, top)
    joined = membership(whole, full)
    brute = joined @ rate_matrix(full, kelvin) @ (joined.T.multiply(shares(whole, full)[:, None]))
    # Where rates leave the doubles (in the cold) both are 0 or denormal.
    np.testing.assert_allclose(
        rate_matrix(whole, kelvin).toarray(), brute.toarray(), rtol=1e-11, atol=1e-290
    )
    for matter in (kelvin, 0.3 * kelvin):
        alpha = joined @ recombination_coefficients(full, kelvin, matter)[1:]
        ours = recombination_coefficients(whole, kelvin, matter)[1:]
        np.testing.assert_allclose(ours, alpha, rtol=1e-12)


@pytest.mark.parametrize("kept", [TWO, GAP], ids=str)
@pytest.mark.parametrize("kelvin", [300.0, 3000.0])
def test_effective_rates_of_the_aggregated_network(kept: Any, kelvin: float) -> None:
    # The same brute-force matrix through scipy's sparse LU, against our elimination of the border.
    full = hydrogen_ladder(20, "nonrelativistic", kept)
    whole = hydrogen_ladder(20, "nonrelativistic", kept, 6)
    joined = membership(whole, full)
    part = shares(whole, full)
    brute = sparse_network(whole, kelvin)._replace(
        matrix=sparse.csr_array(
            joined @ rate_matrix(full, kelvin) @ joined.T.multiply(part[:, None])
        ),
        photoionization=joined @ (part * interior_photoionization(full, kelvin)[1:]),
    )
    ours = live_reduction(whole).rates(kelvin, 0.4 * kelvin)
    np.testing.assert_allclose(ours.exchange, exchange(brute), rtol=ELIMINATION)
    expected = effective_recombination(brute, kelvin, 0.4 * kelvin)
    np.testing.assert_allclose(ours.recombination, expected, rtol=ELIMINATION)
    photo = effective_photoionization(brute)
    np.testing.assert_allclose(np.exp(ours.log_photoionization), photo, rtol=ELIMINATION)


@pytest.mark.parametrize("kelvin", [300.0, 3000.0])
def test_limit_of_fast_mixing_in_l(kelvin: float) -> None:
    # Rates Q g_l' / g_n between all levels of each shell above n = 5, added to the resolved matrix:
    # the chances to reach 2s and 2p go over into ours as 1/Q.
    full = hydrogen_ladder(15, "nonrelativistic", TWO)
    whole = hydrogen_ladder(15, "nonrelativistic", TWO, 5)
    ours = all_fates(factor_interior(whole, kelvin))[:, 1:] @ membership(whole, full).toarray()
    plain = sparse_network(full, kelvin)
    errors = []
    for fast in (1e11, 1e12, 1e13):
        mixed = plain._replace(matrix=plain.matrix + mixing(full, 5, fast))
        found = fates(mixed)[:-1]
        errors.append(np.abs(found / ours[:, mixed.inside] - 1.0).max())
    # Rates inside are 1e8 s^-1 and slower.
    assert errors[2] < 2e-5
    assert errors[0] / errors[1] == pytest.approx(10.0, rel=0.05)
    assert errors[1] / errors[2] == pytest.approx(10.0, rel=0.05)
    apart = np.abs(fates(plain)[:-1] / ours[:, plain.inside] - 1.0).max()
    assert apart > 0.3, "without mixing the two networks must differ, or the test says nothing"


def mixing(full: Ladder, top: int, rate_per_s: float) -> sparse.csr_array:
    """Outflow on the diagonal, minus the rate from j to i off it, inside shells n > `top`."""
    n, weight = full.levels.n[1:], full.levels.statistical_weight[1:]
    same = (n[:, None] == n[None, :]) & (n > top)[:, None]
    rates = rate_per_s * same * (weight / (2.0 * n.astype(float) ** 2))[:, None]
    np.fill_diagonal(rates, 0.0)
    return sparse.csr_array(np.diag(rates.sum(axis=0)) - rates)


@pytest.mark.parametrize("energies", ["measured", "nonrelativistic"])
@pytest.mark.parametrize(("n_max", "top"), [*SIZES, (100, 2), (100, 50)])
def test_equilibrium_and_conservation(n_max: int, top: int, energies: str) -> None:
    ladder = hydrogen_ladder(n_max, energies, TWO, top)
    for kelvin in TEMPERATURES:
        factored = factor_interior(ladder, kelvin)
        exits = factored.fates(np.vstack([factored.to_kept, factored.photoionization]))
        assert np.all(exits >= 0.0)
        assert np.abs(exits.sum(axis=0) - 1.0).max() < CONSERVATION, kelvin
        at = Conditions(kelvin, kelvin, 1.0, 1e-14, 1e-3, 1e-3, 1.0)
        log_kept = np.log(1e-6) + log_saha_factor(
            ladder.kept.statistical_weight, ladder.kept.ionization_energy_ev, kelvin
        )
        found = populations(factored, log_kept, at)
        assert np.abs(found.log_departure[1:]).max() < EQUILIBRIUM, kelvin
        assert found.conservation_error < CONSERVATION


@pytest.mark.parametrize("kept", [TWO, GAP], ids=str)
@pytest.mark.parametrize("kelvin", [20.0, 30.0, 300.0, 3000.0])
def test_against_sparse_solver(kept: Any, kelvin: float) -> None:
    # scipy's SuperLU on the exported matrix; at 20 K our form without symmetry.
    ladder = hydrogen_ladder(40, "measured", kept, 12)
    factored = factor_interior(ladder, kelvin)
    live = ~ladder.interior.idle
    place = ladder.interior.position[live] - 1
    matrix = sparse.csc_array(rate_matrix(ladder, kelvin)[place][:, place])
    exits = np.vstack([factored.to_kept, factored.photoionization])
    expected = splu(matrix).solve(exits[:, live].T, trans="T").T
    ours = factored.fates(exits)[:, live]
    seen = expected > 1e-200
    assert np.abs(ours[seen] / expected[seen] - 1.0).max() < ELIMINATION
    source = np.full(ladder.interior.n_unknowns, -np.inf)
    source[live] = np.linspace(-3.0, 2.0, live.sum())
    filled = np.exp(factored.log_populations(source)[live])
    np.testing.assert_allclose(filled, splu(matrix).solve(np.exp(source[live])), rtol=ELIMINATION)


def test_both_forms_agree_where_both_hold(monkeypatch: pytest.MonkeyPatch) -> None:
    ladder = hydrogen_ladder(25, "measured", GAP, 7)
    warm = factor_interior(ladder, 500.0)
    monkeypatch.setattr("levelnet.network.assembly.COLD_K", 1000.0)
    cold = factor_interior(ladder, 500.0)
    live = ~ladder.interior.idle
    np.testing.assert_allclose(cold.diagonal[live], warm.diagonal[live], rtol=ELIMINATION)
    np.testing.assert_allclose(
        cold.fates(cold.to_kept)[:, live], warm.fates(warm.to_kept)[:, live], rtol=ELIMINATION
    )


@pytest.mark.parametrize("top", [2, 3, 10])
def test_cold_field(top: int) -> None:
    # What recombines at 20 K ends in 2s or 2p; chances over all exits sum to 1.
    ladder = hydrogen_ladder(50, "measured", TWO, top)
    for kelvin in (2.7, 20.0):
        factored = factor_interior(ladder, kelvin)
        chances = factored.fates(np.vstack([factored.to_kept, factored.photoionization]))
        assert np.abs(chances.sum(axis=0) - 1.0).max() < CONSERVATION
        rates = live_reduction(ladder).rates(kelvin, kelvin)
        assert np.all(np.isfinite(rates.recombination)) and np.all(rates.recombination > 0.0)


def test_histories_converge_to_the_resolved_one() -> None:
    # x_e of a resolved atom is approached as more of it is resolved.
    redshifts = {"redshift_end": 200.0, "redshifts": (1100.0, 600.0, 200.0)}
    grid = {"redshift_start": 1800.0} | redshifts
    resolved = solve(small_setup(30, grid=grid)).free_electron_fraction
    errors = [
        np.abs(solve(small_setup(30, grid=grid, hydrogen={"resolve_l_to": top}))
               .free_electron_fraction / resolved - 1.0)
        for top in (5, 10, 20)
    ]  # fmt: skip
    assert np.all(errors[0] > errors[1]) and np.all(errors[1] > errors[2])
    assert np.all(errors[2] > 0.0) and errors[2].max() < 0.01


def test_resolved_all_the_way_keeps_every_bit() -> None:
    unset, asked = solve(small_setup(8)), solve(small_setup(8, hydrogen={"resolve_l_to": 8}))
    for name in ("free_electron_fraction", "matter_temperature_k", "optical_depth"):
        assert getattr(unset, name).tobytes() == getattr(asked, name).tobytes(), name
    assert unset.log_departures("H I").tobytes() == asked.log_departures("H I").tobytes()
    assert unset.notes == asked.notes


def test_history_says_what_is_statistical() -> None:
    history = solve(small_setup(8, hydrogen={"resolve_l_to": 3}))
    assert history.outcome.ok and history.diagnostics.conservation_error < CONSERVATION
    (note,) = [note for note in history.notes if "shells" in note]
    assert note == "shells n = 4 to 8 are populated by statistical weight over l (resolve_l_to = 3)"
    levels = history.levels("H I")
    assert levels.n[levels.shell].tolist() == [4, 5, 6, 7, 8]
    assert history.populations("H I").shape == (50, len(levels)) == (50, 11)


def test_pieces_of_resolved_and_whole_shells_are_kept_apart(tmp_path: Path) -> None:
    pieces = FolderPieces(tmp_path)
    grid = {"redshift_start": 1500.0, "redshift_end": 900.0, "n_redshifts": 2}
    setups = [small_setup(8, grid=grid, hydrogen={"resolve_l_to": top}) for top in (8, 4, 3)]
    first = [solve(setup, pieces=pieces).free_electron_fraction[-1] for setup in setups]
    again = [solve(setup, pieces=pieces).free_electron_fraction[-1] for setup in setups]
    alone = [solve(setup).free_electron_fraction[-1] for setup in setups]
    assert len(set(first)) == 3
    assert first == again == alone


def test_comes_back_from_a_file(tmp_path: Path) -> None:
    history = solve(small_setup(8, count=3, hydrogen={"resolve_l_to": 3}))
    write(history, tmp_path / "shells.h5")
    again = read(tmp_path / "shells.h5")
    assert again.setup == history.setup and again.notes == history.notes
    for name in ("n", "l", "statistical_weight", "energy_ev", "ionization_energy_ev"):
        one, other = getattr(history.levels("H I"), name), getattr(again.levels("H I"), name)
        assert one.tobytes() == other.tobytes(), name
    assert again.log_departures("H I").tobytes() == history.log_departures("H I").tobytes()


def test_distilled_table_with_whole_shells() -> None:
    # The table against the history of the full network it was made from.
    setup = small_setup(8, end=200.0, count=20, hydrogen={"resolve_l_to": 3})
    table = distill(setup, tolerance=1e-9, certify=False)
    redshift = np.array([1200.0, 1000.0, 500.0, 200.0])
    grid = {"redshift_start": 1800.0, "redshift_end": 200.0, "redshifts": tuple(redshift)}
    accuracy = {"relative": 1e-8}
    full = solve(dataclasses.replace(setup, grid=grid, accuracy=accuracy))
    fast = history_from_table(table, setup.cosmology, redshifts=redshift, relative=1e-8)
    np.testing.assert_allclose(
        fast.free_electron_fraction, full.free_electron_fraction, rtol=HISTORY
    )
    assert "whole shells above n = 3" in " ".join(about_lines(table))
    with pytest.raises(InputError, match=r"'all': only levels resolved in l .* above n = 3"):
        history_from_table(table, setup.cosmology, lines=Lines(lyman_lines="all"))
    with pytest.raises(InputError, match=r"kept = \(4, 1\): .* 2 <= n <= 3, .*, resolved in l"):
        distill(setup, kept=[(2, 0), (2, 1), (4, 1)])
