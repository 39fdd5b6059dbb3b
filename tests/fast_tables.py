"""Tables of small atoms for the tests of the fast history; each is distilled once."""

from __future__ import annotations

from functools import lru_cache

from levelnet.distilled.build import distill
from levelnet.distilled.table import EffectiveTable
from tests.small_runs import small_setup


@lru_cache(maxsize=4)
def small_table(n_max: int = 8, lyman: int = 1, more: bool = False) -> EffectiveTable:
    """Table of a small atom; `more` keeps all of n = 3 besides what the lines need."""
    kept = [(2, 0), (2, 1), (3, 0), (3, 1), (3, 2)] if more else None
    setup = small_setup(n_max, lines={"lyman_lines": lyman})
    return distill(setup, kept=kept, tolerance=1e-9, certify=False)
