"""What reductions of He I hang on, against differences of the same reduction."""

from __future__ import annotations

import math

import numpy as np
import pytest

from levelnet.atomic.helium_transitions import helium_places, helium_transitions
from levelnet.network.helium import HeliumLadders, reduce_helium
from levelnet.network.helium_weights import add_helium_node_weights
from levelnet.network.weights import NodeWeights
from tests.frozen_differences import slope
from tests.helium_differences import helium_cross_sections, helium_strengths
from tests.small_helium_lines import small_ladders


def weights(ladders: HeliumLadders, kelvin: float, by: np.ndarray) -> NodeWeights:
    shapes = (len(by), helium_places(ladders.lines)), (len(by), len(ladders.levels))
    total = NodeWeights(*(np.zeros(shape) for shape in shapes))
    add_helium_node_weights(ladders, kelvin, by, total)
    return total


@pytest.mark.parametrize(("higher", "n_max"), [("closed", 5), ("free", 5), ("closed", 2)])
@pytest.mark.parametrize("kelvin", [1500.0, 6000.0])
def test_every_rate_against_differences(higher: str, n_max: int, kelvin: float) -> None:
    ladders = small_ladders(higher, n_max)
    draw = np.random.default_rng(20261201)
    by = draw.normal(size=(2, len(reduce_helium(ladders, kelvin))))
    found, listed = weights(ladders, kelvin, by), helium_transitions(ladders.lines)
    few = draw.choice(len(listed.place), min(12, len(listed.place)), replace=False)
    for k in few.tolist():
        place = listed.place[[k]]
        changed = slope(
            lambda h, place=place: (
                by @ reduce_helium(helium_strengths(ladders, place, math.exp(h)), kelvin)
            )
        )
        np.testing.assert_allclose(found.bound_bound[:, place[0]], changed, rtol=1e-7, atol=1e-8)
    for level in draw.choice(np.arange(1, len(ladders.levels)), 3, replace=False).tolist():
        changed = slope(
            lambda h, level=level: (
                by
                @ reduce_helium(
                    helium_cross_sections(ladders, np.array([level]), math.exp(h)), kelvin
                )
            )
        )
        np.testing.assert_allclose(found.bound_free[:, level], changed, rtol=1e-7, atol=1e-8)


def test_transitions_are_those_of_the_selection_rules() -> None:
    ladders = small_ladders("closed", 4)
    levels, found = ladders.levels, helium_transitions(ladders.lines)
    l, spin, energy = levels.l, levels.spin, levels.energy_ev
    pairs = {
        (a, b)
        for a in range(1, len(levels))
        for b in range(1, len(levels))
        if spin[a] == spin[b] and abs(l[a] - l[b]) == 1 and energy[a] > energy[b]
    }
    assert set(zip(found.upper.tolist(), found.lower.tolist(), strict=True)) == pairs
    assert len(found.upper) == len(pairs)
    weight = np.sqrt(levels.statistical_weight[found.upper])
    weight /= np.sqrt(levels.statistical_weight[found.lower])
    strength = np.concatenate([one.strength_per_s for one in ladders.lines.ladders])[found.place]
    for k in range(len(found.place)):
        a = ladders.lines.einstein_a(int(found.upper[k]), int(found.lower[k]))
        assert strength[k] == pytest.approx(a * weight[k], rel=1e-14)


def test_no_weight_but_where_a_rate_stands() -> None:
    ladders = small_ladders("closed", 4)
    by = np.ones((1, len(reduce_helium(ladders, 5000.0))))
    found = weights(ladders, 5000.0, by)
    others = np.setdiff1d(
        np.arange(found.bound_bound.shape[1]), helium_transitions(ladders.lines).place
    )
    assert not found.bound_bound[:, others].any()
    assert not found.bound_free[:, 0].any()
