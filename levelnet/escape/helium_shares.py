"""What each line of He I alone puts into the coupling to the ground state, and what that hangs on.

Two lines may share an upper level, so that the coupling of all does not tell them apart.
"""

from __future__ import annotations

from dataclasses import replace
from typing import NamedTuple

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..background.conditions import Conditions
from ..network.coupling import GroundCoupling, plus
from ..network.reduced import KeptLevels
from .helium_lines import HeliumGroundLines
from .helium_past import HeliumBlueSide
from .helium_treatment import HeliumTreatment, Seen
from .sobolev import sobolev_optical_depth


class LineShares(NamedTuple):
    """Parts of K and of the excess source at the upper levels; shape (n_lines,), s^-1.

    Attributes
    ----------
    loss, excess : ndarray
        What the line adds to K and to the excess source.
    loss_by_depth, loss_by_continuum : ndarray
        By ln of tau, and of the depth of the H I continuum inside the line.
    loss_by_ground_rate, loss_by_other_decays : ndarray
        Through the width of the upper level alone: by ln of its rate to the ground state, and of
        all its other decays.
    excess_by_depth, excess_by_field : ndarray
        By ln of tau, and of the distortion on the blue side.
    """

    loss: FloatArray
    excess: FloatArray
    loss_by_depth: FloatArray
    loss_by_continuum: FloatArray
    loss_by_ground_rate: FloatArray
    loss_by_other_decays: FloatArray
    excess_by_depth: FloatArray
    excess_by_field: FloatArray


def line_shares(
    treatment: HeliumTreatment,
    lines: HeliumGroundLines,
    kept: KeptLevels,
    conditions: Conditions,
    seen: Seen,
    factor: FloatArray | None = None,
) -> LineShares:
    """Ask the treatment about each line on its own; parameters are those of `with_factors`."""
    found = np.zeros((len(LineShares._fields), len(lines.names)))
    for line, upper in enumerate(lines.upper.tolist()):
        alone = only(lines, line)
        here = treatment.couple(alone, kept, conditions, _seen_by(seen, line))
        found[0, line], found[1, line] = here.loss[upper, upper], here.excess_source[upper]
        found[2, line] = here.slope_column[upper, upper]
        if here.slope_continuum is not None:
            found[3, line] = here.slope_continuum[upper, upper]
        found[4:6, line] = _by_width(treatment, alone, conditions, seen)
        if here.excess_by_ground is not None and here.excess_by_continuum is not None:
            # A lift goes as the ground population, directly and through tau.
            found[6, line] = here.excess_by_ground[upper] - here.excess_source[upper]
            found[7, line] = here.excess_by_continuum[upper]
    return LineShares(*(found if factor is None else found * factor))


def with_factors(
    treatment: HeliumTreatment,
    lines: HeliumGroundLines,
    kept: KeptLevels,
    conditions: Conditions,
    seen: Seen,
    factor: FloatArray | None,
) -> GroundCoupling:
    """Coupling with the net flow of each line times a factor, its depth held.

    Parameters
    ----------
    treatment, lines, kept, conditions, seen
        As for :meth:`levelnet.escape.helium_treatment.HeliumTreatment.couple`.
    factor : ndarray, shape (n_lines,), dimensionless, or None
        Factors; None: all are 1.
    """
    coupling = treatment.couple(lines, kept, conditions, seen)
    if factor is None:
        return coupling
    for line in np.flatnonzero(factor != 1.0).tolist():
        blue = seen.blue
        if blue is not None:
            here = slice(line, line + 1)
            blue = HeliumBlueSide(
                blue.log_distortion[here],
                blue.slope[here],
                blue.by_continuum[here],
                blue.hubble_slope,
            )
        alone = treatment.couple(only(lines, line), kept, conditions, seen._replace(blue=blue))
        coupling = plus(coupling, alone, float(factor[line]) - 1.0)
    return coupling


def only(lines: HeliumGroundLines, line: int) -> HeliumGroundLines:
    """One line alone, lit by none of its like."""
    here = slice(line, line + 1)
    others = lines.others
    return HeliumGroundLines(
        lines.names[here],
        lines.upper[here],
        lines.einstein_a_per_s[here],
        lines.energy_ev[here],
        lines.weight_ratio[here],
        lines.decay_rate_per_s[here],
        lines.ground_rate_per_s[here],
        replace(
            others,
            energy_ev=others.energy_ev[here],
            rate_per_s=others.rate_per_s[here],
            spontaneous=others.spontaneous[here],
        ),
        lines.hydrogen_cross_section_cm2[here],
        np.array([-1]),
        np.array([-1]),
    )


def _seen_by(seen: Seen, line: int) -> Seen:
    """What one line sees; the slope by the continuum becomes that by ln of the field itself."""
    if seen.blue is None:
        return seen
    here = slice(line, line + 1)
    distortion, slope = seen.blue.log_distortion[here], seen.blue.slope[here]
    return seen._replace(blue=HeliumBlueSide(distortion, slope, np.ones(1), seen.blue.hubble_slope))


def _by_width(
    treatment: HeliumTreatment, alone: HeliumGroundLines, conditions: Conditions, seen: Seen
) -> tuple[float, float]:
    depth = sobolev_optical_depth(
        alone.einstein_a_per_s,
        alone.wavelength_cm,
        alone.weight_ratio,
        conditions.hydrogen_density_cm3 * conditions.ground_fraction,
        conditions.hubble_rate_per_s,
    )
    chance = treatment.escape(alone, conditions, depth, seen.neutral_hydrogen_cm3)
    if chance.by_ground_rate is None or chance.by_other_decays is None:
        return 0.0, 0.0
    kt = const.BOLTZMANN_EV_K * conditions.radiation_temperature_k
    # The line adds A (1 + f) P to K.
    rate = float(alone.einstein_a_per_s[0] / -np.expm1(-alone.energy_ev[0] / kt))
    return rate * float(chance.by_ground_rate[0]), rate * float(chance.by_other_decays[0])
