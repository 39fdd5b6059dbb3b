"""Selectors: what each pattern picks, checked by brute force over all levels, and every refusal."""

from __future__ import annotations

import itertools
import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from levelnet.atomic.levels import LevelSet, hydrogenic_levels, level_name
from levelnet.atomic.selection import (
    AtomSize,
    Selector,
    level_mask,
    line_mask,
    pair_mask,
    parse_selector,
)
from levelnet.errors import InputError

N_MAX = 7
LEVELS = hydrogenic_levels(N_MAX)
# Every dipole pair between excited levels, in no particular order.
PAIRS = [
    (i, j)
    for i, j in itertools.permutations(range(1, len(LEVELS)), 2)
    if LEVELS.n[i] > LEVELS.n[j] and abs(LEVELS.l[i] - LEVELS.l[j]) == 1
]
UPPER, LOWER = (np.array(side) for side in zip(*PAIRS, strict=True))


def names(mask: np.ndarray) -> set[str]:
    chosen = np.flatnonzero(mask).tolist()
    return {level_name(int(LEVELS.n[k]), int(LEVELS.l[k])) for k in chosen}


def with_shells(resolved: int) -> LevelSet:
    """Levels to `resolved`, then one whole shell for each n."""
    few = hydrogenic_levels(resolved)
    shell = np.arange(resolved + 1, N_MAX + 1)
    return LevelSet(
        np.concatenate([few.n, shell]),
        np.concatenate([few.l, np.full_like(shell, -1)]),
        np.concatenate([few.statistical_weight, 2.0 * shell**2]),
        np.concatenate([few.energy_ev, 13.6 - 13.6 / shell**2]),
        np.concatenate([few.ionization_energy_ev, 13.6 / shell**2]),
    )


@pytest.mark.parametrize(
    ("pattern", "expected"),
    [
        ("3d", {"3d"}),
        ("3[l=2]", {"3d"}),
        ("3", {"3s", "3p", "3d"}),
        ("2-3", {"2s", "2p", "3s", "3p", "3d"}),
        ("6-*p", {"6p", "7p"}),
        ("*f", {"4f", "5f", "6f", "7f"}),
        ("2-5[l=3]", {"4f", "5f"}),
        ("7i", {"7i"}),
    ],
)
def test_levels_of_a_pattern(pattern: str, expected: set[str]) -> None:
    assert names(level_mask(parse_selector("bound_free", pattern, ""), LEVELS)) == expected


def test_every_excited_level() -> None:
    mask = level_mask(parse_selector("bound_free", "*", ""), LEVELS)
    assert mask.tolist() == (LEVELS.n >= 2).tolist()


def test_letters_reach_as_far_as_names_and_numbers_beyond() -> None:
    levels = hydrogenic_levels(30)
    for l in range(30):
        name = level_name(30, l)
        mask = level_mask(parse_selector("bound_free", name, ""), levels)
        assert np.flatnonzero(mask).tolist() == [levels.index(30, l)]


def test_whole_shells_answer_to_patterns_without_l_only() -> None:
    levels = with_shells(4)
    for pattern, expected in (("6", [6]), ("5-*", [5, 6, 7]), ("6p", []), ("*[l=5]", [])):
        mask = level_mask(parse_selector("bound_free", pattern, ""), levels)
        assert levels.n[mask & levels.shell].tolist() == expected
    upper, lower = np.array([levels.index(6, -1)] * 2), np.array([4, levels.index(5, -1)])
    pick = pair_mask(parse_selector("bound_bound", "6", "*"), levels, upper, lower)
    assert pick.tolist() == [True, True]
    pick = pair_mask(parse_selector("bound_bound", "6", "*p"), levels, upper, lower)
    assert pick.tolist() == [bool(levels.l[4] == 1), False]


@pytest.mark.parametrize(
    ("upper", "lower", "count"),
    # 7 shells: pairs by hand. Each (n, m), n > m >= 2, has 2m - 1 pairs with l < m on the lower
    # side going either way: l_u = l_l + 1 for m of them, l_u = l_l - 1 for m - 1.
    [
        ("3d", "2p", 1),
        ("3", "2", 3),
        ("*", "2", 3 * 5),
        ("*", "*", sum((2 * m - 1) * (7 - m) for m in range(2, 7))),
        ("*s", "*p", 5 + 4 + 3 + 2 + 1),
        ("4-5f", "3d", 2),
    ],
)
def test_pairs(upper: str, lower: str, count: int) -> None:
    assert (
        pair_mask(parse_selector("bound_bound", upper, lower), LEVELS, UPPER, LOWER).sum() == count
    )


def test_lines_by_the_n_of_their_upper_level() -> None:
    n = np.array([2, 3, 4, 5])
    for pattern, expected in (("2p", [2]), ("3-4p", [3, 4]), ("*", n.tolist()), ("4", [4])):
        assert n[line_mask(parse_selector("escape", pattern, ""), n)].tolist() == expected


def test_masks_of_other_processes_are_empty() -> None:
    compton = parse_selector("compton", "", "")
    assert not level_mask(compton, LEVELS).any()
    assert not pair_mask(compton, LEVELS, UPPER, LOWER).any()
    assert not line_mask(compton, np.array([2])).any()


@pytest.mark.parametrize("upper", ["", "2s"])
def test_two_photon(upper: str) -> None:
    assert parse_selector("two_photon", upper, "").exists_in(AtomSize(2, 2, 1))


parts = st.tuples(
    st.sampled_from(["*", "2", "3", "5", "7", "2-4", "3-6", "6-*", "9"]),
    st.sampled_from(["", "s", "p", "d", "f", "h", "[l=6]"]),
).map("".join)


def selector_or_none(process: str, upper: str, lower: str) -> Selector | None:
    try:
        return parse_selector(process, upper, lower)
    except InputError:
        return None


@given(parts, parts, st.sampled_from([2, 4, 7]))
@settings(max_examples=300)
def test_existence_is_what_masks_say(upper: str, lower: str, resolved: int) -> None:
    """Closed form against brute force, with and without whole shells."""
    levels = with_shells(resolved)
    n, l = levels.n, levels.l
    pairs = [
        (i, j)
        for i, j in itertools.permutations(range(1, len(levels)), 2)
        if n[i] > n[j] and (l[i] < 0 or l[j] < 0 or abs(l[i] - l[j]) == 1)
    ]
    sides = (np.array(side) for side in zip(*pairs, strict=True))
    atom = AtomSize(N_MAX, resolved, 1)
    line = selector_or_none("bound_bound", upper, lower)
    if line is not None:
        assert line.exists_in(atom) == bool(pair_mask(line, levels, *sides).any())
    level = selector_or_none("bound_free", upper, "")
    if level is not None:
        assert level.exists_in(atom) == bool(level_mask(level, levels).any())


@given(parts, parts, parts, parts)
@settings(max_examples=300)
def test_overlap_is_what_masks_say(a: str, b: str, c: str, d: str) -> None:
    levels = hydrogenic_levels(12)  # past every bound of `parts`
    n, l = levels.n, levels.l
    i, j = np.nonzero((n[:, None] > n) & (n > 1) & (np.abs(l[:, None] - l) == 1))
    first, second = selector_or_none("bound_bound", a, b), selector_or_none("bound_bound", c, d)
    if first is not None and second is not None:
        both = pair_mask(first, levels, i, j) & pair_mask(second, levels, i, j)
        assert first.overlaps(second) == bool(both.any())
    one, other = selector_or_none("bound_free", a, ""), selector_or_none("bound_free", c, "")
    if one is not None and other is not None:
        both = level_mask(one, levels) & level_mask(other, levels)
        assert one.overlaps(other) == bool(both.any())
        assert first is None or not one.overlaps(first)


@pytest.mark.parametrize("process", ["two_photon", "compton"])
def test_single_rates_overlap_themselves(process: str) -> None:
    one = parse_selector(process, "", "")
    assert one.overlaps(one)
    assert not one.overlaps(parse_selector("escape", "2p", ""))


def test_escape_exists_where_the_line_is_open() -> None:
    line = parse_selector("escape", "3-5p", "")
    assert not line.exists_in(AtomSize(10, 10, 1))
    assert line.exists_in(AtomSize(10, 10, 2))
    assert not line.exists_in(AtomSize(2, 2, 9))


@pytest.mark.parametrize(
    ("upper", "lower", "expected"),
    [
        ("3d", "2p", (3, 2, 2, 1)),
        ("3[l=2]", "2p", (3, 2, 2, 1)),
        ("3", "2p", None),
        ("3-4d", "2p", None),
        ("3d", "*p", None),
    ],
)
def test_one_transition(upper: str, lower: str, expected: tuple[int, ...] | None) -> None:
    assert parse_selector("bound_bound", upper, lower).transition == expected


@pytest.mark.parametrize(
    ("process", "upper", "lower", "complaint"),
    [
        ("collisions", "2s", "", 'process "collisions": allowed are bound_bound, bound_free'),
        ("", "2s", "", "allowed are bound_bound"),
        ("bound_bound", "3d", "1s", "use process escape"),
        ("bound_bound", "3p", "1", "use process escape"),
        ("bound_bound", "3p", "1-4s", "use process escape"),
        ("bound_bound", "3d", "", 'lower = "": is no level pattern'),
        ("bound_bound", "", "2p", 'upper = "": is no level pattern'),
        ("bound_bound", "3d", "2s", "selects nothing in any atom"),
        ("bound_bound", "2p", "3d", "selects nothing in any atom"),
        ("bound_bound", "2p", "2s", "selects nothing in any atom"),
        ("bound_bound", "3", "3-5", "selects nothing in any atom"),
        ("bound_free", "3q", "", "is no level; l = 12 needs n of at least 13"),
        ("bound_free", "3[l=3]", "", "is no level; l = 3 needs n of at least 4"),
        ("bound_free", "1s", "", "n from 2 up"),
        ("bound_free", "1-3", "", "n from 2 up"),
        ("bound_free", "5-3", "", "a range ascends"),
        ("bound_free", "3 d", "", "is no level pattern"),
        ("bound_free", "3D", "", "is no level pattern"),
        ("bound_free", "3-", "", "is no level pattern"),
        ("bound_free", "-3", "", "is no level pattern"),
        ("bound_free", "3" * 60, "", "is no level pattern"),
        ("bound_free", "3d", "2p", "bound_free takes none"),
        ("escape", "3d", "", "start from p levels"),
        ("escape", "2p", "1s", "escape takes none"),
        ("two_photon", "3s", "", "allowed is 2s, or nothing"),
        ("two_photon", "2s", "1s", "two_photon takes none"),
        ("compton", "2s", "", "leave it empty"),
    ],
)
def test_refusals(process: str, upper: str, lower: str, complaint: str) -> None:
    with pytest.raises(InputError, match=re.escape(complaint)) as caught:
        parse_selector(process, upper, lower)
    assert "\n" not in str(caught.value)
    assert len(str(caught.value)) < 250
