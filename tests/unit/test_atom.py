"""From a setup to an atom: which levels are kept, which lines are open."""

from __future__ import annotations

import numpy as np
import pytest

from levelnet.atomic.bound_bound import einstein_a
from levelnet.history.atom import build_ladder, lyman_lines, open_lyman_lines
from tests.small_runs import small_setup
from tests.tolerances import ROUND_OFF, published


@pytest.mark.parametrize(
    ("n_max", "asked", "count"), [(8, 1, 1), (8, 3, 3), (8, 7, 7), (8, "all", 7), (2, "all", 1)]
)
def test_kept_levels_are_2s_and_every_open_np(n_max: int, asked: int | str, count: int) -> None:
    setup = small_setup(n_max, lines={"lyman_lines": asked})
    assert open_lyman_lines(setup) == count
    kept = build_ladder(setup).kept
    assert list(zip(kept.n, kept.l, strict=True)) == [
        (2, 0),
        *((n, 1) for n in range(2, count + 2)),
    ]


def test_a_smaller_atom_keeps_what_it_has() -> None:
    setup = small_setup(8, lines={"lyman_lines": "all"})
    ladder = build_ladder(setup, 3)
    assert ladder.n_max == 3
    assert ladder.kept.n.tolist() == [2, 2, 3]
    assert build_ladder(small_setup(8), 6).kept.n.tolist() == [2, 2]


def test_energies_are_those_asked_for() -> None:
    measured = build_ladder(small_setup(3))
    plain = build_ladder(small_setup(3, hydrogen={"energies": "nonrelativistic"}))
    # 13.598434 and 13.59829 eV (NIST Atomic Spectra Database; chi = h c R_inf mu/m_e; from memory).
    for ladder, expected in ((measured, 13.598434), (plain, 13.598287)):
        assert ladder.levels.ionization_energy_ev[0] == pytest.approx(expected, rel=published(8))


def test_lines_of_the_kept_levels() -> None:
    lines = lyman_lines(build_ladder(small_setup(5, lines={"lyman_lines": "all"})))
    assert lines.names == ("2p-1s", "3p-1s", "4p-1s", "5p-1s")
    assert lines.upper.tolist() == [1, 2, 3, 4]
    assert lines.weight_ratio.tolist() == [3.0] * 4
    for k, n in enumerate((2, 3, 4, 5)):
        assert lines.einstein_a_per_s[k] == einstein_a(n, 1, 1, 0)
        partners = [(m, 0) for m in range(1, n)] + [(m, 2) for m in range(3, n)]
        total = sum(einstein_a(n, 1, *lower) for lower in partners)
        assert lines.decay_rate_per_s[k] == pytest.approx(total, rel=ROUND_OFF)
    # A of 2p and of 3p (3p-1s and 3p-2s): Wiese & Fuhr 2009, J. Phys. Chem. Ref. Data 38, 565.
    expected = [6.2649e8, 1.6725e8 + 2.2448e7]
    np.testing.assert_allclose(lines.decay_rate_per_s[:2], expected, rtol=published(5))
    # 10.1988, 12.0875 eV (NIST; from memory).
    np.testing.assert_allclose(lines.energy_ev[:2], [10.1988, 12.0875], rtol=published(5))
