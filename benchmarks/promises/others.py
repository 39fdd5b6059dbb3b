"""What is not one atom's elimination: dipole lines (P9) and histories from a table (P10)."""

from __future__ import annotations

from benchmarks.timing import best_of, clocked, matrix_product  # first: pins threads

# isort: split
import numpy as np
from scipy.interpolate import CubicSpline

from benchmarks.distilled import COSMOLOGY, REDSHIFTS, General, at_equal_error, small_table
from benchmarks.lines import per_coefficient, worst_error
from benchmarks.promises.table import Row, row
from benchmarks.promises.targets import AGAINST_EXACT_LINES, AGAINST_TIGHT_HISTORY, TARGETS
from levelnet.arrays import FloatArray
from levelnet.distilled import history
from levelnet.distilled.fast import FastHistory

_STEPS = 2000


def line_rows(sizes: list[int]) -> list[Row]:
    """P9; the error is that of lines with n <= 120, whatever the size that is timed."""
    error = worst_error()
    return [
        row("P9", n, error, "exact, n <= 120", AGAINST_EXACT_LINES, 1e9 * per_coefficient(n)[0])
        for n in sizes
    ]


def euler(general: General) -> FloatArray:
    """x_e by backward Euler in 2000 equal steps of ln(1 + z)."""
    places = np.linspace(general.start, float(general.outputs[-1]), _STEPS + 1)
    step, y, found = places[1] - places[0], general.state.copy(), [general.state[0]]
    for s in places[1:].tolist():
        before, y = y, y.copy()
        for _ in range(4):
            away = y - before - step * np.array(general.rate(s, y))
            y -= np.linalg.solve(np.eye(2) - step * general.jacobian(s, y), away)
        found.append(y[0])
    return np.asarray(1.0 / (1.0 + np.exp(-CubicSpline(places, found)(general.outputs))))


def history_rows() -> list[Row]:
    """P10, and what 2000 of our steps cost.

    The last row has no promise: scipy's LSODA on the same compiled equations at equal error, over
    ours, the whole call on both sides.
    """
    table = small_table()

    def ours(relative: float = 1e-6) -> FastHistory:
        return history.history_from_table(table, COSMOLOGY, redshifts=REDSHIFTS, relative=relative)

    exact = ours(1e-11).free_electron_fraction

    def error(x: FloatArray) -> float:
        return float(np.max(np.abs(x / exact - 1.0)))

    plain, product = ours(), matrix_product()[0]
    general = General(table, plain.start_redshift)
    own = error(plain.free_electron_fraction)
    tolerance, _ = at_equal_error(general, "LSODA", error, own)
    asked = np.geomspace(1e-8, 1e-11, 200).tolist()
    many = next((one for one in asked if ours(one).n_steps >= _STEPS), asked[-1])
    long_run = ours(many)
    with clocked(history, "effective_history") as long:
        best_of([lambda: ours(many), product], 10)
    with clocked(history, "effective_history") as short:
        whole, lsoda, _ = best_of([ours, lambda: general.solve("LSODA", tolerance), product], 20)

    def history_row(run: FastHistory, what: str, seen: float, promise: float | None) -> Row:
        off, allowed = error(run.free_electron_fraction), AGAINST_TIGHT_HISTORY
        return Row("P10", len(REDSHIFTS), off, "run to 1e-11", allowed, seen, what, promise)

    by_euler = error(euler(general))
    words, promise = TARGETS["P10"].what, TARGETS["P10"].promise[len(REDSHIFTS)]
    rival = "scipy LSODA, same equations and error, over this"
    return [
        history_row(plain, words, 1e3 * short.best, promise),
        history_row(plain, rival, lsoda / whole, None),
        history_row(
            long_run, f"the same in {long_run.n_steps} of our steps, ms", 1e3 * long.best, None
        ),
        history_row(
            plain, f"error of {_STEPS} steps of backward Euler over ours", by_euler / own, None
        ),
    ]
