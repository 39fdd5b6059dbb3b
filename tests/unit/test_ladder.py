"""The ladder of levels: what is kept, what is inside, and the lines between."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy import constants as codata

from levelnet.atomic.bound_bound import einstein_a
from levelnet.errors import InputError
from levelnet.network.ladder import (
    Ladder,
    hydrogen_ladder,
    level_position,
    lines_of,
    transition_over_kt,
)
from tests.tolerances import RECURRENCE

TWO = ((2, 0), (2, 1))
KEPT = [
    TWO,
    ((2, 1),),
    ((2, 0), (2, 1), (3, 1), (4, 1)),
    ((2, 0), (2, 1), (3, 0), (3, 1), (3, 2)),
    ((2, 0), (2, 1), (4, 1), (6, 3)),
    ((6, 5), (2, 0)),
]


@pytest.mark.parametrize("kept", KEPT, ids=str)
@pytest.mark.parametrize("n_max", [6, 9])
def test_every_level_has_one_place(n_max: int, kept: Any) -> None:
    ladder = hydrogen_ladder(n_max, "measured", kept)
    inside = ladder.interior
    live = {
        (n, l)
        for n, l in zip(
            inside.n[~inside.idle].tolist(), inside.l[~inside.idle].tolist(), strict=True
        )
    }
    excited = {(n, l) for n in range(2, n_max + 1) for l in range(n)}
    assert live == excited - set(kept)
    assert len(inside.n) == inside.shape.n_unknowns
    idle = set(zip(inside.n[inside.idle].tolist(), inside.l[inside.idle].tolist(), strict=True))
    assert idle <= set(kept)
    assert list(zip(ladder.kept.n.tolist(), ladder.kept.l.tolist(), strict=True)) == sorted(kept)


@pytest.mark.parametrize("kept", KEPT, ids=str)
def test_blocks_run_to_the_top(kept: Any) -> None:
    ladder = hydrogen_ladder(9, "nonrelativistic", kept)
    inside = ladder.interior
    for l in range(9):
        n = inside.shape.part(inside.n, l)
        assert n.tolist() == list(range(int(inside.first_n[l]), 10))
        assert np.all(inside.shape.part(inside.l, l) == l)
        # A block never begins with a level that takes no part.
        assert not inside.shape.part(inside.idle, l)[:1].any()


def test_positions_are_those_of_the_level_set() -> None:
    ladder = hydrogen_ladder(8, "measured", KEPT[3])
    levels = ladder.levels
    assert level_position(levels.n, levels.l).tolist() == list(range(len(levels)))
    inside = ladder.interior
    assert np.array_equal(levels.n[inside.position], inside.n)
    assert np.array_equal(levels.l[inside.position], inside.l)
    assert np.array_equal(levels.n[ladder.kept_position], ladder.kept.n)
    assert np.array_equal(levels.l[ladder.kept_position], ladder.kept.l)
    assert np.array_equal(levels.energy_ev[ladder.kept_position], ladder.kept.energy_ev)


def test_kept_levels_stand_in_ascending_energy() -> None:
    for energies in ("measured", "nonrelativistic"):
        kept = hydrogen_ladder(6, energies, ((5, 1), (2, 0), (3, 1))).kept
        assert np.all(np.diff(kept.energy_ev) > 0.0)
        np.testing.assert_array_equal(kept.statistical_weight, 2 * (2 * kept.l + 1))


def test_two_levels_have_nothing_inside() -> None:
    ladder = hydrogen_ladder(2, "measured", TWO)
    assert ladder.interior.shape.size.tolist() == [0, 0]
    assert ladder.interior.shape.n_unknowns == 0
    assert len(lines_of(ladder, 2, 0)[0]) == len(lines_of(ladder, 2, 1)[0]) == 0


def partners(ladder: Ladder, n: int, l: int) -> dict[tuple[int, int], float]:
    position, strength = lines_of(ladder, n, l)
    assert len(set(position.tolist())) == len(position)
    where = zip(ladder.levels.n[position].tolist(), ladder.levels.l[position].tolist(), strict=True)
    return dict(zip(where, strength.tolist(), strict=True))


def test_lines_against_the_rates_of_the_atom() -> None:
    # Dipole rule: l +- 1, n' not n; strength A sqrt(g_upper / g_lower). The ground state is no
    # partner.
    ladder = hydrogen_ladder(7, "measured", TWO)
    for n in range(2, 8):
        for l in range(n):
            found = partners(ladder, n, l)
            expected = {
                (m, k) for m in range(2, 8) for k in (l - 1, l + 1) if m != n and 0 <= k < m
            }
            assert set(found) == expected
            for (m, k), strength in found.items():
                (up, lu), (low, ll) = sorted([(n, l), (m, k)], reverse=True)
                a = einstein_a(up, lu, low, ll)
                root = np.sqrt((2 * lu + 1) / (2 * ll + 1))
                assert strength == pytest.approx(a * root, rel=RECURRENCE)
                assert partners(ladder, m, k)[n, l] == strength


def test_energies_of_lines() -> None:
    kelvin_per_ev = codata.e / codata.k
    for energies in ("measured", "nonrelativistic"):
        ladder = hydrogen_ladder(6, energies, TWO)
        lower, upper = np.array([1, 2, 4]), np.array([4, 3, 20])
        plain, actual = transition_over_kt(ladder, lower, upper, 300.0)
        energy = ladder.levels.energy_ev
        np.testing.assert_allclose(
            actual, (energy[upper] - energy[lower]) * kelvin_per_ev / 300.0, rtol=1e-11
        )
        if energies == "nonrelativistic":
            np.testing.assert_array_equal(plain, actual)
            assert np.all(np.abs(ladder.energy_excess_ev) < 1e-14)
        else:
            assert np.all(np.abs(actual / plain - 1.0) < 3e-5)


def test_atomic_data_is_shared_between_ladders() -> None:
    one = hydrogen_ladder(6, "measured", TWO)
    other = hydrogen_ladder(6, "nonrelativistic", KEPT[3])
    assert one.dipole is other.dipole
    assert one.bound_free is other.bound_free


@pytest.mark.parametrize("level", [(1, 0), (7, 0), (3, 3), (3, -1), (0, 0)])
def test_levels_that_cannot_be_kept(level: tuple[int, int]) -> None:
    with pytest.raises(InputError, match=r"kept levels .*2 <= n <= 6, 0 <= l < n"):
        hydrogen_ladder(6, "measured", (level, (2, 1)))
