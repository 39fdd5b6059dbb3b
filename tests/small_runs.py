"""Small runs and small atoms that several test files look at; each is computed once."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

from levelnet.background.conditions import Conditions
from levelnet.background.cosmology import Cosmology
from levelnet.escape.family import treatment
from levelnet.escape.treatment import LineTreatment
from levelnet.history.atom import build_ladder, lyman_lines
from levelnet.history.equations import SlowEquations
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from levelnet.network.tabulation import tabulate

# An invented flat universe with round parameters, the same as the fixture `fiducial_cosmology`.
COSMOLOGY = Cosmology(
    hubble_km_s_mpc=68.0,
    baryon_density_h2=0.0224,
    matter_density_h2=0.142,
    cmb_temperature_k=2.7255,
    helium_mass_fraction=0.245,
    effective_neutrinos=3.046,
)
# Near the middle of recombination: x_e = 0.15 at z = 1100.
RECOMBINING = Conditions(3000.0, 2999.0, 264.0, 4.9e-14, 0.15, 0.15, 0.85)


def small_setup(n_max: int = 8, end: float = 20.0, count: int = 50, **parts: Any) -> Setup:
    """Setup of a run that takes a second or two; keyword arguments replace whole parts."""
    hydrogen = {"n_max": n_max} | parts.pop("hydrogen", {})
    grid = {"redshift_start": 1800.0, "redshift_end": end, "n_redshifts": count}
    chosen: dict[str, Any] = {"cosmology": COSMOLOGY, "hydrogen": hydrogen, "grid": grid} | parts
    return Setup(**chosen)


@lru_cache(maxsize=8)
def small_history(n_max: int = 8, end: float = 20.0, count: int = 50) -> History:
    """Sobolev history of a small atom."""
    return solve(small_setup(n_max, end, count))


@lru_cache(maxsize=16)
def small_equations(
    lines: str | LineTreatment = "sobolev",
    two_photon: str = "spontaneous",
    n_max: int = 5,
    rate_per_s: float = 8.2246,
    lyman: int | str = 2,
) -> SlowEquations:
    """Equations of a small atom with a table from 25 to 30000 K."""
    setup = small_setup(n_max, lines={"lyman_lines": lyman})
    ladder = build_ladder(setup)
    chosen = treatment(lines) if isinstance(lines, str) else lines
    table = tabulate(ladder, 25.0, 30000.0, 1e-9)
    return SlowEquations(COSMOLOGY, table, lyman_lines(ladder), chosen, rate_per_s, two_photon)
