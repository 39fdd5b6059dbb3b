"""Reduction onto kept levels: against sparse LU, published effective rates, and its own limits."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants as codata

from levelnet.atomic.bound_free import recombination_coefficient
from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.atomic.levels import reduced_mass_ratio
from levelnet.errors import RangeError
from levelnet.network import tabulation
from levelnet.network.assembly import factor_interior, recombination_coefficients
from levelnet.network.ladder import Ladder, hydrogen_ladder
from levelnet.network.rates import assemble_rates, rate_constants, stack
from levelnet.network.reduced import ReducedRates
from levelnet.network.reduction import WARM_K, all_fates, exchange_pairs, reduce_at
from levelnet.network.tabulation import live_reduction, node_count, tabulate
from levelnet.tables import read_table
from tests.sparse_reference import (
    effective_photoionization,
    effective_recombination,
    exchange,
    sparse_network,
)
from tests.tolerances import ELIMINATION, INTERPOLATION, ROUND_OFF

KELVIN_PER_EV = codata.e / codata.k
TWO = ((2, 0), (2, 1))
LYMAN = ((2, 0), (2, 1), (3, 1), (4, 1))
THREE = ((2, 0), (2, 1), (3, 0), (3, 1), (3, 2))
GAP = ((2, 0), (2, 1), (4, 1), (5, 3))
KEPT = [TWO, LYMAN, THREE, GAP]
# Forward (populations) against adjoint (fates) effective rates.
FORWARD_ADJOINT = 1e-12
# Every reduction here is tabulated to this.
TABLE = 1e-9


def exact_rates(ladder: Ladder, kelvin: float, matter: float) -> ReducedRates:
    """Reduce exactly; slopes are left 0."""
    pairs = exchange_pairs(ladder)
    value = stack(reduce_at(ladder, pairs, kelvin))
    constants = rate_constants(ladder, pairs)
    return assemble_rates(constants, value, np.zeros_like(value), kelvin, matter)


@pytest.mark.parametrize("kept", KEPT, ids=str)
@pytest.mark.parametrize("kelvin", [100.0, 1000.0, 2500.0, 6000.0])
def test_rates_against_sparse_lu(kept: Any, kelvin: float) -> None:
    ladder = hydrogen_ladder(12, "measured", kept)
    network = sparse_network(ladder, kelvin)
    for matter in (kelvin, 0.3 * kelvin):
        rates = exact_rates(ladder, kelvin, matter)
        expected = effective_recombination(network, kelvin, matter)
        np.testing.assert_allclose(rates.recombination, expected, rtol=ELIMINATION)
    np.testing.assert_allclose(
        np.exp(rates.log_photoionization), effective_photoionization(network), rtol=ELIMINATION
    )
    np.testing.assert_allclose(rates.exchange, exchange(network), rtol=ELIMINATION, atol=1e-250)
    assert np.all(np.diag(rates.exchange) == 0.0)


@pytest.mark.parametrize("kept", KEPT, ids=str)
def test_exchange_is_symmetric_in_equilibrium_weights(kept: Any) -> None:
    # w_i R_ij = w_j R_ji, both directions from independent solves of the sparse matrix, and of
    # ours.
    ladder = hydrogen_ladder(15, "measured", kept)
    levels = ladder.kept
    for kelvin in (200.0, 1000.0, 6000.0):
        x = levels.energy_ev * KELVIN_PER_EV / kelvin
        weight = levels.statistical_weight * np.exp(x.min() - x)
        for rates in (
            exchange(sparse_network(ladder, kelvin)),
            exact_rates(ladder, kelvin, 1e3).exchange,
        ):
            flow = weight[:, None] * rates
            np.testing.assert_allclose(flow, flow.T, rtol=ELIMINATION)


@pytest.mark.parametrize("kept", KEPT, ids=str)
@pytest.mark.parametrize("kelvin", [40.0, 1000.0, 2500.0, 6000.0])
@pytest.mark.parametrize("n_max", [10, 50])
def test_forward_and_adjoint_agree(n_max: int, kept: Any, kelvin: float) -> None:
    assert forward_against_adjoint(n_max, kept, kelvin) < FORWARD_ADJOINT


@pytest.mark.slow
@pytest.mark.parametrize("n_max", [100, 300])
def test_forward_and_adjoint_agree_for_many_levels(n_max: int) -> None:
    for kelvin in (100.0, 1000.0, 2500.0, 6000.0):
        assert forward_against_adjoint(n_max, TWO, kelvin) < FORWARD_ADJOINT


def forward_against_adjoint(n_max: int, kept: Any, kelvin: float) -> float:
    """Largest relative difference of A_i from populations and from fates."""
    ladder = hydrogen_ladder(n_max, "measured", kept)
    interior = factor_interior(ladder, kelvin)
    position, live = ladder.interior.position, ~ladder.interior.idle
    worst = 0.0
    for matter in (kelvin, 0.4 * kelvin):
        alpha = recombination_coefficients(ladder, kelvin, matter)
        adjoint = all_fates(interior) @ alpha
        log_source = np.full(len(live), -np.inf)
        log_source[live] = np.log(alpha[position][live])
        with np.errstate(divide="ignore"):
            population = np.exp(interior.log_populations(log_source))
        forward = alpha[ladder.kept_position] + interior.to_kept @ population
        worst = max(worst, float(np.max(np.abs(forward / adjoint - 1.0))))
    return worst


@pytest.mark.parametrize("kept", [TWO, LYMAN, THREE], ids=str)
def test_nothing_is_lost_without_radiation(kept: Any) -> None:
    # Hummer 1994, MNRAS 268, 109: without radiation every recombination to n >= 2 ends in a kept
    # level (here n = 2 at last), so the effective coefficients add up to case B of the same levels.
    ladder = hydrogen_ladder(30, "nonrelativistic", kept)
    n, l = ladder.levels.n[1:], ladder.levels.l[1:]
    for matter in (1e3, 1e4):
        total = recombination_coefficient(n, l, matter).sum()
        computed = exact_rates(ladder, 2.7, matter).recombination.sum()
        assert computed == pytest.approx(total, rel=1e-9)
        # At 30 K the thermal photons are still far below the lines of n <= 30 and up.
        warmer = exact_rates(ladder, WARM_K, matter).recombination.sum()
        assert warmer == pytest.approx(total, rel=2e-3)


def cascade(n_max: int, matter: float) -> np.ndarray:
    """Effective recombination into 2s and 2p without radiation; beyond n_max in proportion."""
    ladder = hydrogen_ladder(n_max, "nonrelativistic", TWO)
    n, l = ladder.levels.n[1:], ladder.levels.l[1:]
    alpha = recombination_coefficient(n, l, matter)
    last, before = alpha[n == n_max].sum(), alpha[n == n_max - 10].sum()
    steepness = np.log(before / last) / np.log(n_max / (n_max - 10))
    tail = last * (n_max / (steepness - 1.0) - 0.5)
    rates = exact_rates(ladder, 2.7, matter).recombination
    return rates * (1.0 + tail / rates.sum())


def test_published_case_b() -> None:
    # Hummer 1994, MNRAS 268, 109, for infinite nuclear mass: lengths scale as 1/mu.
    mu = reduced_mass_ratio()
    numbers = read_table("hydrogen/case_b_recombination").numbers
    for log_kelvin, scaled in zip(
        numbers["log10_temperature"].tolist(), numbers["scaled_coefficient"].tolist(), strict=True
    ):
        kelvin = 10.0**log_kelvin
        total = cascade(100, kelvin * mu).sum() * mu**2
        # Four digits, and the power-law tail beyond n = 100: 1e-3 of the whole at 1000 K.
        assert np.sqrt(kelvin) * total * 1e11 == pytest.approx(scaled, rel=1.5e-3)


def test_published_split_between_2s_and_2p() -> None:
    # Osterbrock & Ferland 2006, Astrophysics of Gaseous Nebulae, low-density effective coefficients
    # at 1e4 K, low density: 2s 0.838e-13, 2p 1.74e-13 cm^3/s (from memory).
    to_2s, to_2p = cascade(60, 1e4)
    assert to_2s == pytest.approx(0.838e-13, rel=0.01)
    assert to_2p == pytest.approx(1.74e-13, rel=0.01)


@pytest.mark.parametrize("kept", KEPT, ids=str)
def test_detailed_balance_with_the_continuum(kept: Any) -> None:
    # Milne 1924, Phil. Mag. 47, 209: at T_m = T_r the effective coefficients balance as direct
    # ones do.
    ladder = hydrogen_ladder(12, "measured", kept)
    levels = ladder.kept
    for kelvin in (300.0, 3000.0):
        photo = effective_photoionization(sparse_network(ladder, kelvin))
        alpha = exact_rates(ladder, kelvin, kelvin).recombination
        log_saha = log_saha_factor(levels.statistical_weight, levels.ionization_energy_ev, kelvin)
        np.testing.assert_allclose(
            np.log(photo), np.log(alpha) - log_saha, rtol=0, atol=ELIMINATION
        )


def reduced_again(rates: ReducedRates, keep: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Eliminate all kept levels but the first `keep`, densely: A, B and R of what is left."""
    matrix = np.diag(rates.exchange.sum(axis=1) + np.exp(rates.log_photoionization))
    matrix -= rates.exchange
    chance = np.linalg.solve(matrix[keep:, keep:], rates.exchange[keep:, :keep])
    lost = np.linalg.solve(matrix[keep:, keep:], np.exp(rates.log_photoionization)[keep:])
    out = rates.exchange[:keep, keep:]
    between = rates.exchange[:keep, :keep] + out @ chance
    np.fill_diagonal(between, 0.0)
    return (
        rates.recombination[:keep] + rates.recombination[keep:] @ chance,
        np.exp(rates.log_photoionization)[:keep] + out @ lost,
        between,
    )


@pytest.mark.parametrize("kept", [LYMAN, THREE, GAP], ids=str)
def test_reducing_in_two_stages_is_reducing_at_once(kept: Any) -> None:
    for kelvin in (300.0, 2500.0, 6000.0):
        once = exact_rates(hydrogen_ladder(15, "measured", TWO), kelvin, 0.5 * kelvin)
        more = exact_rates(hydrogen_ladder(15, "measured", kept), kelvin, 0.5 * kelvin)
        capture, photo, between = reduced_again(more, 2)
        np.testing.assert_allclose(capture, once.recombination, rtol=ELIMINATION)
        np.testing.assert_allclose(photo, np.exp(once.log_photoionization), rtol=ELIMINATION)
        np.testing.assert_allclose(between, once.exchange, rtol=ELIMINATION)


@pytest.mark.parametrize("n_max", [2, 3])
def test_every_excited_level_kept(n_max: int) -> None:
    # Nothing to eliminate: the rates are the direct ones.
    kept = tuple((n, l) for n in range(2, n_max + 1) for l in range(n))
    ladder = hydrogen_ladder(n_max, "measured", kept)
    rates = exact_rates(ladder, 3000.0, 2000.0)
    alpha = recombination_coefficients(ladder, 3000.0, 2000.0)[1:]
    np.testing.assert_allclose(rates.recombination, alpha, rtol=1e-13)
    network = sparse_network(ladder, 3000.0)
    direct = -network.matrix.toarray().T
    np.fill_diagonal(direct, 0.0)
    np.testing.assert_allclose(rates.exchange, direct, rtol=1e-12, atol=1e-200)


@pytest.mark.parametrize("kept", [TWO, LYMAN, THREE], ids=str)
@pytest.mark.parametrize("n_max", [2, 3, 5, 40])
def test_logarithms_are_finite_in_any_field(n_max: int, kept: Any) -> None:
    kept = tuple(level for level in kept if level[0] <= n_max)
    ladder = hydrogen_ladder(n_max, "measured", kept)
    pairs = exchange_pairs(ladder)
    for kelvin in (2.7, 10.0, 27.4, 29.99, 30.01, 100.0, 3000.0, 20000.0):
        node = reduce_at(ladder, pairs, kelvin)
        assert not np.any(np.isnan(node.log_exchange))
        assert np.all(node.log_exchange < 50.0)
        assert np.all(np.isfinite(node.log_spectrum))
        for matter in (0.1 * kelvin, kelvin):
            rates = exact_rates(ladder, kelvin, matter)
            assert all(np.all(np.isfinite(part)) for part in rates)
            assert np.all(rates.recombination > 0.0)
            assert np.all(rates.exchange >= 0.0)


def test_barriers() -> None:
    # 2s and 2p meet through n = 3: H-alpha is 1.89 eV. With 3p kept 2p climbs to 4s, as 2s may.
    def barrier(kept: Any, energies: str = "nonrelativistic") -> dict[tuple[int, int], float]:
        pairs = exchange_pairs(hydrogen_ladder(8, energies, kept))
        where = zip(pairs.lower.tolist(), pairs.upper.tolist(), strict=True)
        return dict(zip(where, pairs.barrier_ev.tolist(), strict=True))

    chi = 13.59829
    found = barrier(TWO)[0, 1]
    # An atom in 2p rises to 3s or 3d and must then come to 2s through a p level: n = 4.
    assert found == pytest.approx(chi * (1 / 4 - 1 / 16), rel=1e-6)
    kept = barrier(LYMAN)
    assert kept[0, 2] == kept[0, 3] == 0.0
    # The exchange that is stored is what is left without the barrier: it varies little when cold.
    ladder = hydrogen_ladder(8, "measured", TWO)
    pairs = exchange_pairs(ladder)
    cold, warm = (reduce_at(ladder, pairs, kelvin).log_exchange[0] for kelvin in (30.5, 300.0))
    assert abs(cold - warm) < 1.0


def test_exchange_over_a_barrier_fades_without_a_jump_in_rates() -> None:
    # Below WARM_K it is switched off: it was e^-900 of a rate before.
    ladder = hydrogen_ladder(8, "measured", TWO)
    for kelvin in (WARM_K * (1 - 1e-9), WARM_K):
        assert np.all(exact_rates(ladder, kelvin, 10.0).exchange < 1e-300)
    below, above = (exact_rates(ladder, WARM_K * (1 + s * 1e-9), 10.0) for s in (-1, 1))
    np.testing.assert_allclose(below.recombination, above.recombination, rtol=1e-7)


@pytest.fixture(scope="module")
def table() -> Any:
    return tabulate(hydrogen_ladder(10, "measured", TWO), 60.0, 6000.0, TABLE)


@given(st.floats(60.0, 6000.0), st.floats(0.05, 1.5))
@settings(max_examples=40)
def test_table_against_the_exact_reduction(table: Any, kelvin: float, ratio: float) -> None:
    exact = exact_rates(table.ladder, kelvin, ratio * kelvin)
    found = table.rates(kelvin, ratio * kelvin)
    assert table.interpolation_error <= TABLE
    # Measured at seven points; elsewhere it may be a little more.
    atol = 3 * TABLE
    np.testing.assert_allclose(found.recombination, exact.recombination, rtol=atol)
    np.testing.assert_allclose(
        found.log_photoionization, exact.log_photoionization, rtol=0, atol=atol
    )
    np.testing.assert_allclose(found.exchange, exact.exchange, rtol=atol)


def slopes_by_difference(
    rates: Callable[[float, float], ReducedRates], kelvin: float, matter: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Central differences, fourth order, of exact reductions."""
    step = 2e-3

    def slope(of: Callable[[float], np.ndarray]) -> np.ndarray:
        far = of(np.exp(2 * step)) - of(np.exp(-2 * step))
        near = of(np.exp(step)) - of(np.exp(-step))
        return (8 * near - far) / (12 * step)

    off = ~np.eye(len(rates(kelvin, matter).recombination), dtype=bool)
    return (
        slope(lambda f: np.log(rates(kelvin * f, matter).recombination)),
        slope(lambda f: np.log(rates(kelvin, matter * f).recombination)),
        slope(lambda f: rates(kelvin * f, matter * f).log_photoionization),
        slope(lambda f: np.log(rates(kelvin * f, matter).exchange[off])),
    )


@pytest.mark.parametrize("live", [False, True])
def test_slopes_equal_differences(live: bool, table: Any) -> None:
    reduced = live_reduction(table.ladder) if live else table
    for kelvin, matter in ((100.0, 30.0), (1000.0, 990.0), (3500.0, 3500.0)):
        found = reduced.rates(kelvin, matter)
        radiation, in_matter, photo, between = slopes_by_difference(
            lambda r, m: exact_rates(table.ladder, r, m), kelvin, matter
        )
        off = ~np.eye(len(table.ladder.kept), dtype=bool)
        tight = {"rtol": 1e-6, "atol": 1e-6}
        np.testing.assert_allclose(found.recombination_slope_radiation, radiation, **tight)
        np.testing.assert_allclose(found.recombination_slope_matter, in_matter, **tight)
        np.testing.assert_allclose(found.photoionization_slope, photo, **tight)
        np.testing.assert_allclose(found.exchange_slope[off], between, **tight)


def test_live_reduction_is_the_exact_one() -> None:
    ladder = hydrogen_ladder(10, "measured", TWO)
    live = live_reduction(ladder)
    exact, found = exact_rates(ladder, 700.0, 300.0), live.rates(700.0, 300.0)
    # The temperature goes through its logarithm: one rounding, magnified by E/kT.
    np.testing.assert_allclose(found.recombination, exact.recombination, rtol=ROUND_OFF)
    np.testing.assert_allclose(found.exchange, exact.exchange, rtol=20 * ROUND_OFF)
    assert live.kept is ladder.kept


@pytest.mark.parametrize("kept", [TWO, LYMAN, THREE, GAP], ids=str)
@pytest.mark.parametrize(("low", "high"), [(2.7, 4600.0), (100.0, 4600.0)])
def test_tables_reach_their_tolerance_with_few_nodes(kept: Any, low: float, high: float) -> None:
    # Six nodes per e-fold (measured) and the check points; a table to redshift 0 has a cold piece.
    ladder = hydrogen_ladder(8, "measured", kept)
    found = tabulate(ladder, low, high, INTERPOLATION)
    assert found.interpolation_error <= INTERPOLATION
    assert found.n_nodes < 100


def test_a_table_in_two_pieces_joins() -> None:
    found = tabulate(hydrogen_ladder(6, "measured", TWO), 5.0, 1000.0, INTERPOLATION)
    assert len(found.series) == 2
    for kelvin in (WARM_K, WARM_K * (1 - 1e-12), WARM_K * (1 + 1e-12), 5.0, 1000.0):
        rates = found.rates(kelvin, 3.0)
        exact = exact_rates(found.ladder, kelvin, 3.0)
        np.testing.assert_allclose(rates.recombination, exact.recombination, rtol=3 * INTERPOLATION)
    assert len(tabulate(found.ladder, WARM_K, 100.0, 1e-4).series) == 1


def test_outside_the_table(table: Any) -> None:
    for kelvin in (59.9, 6001.0, 2.7):
        with pytest.raises(RangeError, match=r"T_r = .* K: outside the tabulated"):
            table.rates(kelvin, 100.0)


def test_stored_nodes_are_used_and_counted() -> None:
    ladder = hydrogen_ladder(6, "measured", TWO)
    store: dict[float, np.ndarray] = {}
    computed, told = [], []

    def recall(kelvin: float, compute: Callable[[float], np.ndarray]) -> np.ndarray:
        if kelvin not in store:
            computed.append(kelvin)
            store[kelvin] = compute(kelvin)
        return store[kelvin]

    first = tabulate(ladder, 100.0, 3000.0, 1e-6, lambda: told.append(1), recall)
    assert len(computed) == len(store) == len(told) > first.n_nodes
    again = tabulate(ladder, 100.0, 3000.0, 1e-6, None, recall)
    assert len(computed) == len(store)
    plain = tabulate(ladder, 100.0, 3000.0, 1e-6)
    for other in (again, plain):
        assert np.array_equal(first.series[0].coefficients, other.series[0].coefficients)
    assert first.interpolation_error == again.interpolation_error == plain.interpolation_error


def test_too_few_nodes_are_noticed_and_more_are_taken(monkeypatch: pytest.MonkeyPatch) -> None:
    ladder = hydrogen_ladder(4, "measured", TWO)
    monkeypatch.setattr(tabulation, "node_count", lambda *_: 4)
    found = tabulate(ladder, 100.0, 4600.0, INTERPOLATION)
    assert found.interpolation_error <= INTERPOLATION
    assert found.n_nodes > 4
    # What cannot be reached ends, and says how far it came.
    out_of_reach = tabulate(ladder, 100.0, 4600.0, 1e-30)
    assert 1e-30 < out_of_reach.interpolation_error < 1e-9
    assert out_of_reach.n_nodes >= 200


def test_error_is_measured_where_the_table_is_bad() -> None:
    # A store that gives wrong values at the check points must show in the error.
    ladder = hydrogen_ladder(4, "measured", TWO)
    calls = []

    def recall(kelvin: float, compute: Callable[[float], np.ndarray]) -> np.ndarray:
        calls.append(kelvin)
        return compute(kelvin) + (1e-5 if len(calls) == 3 else 0.0)

    found = tabulate(ladder, 500.0, 1000.0, 1e-3, None, recall)
    assert found.interpolation_error == pytest.approx(1e-5, rel=0.05)


def test_first_guess_of_nodes() -> None:
    assert node_count(100.0, 4600.0, 1e-8) == 25
    assert node_count(100.0, 4600.0, 1e-12) > node_count(100.0, 4600.0, 1e-8)
