"""Small tables with levels of helium that several test files look at; each is distilled once."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

from levelnet.distilled import helium_escape
from levelnet.distilled.build import distill
from levelnet.distilled.table import EffectiveTable
from levelnet.history.setup import Setup
from levelnet.pieces import MemoryPieces
from tests.small_runs import small_setup

# All tables share their reductions of He I and He II.
PIECES = MemoryPieces()
CONTINUUM = {"redistribution": "partial", "feedback": True}
# Coarse nodes of the escape: seconds instead of a minute, errors of 1e-2 in unlikely corners.
COARSE = (1.2, 1.2, 0.5)


def helium_setup(lines: str = "sobolev_feedback", ion: str = "network", **parts: Any) -> Setup:
    """Hydrogen to n_max 5 and helium to 4 ("free": 7), z = 8000 to 20."""
    chosen: dict[str, Any] = {"helium": lines}
    n_max = 4
    if lines == "continuum":
        chosen["helium_continuum"] = CONTINUUM
    if lines == "free":
        chosen, n_max = {"helium": "sobolev", "helium_higher_lines": "free"}, 7
    grid = {"redshift_start": 8000.0, "redshift_end": 20.0, "n_redshifts": 120}
    helium = {"n_max": n_max, "helium_ion": ion}
    return small_setup(5, **({"helium": helium, "lines": chosen, "grid": grid} | parts))


@lru_cache(maxsize=5)
def helium_table(lines: str = "sobolev_feedback", ion: str = "network") -> EffectiveTable:
    """Without a certificate; the escape of "continuum" on coarse nodes; "free": many lines."""
    spacing = helium_escape.SPACING
    helium_escape.SPACING = COARSE
    limit, helium_escape.LARGEST_ERROR = helium_escape.LARGEST_ERROR, 0.1
    try:
        setup = helium_setup(lines, ion)
        return distill(setup, tolerance=1e-8, pieces=PIECES, certify=False)
    finally:
        helium_escape.SPACING, helium_escape.LARGEST_ERROR = spacing, limit
