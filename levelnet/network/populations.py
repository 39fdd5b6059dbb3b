"""Populations of every level once the kept ones are known, in logarithms."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from ..atomic.detailed_balance import log_saha_factor
from ..background.conditions import Conditions
from .assembly import FactoredInterior, recombination_coefficients


class LevelPopulations(NamedTuple):
    """Populations of one species at one redshift.

    Attributes
    ----------
    log_population : ndarray, shape (n_levels,)
        Natural log of the population per hydrogen nucleus.
    log_departure : ndarray, shape (n_levels,)
        Natural log of the departure from Saha-Boltzmann at T_m with the actual n_e and n_ion.
    conservation_error : float
        |outflow/inflow - 1| of the interior, summed over its levels.
    """

    log_population: FloatArray
    log_departure: FloatArray
    conservation_error: float


def populations(
    factored: FactoredInterior, log_kept: FloatArray, conditions: Conditions
) -> LevelPopulations:
    """Solve every interior level, fed by recombination and by the kept levels.

    Parameters
    ----------
    factored : FactoredInterior
        The interior at this T_r.
    log_kept : ndarray, shape (n_kept,)
        Natural log of the populations of the kept levels per hydrogen nucleus.
    conditions : Conditions
        Densities and fractions; the ground state's population is among them.

    Returns
    -------
    LevelPopulations
        All levels, in the order of the ladder's LevelSet.
    """
    ladder, inside = factored.ladder, factored.ladder.interior
    pairs = (
        conditions.hydrogen_density_cm3 * conditions.electron_fraction * conditions.ionized_fraction
    )
    alpha = recombination_coefficients(
        ladder, factored.radiation_temperature_k, conditions.matter_temperature_k
    )
    with np.errstate(divide="ignore"):
        log_source = np.log(alpha * pairs)
    for log_x, lines in zip(log_kept, factored.kept_lines, strict=True):
        log_source[lines.position] = np.logaddexp(log_source[lines.position], log_x + lines.log_out)
    log_population = np.full(len(ladder.levels), -np.inf)
    error = 0.0
    if inside.n_unknowns:
        source = log_source[inside.position]
        source[inside.idle] = -np.inf
        solution = factored.log_populations(source)
        log_population[inside.position] = solution
        error = _imbalance(factored, source, solution)
    log_population[0] = np.log(conditions.ground_fraction)
    log_population[ladder.kept_position] = log_kept
    log_saha = np.log(pairs) + log_saha_factor(
        ladder.levels.statistical_weight,
        ladder.levels.ionization_energy_ev,
        conditions.matter_temperature_k,
        ladder.charge,
    )
    return LevelPopulations(log_population, log_population - log_saha, error)


def _imbalance(factored: FactoredInterior, log_source: FloatArray, log_x: FloatArray) -> float:
    """|outflow/inflow - 1|; both sums taken relative to the largest source."""
    top = log_source.max()
    outflow = factored.photoionization + factored.to_kept.sum(axis=0)
    inflow = np.exp(log_source - top).sum()
    live = ~factored.ladder.interior.idle
    return float(abs((np.exp(log_x[live] - top) @ outflow[live]) / inflow - 1.0))
