"""Populations of every level of He I once the kept ones are known, in logarithms."""

from __future__ import annotations

import numpy as np

from ..arrays import FloatArray, IntArray
from ..atomic.detailed_balance import log_saha_factor
from ..atomic.helium_bound_free import ION_WEIGHT, helium_recombination_cm3_per_s
from ..background.conditions import Conditions
from .helium import HeliumLadders, Reduction, factor_helium
from .populations import LevelPopulations


def helium_populations(
    ladders: HeliumLadders, log_kept: FloatArray, conditions: Conditions
) -> LevelPopulations:
    """Solve every level of He I, fed by recombination and by the kept levels.

    Parameters
    ----------
    ladders : HeliumLadders
        The atom.
    log_kept : ndarray, shape (n_kept,)
        Natural log of the populations of the kept levels per helium nucleus.
    conditions : Conditions
        Temperatures, and densities and fractions of helium in place of hydrogen.

    Returns
    -------
    LevelPopulations
        Per helium nucleus, in the order of `ladders.levels`.
    """
    here = factor_helium(ladders, conditions.radiation_temperature_k)
    pairs = (
        conditions.hydrogen_density_cm3 * conditions.electron_fraction * conditions.ionized_fraction
    )
    source = pairs * helium_recombination_cm3_per_s(
        ladders.bound_free,
        conditions.matter_temperature_k,
        conditions.radiation_temperature_k,
        here.captured,
    )
    for log_x, lines in zip(log_kept, here.kept_lines, strict=True):
        source += np.exp(log_x) * lines.out
    levels = ladders.levels
    log_population = np.full(len(levels), -np.inf)
    fed = left = 0.0
    for side, inside in zip(here.interior, ladders.interior, strict=True):
        if side is None:
            continue
        into = np.where(inside.idle, 0.0, source[inside.position])
        found = side.populations(into)
        fed += into.sum()
        left += float(found @ _leaving(here, inside.position))
        with np.errstate(divide="ignore"):
            log_population[inside.position] = np.log(found)
    log_population[0] = np.log(conditions.ground_fraction)
    log_population[ladders.kept_position] = log_kept
    log_saha = np.log(pairs) + log_saha_factor(
        levels.statistical_weight / ION_WEIGHT,
        levels.ionization_energy_ev,
        conditions.matter_temperature_k,
        levels.nuclear_charge,
    )
    error = abs(left / fed - 1.0) if fed else 0.0
    return LevelPopulations(log_population, log_population - log_saha, error)


def _leaving(here: Reduction, position: IntArray) -> FloatArray:
    """Rate at which eliminated levels leave the interior, s^-1."""
    rates: FloatArray = here.photoionization_per_s[position] + here.to_kept[:, position].sum(axis=0)
    return rates
