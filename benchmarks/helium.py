"""How x_e hangs on the choices about helium, and what helium costs: figures of the README.

    python -m benchmarks.helium

Relative changes of x_e where they are largest between z = 1500 and 7000, hydrogen and helium to
n_max = 10, Sobolev lines; then the best of four process times of whole histories, z = 8000 to 20
with populations at 200 redshifts, against hydrogen alone. No cache of reductions; atomic data are
at hand.
"""

from __future__ import annotations

from benchmarks.timing import best_of, machine  # pins threads

# isort: split
from collections.abc import Callable
from typing import Any

import numpy as np

from benchmarks.history import COSMOLOGY
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.history.setup import Setup

# A history with helium may take so many times that of hydrogen alone.
MOST = 2.5
REDSHIFTS = (8000.0, *np.arange(7000.0, 1499.0, -100.0).tolist())


def history(
    helium: int = 10, higher: str = "closed", treatment: str = "sobolev", **keys: Any
) -> History:
    """One run."""
    lines = {"helium": treatment, "helium_higher_lines": higher}
    return solve(
        Setup(
            cosmology=COSMOLOGY,
            hydrogen={"n_max": 10},
            helium={"n_max": helium, **keys},
            grid={"redshift_start": 8000.0, "redshift_end": 1500.0, "redshifts": REDSHIFTS},
            lines=lines,
        )
    )


def show(label: str, changed: History, usual: History) -> None:
    """Print the largest change and where it is."""
    change = changed.free_electron_fraction / usual.free_electron_fraction - 1.0
    worst = int(np.argmax(np.abs(change)))
    print(f"{label:32} z = {changed.redshift[worst]:5.0f}  {change[worst]:+.1e}")


FRACTIONS = (
    "free_electron_fraction",
    "neutral_hydrogen_fraction",
    "ionized_hydrogen_fraction",
    "neutral_helium_fraction",
    "singly_ionized_helium_fraction",
    "doubly_ionized_helium_fraction",
)


def show_stepping() -> None:
    """Print what stepping to 1e-6 leaves of each fraction where it is above 1e-9."""

    def run(relative: float) -> History:
        return solve(
            Setup(
                cosmology=COSMOLOGY,
                hydrogen={"n_max": 6},
                helium={"n_max": 6},
                lines={"helium": "continuum"},
                grid={"redshift_start": 8000.0, "redshift_end": 20.0, "n_redshifts": 400},
                accuracy={"relative": relative},
            )
        )

    usual, tight = run(1e-6), run(1e-9)
    print(f"stepping to 1e-6 in {usual.diagnostics.steps} steps, n_max 6, 400 outputs, continuum")
    for name in FRACTIONS:
        one, other = getattr(usual, name), getattr(tight, name)
        seen = other > 1e-9
        error = np.abs(one[seen] / other[seen] - 1.0)
        worst = int(np.argmax(error))
        print(f"{name:32} z = {usual.redshift[seen][worst]:5.0f}  {error[worst]:.1e}")


def main() -> None:
    """Print everything."""
    print(machine())
    usual = history()
    show("helium_ion = saha", history(helium_ion="saha"), usual)
    for rate in (0.0, 176.4, 233.0):
        show(
            f"intercombination {rate:g} for 177.6",
            history(intercombination_rate_per_s=rate),
            usual,
        )
    show("two-photon rate of 2 1S +1 %", history(two_photon_rate_per_s=1.01 * 51.02), usual)
    for n_max in (4, 15, 30):
        show(f"n_max of helium {n_max} for 10", history(n_max), usual)
    inside = history(treatment="continuum")
    for n_max in (4, 15, 30):
        changed = history(n_max, treatment="continuum")
        show(f"n_max {n_max} for 10, continuum", changed, inside)
    for n_max in (4, 10, 15):
        show(f"higher lines free, n_max {n_max}", history(n_max, "free"), history(n_max))
    show_stepping()
    parts: list[dict[str, Any]] = [{}]
    names = ("sobolev", "continuum")
    parts += [{"helium": {"n_max": 30}, "lines": {"helium": name}} for name in names]
    runs = [whole(**one) for one in parts]
    print(f"steps from z = 8000: {[run().diagnostics.steps for run in runs]}")
    alone, *both = best_of(runs, 4)
    for name, seconds in zip(names, both, strict=True):
        ratio = seconds / alone
        verdict = "met" if ratio <= MOST else "MISSED"
        print(
            f"H 100, He 30, {name}: {seconds:.1f} s, H alone {alone:.1f} s: {ratio:.2f} x, "
            f"at most {MOST} promised: {verdict}"
        )


def whole(**parts: Any) -> Callable[[], History]:
    """A whole history, run once already."""
    setup = Setup(
        cosmology=COSMOLOGY,
        hydrogen={"n_max": 100},
        grid={"redshift_start": 8000.0, "redshift_end": 20.0},
        **parts,
    )
    solve(setup)
    return lambda: solve(setup)


if __name__ == "__main__":
    main()
