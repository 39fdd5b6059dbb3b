"""Is the error bar of the limit honest, what is it worth, and what does a ladder cost?

    python -m benchmarks.levels [--longest 500] [--only-bars | --only-cost]

1. Ladders of many kinds (fine and coarse, short and long, few rungs and many), cut from one pool of
   rungs for each of several universes and choices of lines. Each ladder foresees every longer rung,
   and its limit is held against that of all rungs from 20 on; so is the error by truncation at
   every n_max of the pool, between its rungs and beyond them. Printed: the largest misses over
   the bar at any redshift, and the largest bar over the correction at 200 <= z <= 1600.
2. Facts: x_e(100)/x_e(350) - 1 at z = 200, the exponent of the approach.
3. Process time of each rung, and wall-clock time of the whole study on two processes.
"""

from __future__ import annotations

import argparse
import time
from typing import Any

from benchmarks.timing import machine  # pins threads

# isort: split
import numpy as np

from levelnet.arrays import FloatArray, IntArray
from levelnet.background.cosmology import Cosmology
from levelnet.cli.demo import demo_text
from levelnet.distilled.nodes import process_pool
from levelnet.history.setup import Setup, parse_setup
from levelnet.studies.convergence import carry, truncation_error
from levelnet.studies.levels import level_study
from levelnet.studies.rung import compute_rung, rung_setup

# Invented universes: near the measured one, and at the edge of what anybody would fit.
CASES: dict[str, tuple[Cosmology, dict[str, Any]]] = {
    "fiducial": (Cosmology(68.0, 0.0224, 0.142, helium_mass_fraction=0.245), {}),
    "many baryons, stimulated two-photon": (
        Cosmology(75.0, 0.035, 0.125, 2.9, 0.27),
        {"two_photon": "stimulated"},
    ),
    "few baryons, five Lyman lines": (
        Cosmology(60.0, 0.012, 0.18, 2.6, 0.22),
        {"lyman_lines": 5},
    ),
}
POOL = (10, 14, 20, 28, 30, 40, 45, 56, 70, 80, 100, 112, 140, 160, 200, 224, 300, 400)
ALL = (20, 28, 40, 56, 80, 112, 160, 224, 300, 400)
LADDERS = (
    (20, 30, 45, 70, 100),
    (20, 30, 45, 70, 100, 140),
    (20, 30, 45, 70, 100, 140, 200),
    (20, 30, 45, 70, 100, 140, 200, 300),
    (10, 14, 20, 28, 40, 56),
    (14, 20, 28, 40, 56),
    (28, 40, 56, 80, 112),
    (30, 45, 56, 70, 80, 100),
    (14, 28, 56, 112, 224),
    (20, 40, 80, 160, 300),
    (10, 14, 20, 28),
    (30, 45, 70, 100),
    (40, 56, 80, 112),
    (10, 20, 40, 45, 56),
    (10, 14, 28, 56, 100),
    (28, 40, 56, 100),
    (14, 28, 56, 112),
    (20, 40, 80, 160),
)
REDSHIFTS = (1600.0, 1500.0, 1400.0, 1300.0, 1200.0, 1100.0, 1000.0, 900.0, 800.0, 700.0, 600.0)
REDSHIFTS += (500.0, 400.0, 300.0, 250.0, 200.0, 150.0, 100.0, 50.0, 20.0)
NOISE = 1e-10  # of differences of ln x_e between rungs, relative to the largest; see the study


def pool_of(cosmology: Cosmology, lines: dict[str, Any]) -> FloatArray:
    """ln x_e of every rung of the pool, shape (n_rungs, n_redshift)."""
    grid = {"redshift_start": 1650.0, "redshift_end": 20.0, "redshifts": REDSHIFTS}
    setup = Setup(cosmology, {"n_max": 10}, lines=lines, grid=grid)
    jobs = [rung_setup(setup, n, None, 1e-8) for n in POOL]
    with process_pool(2) as pool:
        found = [pool.submit(compute_rung, job, (1100.0,), None) for job in reversed(jobs)]
        return np.log([one.result().electron_fraction for one in reversed(found)])


def ladder_of(logs: FloatArray, ladder: tuple[int, ...]) -> tuple[IntArray, FloatArray, FloatArray]:
    """Rungs, ln x_e on them, and noise: what the fits take."""
    rows = [POOL.index(n) for n in ladder]
    return np.array(ladder), logs[rows], np.maximum(NOISE * (logs[0] - logs[-1]), 1e-15)


def worst_misses(
    logs: FloatArray, ladder: tuple[int, ...], limit: FloatArray
) -> tuple[float, float, float]:
    """Largest miss over the bar: of longer rungs, of truncation between the rungs, and beyond."""
    given = ladder_of(logs, ladder)
    longer, between, beyond = [0.0], [0.0], [0.0]
    for n, actual in zip(POOL, logs, strict=True):
        if n < ladder[0]:
            continue
        error, bar = truncation_error(*given, n)
        miss = np.max(np.abs(error - (actual - limit)) / bar)
        (between if n <= ladder[-1] else beyond).append(float(miss))
        if n > ladder[-1]:
            seen = carry(*given, float(n))
            longer.append(float(np.max(np.abs(seen.value - actual) / seen.bar)))
    return max(longer), max(between), max(beyond)


def held_against_longer(logs: FloatArray) -> None:
    asked = np.array(REDSHIFTS) >= 200.0
    reference = carry(*ladder_of(logs, ALL))
    print(
        f"{'ladder':34s}{'miss/bar: longer':>18s}{'limit':>7s}{'between':>9s}{'beyond':>8s}", end=""
    )
    print(f"{'bar/corr.':>11s}")
    for ladder in LADDERS:
        limit = carry(*ladder_of(logs, ladder))
        longer, between, beyond = worst_misses(logs, ladder, reference.value)
        miss = np.max(np.abs(limit.value - reference.value) / limit.bar)
        worth = limit.bar / np.abs(limit.value - logs[POOL.index(ladder[-1])])
        name = ", ".join(str(n) for n in ladder)
        print(f"{name:34s}{longer:18.2f}{miss:7.2f}{between:9.2f}{beyond:8.2f}", end="")
        print(f"{np.max(worth[asked]):11.3f}", flush=True)


def cost(longest: int) -> None:
    setup = parse_setup(demo_text())
    rungs = (*(n for n in (20, 30, 45, 70, 100, 140, 200, 300) if n < longest), longest)
    compute_rung(rung_setup(setup, 10, None, 1e-8), (1100.0,), None)  # compiles
    print("n_max, process time of the rung in s")
    for n in rungs:
        start = time.process_time()
        compute_rung(rung_setup(setup, n, None, 1e-8), (1100.0,), None)
        print(f"{n:5d} {time.process_time() - start:8.1f}", flush=True)
    start = time.perf_counter()
    with process_pool(2) as pool:
        study = level_study(setup, rungs, executor=pool, workers=2)
    print(
        f"study of all of them on two processes: {time.perf_counter() - start:.0f} s of wall clock"
    )
    facts(np.array(rungs), study.redshift, np.log(study.rungs.free_electron_fraction))


def facts(rungs: FloatArray, redshift: FloatArray, logs: FloatArray) -> None:
    row = int(np.argmin(np.abs(redshift - 200.0)))
    quiet = np.full(logs.shape[1], 1e-10)
    shorter = rungs < 350  # so that 350 is foreseen
    at_350 = carry(rungs[shorter], logs[shorter], quiet, 350.0)
    hundred = logs[list(rungs).index(100), row]
    print(
        f"x_e(100)/x_e(350) - 1 at z = {redshift[row]:.0f}: "
        f"{100.0 * np.expm1(hundred - at_350.value[row]):.2f} % "
        "(350 foreseen from shorter rungs; published: about 1.2 %)"
    )
    for z in (1100.0, 200.0, 20.0):
        k = int(np.argmin(np.abs(redshift - z)))
        print(f"exponent of the approach at z = {redshift[k]:.0f}: {at_350.exponent[k]:.2f}")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--longest", type=int, default=200, help="longest rung of the timing")
    parser.add_argument("--only-cost", action="store_true", help="leave out the first part")
    parser.add_argument("--only-bars", action="store_true", help="leave out the other parts")
    options = parser.parse_args()
    print(machine())
    if not options.only_cost:
        for name, (cosmology, lines) in CASES.items():
            print(f"\n{name}")
            held_against_longer(pool_of(cosmology, lines))
    if not options.only_bars:
        cost(options.longest)


if __name__ == "__main__":
    main()
