"""All the network knows of the lines to the ground state: a small loss matrix and a source."""

from __future__ import annotations

from dataclasses import dataclass, field, fields, replace

import numpy as np

from ..arrays import FloatArray, IntArray


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
        s less K times the Boltzmann populations at T_r over the ground state: exactly zero where
        the field outside the lines is a blackbody.
    excess_by_ground, excess_by_time : ndarray, shape (n_kept,), s^-1
        Its derivatives by ln of the ground population, and by ln a with the populations held; None
        where it is zero.
    slope_continuum : ndarray, shape (n_kept, n_kept), s^-1, or None
        dK/d ln(n_HI/H), where absorption by neutral hydrogen inside a line of helium counts.
    excess_by_continuum : ndarray, shape (n_kept,), s^-1, or None
        Derivative of the excess source by ln n_HI, where it counts between the lines.
    validity : mapping of str to ndarray
        Figures per line by which the treatment can be judged.
    """

    loss: FloatArray
    source: FloatArray
    slope_column: FloatArray
    slope_temperature: FloatArray
    excess_source: FloatArray
    validity: dict[str, FloatArray] = field(default_factory=dict)
    excess_by_ground: FloatArray | None = None
    excess_by_time: FloatArray | None = None
    slope_continuum: FloatArray | None = None
    excess_by_continuum: FloatArray | None = None


def blackbody_coupling(
    loss: FloatArray,
    slope_column: FloatArray,
    slope_temperature: FloatArray,
    boltzmann: FloatArray,
    validity: dict[str, FloatArray] | None = None,
) -> GroundCoupling:
    """Coupling of levels that each lose `loss` (a vector) into a blackbody field.

    The source follows from detailed balance: s = K x_B, x_B the populations in Boltzmann
    equilibrium with the ground state at T_r.
    """
    return GroundCoupling(
        np.diag(loss),
        loss * boltzmann,
        np.diag(slope_column),
        np.diag(slope_temperature),
        np.zeros_like(loss),
        validity or {},
    )


def with_decay(
    coupling: GroundCoupling, kept: int, rate_per_s: float, slope: float, boltzmann: float
) -> GroundCoupling:
    """Add a decay of one kept level to the ground state, and its inverse, to a coupling.

    Parameters
    ----------
    coupling : GroundCoupling
        What there is.
    kept : int
        Position of the decaying level.
    rate_per_s : float, s^-1
        Its rate.
    slope : float, dimensionless
        d ln rate / d ln T_r.
    boltzmann : float, dimensionless
        Population of the level in Boltzmann equilibrium with the ground state at T_r.
    """
    loss, source = coupling.loss.copy(), coupling.source.copy()
    slope_temperature = coupling.slope_temperature.copy()
    loss[kept, kept] += rate_per_s
    source[kept] += rate_per_s * boltzmann
    slope_temperature[kept, kept] += rate_per_s * slope
    return replace(coupling, loss=loss, source=source, slope_temperature=slope_temperature)


def plus(coupling: GroundCoupling, other: GroundCoupling, share: float) -> GroundCoupling:
    """A coupling and `share` times another one; `validity` stays that of the first."""
    sums = {}
    for part in fields(coupling):
        one, two = getattr(coupling, part.name), getattr(other, part.name)
        if part.name != "validity" and two is not None:
            sums[part.name] = share * two if one is None else one + share * two
    return replace(coupling, **sums)


def with_line_factors(
    coupling: GroundCoupling, upper: IntArray, factor: FloatArray
) -> GroundCoupling:
    """Multiply the net flow of each line by a factor; detailed balance holds as before.

    Parameters
    ----------
    coupling : GroundCoupling
        Of the lines alone.
    upper : ndarray of int, shape (n_lines,)
        Position of the upper level of each line among the kept levels.
    factor : ndarray, shape (n_lines,), dimensionless
        Factors.

    Returns
    -------
    GroundCoupling
        Rows of K, of its slopes and of the sources multiplied; `validity` stays what the treatment
        said.
    """
    by_level = np.ones(len(coupling.source))
    by_level[upper] = factor
    return replace(
        coupling,
        loss=coupling.loss * by_level[:, None],
        source=coupling.source * by_level,
        slope_column=coupling.slope_column * by_level[:, None],
        slope_temperature=coupling.slope_temperature * by_level[:, None],
        excess_source=coupling.excess_source * by_level,
        excess_by_ground=_times(coupling.excess_by_ground, by_level),
        excess_by_time=_times(coupling.excess_by_time, by_level),
        slope_continuum=_times(coupling.slope_continuum, by_level[:, None]),
        excess_by_continuum=_times(coupling.excess_by_continuum, by_level),
    )


def _times(values: FloatArray | None, factor: FloatArray) -> FloatArray | None:
    return None if values is None else values * factor
