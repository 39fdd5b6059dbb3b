"""He I of n_max 4 and its lines to the ground state, and a plasma half way through He I."""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np

from levelnet.atomic.helium_ground import INTERCOMBINATION_PER_S
from levelnet.background.conditions import Conditions
from levelnet.escape.helium_lines import (
    HeliumGroundLines,
    HigherLines,
    helium_ground_lines,
    kept_terms,
)
from levelnet.network.helium import HeliumLadders, helium_ladders

# Near z = 2000 of an invented universe; densities and fractions of helium.
HALF_WAY = Conditions(5455.0, 5454.9, 119.0, 1.66e-13, 13.0, 0.55, 0.45)
NEUTRAL_HYDROGEN_CM3 = 8.7e-3  # x_HI = 6e-6


@lru_cache(maxsize=4)
def small_ladders(higher: HigherLines = "closed", n_max: int = 4) -> HeliumLadders:
    """He I with what the lines ask for kept."""
    return helium_ladders(n_max, kept_terms(n_max, higher))


@lru_cache(maxsize=8)
def small_lines(
    feedback: bool = False,
    higher: HigherLines = "closed",
    rate_per_s: float = INTERCOMBINATION_PER_S,
    n_max: int = 4,
) -> HeliumGroundLines:
    """Lines of it."""
    return helium_ground_lines(small_ladders(higher, n_max), feedback, higher, rate_per_s)


def changed(c: Conditions, name: str, step: float) -> Conditions:
    """Conditions with ln of one of them changed."""
    return c._replace(**{name: getattr(c, name) * math.exp(step)})


def ratio_by(high: np.ndarray, low: np.ndarray, step: float) -> np.ndarray:
    """Central difference."""
    return (high - low) / (2.0 * step)
