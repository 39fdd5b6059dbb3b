"""The kept levels in the quasi-steady state: populations and flow to the ground state.

With x_B the Boltzmann populations over the ground state at T_r and x = x_B + d, the balance of the
kept levels reads

    (M + K) d = r + (s - K x_B),   M = diag(B_i + sum_j R_ij) - R^T,
    r_i = a_i - B_i x_B,i = a_i [1 - exp(ln B_i x_B,i - ln a_i)],   a_i = A_i n_H x_e x_p,

since exchange cancels exactly in Boltzmann equilibrium. The net flow to the ground state,
K d - (s - K x_B), is then a product of a rate and a departure, never the difference of two large
flows.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import lapack

from .. import constants as const
from ..arrays import FloatArray
from ..background.conditions import Conditions
from ..errors import Outcome, SolveError
from .coupling import GroundCoupling
from .reduced import KeptLevels, ReducedRates


@dataclass(frozen=True, slots=True, eq=False)
class KeptSolution:
    """Quasi-steady kept levels at one set of conditions.

    Attributes
    ----------
    log_boltzmann : ndarray, shape (n_kept,)
        ln x_B.
    departure : ndarray, shape (n_kept,)
        d = x - x_B, per hydrogen nucleus.
    flow : ndarray, shape (n_kept,), s^-1
        Net flow to the ground state out of each kept level, per hydrogen nucleus.
    capture : ndarray, shape (n_kept,), s^-1
        A_i n_H x_e x_p.
    lift : ndarray, shape (n_kept,), s^-1
        B_i x_B,i.
    recombination : ndarray, shape (n_kept,), s^-1
        r_i, their difference.
    matrix : ndarray, shape (n_kept, n_kept), s^-1
        M + K.
    """

    log_boltzmann: FloatArray
    departure: FloatArray
    flow: FloatArray
    capture: FloatArray
    lift: FloatArray
    recombination: FloatArray
    matrix: FloatArray

    @property
    def net_flow(self) -> float:
        """Net recombinations per hydrogen nucleus and second."""
        return float(self.flow.sum())

    @property
    def log_population(self) -> FloatArray:
        """Natural log of the populations per hydrogen nucleus; SolveError if not positive."""
        # Where x_B leaves the doubles, d is the population.
        population = np.exp(self.log_boltzmann) + self.departure
        if np.any(population <= 0.0):
            outcome = Outcome.NONPOSITIVE_POPULATION
            raise SolveError(outcome.value, outcome=outcome)
        return np.log(population)

    def slowest_relaxation(self) -> float:
        """Smallest relaxation rate of the kept levels, s^-1; 0 where rounding hides it."""
        return max(0.0, float(np.min(np.linalg.eigvals(self.matrix).real)))


def log_boltzmann_populations(
    kept: KeptLevels, radiation_temperature_k: float, ground_fraction: float
) -> FloatArray:
    """Natural log of the populations in Boltzmann equilibrium with the ground state at T_r."""
    kt = const.BOLTZMANN_EV_K * radiation_temperature_k
    weight = ground_fraction * kept.statistical_weight / kept.ground_weight
    log_population: FloatArray = np.log(weight) - kept.energy_ev / kt
    return log_population


def solve_kept(
    kept: KeptLevels, rates: ReducedRates, coupling: GroundCoupling, conditions: Conditions
) -> KeptSolution:
    """Solve the kept levels.

    Parameters
    ----------
    kept : KeptLevels
        The kept levels.
    rates : ReducedRates
        The reduced network at these temperatures.
    coupling : GroundCoupling
        Lines and two-photon decay to the ground state.
    conditions : Conditions
        Densities and fractions.

    Returns
    -------
    KeptSolution
        Populations and flows.

    Raises
    ------
    SolveError
        If the matrix is singular (a kept level has no exit).
    """
    log_boltzmann = log_boltzmann_populations(
        kept, conditions.radiation_temperature_k, conditions.ground_fraction
    )
    pairs = (
        conditions.hydrogen_density_cm3 * conditions.electron_fraction * conditions.ionized_fraction
    )
    capture = rates.recombination * pairs
    log_lift = rates.log_photoionization + log_boltzmann
    recombination = -capture * np.expm1(log_lift - np.log(capture))
    exchange = rates.exchange
    matrix = coupling.loss - exchange.T
    diagonal = np.einsum("ii->i", matrix)
    diagonal += exchange.sum(axis=1) + np.exp(rates.log_photoionization)
    _, _, departure, status = lapack.dgesv(matrix, recombination + coupling.excess_source)
    if status:
        raise SolveError(Outcome.SINGULAR.value)
    flow = coupling.loss @ departure - coupling.excess_source
    return KeptSolution(
        log_boltzmann, departure, flow, capture, np.exp(log_lift), recombination, matrix
    )
