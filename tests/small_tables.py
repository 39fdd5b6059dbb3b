"""Small tables of effective rates that several test files look at; each is distilled once."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

from levelnet.distilled.build import distill
from levelnet.distilled.table import EffectiveTable
from tests.small_runs import small_setup


@lru_cache(maxsize=8)
def small_table(
    lines: str = "sobolev",
    two_photon: str = "spontaneous",
    lyman: int = 1,
    n_max: int = 5,
    kept: tuple[tuple[int, int], ...] | None = None,
    **parts: Any,
) -> EffectiveTable:
    """Table of a small atom without a certificate; its title holds what ends comments in C."""
    chosen = {"hydrogen": lines, "two_photon": two_photon, "lyman_lines": lyman}
    title = 'invented: "Lantern" array */ /* ??/ \u03b1-test\nsecond line'
    setup = small_setup(n_max, lines=chosen, title=title, **parts)
    return distill(setup, kept=kept, tolerance=1e-7, certify=False)
