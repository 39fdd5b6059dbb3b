"""A history with its field: the last output, and marches that fail."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from levelnet import InputError, SolveError, solve
from levelnet.errors import Outcome
from levelnet.escape.resolved import ResolvedField
from levelnet.history import field as field_run
from levelnet.history.march import Marched, Way
from levelnet.history.setup import Setup
from levelnet.kernels import transfer as kernel
from tests.small_runs import small_setup

STEP = 1e-3
LINES = {"hydrogen": "transfer", "lyman_lines": 2, "transfer": {"frequency_step": STEP}}


def run(*redshifts: float, **parts: Any) -> Setup:
    """A run of a small atom with all switches."""
    grid = {"redshift_start": 1800.0, "redshift_end": 25.0, "redshifts": redshifts}
    return small_setup(5, lines=LINES, grid=grid, **parts)


def test_the_last_output_is_as_good_as_the_others() -> None:
    """Computed by a run that goes on: K and s are interpolated up to the end."""
    short, long = solve(run(1300.0, 1100.0)), solve(run(1300.0, 1100.0, 900.0))
    for name in ("net_rate_per_s", "share"):
        found, expected = getattr(short.channels, name), getattr(long.channels, name)[:2]
        # The ends of splines in steps of 1e-3 in ln a; held at the last record it was 2e-2.
        np.testing.assert_allclose(found, expected, rtol=1e-6)
    np.testing.assert_allclose(short.lines.log_blue_side, long.lines.log_blue_side[:2], atol=1e-8)


def test_a_march_that_fails_before_there_are_records(monkeypatch: pytest.MonkeyPatch) -> None:
    """Ten steps are one record at 1e-4: nothing to interpolate."""
    whole = kernel.march

    def stopping(*arguments: Any) -> int:
        whole(*arguments)
        arguments[-1].report[kernel.STEPS] = 10.0
        return kernel.NOT_CONVERGED

    monkeypatch.setattr(kernel, "march", stopping)
    lines = LINES | {"transfer": {"frequency_step": 1e-4}}
    with pytest.raises(SolveError) as caught:
        solve(small_setup(5, 1500.0, 5, lines=lines))
    assert caught.value.outcome is Outcome.FIELD_NOT_SETTLED


def test_a_coarser_march_that_fails_tells_no_error(monkeypatch: pytest.MonkeyPatch) -> None:
    whole = field_run.march

    def stopping(way: Way, *rest: Any) -> Marched:
        found = whole(way, *rest)
        if way.cells.step <= STEP:
            return found
        return found._replace(
            time=found.time[:50], state=found.state[:50], outcome=Outcome.FIELD_NOT_SETTLED
        )

    monkeypatch.setattr(field_run, "march", stopping)
    assert solve(run(1500.0, 1100.0)).diagnostics.frequency_error == np.inf


def test_a_field_needs_a_setup_that_says_what_it_does() -> None:
    """Own rule: it marched with scattering alone, and none of the checks of a setup."""
    with pytest.raises(InputError, match="goes with the field resolved"):
        solve(small_setup(5, 1500.0, 4), line_treatment=ResolvedField())
