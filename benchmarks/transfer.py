"""How exact is the radiation field resolved in frequency, and what does it change?

    python -m benchmarks.transfer [steps | levels | size | switches]

Changes of x_e are in per cent of it. The tables of the README's section on the transfer treatment;
without a word all of them, in about ten minutes.
"""

from __future__ import annotations

import sys
import time
from itertools import pairwise

from benchmarks.history import COSMOLOGY  # pins threads
from benchmarks.timing import machine

# isort: split
from typing import Any

import numpy as np

from levelnet.arrays import FloatArray
from levelnet.history.run import solve
from levelnet.history.setup import Setup

REDSHIFTS = (1500.0, 1300.0, 1200.0, 1100.0, 1050.0, 900.0, 700.0, 400.0, 200.0)
SWITCHES = ("feedback", "excited_two_photon", "raman", "scattering")
ALONE = {
    "none": {},
    "feedback": {"feedback": True},
    "stimulated": {"two_photon": "stimulated"},
    "distorted": {"two_photon": "distorted"},
    "excited_two_photon": {"excited_two_photon": True},
    "raman": {"raman": True},
    "scattering": {"scattering": True},
    "all": {"two_photon": "distorted"} | dict.fromkeys(SWITCHES, True),
}


def electrons(
    chosen: dict[str, Any], step: float = 5e-4, n_max: int = 10, lyman_lines: int = 3
) -> FloatArray:
    """x_e at the listed redshifts of a transfer run in which only what is chosen takes part."""
    own = dict.fromkeys(SWITCHES, False) | {"frequency_step": step} | chosen
    two_photon = own.pop("two_photon", "spontaneous")
    lines = {"hydrogen": "transfer", "lyman_lines": lyman_lines}
    return at_redshifts(n_max, lines | {"two_photon": two_photon, "transfer": own})


def at_redshifts(n_max: int, lines: dict[str, Any]) -> FloatArray:
    """x_e at the listed redshifts."""
    grid = {"redshift_start": REDSHIFTS[0], "redshift_end": REDSHIFTS[-1], "redshifts": REDSHIFTS}
    setup = Setup(COSMOLOGY, {"n_max": n_max}, lines=lines, grid=grid)
    return solve(setup).free_electron_fraction


def show(name: str, change: FloatArray) -> None:
    """One line: changes of x_e in per cent."""
    print(f"{name:34s}" + "".join(f"{100 * x:10.4f}" for x in change), flush=True)


def heading(text: str) -> None:
    """Name a table and its columns."""
    print(f"\n{text}\n{'':34s}" + "".join(f"{z:10.0f}" for z in REDSHIFTS), flush=True)


def steps() -> None:
    """Print what halving d ln nu changes, and the order of accuracy, for each switch."""
    heading("change of x_e from a step to half of it (n_max 5, 3 lines)")
    for name, chosen in ALONE.items():
        halved = [1e-3 / 2**k for k in range(5)]
        began = [time.process_time()]
        found = []
        for step in halved:
            found.append(electrons(chosen, step, 5))
            began.append(time.process_time())
        changes = [fine / coarse - 1.0 for coarse, fine in pairwise(found)]
        for step, change in zip(halved, changes, strict=False):
            show(f"{name} {step:.3g}", change)
        sizes = [float(np.max(np.abs(change))) for change in changes]
        orders = np.log2(np.array(sizes[:-1]) / sizes[1:])
        times = " ".join(f"{one:.1f}" for one in np.diff(began))
        print(f"{name}: orders {np.round(orders, 2).tolist()}, seconds {times}", flush=True)


def levels() -> None:
    """Print how x_e goes with the number of levels with two-photon decay, and of open lines."""
    everything = ALONE["all"]
    heading("all switches: highest_two_photon_n against 8 (n_max 10)")
    most = electrons(everything | {"highest_two_photon_n": 8})
    for top in (3, 4, 5, 6, 7):
        found = electrons(everything | {"highest_two_photon_n": top})
        show(f"highest_two_photon_n {top}", found / most - 1.0)
    heading("all switches: lyman_lines against 8 (n_max 10)")
    most = electrons(everything, 2.5e-4, lyman_lines=8)
    for count in range(1, 7):
        found = electrons(everything, 2.5e-4, lyman_lines=count)
        show(f"lyman_lines {count}", found / most - 1.0)


def size() -> None:
    """Print transfer against Sobolev with as many levels."""
    heading("all switches, 3 lines, against Sobolev with 1")
    for n_max in (5, 10, 30, 50):
        plain = at_redshifts(n_max, {"hydrogen": "sobolev"})
        show(f"n_max {n_max}", electrons(ALONE["all"], n_max=n_max) / plain - 1.0)


def switches() -> None:
    """Print what each switch does alone, and what it does when all others are on."""
    heading("each alone, against none (n_max 10, 3 lines)")
    none, every = electrons({}), electrons(ALONE["all"])
    for name, chosen in ALONE.items():
        show(name, electrons(chosen) / none - 1.0)
    heading("all, against all but one")
    for name in SWITCHES:
        show(name, every / electrons(ALONE["all"] | {name: False}) - 1.0)
    show("distorted", every / electrons(ALONE["all"] | {"two_photon": "spontaneous"}) - 1.0)


if __name__ == "__main__":
    tables = {"switches": switches, "size": size, "levels": levels, "steps": steps}
    print(machine())
    for name in sys.argv[1:] or list(tables):
        tables[name]()
