"""Helium at one output redshift, before it becomes a record."""

from __future__ import annotations

import math
from typing import NamedTuple

from ..network.populations import LevelPopulations
from .helium import HeliumFractions
from .local import Local


class HeliumMoment(NamedTuple):
    """Helium at one output redshift.

    Attributes
    ----------
    fractions : HeliumFractions
        Of its nuclei.
    first : Local or None
        Kept levels of He I; None where helium is held.
    levels : tuple of LevelPopulations
        He I, then He II where it has levels.
    relaxation_hubble : float, dimensionless
        Slowest relaxation of the kept levels over the Hubble rate; infinite where it does not
        count.
    electrons_per_hydrogen : float, dimensionless
        x_e.
    settling_hubble : float, dimensionless
        As in :class:`HeliumFigures`.
    """

    fractions: HeliumFractions
    first: Local | None
    levels: tuple[LevelPopulations, ...]
    relaxation_hubble: float
    electrons_per_hydrogen: float
    settling_hubble: float = math.nan
