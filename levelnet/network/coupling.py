"""All the network knows of the lines to the ground state: a small loss matrix and a source."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from ..arrays import FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class GroundCoupling:
    """Net flow from the kept levels to the ground state, K x - s per hydrogen nucleus.

    Attributes
    ----------
    loss : ndarray, shape (n_kept, n_kept), s^-1
        K; off-diagonal where the photon field couples levels.
    source : ndarray, shape (n_kept,), s^-1
        s, what the photon field lifts from the ground state per hydrogen nucleus and second.
    slope_column, slope_temperature : ndarray, shape (n_kept, n_kept), s^-1
        dK/d ln(n_1s/H) and dK/d ln T_r, for the implicit step.
    excess_source : ndarray, shape (n_kept,), s^-1
        s less K times the Boltzmann populations at T_r over the ground state: exactly zero where the
        field outside the lines is a blackbody.
    memory : object
        What the treatment must remember to the next step; the network never looks inside.
    validity : mapping of str to ndarray
        Figures per line by which the treatment can be judged.
    """

    loss: FloatArray
    source: FloatArray
    slope_column: FloatArray
    slope_temperature: FloatArray
    excess_source: FloatArray
    memory: object = None
    validity: dict[str, FloatArray] = field(default_factory=dict)


def blackbody_coupling(
    loss: FloatArray,
    slope_column: FloatArray,
    slope_temperature: FloatArray,
    boltzmann: FloatArray,
    memory: object = None,
    validity: dict[str, FloatArray] | None = None,
) -> GroundCoupling:
    """Coupling of levels that each lose `loss` (a vector) into a blackbody field.

    The source follows from detailed balance: s = K x_B, x_B the populations in Boltzmann equilibrium
    with the ground state at T_r.
    """
    return GroundCoupling(
        np.diag(loss),
        loss * boltzmann,
        np.diag(slope_column),
        np.diag(slope_temperature),
        np.zeros_like(loss),
        memory,
        validity or {},
    )


def combine(first: GroundCoupling, second: GroundCoupling) -> GroundCoupling:
    """Add two couplings, such as Lyman lines and two-photon decay; memory is the first one's."""
    return GroundCoupling(
        first.loss + second.loss,
        first.source + second.source,
        first.slope_column + second.slope_column,
        first.slope_temperature + second.slope_temperature,
        first.excess_source + second.excess_source,
        first.memory,
        {**second.validity, **first.validity},
    )
