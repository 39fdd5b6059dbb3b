"""What does a weighing cost, against one history and against differences?

    python -m benchmarks.weigh

1. Error: derivatives by the two-photon rate and by all cross sections, against central differences
   of two whole runs each (Richardson-extrapolated).
2. One scalar at n_max = 30, 100 and 200 in units of one history without and with populations, and
   of the differences that it replaces: two histories for each of its rates.
"""

from __future__ import annotations

import dataclasses

from benchmarks.timing import best_of, machine  # pins threads

# isort: split
import numpy as np

from benchmarks.history import setup
from levelnet.history.integrate import integrate_history
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from levelnet.studies.weigh import weigh

TARGET = "x_e(900)"


def log_x(run: Setup, row: str) -> float:
    """Ln x_e(900) of a run with one row of overrides."""
    changed = dataclasses.replace(run, rates={"rows": (row,)})
    found = solve(changed)
    at = int(np.argmin(np.abs(found.redshift - 900.0)))
    return float(np.log(found.free_electron_fraction[at]))


def difference(run: Setup, selector: str) -> float:
    """D ln x_e(900)/d ln(rate) from whole runs, error of fourth order in 2 and 4 per cent."""

    def slope(h: float) -> float:
        low, high = (
            log_x(run, f"{selector},{float(np.exp(s * h))!r},,benchmark") for s in (-1.0, 1.0)
        )
        return (high - low) / (2.0 * h)

    return (4.0 * slope(0.02) - slope(0.04)) / 3.0


def main() -> None:
    print(machine())
    grid = {"redshift_start": 1600.0, "redshift_end": 20.0, "redshifts": (1600.0, 900.0, 20.0)}
    exact = dataclasses.replace(setup(20, 1e-9), grid=grid)
    processes = weigh(exact, [TARGET]).processes(TARGET)
    for name, selector in (("two_photon", "two_photon,2s,"), ("bound_free", "bound_free,*,")):
        ours, theirs = processes[name], difference(exact, selector)
        print(f"{name}: {ours:+.9f}, differences of runs {theirs:+.9f}, off by {ours - theirs:.1e}")
    print("n_max   rates     weigh     over history   with populations   over differences")
    for n_max in (30, 100, 200):
        run = setup(n_max, 1e-6, 200)
        rates = len(weigh(run, [TARGET]).upper)
        plain, full, ours = best_of(
            [
                lambda run=run: integrate_history(run, lambda stage, fraction: None),
                lambda run=run: solve(run),
                lambda run=run: weigh(run, [TARGET]),
            ],
            3,
        )
        print(
            f"{n_max:5d} {rates:8d} {ours:8.2f} s {ours / plain:12.2f} {ours / full:18.2f} "
            f"{ours / (2 * rates * plain):18.1e}"
        )


if __name__ == "__main__":
    main()
