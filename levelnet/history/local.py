"""Everything worked out for the kept levels of one ion at one time."""

from __future__ import annotations

from typing import NamedTuple

from ..background.conditions import Conditions
from ..network.coupling import GroundCoupling
from ..network.reduced import ReducedRates
from ..network.solve import KeptSolution


class Local(NamedTuple):
    """Everything computed at one time and state.

    Attributes
    ----------
    conditions : Conditions
        Where.
    rates : ReducedRates
        Of the interior.
    coupling : GroundCoupling
        To the ground state.
    solution : KeptSolution
        The kept levels.
    """

    conditions: Conditions
    rates: ReducedRates
    coupling: GroundCoupling
    solution: KeptSolution
