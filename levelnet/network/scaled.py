"""A reduced network with changed constants, from the same network with the measured ones."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TypeVar

from ..atomic.helium_levels import HeliumLevels
from ..atomic.levels import LevelSet
from ..atomic.physics import UNCHANGED, Scales
from ..background.conditions import Conditions
from ..errors import RangeError
from .reduced import KeptLevels, Reduced, ReducedRates

Levels = TypeVar("Levels", KeptLevels, LevelSet, HeliumLevels)


def scaled_levels(levels: Levels, scales: Scales) -> Levels:
    """Levels with every energy scaled: the kept ones, or all of an atom."""
    return replace(
        levels,
        energy_ev=levels.energy_ev * scales.energy,
        ionization_energy_ev=levels.ionization_energy_ev * scales.energy,
    )


def as_measured(conditions: Conditions, scales: Scales) -> Conditions:
    """Conditions under which the atom with measured constants has the same populations."""
    return conditions._replace(
        radiation_temperature_k=conditions.radiation_temperature_k / scales.energy,
        matter_temperature_k=conditions.matter_temperature_k / scales.energy,
        hydrogen_density_cm3=conditions.hydrogen_density_cm3 * scales.density,
    )


def scaled_rates(rates: ReducedRates, scales: Scales) -> ReducedRates:
    """Rates of the changed atom at T from those of the measured one at T / scales.energy.

    Logarithmic slopes stay.
    """
    return rates._replace(
        recombination=rates.recombination * scales.recombination,
        log_photoionization=rates.log_photoionization + math.log(scales.line_rate),
        exchange=rates.exchange * scales.line_rate,
    )


@dataclass(frozen=True, slots=True, eq=False)
class ScaledReduction:
    """A reduced network with changed constants.

    Attributes
    ----------
    measured : Reduced
        The network with the measured constants.
    scales : Scales
        What the change does.
    """

    measured: Reduced
    scales: Scales

    @property
    def kept(self) -> KeptLevels:
        """The kept levels, energies scaled."""
        return scaled_levels(self.measured.kept, self.scales)

    def rates(self, radiation_temperature_k: float, matter_temperature_k: float) -> ReducedRates:
        """Effective rates; RangeError outside the range of the measured network."""
        unit = self.scales.energy
        try:
            inner = self.measured.rates(radiation_temperature_k / unit, matter_temperature_k / unit)
        except RangeError as error:
            raise RangeError(f"{error} (temperatures over {unit:.6g}, constants changed)") from None
        return scaled_rates(inner, self.scales)


def with_scales(reduced: Reduced, scales: Scales) -> Reduced:
    """`reduced` itself where nothing is changed, else its scaled form."""
    return reduced if scales == UNCHANGED else ScaledReduction(reduced, scales)
