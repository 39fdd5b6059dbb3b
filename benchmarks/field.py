"""What does the radiation field cost, against a general sparse solver on the same step?

    python -m benchmarks.field [n_max ...]

1. One step of the field with every process, at z = 1100: all cells and kept levels solved together.
   The rival is scipy's splu with its default ordering on the matrix of all of them, balanced,
   factored and solved; its assembly is not counted. Ours counts everything but the conditions: the
   coupling of the field to the levels, the dense system of the kept levels, the field carried on.
2. A whole history with every process; what a repeated run of one atom pays (rates of second order
   are known), with the reference history and the march on the coarser grid that gives the error.
"""

from __future__ import annotations

import sys
import warnings

from benchmarks.timing import best_of, cpu_seconds, machine  # pins threads

# isort: split
import numpy as np
from scipy.sparse.linalg import splu

from benchmarks.history import COSMOLOGY
from levelnet.errors import AccuracyWarning
from levelnet.history.integrate import integrate_history
from levelnet.history.setup import Setup
from tests.field_sparse import random_problem, sparse_step
from tests.field_steps import DEFAULT_STEP

LYMAN = 3


def one_step(width: float = DEFAULT_STEP, repeats: int = 7) -> tuple[float, float, float]:
    """Largest relative difference of populations, and CPU seconds of ours and of the rival."""
    problem = random_problem("all", width, LYMAN)
    room = problem.step.room
    field, boltzmann = room.field.copy(), room.boltzmann.copy()
    system = sparse_step(*problem)
    departure, _ = system.solve(problem.step)
    own, _ = problem.eliminate()
    error = float(np.max(np.abs(own / departure - 1.0)))

    def restore() -> None:
        room.field[:], room.boltzmann[:] = field, boltzmann

    def ours() -> None:
        for _ in range(20):
            restore()
            problem.eliminate()

    def rival() -> None:
        splu(system.matrix).solve(system.right)

    own_seconds, rival_seconds = best_of([ours, rival], repeats)
    return error, own_seconds / 20.0, rival_seconds


def history(n_max: int) -> None:
    """Print error and cost of a whole history."""
    setup = Setup(
        COSMOLOGY,
        {"n_max": n_max},
        lines={
            "hydrogen": "transfer",
            "lyman_lines": LYMAN,
            "transfer": {"frequency_step": DEFAULT_STEP},
        },
        grid={"redshift_start": 1600.0, "redshift_end": 200.0, "n_redshifts": 200},
    )
    found = []

    def run() -> None:
        found.append(integrate_history(setup, lambda stage, fraction: None).field)

    first, again = cpu_seconds(run), cpu_seconds(run)
    one = found[-1]
    print(
        f"n_max {n_max:3d}, to z = 200, d ln nu {one.frequency_step:.2e}: error of x_e "
        f"{one.frequency_error:.1e}, photons {one.photon_number_error:.1e}, atoms "
        f"{one.atom_number_error:.1e} | {again:.1f} s (the first time {first:.1f} s)",
        flush=True,
    )


if __name__ == "__main__":
    warnings.simplefilter("ignore", AccuracyWarning)
    print(machine())
    for width in (10.0 * DEFAULT_STEP, DEFAULT_STEP, 0.5 * DEFAULT_STEP):
        error, own, rival = one_step(width)
        print(
            f"one step, d ln nu {width:.1e}: error {error:.1e} | {rival / own:.1f} x | "
            f"{1e3 * own:.2f} ms against {1e3 * rival:.1f} ms",
            flush=True,
        )
    for size in [int(argument) for argument in sys.argv[1:]] or [10, 30]:
        history(size)
