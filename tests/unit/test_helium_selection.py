"""Selectors of He I and He II: what each pattern picks, by brute force over all terms."""

from __future__ import annotations

import numpy as np
import pytest

from levelnet.atomic.helium_levels import helium_levels
from levelnet.atomic.helium_lines import helium_lines
from levelnet.atomic.helium_selection import ground_line_mask, term_mask, term_pair_mask
from levelnet.atomic.helium_transitions import helium_transitions
from levelnet.atomic.selection import ANY_ATOM, AtomSize, parse_selector
from levelnet.atomic.term_patterns import HeliumSize

LEVELS = helium_levels(4)
FOUND = helium_transitions(helium_lines(LEVELS))
LINES = ("2 3S-1 1S", "2 3P2-1 1S", "2 3P1-1 1S", "2 1P-1 1S", "3 1P-1 1S")


def names(mask: np.ndarray) -> set[str]:
    return {LEVELS.name(k) for k in np.flatnonzero(mask).tolist()}


@pytest.mark.parametrize(
    ("pattern", "expected"),
    [
        ("2 3P", {"2 3P"}),
        ("2", {"2 1S", "2 1P", "2 3S", "2 3P"}),
        ("2-3 1S", {"2 1S", "3 1S"}),
        ("3-* 3D", {"3 3D", "4 3D"}),
        ("4 3[l=3]", {"4 3F"}),
        ("2 3", {"2 3S", "2 3P"}),
    ],
)
def test_terms(pattern: str, expected: set[str]) -> None:
    chosen = parse_selector("bound_free", f"He I {pattern}", "")
    assert names(term_mask(chosen, LEVELS)) == expected
    assert chosen.species == "He I"
    assert chosen.exists_in(AtomSize(2, 2, 1, HeliumSize(4)))
    assert not chosen.exists_in(AtomSize(4, 4, 1))


@pytest.mark.parametrize(
    ("upper", "lower", "expected"),
    [
        ("2 1P", "2 1S", {("2 1P", "2 1S")}),
        ("2 1S", "2 1P", set()),  # the upper term is that of the higher energy
        ("3 3D", "2 3P", {("3 3D", "2 3P")}),
        ("3 1", "3 1", {("3 1P", "3 1S"), ("3 1P", "3 1D")}),
        ("3 3", "2 1", set()),
    ],
)
def test_pairs(upper: str, lower: str, expected: set[tuple[str, str]]) -> None:
    if expected or upper == "2 1S":
        chosen = parse_selector("bound_bound", f"He I {upper}", f"He I {lower}")
        mask = term_pair_mask(chosen, LEVELS, FOUND.upper, FOUND.lower)
        ends = zip(FOUND.upper[mask].tolist(), FOUND.lower[mask].tolist(), strict=True)
        assert {(LEVELS.name(a), LEVELS.name(b)) for a, b in ends} == expected
        assert parse_selector("bound_bound", f"He I {upper}", lower).upper == chosen.upper
    else:
        with pytest.raises(ValueError, match="selects nothing in any atom"):
            parse_selector("bound_bound", f"He I {upper}", lower)


@pytest.mark.parametrize(
    ("pattern", "expected"),
    [
        ("2 3P1", {"2 3P1-1 1S"}),
        ("2 3P", {"2 3P1-1 1S", "2 3P2-1 1S"}),
        ("* 1P", {"2 1P-1 1S", "3 1P-1 1S"}),
        ("2", set(LINES) - {"3 1P-1 1S"}),
    ],
)
@pytest.mark.parametrize("process", ["escape", "bound_bound"])
def test_lines_to_the_ground_state(pattern: str, expected: set[str], process: str) -> None:
    lower = "1 1S" if process == "bound_bound" else ""
    chosen = parse_selector(process, f"He I {pattern}", lower)
    mask = ground_line_mask(chosen, LINES)
    assert {name for name, one in zip(LINES, mask, strict=True) if one} == expected
    assert chosen.to_ground == (process == "bound_bound")
    assert not term_pair_mask(chosen, LEVELS, FOUND.upper, FOUND.lower).any()


def test_what_helium_has() -> None:
    closed = AtomSize(5, 5, 1, HeliumSize(5))
    free = AtomSize(5, 5, 1, HeliumSize(5, 5, intercombination=False, absorption=True, ion=True))
    third = parse_selector("escape", "He I 3 1P", "")
    assert not third.exists_in(closed)
    assert third.exists_in(free)
    weak = parse_selector("bound_bound", "He I 2 3P1", "1 1S")
    assert weak.exists_in(closed)
    assert not weak.exists_in(free)
    for process, upper in (("absorption", ""), ("escape", "He II 2p"), ("two_photon", "He II")):
        chosen = parse_selector(process, upper, "")
        assert not chosen.exists_in(closed)
        assert chosen.exists_in(free)
        assert chosen.exists_in(ANY_ATOM)


def test_overlaps_know_the_species() -> None:
    def chosen(process: str, upper: str, lower: str = ""):
        return parse_selector(process, upper, lower)

    assert not chosen("two_photon", "He I 2 1S").overlaps(chosen("two_photon", "2s"))
    assert not chosen("bound_free", "He II 3d").overlaps(chosen("bound_free", "3d"))
    assert chosen("bound_free", "He II 3").overlaps(chosen("bound_free", "He II 3d"))
    assert chosen("bound_free", "He I 3 1D").overlaps(chosen("bound_free", "He I 2-5"))
    assert not chosen("bound_free", "He I 3 1D").overlaps(chosen("bound_free", "He I 3 3"))
    one = chosen("bound_bound", "He I 2 3P1", "1 1S")
    assert not one.overlaps(chosen("bound_bound", "He I 2 3P2", "1 1S"))
    assert one.overlaps(chosen("bound_bound", "He I 2 3P", "1 1S"))
    assert not one.overlaps(chosen("bound_bound", "He I 3 3S", "2 3P"))
