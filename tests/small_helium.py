"""Small runs with helium, each computed once."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

from levelnet.history.atom import build_ladder
from levelnet.history.equations import SlowEquations
from levelnet.history.helium_atom import HeliumAtoms, build_helium
from levelnet.history.integrate import slow_equations
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from levelnet.network.tabulation import tabulate
from levelnet.pieces import MemoryPieces
from tests.small_runs import small_setup

_PIECES = MemoryPieces()
REDSHIFTS = (
    *(9500.0, 8000.0, 6500.0, 6000.0, 5500.0, 5000.0, 4000.0, 3500.0, 3000.0, 2500.0, 2200.0),
    *(2000.0, 1800.0, 1600.0, 1400.0, 1100.0, 900.0, 600.0, 450.0),
)


def helium_setup(n_max: int = 5, relative: float = 1e-6, **parts: Any) -> Setup:
    """Setup of H and He with atoms of n_max levels; keyword arguments replace whole parts."""
    grid = {"redshift_start": 10_000.0, "redshift_end": 400.0, "redshifts": REDSHIFTS}
    chosen = {"grid": grid, "accuracy": {"relative": relative}} | parts
    chosen["helium"] = {"n_max": n_max} | chosen.pop("helium", {})
    return small_setup(n_max, **chosen)


@lru_cache(maxsize=16)
def helium_history(
    relative: float = 1e-6,
    ion: str = "network",
    intercombination_per_s: float = 177.6,
    higher: str = "closed",
    hydrogen: str = "sobolev",
    n_max: int = 5,
    two_photon: str | None = None,
    alpha: float = 0.0,
    electron: float = 0.0,
) -> History:
    """History of H and He."""
    helium = {
        "n_max": n_max,
        "helium_ion": ion,
        "intercombination_rate_per_s": intercombination_per_s,
    }
    lines = {"hydrogen": hydrogen, "helium_higher_lines": higher}
    if two_photon is not None:
        lines["two_photon"] = two_photon
    physics = {"fine_structure_change": alpha, "electron_mass_change": electron}
    setup = helium_setup(n_max, relative, helium=helium, lines=lines, physics=physics)
    return solve(setup, pieces=_PIECES)


@lru_cache(maxsize=2)
def helium_equations(ion: str = "network") -> tuple[SlowEquations, HeliumAtoms]:
    """Equations of H and He, and the helium in them."""
    setup = helium_setup(helium={"helium_ion": ion})
    atoms = build_helium(setup, 27_000.0, lambda *_: None, _PIECES)
    table = tabulate(build_ladder(setup), 1000.0, 27_600.0, 1e-9)
    return slow_equations(setup, table, helium=atoms.equations), atoms
