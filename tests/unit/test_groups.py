"""Sums of a weighing: each against a plain loop over the arrays, and against the whole."""

from __future__ import annotations

import numpy as np
import pytest

from levelnet.errors import InputError
from levelnet.studies.groups import (
    by_l,
    by_level,
    by_shell,
    level_map,
    shell_map,
    top_transitions,
    transition_name,
)
from tests.invented_weighing import invented_weighing

TARGET = "z_*"
WHOLE = pytest.mark.parametrize("whole_from", [100, 4])


@WHOLE
def test_groups_add_up_to_the_processes(whole_from: int) -> None:
    weighing = invented_weighing(n_max=6, whole_from=whole_from)
    totals = weighing.processes(TARGET)
    for group in (by_level, by_shell, by_l):
        shares = group(weighing, TARGET)
        assert shares.as_upper.sum() == pytest.approx(totals["bound_bound"], rel=1e-12)
        assert shares.as_lower.sum() == pytest.approx(totals["bound_bound"], rel=1e-12)
        assert shares.bound_free.sum() == pytest.approx(totals["bound_free"], rel=1e-12)


@WHOLE
def test_groups_are_plain_sums(whole_from: int) -> None:
    # Independent: a loop over transitions and levels.
    weighing = invented_weighing(n_max=6, whole_from=whole_from)
    at, levels = weighing.index(TARGET), weighing.levels
    for shares, key in ((by_shell(weighing, TARGET), levels.n), (by_l(weighing, TARGET), levels.l)):
        for k, wanted in enumerate(shares.key):
            weights = weighing.bound_bound[at]
            ends = [
                sum(w for w, end in zip(weights, side, strict=True) if key[end] == wanted)
                for side in (weighing.upper, weighing.lower)
            ]
            assert [shares.as_upper[k], shares.as_lower[k]] == pytest.approx(ends, abs=1e-14)
            free = weighing.bound_free[at][key == wanted].sum()
            assert shares.bound_free[k] == pytest.approx(free, abs=1e-14)


def test_whole_shells_have_names_of_their_own() -> None:
    weighing = invented_weighing(n_max=5, whole_from=4)
    assert by_shell(weighing, TARGET).names == ("n=1", "n=2", "n=3", "n=4", "n=5")
    assert by_l(weighing, TARGET).names == ("whole shells", "l=0", "l=1", "l=2")
    assert by_level(weighing, TARGET).names == ("1s", "2s", "2p", "3s", "3p", "3d", "n=4", "n=5")
    named = {transition_name(weighing, k) for k in range(len(weighing.upper))}
    assert {"3d-2p", "n=4-3d", "n=5-n=4"} <= named


def test_ranking_is_by_size_of_either_sign() -> None:
    weighing = invented_weighing(n_max=7)
    top = top_transitions(weighing, TARGET, 12)
    sizes = [abs(one.weight) for one in top]
    assert sizes == sorted(sizes, reverse=True)
    assert sizes[0] == np.abs(weighing.bound_bound[1]).max()
    assert {one.weight > 0.0 for one in top} == {True, False}
    assert len(top_transitions(weighing, TARGET, 10**6)) == len(weighing.upper)
    shares = by_shell(weighing, TARGET)
    first = shares.ranked()[0]
    everything = np.abs([shares.as_upper, shares.as_lower, shares.bound_free])
    assert everything.max(axis=0).argmax() == first


def test_nothing_of_no_weight_is_on_top() -> None:
    assert top_transitions(invented_weighing(scale=0.0), TARGET, 5) == ()


@WHOLE
def test_map_holds_every_excited_level_once(whole_from: int) -> None:
    weighing = invented_weighing(n_max=6, whole_from=whole_from)
    drawn, shares, levels = level_map(weighing, TARGET), by_level(weighing, TARGET), weighing.levels
    assert list(drawn.n) == [2, 3, 4, 5, 6]
    assert list(drawn.l) == ([0, 1, 2, -1] if whole_from == 4 else [0, 1, 2, 3, 4, 5])
    assert np.isfinite(drawn.out).sum() == len(levels) - 1
    for k in range(1, len(levels)):
        place = list(drawn.n).index(levels.n[k]), list(drawn.l).index(levels.l[k])
        assert drawn.bound_free[place] == shares.bound_free[k]
        assert drawn.out[place] == shares.as_upper[k]


@WHOLE
def test_map_of_shells_is_the_sum_over_l(whole_from: int) -> None:
    weighing = invented_weighing(n_max=6, whole_from=whole_from)
    n, weights = shell_map(weighing, TARGET)
    at, levels = weighing.index(TARGET), weighing.levels
    for i, upper in enumerate(n):
        for j, lower in enumerate(n):
            both = (levels.n[weighing.upper] == upper) & (levels.n[weighing.lower] == lower)
            if both.any():
                expected = weighing.bound_bound[at][both].sum()
                assert weights[i, j] == pytest.approx(expected, abs=1e-14)
            else:
                assert np.isnan(weights[i, j])


def test_smallest_atom_has_no_transition() -> None:
    weighing = invented_weighing(n_max=2)
    assert top_transitions(weighing, TARGET, 3) == ()
    n, weights = shell_map(weighing, TARGET)
    assert list(n) == [2]
    assert np.isnan(weights).all()
    assert level_map(weighing, TARGET).out.tolist() == [[0.0, 0.0]]


def test_unknown_target_is_one_line() -> None:
    for what in (by_level, by_shell, by_l, level_map, shell_map):
        with pytest.raises(InputError, match=r'target "r_s": weighed were x_e\(900\), z_\*'):
            what(invented_weighing(), "r_s")
