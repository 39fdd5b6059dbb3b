"""Which rates of helium does x_e hang on, how exactly is that told, and what does it cost?

    python -m benchmarks.helium_weigh

1. Derivatives of ln x_e by the main rates of helium at three redshifts (n_max = 10), with Sobolev's
   treatment of the He I lines and with the continuum and feedback, and the error budget there.
2. That by the intercombination rate against central differences of whole runs.
3. Time of a weighing over one history.
"""

from __future__ import annotations

import dataclasses

from benchmarks.timing import best_of, machine  # pins threads

# isort: split
import numpy as np

from benchmarks.history import setup
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from levelnet.studies.budget import error_budget, uncertainties_in
from levelnet.studies.helium_groups import helium_shares
from levelnet.studies.weigh import weigh
from levelnet.studies.weighing import Weighing

REDSHIFTS = (2300.0, 1900.0, 1800.0)
LINES = {
    "sobolev": {"helium": "sobolev"},
    "continuum": {
        "helium": "continuum",
        "helium_continuum": {"redistribution": "partial", "feedback": True},
    },
}


def run_of(kind: str, n_max: int, relative: float) -> Setup:
    """H and He down to z = 1600."""
    grid = {"redshift_start": 2600.0, "redshift_end": 1600.0, "redshifts": (*REDSHIFTS, 1600.0)}
    parts = {"helium": {"n_max": n_max}, "lines": LINES[kind], "grid": grid}
    return dataclasses.replace(setup(n_max, relative), **parts)


def log_x(run: Setup, factor: float) -> np.ndarray:
    """Ln x_e at the redshifts with another intercombination rate."""
    changed = dataclasses.replace(
        run, rates={"rows": (f"bound_bound,He I 2 3P1,1 1S,{factor!r},,benchmark",)}
    )
    found = solve(changed)
    at = [int(np.argmin(np.abs(found.redshift - z))) for z in REDSHIFTS]
    return np.log(found.free_electron_fraction[at])


def main() -> None:
    print(machine())
    targets = [f"x_e({z:g})" for z in REDSHIFTS]
    for kind in LINES:
        print(kind, *targets)
        found = weigh(run_of(kind, 10, 1e-6), targets)
        for name, row in rows_of(found).items():
            print(f"  {name:34s}", *(f"{one:+.3e}" for one in row))
        budget = error_budget(found, uncertainties_in(found.setup))
        for target in targets:
            sigma = budget.sigma[budget.targets.index(target)]
            parts = [f"{one.group} {one.contribution:+.1e}" for one in budget.ranked(target)[:3]]
            print(f"  budget of {target}: {sigma:.1e}: {'; '.join(parts)}")
    for kind in LINES:
        exact = run_of(kind, 5, 1e-8)
        helium = weigh(exact, targets).helium
        assert helium is not None
        ours = helium.strength[:, helium.lines.index("2 3P1-1 1S")]
        slopes = [
            (log_x(exact, float(np.exp(h))) - log_x(exact, float(np.exp(-h)))) / (2.0 * h)
            for h in (0.02, 0.04)
        ]
        off = ours - (4.0 * slopes[0] - slopes[1]) / 3.0
        print(f"{kind}: A(2 3P1) {ours}, off from differences of runs by {off}")
        plain, weighed = best_of(
            [lambda run=exact: solve(run), lambda run=exact: weigh(run, targets[:1])], 2
        )
        print(f"{kind}: n_max = 5, relative 1e-8: {weighed / plain:.2f} histories")


def rows_of(found: Weighing) -> dict[str, np.ndarray]:
    """Derivatives by name, one per target."""
    helium = found.helium
    assert helium is not None
    rows = {f"A({name})": one for name, one in zip(helium.lines, helium.strength.T, strict=True)}
    rows |= {f"escape {name}": one for name, one in zip(helium.lines, helium.escape.T, strict=True)}
    rows |= {"two-photon 2 1S": helium.two_photon, "H I continuum": helium.absorption}
    shares = [helium_shares(helium, at) for at in range(len(found.targets))]
    return rows | {name: np.array([one[name] for one in shares]) for name in shares[0]}


if __name__ == "__main__":
    main()
