"""What does a history of hydrogen and helium from a table cost, and how exact is it?

    python -m benchmarks.distilled_helium

For Sobolev lines of He I and for the continuum with feedback: the error of x_e against the full
network with the same atoms at 1e-7, then the cost of 2000 redshifts from z = 8000 to 20, and error
(of the largest derivative by each parameter, against steps for 1e-9) and cost of derivatives. For
Sobolev lines, whose equations remember nothing, scipy's BDF and LSODA on the same compiled
right-hand side (BDF with the same compiled Jacobian), at the loosest of the listed tolerances that
reaches our error. Hydrogen n_max = 30, helium n_max = 10.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable

from benchmarks.timing import best_of, machine  # pins threads

# isort: split
import numpy as np
from scipy.integrate import solve_ivp

from benchmarks.distilled import COSMOLOGY, TOLERANCES
from levelnet.distilled.build import distill
from levelnet.distilled.fast import FastHistory
from levelnet.distilled.history import history_from_table
from levelnet.distilled.plasma import electrons_of, plasma_of
from levelnet.distilled.prepared import make_atom
from levelnet.distilled.table import EffectiveTable
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from levelnet.kernels.effective_plasma import evaluate, make_desk, make_memory
from levelnet.kernels.plasma_steps import lagging_state

REDSHIFTS = np.expm1(np.linspace(math.log(8001.0), math.log(21.0), 2000))
CHOICES = {
    "sobolev": {"helium": "sobolev"},
    "continuum with feedback": {
        "helium": "continuum",
        "helium_continuum": {"redistribution": "partial", "feedback": True},
    },
}


class General:
    """The same compiled equations for a general solver, from the same start."""

    def __init__(self, table: EffectiveTable, start: float) -> None:
        self.plasma = plasma_of(table, make_atom(table), COSMOLOGY, -9.3, -3.0)
        self.desk, self.memory = make_desk(self.plasma), make_memory(4, 4)
        self.start, self.state = -math.log1p(start), np.zeros(4)
        lagging_state(self.plasma, self.start, self.memory, self.desk, self.state)

    def rate(self, s: float, y: np.ndarray) -> np.ndarray:
        evaluate(self.plasma, s, y, self.memory, self.desk, False)
        return self.desk.rate.copy()

    def jacobian(self, s: float, y: np.ndarray) -> np.ndarray:
        evaluate(self.plasma, s, y, self.memory, self.desk, True)
        return self.desk.matrix.copy()

    def solve(self, method: str, tolerance: float) -> np.ndarray:
        """Give x_e below the start."""
        outputs = -np.log1p(REDSHIFTS[-np.log1p(REDSHIFTS) > self.start])
        found = solve_ivp(
            self.rate,
            (self.start, float(outputs[-1])),
            self.state,
            method,
            outputs,
            jac=self.jacobian,
            rtol=1e-13,
            atol=tolerance,
            first_step=1e-3,
        )
        return electrons_of(found.y.T, COSMOLOGY)


def main() -> None:
    """Print everything."""
    print(machine())
    for name, lines in CHOICES.items():
        setup = Setup(
            COSMOLOGY,
            {"n_max": 30},
            {"n_max": 10},
            lines,
            {"redshift_start": 8000.0, "redshift_end": 20.0, "n_redshifts": 200},
            {"relative": 1e-7},
        )
        table, full = distill(setup, certify=False), solve(setup)

        def ours(table: EffectiveTable = table, **options: object) -> FastHistory:
            return history_from_table(table, COSMOLOGY, redshifts=REDSHIFTS, **options)

        fast = history_from_table(table, COSMOLOGY, redshifts=full.redshift)
        error = fast.free_electron_fraction / full.free_electron_fraction - 1.0
        plain = ours()
        print(f"{name}: x_e {np.abs(error).max():.1e} from the full network, {plain.n_steps} steps")
        bare = dataclasses.replace(table, helium=None, helium_ion=None, helium_lines=None)
        hydrogen = dataclasses.replace(setup.lines, helium=None, helium_continuum=None)
        times = best_of([ours, lambda b=bare, h=hydrogen: ours(b, lines=h)], 20)
        print(f"  {1e3 * times[0]:.2f} ms, {times[0] / times[1]:.1f} times hydrogen alone")
        derivatives(ours)
        if name == "sobolev":
            rivals(table, plain, times[0])


def derivatives(ours: Callable[..., FastHistory]) -> None:
    """Print error and cost of derivatives."""
    found, exact = (ours(sensitivities=True, relative=one).sensitivities for one in (1e-6, 1e-9))
    assert found is not None and exact is not None
    for part in ("free_electron_fraction", "matter_temperature_k"):
        there = getattr(exact, part)
        error = np.abs(getattr(found, part) - there).max(axis=0) / np.abs(there).max(axis=0)
        worst = found.parameters[int(np.argmax(error))]
        print(f"  derivatives of {part}: error {error.max():.1e} (by {worst})")
    times = best_of([ours, lambda: ours(sensitivities=True)], 10)
    n = len(found.parameters)
    print(f"  by {n} parameters: {times[1] / times[0]:.0f} times one history")


def rivals(table: EffectiveTable, plain: FastHistory, seconds: float) -> None:
    """Print what general solvers need for our error."""
    exact = history_from_table(table, COSMOLOGY, redshifts=REDSHIFTS, relative=1e-10)
    general = General(table, plain.start_redshift)
    below = -np.log1p(REDSHIFTS) > general.start
    truth = exact.free_electron_fraction[below]
    own = float(np.max(np.abs(plain.free_electron_fraction[below] / truth - 1.0)))
    print(f"  stepping: error of x_e {own:.1e}")
    for method in ("LSODA", "BDF"):
        for tolerance in TOLERANCES:
            error = float(np.max(np.abs(general.solve(method, tolerance) / truth - 1.0)))
            if error <= own:
                cost = best_of([lambda m=method, t=tolerance: general.solve(m, t)], 3)[0]
                print(f"  scipy {method} at {tolerance:g}: {cost / seconds:.1f} times")
                break


if __name__ == "__main__":
    main()
