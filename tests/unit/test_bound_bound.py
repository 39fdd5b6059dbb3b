"""Hydrogenic lines against published values and exact arithmetic."""

from __future__ import annotations

from fractions import Fraction
from math import comb, factorial
from typing import Any

import mpmath
import numpy as np
import pytest
from scipy import constants as codata

from levelnet.atomic.bound_bound import DipoleBlocks, dipole_blocks, einstein_a
from levelnet.atomic.hydrogenic import bound_start, stirling_tail
from levelnet.errors import InputError
from levelnet.kernels import radial
from levelnet.kernels.compile import kernel
from tests.tolerances import RECURRENCE, ROUND_OFF, published

# The recurrence up to n = 120: the target that the blocks are held to.
SHORT_RECURRENCE = 1e-12
PROTON_RATIO = codata.physical_constants["electron-proton mass ratio"][0]
ALPHA_RATIO = codata.physical_constants["alpha particle-electron mass ratio"][0]


def rate_from_square(
    n: int, l: int, n_lower: int, l_lower: int, square: Any, mass_ratio: float = PROTON_RATIO
) -> float:
    """A in s^-1 from R^2 in a0^2, with the constants of scipy."""
    omega = 0.5 * (1 / n_lower**2 - 1 / n**2)
    time = codata.physical_constants["atomic unit of time"][0]
    scale = 4 / 3 * codata.fine_structure**3 / time / (1 + mass_ratio)
    return float(scale * omega**3 * max(l, l_lower) / (2 * l + 1) * square)


def laguerre(k: int, a: int) -> list[Fraction]:
    """Coefficients of the associated Laguerre polynomial L_k^a."""
    return [Fraction((-1) ** i * comb(k + a, k - i), factorial(i)) for i in range(k + 1)]


def exact_square(n: int, l: int, m: int, k: int) -> Fraction:
    """<n l|r|m k>^2 from the wave functions, by rational arithmetic."""

    def norm(n: int, l: int) -> Fraction:
        return Fraction(2, n) ** 3 * Fraction(factorial(n - l - 1), 2 * n * factorial(n + l))

    decay, total = Fraction(1, n) + Fraction(1, m), Fraction(0)
    for i, a in enumerate(laguerre(n - l - 1, 2 * l + 1)):
        for j, b in enumerate(laguerre(m - k - 1, 2 * k + 1)):
            power = l + k + i + j + 3
            term = a * b * Fraction(2, n) ** (l + i) * Fraction(2, m) ** (k + j)
            total += term * factorial(power) / decay ** (power + 1)
    return norm(n, l) * norm(m, k) * total**2


def gordon(n: int, m: int, l: int) -> Any:
    """<n l|r|m l-1> for any n != m: Gordon 1929, Ann. Phys. 394, 1031, in mpmath."""
    x = -mpmath.mpf(4 * n * m) / (n - m) ** 2

    def polynomial(a: int) -> Any:
        term = total = mpmath.mpf(1)
        for i in range(min(-a, m - l)):
            term *= mpmath.mpf((a + i) * (l - m + i)) / ((2 * l + i) * (i + 1)) * x
            total += term
        return total

    root = mpmath.sqrt(
        mpmath.mpf(factorial(n + l) * factorial(m + l - 1))
        / (factorial(n - l - 1) * factorial(m - l))
    )
    power = mpmath.mpf(4 * n * m) ** (l + 1) * mpmath.mpf(n - m) ** (n + m - 2 * l - 2)
    power /= mpmath.mpf(n + m) ** (n + m)
    last = (mpmath.mpf(n - m) / (n + m)) ** 2 * polynomial(l - n - 1)
    return root * power * (polynomial(l - n + 1) - last) / (4 * factorial(2 * l - 1))


def test_published_rates() -> None:
    # Wiese & Fuhr 2009, J. Phys. Chem. Ref. Data 38, 565 (digits from memory), s^-1.
    table = {
        (2, 1, 1, 0): 6.2649e8,
        (3, 1, 1, 0): 1.6725e8,
        (3, 1, 2, 0): 2.2448e7,
        (3, 2, 2, 1): 6.4651e7,
        (4, 1, 1, 0): 6.8186e7,
    }
    for line, expected in table.items():
        assert einstein_a(*line) == pytest.approx(expected, rel=published(5)), line


def test_shell_averages_are_those_of_the_trade() -> None:
    # H-alpha 4.410e7, H-beta 8.419e6, 4-3 8.986e6, Lyman-gamma 1.278e7 s^-1 (NIST values as quoted
    # in textbooks; from memory).
    for (n, m), expected in {
        (3, 2): 4.410e7,
        (4, 2): 8.419e6,
        (4, 3): 8.986e6,
        (4, 1): 1.278e7,
    }.items():
        total = sum(
            (2 * l + 1) * einstein_a(n, l, m, k)
            for l in range(n)
            for k in (l - 1, l + 1)
            if 0 <= k < m
        )
        assert total / n**2 == pytest.approx(expected, rel=published(4))


def test_every_line_up_to_n_8_against_rational_arithmetic() -> None:
    for n in range(2, 9):
        for m in range(1, n):
            for l in range(n):
                for k in (l - 1, l + 1):
                    if 0 <= k < m:
                        expected = rate_from_square(n, l, m, k, float(exact_square(n, l, m, k)))
                        # The constants of scipy are those of CODATA 2022, as ours.
                        assert einstein_a(n, l, m, k) == pytest.approx(expected, rel=3 * ROUND_OFF)


@pytest.mark.parametrize(
    ("n", "m", "l", "digits", "tolerance"),
    [
        (30, 29, 15, 60, SHORT_RECURRENCE),
        (120, 119, 1, 150, SHORT_RECURRENCE),
        (120, 119, 60, 150, SHORT_RECURRENCE),
        (120, 7, 3, 150, SHORT_RECURRENCE),
        (120, 60, 60, 150, SHORT_RECURRENCE),
        (1000, 999, 1, 800, RECURRENCE),
        (1000, 999, 500, 800, RECURRENCE),
        (1000, 500, 200, 800, RECURRENCE),
        (1000, 500, 500, 800, RECURRENCE),
        (1000, 2, 1, 800, RECURRENCE),
        (1000, 1, 1, 800, RECURRENCE),
    ],
)
def test_high_levels_against_gordon(n: int, m: int, l: int, digits: int, tolerance: float) -> None:
    with mpmath.workdps(digits):
        expected = rate_from_square(n, l, m, l - 1, float(gordon(n, m, l) ** 2))
        assert einstein_a(n, l, m, l - 1) == pytest.approx(expected, rel=tolerance)
        if l < m:
            # <m l|r|n l-1> is the other kind of line, from l-1 down in n and up in l.
            expected = rate_from_square(n, l - 1, m, l, float(gordon(m, n, l) ** 2))
            assert einstein_a(n, l - 1, m, l) == pytest.approx(expected, rel=tolerance)


def test_gordon_formula_of_this_file_against_the_wave_functions() -> None:
    with mpmath.workdps(40):
        for n, m, l in ((5, 3, 2), (7, 4, 1), (4, 7, 3)):
            exact = exact_square(n, l, m, l - 1)
            assert gordon(n, m, l) ** 2 / exact.numerator * exact.denominator == pytest.approx(1.0)


def test_stirling_tail_against_mpmath() -> None:
    tail = stirling_tail(400)
    with mpmath.workdps(30):
        for n in (1, 2, 11, 12, 13, 40, 400):
            exact = mpmath.loggamma(n + 1) - (n + 0.5) * mpmath.log(n) + n
            exact -= mpmath.log(2 * mpmath.pi) / 2
            assert abs(tail[n] - float(exact)) < 5e-15


@pytest.mark.parametrize("n_max", [2, 3, 8, 9, 21])
def test_blocks_hold_every_line_once(n_max: int) -> None:
    blocks = dipole_blocks(n_max)
    for l in range(n_max - 1):
        block = blocks.block(l)
        assert block.shape == (n_max - l, n_max - l - 1)
        for row, n in enumerate(range(l + 1, n_max + 1)):
            for column, m in enumerate(range(l + 2, n_max + 1)):
                expected = 0.0
                if n < m:
                    expected = einstein_a(m, l + 1, n, l) * np.sqrt((2 * l + 3) / (2 * l + 1))
                elif n > m:
                    expected = einstein_a(n, l, m, l + 1) * np.sqrt((2 * l + 1) / (2 * l + 3))
                assert block[row, column] == pytest.approx(expected, rel=SHORT_RECURRENCE)


def test_blocks_in_a_used_buffer_leave_nothing_of_its_contents() -> None:
    buffer = np.full(20_000, np.nan)
    reused, fresh = dipole_blocks(20, out=buffer), dipole_blocks(20)
    assert np.array_equal(reused.strength_per_s, fresh.strength_per_s)
    assert np.shares_memory(reused.strength_per_s, buffer)
    assert not reused.strength_per_s.flags.writeable
    assert buffer.flags.writeable


def test_scaling_with_charge() -> None:
    # Z^4 and the reduced mass (Bethe & Salpeter 1957; from memory).
    expected = 16 * (1 + PROTON_RATIO) / (1 + 1 / ALPHA_RATIO)
    assert einstein_a(5, 2, 3, 1, charge=2) / einstein_a(5, 2, 3, 1) == pytest.approx(
        expected, rel=ROUND_OFF
    )
    ratio = dipole_blocks(5, charge=2).block(1)[0, 1] / dipole_blocks(5).block(1)[0, 1]
    assert ratio == pytest.approx(expected, rel=ROUND_OFF)


def test_broadcasting_and_scalars() -> None:
    rates = einstein_a(np.array([[3], [4]]), 1, np.array([1, 2]), 0)
    assert rates.shape == (2, 2)
    assert rates[1, 0] == einstein_a(4, 1, 1, 0)
    assert isinstance(einstein_a(2, 1, 1, 0), float)
    assert einstein_a(np.array([], int), 1, 1, 0).shape == (0,)


@pytest.mark.parametrize(
    ("line", "said"),
    [
        ((1, 0, 1, 0), "n > n_lower"),
        ((2, 1, 3, 0), "n > n_lower"),
        ((3, 2, 1, 0), "l - 1 or l"),
        ((3, 3, 2, 1), "0 <= l < n"),
        ((3, -1, 2, 0), "0 <= l < n"),
        ((2, 1, 0, 0), "1 <= n"),
        ((1001, 1, 1, 0), "1000"),
        ((2.5, 1, 1, 0), "whole numbers"),
        (([3, 4], 1, [1, 9], 0), r"\(4, 1\) -> \(9, 0\)"),
    ],
)
def test_lines_that_do_not_exist(line: tuple[Any, ...], said: str) -> None:
    with pytest.raises(InputError, match=said):
        einstein_a(*line)


def test_bad_block_requests() -> None:
    with pytest.raises(InputError, match="n_max = 1: allowed are 2 to 1000"):
        dipole_blocks(1)
    with pytest.raises(InputError, match="out: 3 elements, n_max = 4 needs"):
        dipole_blocks(4, out=np.empty(3))
    with pytest.raises(InputError, match="block l = 4"):
        dipole_blocks(5).block(4)
    with pytest.raises(InputError, match="charge = 31"):
        einstein_a(2, 1, 1, 0, charge=31)


def plain(function: Any) -> Any:
    return function.py_func


def test_kernels_against_their_own_source() -> None:
    compiled = dipole_blocks(10)
    n_max, starts = 10, np.zeros((11, 11))
    lower, upper = np.triu_indices(10, 1)
    starts[lower + 1, upper + 1] = bound_start(upper + 1, lower + 1)
    offsets: Any = compiled.offset
    one, other = np.empty(offsets[-1]), np.empty(offsets[-1])
    radial.dipole_blocks(n_max, starts, offsets, one)
    plain(radial.dipole_blocks)(n_max, starts, offsets, other)
    # Compiled code may join a product and a sum in one rounding.
    np.testing.assert_allclose(one, other, rtol=ROUND_OFF)
    lines = [np.array(column) for column in ([9, 9, 4], [2, 4, 0], [7, 8, 3], [3, 3, 1])]
    one = bound_start(lines[0], lines[2])
    other = one.copy()
    radial.line_integrals(*lines, one)
    plain(radial.line_integrals)(*lines, other)
    np.testing.assert_allclose(one, other, rtol=ROUND_OFF)


def test_no_place_for_a_cache_is_no_error() -> None:
    # numba finds no cache folder for code that has no file, as for a folder it may not write.
    scope: dict[str, Any] = {}
    exec("def double(x):\n    return 2.0 * x\n", scope)
    assert kernel(scope["double"])(4.0) == 8.0


def test_the_record_is_what_was_asked_for() -> None:
    blocks = dipole_blocks(6, charge=2)
    assert isinstance(blocks, DipoleBlocks)
    assert (blocks.n_max, blocks.charge) == (6, 2)
    assert len(blocks.strength_per_s) == blocks.offset[-1] == sum(k * (k - 1) for k in range(2, 7))
