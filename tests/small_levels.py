"""Studies of levels on small atoms that several test files look at; each is computed once."""

from __future__ import annotations

from functools import lru_cache

from levelnet.history.setup import Setup
from levelnet.pieces import MemoryPieces
from levelnet.studies import levels
from levelnet.studies.level_records import LevelStudy
from levelnet.studies.levels import level_study
from tests.small_runs import small_setup

RUNGS = (4, 5, 6, 8, 10, 13)


def level_setup(count: int = 20) -> Setup:
    """Setup of a study; the n_max in it is not used."""
    return small_setup(4, 200.0, count)


@lru_cache(maxsize=1)
def small_study() -> LevelStudy:
    """Study with one rung held out."""
    return level_study(level_setup(), RUNGS)


@lru_cache(maxsize=1)
def small_helium_study() -> LevelStudy:
    """Ladder of helium above hydrogen to n = 4, He III in Saha equilibrium."""
    grid = {"redshift_start": 3500.0, "redshift_end": 1600.0, "redshifts": (3500.0, 1900.0, 1600.0)}
    setup = small_setup(4, helium={"n_max": 8, "helium_ion": "saha"}, grid=grid)
    relative, levels._RELATIVE = levels._RELATIVE, 1e-6  # a tenth of the time
    try:
        return level_study(setup, (4, 5, 6, 8), atom="helium", pieces=MemoryPieces())
    finally:
        levels._RELATIVE = relative
