"""What does a history from a table cost, against general solvers on the same compiled equations?

    python -m benchmarks.distilled

1. One history at 2000 redshifts at the default accuracy: its error first, then its cost, and that
   with derivatives by every parameter.
2. scipy's LSODA and BDF on the same compiled right-hand side (BDF with the same compiled Jacobian),
   at 2000 redshifts too; the loosest of the listed tolerances that reaches our error. Each of their
   evaluations pays for a call from Python, as in any use of these solvers.
3. An ensemble, one after the other and on two threads.

Errors are the largest of x_e, relative, from z = 1600 to 20, against a run of 1e-11.
"""

from __future__ import annotations

import dataclasses
import math
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

from benchmarks.timing import best_of, machine  # pins threads

# isort: split
import numpy as np
from scipy.integrate import solve_ivp

from levelnet.background.cosmology import Cosmology
from levelnet.distilled.build import distill
from levelnet.distilled.ensemble import ensemble
from levelnet.distilled.history import history_from_table
from levelnet.distilled.prepared import make_atom
from levelnet.distilled.table import EffectiveTable
from levelnet.distilled.universe import make_universe
from levelnet.history.setup import Setup
from levelnet.kernels import effective

# An invented cosmology; any other would do.
COSMOLOGY = Cosmology(68.0, 0.0224, 0.142, helium_mass_fraction=0.245)
REDSHIFTS = np.expm1(np.linspace(math.log(1601.0), math.log(21.0), 2000))
TOLERANCES = (1e-3, 3e-4, 1e-4, 3e-5, 1e-5, 3e-6, 1e-6, 3e-7, 1e-7, 3e-8, 1e-8)


class General:
    """The same compiled equations for a general solver, from the same start."""

    def __init__(self, table: EffectiveTable, start: float) -> None:
        self.atom, self.room = make_atom(table), effective.make_room(len(table.kept), 1)
        low = math.log(COSMOLOGY.cmb_temperature_k) - table.log_high
        self.outputs = -np.log1p(REDSHIFTS)
        self.universe = make_universe(COSMOLOGY, low, float(self.outputs[-1]))
        self.start, self.state, self.none = -math.log1p(start), np.zeros(2), np.zeros((2, 0))
        effective.equilibrium(
            self.atom, self.universe, self.start, self.room, self.state, self.none
        )

    def rate(self, s: float, y: np.ndarray) -> tuple[float, float]:
        return effective.rate_of_slow(self.atom, self.universe, s, y[0], y[1], self.room)

    def jacobian(self, s: float, y: np.ndarray) -> np.ndarray:
        effective.linearize(self.atom, self.universe, s, y[0], y[1], self.room, self.none)
        return self.room.linear[:, :2].copy()

    def solve(self, method: str, tolerance: float) -> np.ndarray:
        found = solve_ivp(
            self.rate,
            (self.start, float(self.outputs[-1])),
            self.state,
            method,
            self.outputs,
            jac=self.jacobian,
            rtol=1e-13,
            atol=tolerance,
            first_step=1e-3,
        )
        return 1.0 / (1.0 + np.exp(-found.y[0]))


def small_table() -> EffectiveTable:
    """What the histories are made from."""
    setup = Setup(COSMOLOGY, {"n_max": 30}, grid={"redshift_start": 1600.0, "redshift_end": 20.0})
    return distill(setup, certify=False)


def at_equal_error(
    general: General, method: str, error: Callable[[np.ndarray], float], own: float
) -> tuple[float, float]:
    """Loosest tolerance with which the method reaches our error, and its error."""
    reached = ((t, error(general.solve(method, t))) for t in TOLERANCES)
    return next((t, e) for t, e in reached if e <= own)


def main() -> None:
    print(machine())
    table = small_table()

    def ours(**options: object):  # type: ignore[no-untyped-def]
        return history_from_table(table, COSMOLOGY, redshifts=REDSHIFTS, **options)

    exact = ours(relative=1e-11).free_electron_fraction

    def error(x: np.ndarray) -> float:
        return float(np.max(np.abs(x / exact - 1.0)))

    plain, full = ours(), ours(sensitivities=True)
    own = error(plain.free_electron_fraction)
    print(f"error of x_e {own:.1e} in {plain.n_steps} steps, {len(REDSHIFTS)} redshifts")
    general = General(table, plain.start_redshift)
    rivals = [(m, *at_equal_error(general, m, error, own)) for m in ("LSODA", "BDF")]
    actions = [ours, lambda: ours(sensitivities=True)]
    actions += [lambda m=m, t=t: general.solve(m, t) for m, t, _ in rivals]
    times = best_of(actions, 20)
    print(f"one history: {1e3 * times[0]:.2f} ms")
    assert full.sensitivities is not None
    names = full.sensitivities.parameters
    print(f"with derivatives by {len(names)} parameters: {times[1] / times[0]:.2f} times that")
    for (method, tolerance, reached_error), seconds in zip(rivals, times[2:], strict=True):
        ratio = seconds / times[0]
        print(f"scipy {method} at {tolerance:g} (error {reached_error:.1e}): {ratio:.1f} times")
    many(table)


def many(table: EffectiveTable) -> None:
    """An ensemble of 256 cosmologies, alone and on two threads."""
    chosen = [
        dataclasses.replace(COSMOLOGY, matter_density_h2=0.12 + 0.0002 * k) for k in range(256)
    ]

    def run(executor: ThreadPoolExecutor | None) -> None:
        ensemble(table, chosen, redshifts=REDSHIFTS, executor=executor)

    cpu = best_of([lambda: run(None)], 3)[0]
    print(f"ensemble: {1e3 * cpu / len(chosen):.2f} ms of CPU a cosmology")
    wall = [math.inf, math.inf]
    with ThreadPoolExecutor(2) as executor:
        for _ in range(5):
            for k, one in enumerate((None, executor)):
                begin = time.perf_counter()
                run(one)
                wall[k] = min(wall[k], time.perf_counter() - begin)
    print(f"two threads: {wall[0] / wall[1]:.2f} times one (wall clock, best of 5)")


if __name__ == "__main__":
    main()
