"""Whole shells: averages over l of rates and cross sections, and their place in the ladder."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy import constants as codata

from levelnet.atomic.bound_bound import DipoleBlocks, dipole_blocks, einstein_a
from levelnet.atomic.bound_free import BoundFree, bound_free, photoionization_cross_section
from levelnet.atomic.levels import LevelSet, hydrogenic_levels, level_name
from levelnet.atomic.shells import Shells, whole_shells
from levelnet.errors import InputError
from levelnet.kernels import assembly as kernels
from levelnet.network.assembly import rate_matrix
from levelnet.network.ladder import Ladder, hydrogen_ladder, line_groups, lines_of
from levelnet.network.line_rates import half_angle_tables, log_line_rates, shell_means, shell_rates
from tests.tolerances import RECURRENCE, ROUND_OFF, published

TWO = ((2, 0), (2, 1))
KELVIN_PER_EV = codata.e / codata.k


def averaged(n_max: int, top: int) -> Shells:
    return whole_shells(dipole_blocks(n_max), bound_free(n_max), top)[2]


def mean_einstein_a(n: int, lower: int) -> float:
    """A averaged over the upper and summed over the lower shell, from single lines."""
    lines = [(l, k) for l in range(n) for k in (l - 1, l + 1) if 0 <= k < lower]
    return sum((2 * l + 1) * float(einstein_a(n, l, lower, k)) for l, k in lines) / n**2


def test_published_shell_averages() -> None:
    # H-alpha, H-beta, 4-3, Lyman-gamma: NIST values as quoted in textbooks (from memory).
    # Lyman-alpha: 3/4 of A(2p-1s) = 6.2649e8 s^-1 (Wiese & Fuhr 2009, J. Phys. Chem. Ref. Data 38,
    # 565). A = S sqrt(g_lower / g_upper), g = 2 n^2.
    whole = averaged(6, 1)
    expected = {(3, 2): 4.410e7, (4, 2): 8.419e6, (4, 3): 8.986e6}
    for (n, lower), value in expected.items():
        found = whole.among[n - 2, lower - 2] * lower / n
        assert found == pytest.approx(value, rel=published(4)), (n, lower)
    for n, value, digits in ((2, 0.75 * 6.2649e8, 5), (4, 1.278e7, 4)):
        assert whole.to_levels[n - 2, 0] / n == pytest.approx(value, rel=published(digits))


@pytest.mark.parametrize(("n_max", "top"), [(6, 1), (7, 2), (9, 5), (9, 8)])
def test_strengths_against_sums_over_single_lines(n_max: int, top: int) -> None:
    whole, levels = averaged(n_max, top), hydrogenic_levels(top)
    assert whole.n.tolist() == list(range(top + 1, n_max + 1))
    for k, n in enumerate(whole.n.tolist()):
        for j, lower in enumerate(whole.n[:k].tolist()):
            a = mean_einstein_a(n, lower)
            assert whole.among[k, j] == whole.among[j, k]
            assert whole.among[k, j] * lower / n == pytest.approx(a, rel=RECURRENCE)
        for position, (m, l) in enumerate(zip(levels.n.tolist(), levels.l.tolist(), strict=True)):
            upper = [u for u in (l - 1, l + 1) if 0 <= u < n]
            a = sum((2 * u + 1) * float(einstein_a(n, u, m, l)) for u in upper) / n**2
            root = n / np.sqrt(2 * l + 1)
            assert whole.to_levels[k, position] == pytest.approx(a * root, rel=RECURRENCE)
    assert np.all(np.diagonal(whole.among) == 0.0)


@pytest.mark.parametrize("n", [30, 100, 400])
def test_cross_sections_of_large_shells(n: int) -> None:
    # Menzel & Pekeris 1935, MNRAS 96, 77 (from memory), over the Kramers value
    # 64 pi alpha a0^2 n / (3 sqrt 3) (1 + u)^-3, with u = n^2 k^2; the terms neglected are of order
    # 1/n^2, and the coefficients have four digits.
    grid = bound_free(1).grid
    rows = tuple(np.zeros((k, len(grid.energy))) for k in range(1, n))
    own = photoionization_cross_section(n, np.arange(n)[:, None], grid.energy[None, :])
    atom = BoundFree(n, 1, grid, (*rows, np.asarray(own)))
    # Cross sections do not ask for lines: blocks of zeros that take no memory.
    sizes = [(n - l) * (n - l - 1) for l in range(n - 1)]
    offset = np.concatenate([[0], np.cumsum(sizes)])
    no_lines = DipoleBlocks(n, 1, np.broadcast_to(0.0, offset[-1]), offset)
    sigma = whole_shells(no_lines, atom, 2)[1].cross_section_cm2[-1][0]
    u = n**2 * grid.energy
    bohr_cm = 100.0 * codata.physical_constants["Bohr radius"][0] * (1.0 + codata.m_e / codata.m_p)
    kramers = 64 * np.pi * codata.fine_structure * bohr_cm**2 * n / (3 * np.sqrt(3))
    near = u < 3.0
    assert near.sum() > 10
    size = (n * (1 + u)) ** (-2 / 3)
    series = 1 + 0.1728 * (u - 1) * size - 0.0496 * (u * u + 4 * u / 3 + 1) * size**2
    neglected = 0.1 * size**3 * (1 + u) ** 3 + 5e-5 * size * (1 + u)
    found = sigma / kramers * (1 + u) ** 3
    assert np.all(np.abs(found - series)[near] < neglected[near])


def test_levels_of_shells() -> None:
    levels = hydrogenic_levels(9, "measured", resolve_l_to=4)
    full = hydrogenic_levels(9, "measured")
    assert isinstance(levels, LevelSet) and len(levels) == 10 + 5
    assert levels.n[levels.shell].tolist() == [5, 6, 7, 8, 9] == levels.n[10:].tolist()
    assert np.all(levels.l[10:] == -1)
    np.testing.assert_array_equal(levels.statistical_weight[10:], 2.0 * levels.n[10:] ** 2.0)
    for name in ("energy_ev", "ionization_energy_ev"):
        assert np.array_equal(getattr(levels, name)[:10], getattr(full, name)[:10])
        for n in range(5, 10):
            of_shell = full.n == n
            mean = np.average(
                getattr(full, name)[of_shell], weights=full.statistical_weight[of_shell]
            )
            assert getattr(levels, name)[levels.index(n, -1)] == pytest.approx(mean, rel=ROUND_OFF)
    assert level_name(60, -1) == "n=60"


@pytest.mark.parametrize("kept", [TWO, ((2, 0), (2, 1), (4, 1), (5, 3))], ids=str)
def test_every_level_has_one_place(kept: Any) -> None:
    ladder = hydrogen_ladder(9, "measured", kept, 5)
    inside, levels = ladder.interior, ladder.levels
    assert inside.n_unknowns == inside.shape.n_unknowns + 4
    assert np.array_equal(levels.n[inside.position], inside.n)
    assert np.array_equal(levels.l[inside.position], inside.l)
    live = set(inside.position[~inside.idle].tolist())
    assert live | set(ladder.kept_position.tolist()) | {0} == set(range(len(levels)))
    assert levels.n[ladder.shell_position].tolist() == [6, 7, 8, 9] == ladder.shells.n.tolist()
    places = [levels.n[place].tolist() for _, place in ladder.by_n()]
    assert places == [[n] * (n if n <= 5 else 1) for n in range(2, 10)]


def test_lines_of_levels_and_groups_hold_the_same() -> None:
    ladder = hydrogen_ladder(8, "measured", TWO, 4)
    seen = {}
    for one, other, strength in line_groups(ladder):
        for pair in zip(one.tolist(), other.tolist(), strength.tolist(), strict=True):
            assert frozenset(pair[:2]) not in seen
            seen[frozenset(pair[:2])] = pair[2]
    levels = ladder.levels
    for n in range(2, 5):
        for l in range(n):
            own = levels.index(n, l)
            position, strength = lines_of(ladder, n, l)
            assert {levels.index(k, -1) for k in range(5, 9)} <= set(position.tolist())
            for partner, value in zip(position.tolist(), strength.tolist(), strict=True):
                assert seen[frozenset((own, partner))] == value
    # Every pair of shells, every shell with every excited level, and the resolved dipole lines.
    resolved = sum(1 for p in seen if max(p) < 10)
    assert len(seen) == resolved + 4 * 9 + 6


def test_where_every_level_is_resolved_nothing_is_averaged() -> None:
    one, other = hydrogen_ladder(6, "measured", TWO), hydrogen_ladder(6, "measured", TWO, 6)
    assert one.dipole is other.dipole and one.bound_free is other.bound_free
    assert len(other.shells) == 0 and one.resolve_l_to == 6
    for name in ("position", "first_n", "idle"):
        assert np.array_equal(getattr(one.interior, name), getattr(other.interior, name))


def test_resolved_part_has_the_bits_of_a_smaller_atom() -> None:
    # The recurrences run pair by pair, so a line does not know how large the atom is.
    ladder, small = hydrogen_ladder(12, "measured", TWO, 7), hydrogen_ladder(7, "measured", TWO)
    assert np.array_equal(ladder.dipole.strength_per_s, small.dipole.strength_per_s)
    assert np.array_equal(ladder.dipole.offset, small.dipole.offset)
    assert ladder.dipole.n_max == 7 and not ladder.dipole.strength_per_s.flags.writeable


@pytest.mark.parametrize("energies", ["measured", "nonrelativistic"])
@pytest.mark.parametrize("kelvin", [100.0, 3000.0])
def test_means_against_the_rates_of_single_lines(energies: str, kelvin: float) -> None:
    # Independent: ln of both directions, added; the kernel's own source too.
    ladder = hydrogen_ladder(9, energies, ((2, 0), (2, 1), (4, 1), (5, 3)), 5)
    kt = kelvin / KELVIN_PER_EV
    tables = half_angle_tables(ladder, kt)
    to_blocks, among = shell_means(ladder, *tables, kt)
    inside, place = ladder.interior, ladder.shell_position
    blocks = slice(inside.shape.n_unknowns)
    assert inside.idle[blocks].any() and np.all(to_blocks[:, inside.idle[blocks]] == 0.0)
    rates = shell_rates(ladder, kelvin)
    for k, shell in enumerate(place.tolist()):
        for i in np.flatnonzero(~inside.idle[blocks]).tolist():
            low = inside.position[i]
            strength = ladder.shells.to_levels[k, low : low + 1]
            up, down = log_line_rates(ladder, np.array([low]), np.array([shell]), strength, kelvin)
            assert rates.into[k, i] == np.exp(up[0]) and rates.out[k, i] == np.exp(down[0])
            mean = np.exp(0.5 * (up[0] + down[0]))
            assert to_blocks[k, i] == pytest.approx(mean, rel=100 * ROUND_OFF)
    geometric = np.sqrt(rates.among * rates.among.T)
    np.testing.assert_allclose(among, geometric, rtol=100 * ROUND_OFF)


def test_kernel_against_its_own_source() -> None:
    rng = np.random.default_rng(8)
    n = np.array([2, 3, 4])
    arguments = (np.array([5, 6]), rng.normal(size=2) * 1e-3, n, np.array([1, 4, 7]),
                 rng.normal(size=3) * 1e-3, np.array([1.0, 0.0, 1.0]), rng.random((2, 9)),
                 rng.random((7, 7)), rng.random((7, 7)))  # fmt: skip
    compiled, plain = np.empty((2, 3)), np.empty((2, 3))
    kernel: Any = kernels.shell_means
    kernel(*arguments, compiled)
    kernel.py_func(*arguments, plain)
    np.testing.assert_allclose(compiled, plain, rtol=10 * ROUND_OFF)


@pytest.mark.parametrize("top", [1, 0, -3, 9])
def test_shells_that_cannot_be(top: int) -> None:
    with pytest.raises(InputError, match=rf"resolve_l_to = {top}: allowed are 2 to n_max = 8"):
        hydrogen_ladder(8, "measured", TWO, top)


@pytest.mark.parametrize("level", [(6, 1), (5, -1), (1, 0)])
def test_kept_levels_are_resolved(level: tuple[int, int]) -> None:
    with pytest.raises(InputError, match=r"kept levels .*2 <= n <= 4, 0 <= l < n"):
        hydrogen_ladder(8, "measured", (*TWO, level), 4)


def test_matrix_covers_every_excited_level() -> None:
    ladder: Ladder = hydrogen_ladder(7, "measured", TWO, 3)
    matrix = rate_matrix(ladder, 3000.0)
    assert matrix.shape == (len(ladder.levels) - 1, len(ladder.levels) - 1) == (9, 9)
