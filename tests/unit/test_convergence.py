"""Laws of convergence against sequences whose limit is known in closed form or by another way."""

from __future__ import annotations

from collections.abc import Callable

import mpmath
import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.special import exp1

from levelnet.arrays import FloatArray
from levelnet.errors import InputError
from levelnet.studies.convergence import (
    Carried,
    carry,
    smallest_n_max,
    truncation_error,
)

LADDER = np.array([20, 30, 45, 70, 100, 140, 200])
QUIET = np.array([1e-15])


def column(values: FloatArray) -> FloatArray:
    return np.asarray(values, dtype=float)[:, None]


def carried(sequence: Callable[[FloatArray], FloatArray], ladder: FloatArray = LADDER) -> Carried:
    return carry(ladder, column(sequence(ladder + 0.5)), QUIET)


def kramers(n: FloatArray, over_kt: float) -> FloatArray:
    """Sum of Kramers' recombination coefficients up to n, without the common factor."""
    k = np.arange(1.0, float(np.max(n)) + 1.0)
    t = over_kt / k**2
    total = np.cumsum(np.exp(t) * exp1(t) / k**3)
    return np.asarray(total[np.asarray(n, dtype=int) - 1])


def kramers_limit(over_kt: float) -> float:
    """The same sum over all n, by mpmath's Euler-Maclaurin summation."""
    first = mpmath.fsum(
        mpmath.exp(over_kt / k**2) * mpmath.e1(over_kt / k**2) / k**3 for k in range(1, 200)
    )
    rest = mpmath.nsum(
        lambda k: mpmath.exp(over_kt / k**2) * mpmath.e1(over_kt / k**2) / k**3,
        [200, mpmath.inf],
        method="euler-maclaurin",
    )
    return float(first + rest)


def test_law_itself_is_found_exactly() -> None:
    # Closed form: the law's own terms.
    def law(n: FloatArray) -> FloatArray:
        return -7.0 + (0.3 * np.log(n) - 0.4) / n**2 + (5.0 * np.log(n) - 2.0) / n**4

    found = carried(law)
    assert found.fitted.all()
    assert found.value[0] == pytest.approx(-7.0, abs=1e-13)
    beyond = carry(LADDER, column(law(LADDER + 0.5)), QUIET, 500.0)
    assert beyond.value[0] == pytest.approx(float(law(np.array(500.5))), abs=1e-13)


@pytest.mark.parametrize("over_kt", [30.0, 60.0, 150.0, 600.0])  # z from 2000 to 100
def test_sum_of_kramers_coefficients(over_kt: float) -> None:
    # What the law is made from, in its full form: computed by scipy and mpmath.
    logs = column(-np.log(kramers(LADDER, over_kt)))
    found, limit = carry(LADDER, logs, QUIET), -np.log(kramers_limit(over_kt))
    correction = abs(found.value[0] - logs[-1, 0])
    assert abs(found.value[0] - limit) <= found.bar[0]
    assert found.bar[0] <= 0.2 * correction
    # The logarithm of the sum has the square of its tail besides, which the law leaves out.
    assert abs(found.value[0] - limit) <= correction**2


@pytest.mark.parametrize("power", [1.0, 1.3, 1.6, 1.9, 2.3, 3.0])
@pytest.mark.parametrize("curved", [-2.0, 0.0, 2.0])
def test_bar_holds_for_other_laws(power: float, curved: float) -> None:
    # Closed form: the limit is 1. Near the law's own powers the bar is small, too.
    found = carried(lambda n: 1.0 + n**-power * (1.0 + curved / n))
    assert abs(found.value[0] - 1.0) <= found.bar[0]
    if 1.6 <= power <= 2.3:
        assert found.bar[0] <= 0.2 * 200.5**-power
    assert found.exponent[0] == pytest.approx(power, abs=0.1)


@pytest.mark.parametrize("count", [4, 5, 6, 7])
def test_bar_narrows_with_rungs_and_stays_honest(count: int) -> None:
    def sequence(n: FloatArray) -> FloatArray:
        return np.asarray(-np.log(n) * n**-1.75 / (1.0 + 9.0 / n))

    found = carried(sequence, LADDER[:count])
    longer = carry(LADDER[:count], column(sequence(LADDER[:count] + 0.5)), QUIET, 640.0)
    assert abs(found.value[0]) <= found.bar[0]
    assert abs(longer.value[0] - float(sequence(np.array(640.5)))) <= longer.bar[0]


def test_no_limit_is_said() -> None:
    # ln n has none: a power law finds no exponent, and the bar is no smaller than the last step.
    found = carried(lambda n: -np.log(n))
    assert not found.fitted[0]
    assert np.isnan(found.exponent[0])
    assert found.value[0] == -np.log(200.5)
    assert found.bar[0] > np.log(200.5 / 140.5)


def test_noise_is_not_taken_for_a_law() -> None:
    rng = np.random.default_rng(3)
    logs = 1e-9 * rng.standard_normal((len(LADDER), 400))
    found = carry(LADDER, logs, np.full(400, 1e-9))
    assert not found.fitted.any()
    assert np.isnan(found.exponent).all()
    assert np.array_equal(found.value, logs[-1])
    assert found.bar.min() >= 1e-9


def test_noise_widens_the_bar() -> None:
    rng = np.random.default_rng(4)
    clean = column(1.0 + (LADDER + 0.5) ** -1.8)
    logs = clean + 1e-8 * rng.uniform(-0.5, 0.5, (len(LADDER), 500))
    found = carry(LADDER, logs, np.full(500, 1e-8))
    assert found.fitted.all()
    assert np.all(np.abs(found.value - 1.0) <= found.bar)


def test_quantities_do_not_see_each_other() -> None:
    # Bit for bit: a quantity alone and among others.
    many = 1.0 + (LADDER[:, None] + 0.5) ** -np.array([[1.6, 1.8, 2.2]])
    together = carry(LADDER, many, np.full(3, 1e-15))
    alone = carry(LADDER, many[:, 1:2], QUIET)
    assert together.value[1] == pytest.approx(alone.value[0], abs=1e-15)
    assert together.bar[1] == pytest.approx(alone.bar[0], rel=1e-9)


@pytest.mark.parametrize("count", [0, 1, 2, 3])
def test_too_few_rungs(count: int) -> None:
    with pytest.raises(InputError, match="4 or more values of n_max are needed"):
        carry(LADDER[:count], np.zeros((count, 1)), QUIET)


def test_truncation_error_on_between_and_beyond_rungs() -> None:
    def sequence(n: FloatArray) -> FloatArray:
        return np.asarray(2.0 + 3.0 * np.log(n) / n**2)

    logs = column(sequence(LADDER + 0.5))
    for at in (20, 45, 200, 33, 120, 170, 300, 1000):
        error, bar = truncation_error(LADDER, logs, QUIET, at)
        exact = float(sequence(np.array(at + 0.5))) - 2.0
        # Between rungs it is interpolated in logarithms: nearly straight there.
        assert error[0] == pytest.approx(exact, rel=2e-3 if at < 200 else 1e-9)
        # Five times beyond the longest rung the laws differ by more, relative to what is left.
        assert 0.0 < bar[0] < (0.2 if at > 300 else 0.1) * exact
    with pytest.raises(InputError, match="below the shortest rung, 20"):
        truncation_error(LADDER, logs, QUIET, 19)


@pytest.mark.parametrize("allowed", [1e-2, 1e-3, 1e-4, 2e-5, 3e-6])
def test_smallest_n_max(allowed: float) -> None:
    # Closed form: error N^-2, N = n + 1/2; the law holds it, so that its bar is that of the laws
    # without this term.
    logs = column((LADDER + 0.5) ** -2.0)
    found = smallest_n_max(LADDER, logs, QUIET, np.array([allowed]))
    exact = allowed**-0.5 - 0.5
    assert found.n_max is not None
    assert exact <= found.n_max <= max(20.0, 1.05 * exact + 1.0)
    assert found.beyond == (found.n_max > 200)
    assert found.share <= 1.0


def test_smallest_n_max_out_of_reach() -> None:
    logs = column((LADDER + 0.5) ** -2.0)
    found = smallest_n_max(LADDER, logs, QUIET, np.array([1e-9]))
    assert found.n_max is None
    assert found.share > 1.0


def slow(n: FloatArray) -> FloatArray:
    # A closed form that no law of the fit holds; its limit is 0.
    return np.asarray(np.log(n) * n**-1.75 / (1.0 + 9.0 / n))


@pytest.mark.parametrize(
    "ladder", [LADDER, LADDER[:4], LADDER[:5], (10, 20, 40, 80, 160), (34, 40, 48, 56)]
)
def test_truncation_error_where_no_law_holds(ladder: FloatArray) -> None:
    rungs = np.array(ladder)
    logs = column(slow(rungs + 0.5))
    for at in range(int(rungs[0]), 10 * int(rungs[-1]), 7):
        error, bar = truncation_error(rungs, logs, QUIET, at)
        assert abs(error[0] - float(slow(np.array(at + 0.5)))) <= bar[0]


@pytest.mark.parametrize("allowed", [1e-2, 3e-3, 1e-3, 3e-4, 1e-4])
def test_smallest_n_max_where_no_law_holds(allowed: float) -> None:
    # Exact by scipy's root finding: never too small, nor much too large.
    found = smallest_n_max(LADDER, column(slow(LADDER + 0.5)), QUIET, np.array([allowed]))
    exact = brentq(lambda n: float(slow(np.array(n))) - allowed, 10.0, 5000.0) - 0.5
    assert found.n_max is not None
    assert exact <= found.n_max <= 1.3 * exact + 1.0


# Frozen, since the rungs take minutes: x_e at z = 1100, 500 and 200 of the INVENTED demo universe,
# by `benchmarks.levels.pool_of` at accuracy 1e-8; last line: the limit from 22 rungs, 20 to 640.
# What they test is computed from them here, and depends on none of its digits.
X_E = {
    10: (0.145956386001, 0.000960286508437, 0.000512250950842),
    14: (0.145790511809, 0.000858185265748, 0.000452099908112),
    20: (0.145681255253, 0.000784647013038, 0.000407260420247),
    28: (0.145621211652, 0.000740807457227, 0.000379073303358),
    40: (0.145585876057, 0.000713503009364, 0.000360523495016),
    56: (0.145567960277, 0.000699209353894, 0.000350387244383),
    80: (0.145557822552, 0.000691001811364, 0.000344426958054),
    112: (0.145552739299, 0.000686852775931, 0.000341381385526),
    160: (0.145549858179, 0.000684483689974, 0.000339632233974),
    320: (0.145547587701, 0.000682593590241, 0.000338223745091),
    640: (0.145546943915, 0.00068204678916, 0.000337808794887),
}
X_E_LIMIT = (0.14554669512554289, 0.0006818301409922143, 0.0003376400582336955)


@pytest.mark.parametrize(
    "ladder",
    [
        (20, 28, 40, 56),
        (10, 20, 40, 80),
        (28, 40, 56, 112),
        (20, 28, 40, 56, 80),
        (10, 14, 28, 56, 112),
        (10, 20, 40, 56, 80),
        (10, 20, 40, 80, 160),
        (10, 14, 20, 28, 40, 56),
        (14, 28, 40, 56, 80, 112, 160),
    ],
)
def test_bars_hold_for_histories(ladder: tuple[int, ...]) -> None:
    # Between the rungs, on them, beyond them and at the limit; regular ladders and others.
    rungs, truth = np.array(ladder), np.log(X_E_LIMIT)
    logs = np.log([X_E[n] for n in ladder])
    noise = np.full(3, 1e-11)
    limit = carry(rungs, logs, noise)
    assert limit.fitted.all()
    assert np.all(np.abs(limit.value - truth) <= limit.bar)
    for n, values in X_E.items():
        if n >= ladder[0]:
            error, bar = truncation_error(rungs, logs, noise, n)
            assert np.all(np.abs(error - (np.log(values) - truth)) <= bar)
        if n > ladder[-1]:
            longer = carry(rungs, logs, noise, float(n))
            assert np.all(np.abs(longer.value - np.log(values)) <= longer.bar)


def test_smallest_n_max_for_histories() -> None:
    # Straight in ln |error| over ln N between 320 and 640, z = 200: 0.1 per cent at n_max = 436.
    truth, places = np.log(X_E_LIMIT[2]), np.log([320.5, 640.5])
    sizes = np.log([np.log(X_E[n][2]) - truth for n in (320, 640)])
    exact = np.exp(np.interp(np.log(1e-3), sizes[::-1], places[::-1])) - 0.5
    for ladder in ((20, 28, 40, 56, 80), (20, 28, 40, 56, 80, 112), (14, 28, 56, 112, 160)):
        logs = column(np.log([X_E[n][2] for n in ladder]))
        found = smallest_n_max(np.array(ladder), logs, np.array([1e-11]), np.array([1e-3]))
        assert found.n_max is not None
        assert exact <= found.n_max <= 1.6 * exact


def test_errors_that_change_sign_between_rungs() -> None:
    # Closed form: the limit is 0. No logarithm has both signs; anything between may be true.
    def sequence(n: FloatArray) -> FloatArray:
        return np.asarray(n**-2.0 - 400.0 * n**-3.5)

    logs = column(sequence(LADDER + 0.5))
    assert logs[0, 0] < 0.0 < logs[-1, 0]
    for at in (22, 33, 50, 85, 120, 170):
        error, bar = truncation_error(LADDER, logs, QUIET, at)
        assert abs(error[0] - float(sequence(np.array(at + 0.5)))) <= bar[0]
