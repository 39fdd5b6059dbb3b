"""What is not one atom's elimination: dipole lines (P9) and histories from a table (P10)."""

from __future__ import annotations

from benchmarks.timing import best_of, clocked, matrix_product  # first: pins threads

# isort: split
import numpy as np

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


def history_rows() -> list[Row]:
    """P10 with as many steps as it says, and with as many as the default accuracy needs.

    Each history gives 2000 redshifts. The last row has no promise: scipy's LSODA on the same
    compiled equations at equal error, over ours, the whole call on both sides.
    """
    table = small_table()

    def ours(relative: float = 1e-6) -> FastHistory:
        return history.history_from_table(table, COSMOLOGY, redshifts=REDSHIFTS, relative=relative)

    exact = ours(1e-11).free_electron_fraction

    def error(x: FloatArray) -> float:
        return float(np.max(np.abs(x / exact - 1.0)))

    def history_row(run: FastHistory, what: str, seen: float, promise: float | None) -> Row:
        off, against = error(run.free_electron_fraction), "run to 1e-11"
        return Row("P10", run.n_steps, off, against, AGAINST_TIGHT_HISTORY, seen, what, promise)

    plain, product = ours(), matrix_product()[0]
    general = General(table, plain.start_redshift)
    own = error(plain.free_electron_fraction)
    tolerance, _ = at_equal_error(general, "LSODA", error, own)
    asked = np.geomspace(1e-8, 1e-11, 200).tolist()
    many = next(one for one in asked if ours(one).n_steps >= _STEPS)
    with clocked(history, "effective_history") as long:
        best_of([lambda: ours(many), product], 10)
    with clocked(history, "effective_history") as short:
        whole, lsoda, _ = best_of([ours, lambda: general.solve("LSODA", tolerance), product], 20)
    words, promise = TARGETS["P10"].what, TARGETS["P10"].promise[_STEPS]
    rival = "scipy LSODA, same equations and error, over this"
    return [
        history_row(ours(many), words, 1e3 * long.best, promise),
        history_row(
            plain, "the same, in the steps that 1e-6 of x_e needs", 1e3 * short.best, promise
        ),
        history_row(plain, rival, lsoda / whole, None),
    ]
