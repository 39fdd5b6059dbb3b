"""Convergence of the resolved field in its frequency step, which is its step in time too."""

from __future__ import annotations

import itertools
import math
from functools import lru_cache

import numpy as np
import pytest
from scipy.integrate import quad

from levelnet.history.result import History
from levelnet.history.run import solve
from tests.field_steps import DEFAULT_STEP, NOTHING, steady_escape
from tests.small_runs import small_setup
from tests.tolerances import ORDER

pytestmark = pytest.mark.slow


@lru_cache(maxsize=32)
def fraction(
    hydrogen: str, lyman: int, relative: float, feedback: bool = False, width: float | None = None
) -> np.ndarray:
    """x_e from z = 1800 to 400 of a small atom."""
    lines: dict[str, object] = {"hydrogen": hydrogen, "lyman_lines": lyman}
    if width is not None:
        lines["two_photon"] = "spontaneous"
        lines["transfer"] = NOTHING | {"feedback": feedback, "frequency_step": width}
    found: History = solve(small_setup(5, 400.0, 40, lines=lines, accuracy={"relative": relative}))
    return found.free_electron_fraction


@pytest.mark.parametrize(
    ("name", "lyman", "relative"),
    [("sobolev", 1, 1e-9), ("sobolev", 3, 1e-9), ("sobolev_feedback", 3, 1e-8)],
)
def test_lines_alone_become_sobolev(name: str, lyman: int, relative: float) -> None:
    """Closed form in the limit of fine cells: with nothing in the wings it is the other treatment.

    That one integrates the same physics with another method: errors fall with the second order of
    the implicit midpoint rule, and are 3e-5 at 1e-3.
    """
    widths = (1e-3, 5e-4, 2.5e-4)
    exact = fraction(name, lyman, relative)
    errors = [
        np.abs(fraction("transfer", lyman, 1e-6, "feedback" in name, width) / exact - 1.0).max()
        for width in widths
    ]
    assert errors[-1] < 3e-6
    order = np.polyfit(np.log(widths), np.log(errors), 1)[0]
    assert order == pytest.approx(2.0, abs=ORDER)


def _steady_escape_exactly(x: float, strength: float) -> float:
    """Escape over Sobolev's in a stationary field with recoil, nothing approximated in ln nu.

    As in tests/laws/test_field.py, with h nu/kT and delta = nu/nu_Lya - 1 as they are at each
    distance s below the line in ln nu.
    """

    def depth(s: float) -> float:  # integral of (1 - exp(-t))^2 from 0 to s, by series
        return s**3 / 3.0 - s**4 / 4.0 + 7.0 * s**5 / 60.0 - s**6 / 24.0

    def weight(s: float) -> float:
        return math.exp(x * math.expm1(-s) - depth(s) / strength) * math.expm1(-s) ** 2 / strength

    pieces = np.linspace(0.0, 10.0 * (3.0 * strength) ** (1.0 / 3.0), 11)
    return 1.0 / sum(
        quad(weight, low, high, epsabs=1e-14)[0] for low, high in itertools.pairwise(pieces)
    )


def test_escape_with_recoil() -> None:
    """Closed form; what is left below 2e-5 is the leaning of stiff cells (`STIFF`)."""
    errors = []
    for width in (2.0 * DEFAULT_STEP, DEFAULT_STEP, 0.5 * DEFAULT_STEP):
        escape, _, law = steady_escape(width)
        errors.append(abs(escape / _steady_escape_exactly(*law) - 1.0))
    assert errors[0] < 1e-4
    assert errors[1] < 0.6 * errors[0]
    assert errors[2] < 0.6 * errors[1]


@lru_cache(maxsize=8)
def resolved(width: float) -> History:
    """Every process."""
    lines = {"hydrogen": "transfer", "lyman_lines": 2, "transfer": {"frequency_step": width}}
    return solve(small_setup(6, 500.0, 30, lines=lines))


def test_every_process() -> None:
    """Computed here on a grid twice as fine: the error of x_e, and that the one told covers it.

    It would not be so small if any process next to the line were of first order.
    """
    widths = (4.0 * DEFAULT_STEP, 2.0 * DEFAULT_STEP, DEFAULT_STEP)
    fine = resolved(0.5 * DEFAULT_STEP).free_electron_fraction
    runs = [resolved(width) for width in widths]
    errors = [float(np.abs(run.free_electron_fraction / fine - 1.0).max()) for run in runs]
    for run, error, most in zip(runs, errors, (3e-4, 1e-5, 2e-6), strict=True):
        assert error < most
        assert error < run.diagnostics.frequency_error
