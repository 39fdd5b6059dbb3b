"""Populations of large atoms, kept output by output, so that a run that was killed goes on."""

from __future__ import annotations

import dataclasses
import functools
from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from ..network.populations import LevelPopulations
from ..pieces import Pieces, code_digest, content_key
from ..tables import list_tables
from .cost import node_seconds
from .setup import Setup

# A run whose populations take less, at all outputs together, is quickly done again.
_LONG_S = 20.0

HISTORY_CODE = (
    *("constants", "quantities", "tables", "kernels", "numerics", "atomic", "background"),
    *("network", "escape", "history"),
)
"""Parts of the package that a history depends on besides its setup."""


class LevelsAt(NamedTuple):
    """What the exact network gives at one output.

    Attributes
    ----------
    levels : LevelPopulations
        Populations of every level.
    lost_per_s : ndarray, shape (n_kept,), s^-1
        Rate at which each kept level goes anywhere but to the ground state.
    """

    levels: LevelPopulations
    lost_per_s: FloatArray


def setup_key(what: str, setup: Setup, *more: object) -> str:
    """Content name of something made from a setup, its title aside, by code and tables."""
    plain = dataclasses.replace(setup, title="")
    return content_key(what, code_digest(HISTORY_CODE), _tables(), plain.to_toml(), *more)


@functools.cache
def _tables() -> str:
    return content_key(*(one.sha256 for one in list_tables()))


class KeptLevels:
    """Gives populations at outputs: kept ones at once, else computed and kept.

    Parameters
    ----------
    setup : Setup
        The run.
    n_outputs : int
        How many outputs it has; where their work is short nothing is kept.
    pieces : Pieces or None
        Where.
    """

    def __init__(self, setup: Setup, n_outputs: int, pieces: Pieces | None) -> None:
        long = n_outputs * node_seconds(setup) > _LONG_S
        self._pieces = pieces if long else None
        self._key = setup_key("levels of a history", setup) if self._pieces else ""

    def at(self, redshift: float, compute: Callable[[], LevelsAt]) -> LevelsAt:
        """Populations at one output redshift, the same bits either way."""
        if self._pieces is None:
            return compute()
        key = content_key(self._key, redshift)
        found = self._pieces.get(key)
        if found is not None and set(found) == {"population", "departure", "error", "lost"}:
            levels = LevelPopulations(
                found["population"], found["departure"], float(found["error"])
            )
            return LevelsAt(levels, found["lost"])
        made = compute()
        population, departure, error = made.levels
        self._pieces.put(
            key,
            {
                "population": population,
                "departure": departure,
                "error": np.array(error),
                "lost": made.lost_per_s,
            },
        )
        return made
