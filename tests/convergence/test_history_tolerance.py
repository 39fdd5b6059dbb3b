"""The error of a whole history against the error asked for, and against no interpolation at all."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import pytest

from levelnet.history.result import History
from levelnet.history.run import solve
from tests.small_runs import small_setup

ASKED = (1e-3, 1e-4, 1e-5, 1e-6, 1e-7)
SLOW_VARIABLES = (
    "ionized_hydrogen_fraction",
    "neutral_hydrogen_fraction",
    "matter_temperature_k",
)


# Few outputs, so that the step control and not the grid chooses the steps; most of them where the
# integration begins and the neutral fraction is small and fast.
REDSHIFTS = (1960.0, 1900.0, 1800.0, 1700.0, 1500.0, 1300.0, 1100.0, 900.0, 600.0, 200.0, 20.0)


@lru_cache(maxsize=8)
def history(relative: float, interpolate: bool = True, n_max: int = 3) -> History:
    accuracy = {"relative": relative, "interpolate": interpolate}
    grid = {"redshift_start": 1960.0, "redshift_end": 20.0, "redshifts": REDSHIFTS}
    return solve(small_setup(n_max, grid=grid, accuracy=accuracy))


def error(one: History, truth: History, name: str) -> float:
    return float(np.max(np.abs(getattr(one, name) / getattr(truth, name) - 1.0)))


@pytest.mark.slow
def test_error_stays_below_what_was_asked_and_follows_it() -> None:
    truth = history(1e-9)
    runs = [history(asked) for asked in ASKED]
    for name in SLOW_VARIABLES:
        errors = [error(run, truth, name) for run in runs]
        print(name, [f"{e:.1e}" for e in errors], [run.diagnostics.steps for run in runs])
        assert all(e < asked for e, asked in zip(errors, ASKED, strict=True)), (name, errors)
        # Roughly proportional to what is asked, over four decades.
        exponent = np.polyfit(np.log(ASKED), np.log(errors), 1)[0]
        assert 0.6 < exponent < 1.25, (name, errors)


@pytest.mark.slow
def test_steps_grow_as_the_fourth_root() -> None:
    # An embedded pair 4(3): the controlled error falls as the fourth power of the step, and as the
    # third where the equations are stiff (Hairer & Wanner 1996, sec. IV.15; from memory).
    steps = [history(asked).diagnostics.steps for asked in ASKED[2:]]
    exponent = -np.polyfit(np.log(ASKED[2:]), np.log(steps), 1)[0]
    assert 0.22 < exponent < 0.35, steps


def test_coarse_and_fine_agree_to_the_coarse() -> None:
    coarse, fine = history(1e-4), history(1e-6)
    assert coarse.diagnostics.steps < fine.diagnostics.steps
    for name in SLOW_VARIABLES:
        assert 1e-9 < error(coarse, fine, name) < 1e-4


@pytest.mark.slow
@pytest.mark.parametrize("n_max", [3, 8])
def test_interpolation_against_reduction_at_every_evaluation(n_max: int) -> None:
    # Both take the same steps, so that only the table differs: a hundredth of what is asked.
    table, direct = (history(1e-4, choice, n_max) for choice in (True, False))
    assert direct.diagnostics.nodes == 0
    assert direct.diagnostics.interpolation_error == 0.0
    assert table.diagnostics.interpolation_error <= 1e-6
    for name in SLOW_VARIABLES:
        found = error(table, direct, name)
        print(n_max, name, f"{found:.1e}")
        assert found < 1e-6
    populations = table.populations("H I")[1:], direct.populations("H I")[1:]
    np.testing.assert_allclose(*populations, rtol=1e-5)
