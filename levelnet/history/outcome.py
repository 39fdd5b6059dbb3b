"""How far a computed history may be trusted: the outcome of a run beyond its integration."""

from __future__ import annotations

from collections.abc import Iterable

from ..errors import Outcome
from ..network.tabulation import TabulatedReduction
from .cost import table_tolerance
from .integrate import Integrated
from .local import Local
from .setup import Setup

SLOW_RELAXATION = 100.0
"""Relaxation over Hubble rate of the kept levels below which "quasi-steady" is doubtful."""


def relaxation_hubble(local: Local) -> float:
    """Slowest relaxation rate of the kept levels over the Hubble rate (dimensionless)."""
    return local.solution.slowest_relaxation() / local.conditions.hubble_rate_per_s


def outcome_of(setup: Setup, integrated: Integrated, relaxations: Iterable[float]) -> Outcome:
    """Judge a run.

    Parameters
    ----------
    setup : Setup
        The run.
    integrated : Integrated
        Its slow variables.
    relaxations : iterable of float, dimensionless
        From :func:`relaxation_hubble`, wherever the history is used.

    Returns
    -------
    Outcome
        That of the integration where it failed; else whether the table was fine enough and the
        levels were quasi-steady.
    """
    outcome, table = integrated.trajectory.outcome, integrated.measured
    if not outcome.ok:
        return outcome
    if isinstance(table, TabulatedReduction):
        if table.interpolation_error > table_tolerance(setup):
            return Outcome.TABLE_TOO_COARSE
    if integrated.helium and integrated.helium.interpolation_error > table_tolerance(setup):
        return Outcome.TABLE_TOO_COARSE
    if any(one < SLOW_RELAXATION for one in relaxations):
        return Outcome.QUASI_STEADY_LOST
    return outcome
