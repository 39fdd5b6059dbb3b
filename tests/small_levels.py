"""A study of levels on small atoms that several test files look at; computed once."""

from __future__ import annotations

from functools import lru_cache

from levelnet.history.setup import Setup
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
