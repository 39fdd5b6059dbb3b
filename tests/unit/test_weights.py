"""Derivatives of one reduction by every rate, against differences of the reduction itself."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from levelnet.network.assembly import factor_interior
from levelnet.network.ladder import hydrogen_ladder
from levelnet.network.rates import stack
from levelnet.network.reduction import exchange_pairs, reduce_at
from levelnet.network.transitions import n_places, transitions
from levelnet.network.weights import NodeWeights, add_node_weights
from tests.frozen_differences import slope, with_cross_sections, with_strengths

TWO = ((2, 0), (2, 1))
LYMAN = (*TWO, (3, 1), (4, 1))
THREE = (*TWO, (3, 0), (3, 1), (3, 2))


def weighed(ladder: Any, temperature_k: float, sums: np.ndarray) -> NodeWeights:
    total = NodeWeights(
        np.zeros((len(sums), n_places(ladder))),
        np.zeros((len(sums), len(ladder.levels))),
    )
    add_node_weights(ladder, exchange_pairs(ladder), temperature_k, sums, total)
    return total


# 26 K: elimination without symmetry.
@pytest.mark.parametrize("temperature_k", [5000.0, 1500.0, 60.0, 26.0])
@pytest.mark.parametrize(
    ("kept", "resolved"),
    [(TWO, 8), (LYMAN, 8), (THREE, 8), (LYMAN, 5), (TWO, 2)],
    ids=["two", "lyman", "three", "shells", "only-shells"],
)
def test_equal_to_differences(kept: Any, resolved: int, temperature_k: float) -> None:
    ladder = hydrogen_ladder(8, "measured", kept, resolved)
    pairs = exchange_pairs(ladder)
    draw = np.random.default_rng(17)
    base = stack(reduce_at(ladder, pairs, temperature_k))
    sums = draw.normal(size=(2, len(base)))
    total = weighed(ladder, temperature_k, sums)

    def moved(changed: Any) -> np.ndarray:
        return sums @ (stack(reduce_at(changed, pairs, temperature_k)) - base)

    places = transitions(ladder).place
    chosen_places = draw.choice(places, 12, replace=False)
    for place in (*chosen_places, *places[-4:], places):
        chosen = np.atleast_1d(place)
        expected = slope(lambda h, at=chosen: moved(with_strengths(ladder, at, math.exp(h))), 3e-3)
        computed = total.bound_bound[:, chosen].sum(axis=1)
        np.testing.assert_allclose(computed, expected, rtol=1e-8, atol=1e-8)
    for level in (1, 2, len(ladder.levels) // 2, len(ladder.levels) - 1):
        at = np.array([level])
        expected = slope(lambda h, at=at: moved(with_cross_sections(ladder, at, math.exp(h))), 3e-3)
        np.testing.assert_allclose(total.bound_free[:, level], expected, rtol=1e-8, atol=1e-8)


@pytest.mark.parametrize("temperature_k", [3000.0, 40.0])
def test_scaling_every_rate_scales_every_result(temperature_k: float) -> None:
    # Exact: a common factor on all lines and cross sections is one on all results.
    ladder = hydrogen_ladder(60, "measured", TWO)
    size = len(stack(reduce_at(ladder, exchange_pairs(ladder), temperature_k)))
    total = weighed(ladder, temperature_k, np.eye(size)[[0, 1, 50, 101]])
    whole = total.bound_bound.sum(axis=1) + total.bound_free.sum(axis=1)
    np.testing.assert_allclose(whole, 1.0, rtol=1e-11)


def test_transitions_are_every_dipole_pair_once() -> None:
    ladder = hydrogen_ladder(7, "measured", TWO)
    found = transitions(ladder)
    n, l = ladder.levels.n, ladder.levels.l
    pairs = {
        (a, b)
        for a in range(1, len(n))
        for b in range(1, len(n))
        if n[a] > n[b] and abs(l[a] - l[b]) == 1
    }
    assert set(zip(found.upper.tolist(), found.lower.tolist(), strict=True)) == pairs
    assert len(found.upper) == len(pairs)


def test_adjoint_identity_of_the_elimination() -> None:
    # <y, A x> = <A^T y, x>: fates and populations come from one factorization.
    ladder = hydrogen_ladder(40, "measured", TWO, 30)
    draw = np.random.default_rng(2)
    for temperature_k in (4000.0, 300.0, 26.0):
        factored = factor_interior(ladder, temperature_k)
        rates = draw.uniform(size=(1, ladder.interior.n_unknowns))
        source = draw.uniform(size=ladder.interior.n_unknowns)
        fates = factored.fates(rates)[0]
        populations = np.exp(factored.log_populations(np.log(source)))
        assert source @ fates == pytest.approx(populations @ rates[0], rel=1e-12)
