"""Escape treatments of the He I lines to the ground state.

With P the escape probability of a line, S that of Sobolev, f the blackbody and u the distortion
on the blue side,

    K x - s = A {P [x_u (1+f) - g x_l f] + S f (u - 1)(x_u - g x_l)},

the continuum inside a line being a blackbody, so that the flow vanishes in equilibrium exactly.
What comes from above meets the core of the line before hydrogen can absorb it: wherever
anything is left of it after the way between two lines, hundreds of Doppler widths, the continuum
across the core is thin. It is therefore absorbed with S.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import ClassVar, NamedTuple

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..background.conditions import Conditions
from ..network.coupling import GroundCoupling, blackbody_coupling
from ..network.reduced import KeptLevels
from ..network.solve import log_boltzmann_populations
from .helium_lines import HeliumGroundLines
from .helium_past import HeliumBlueSide
from .sobolev import escape_probability, escape_slope, sobolev_optical_depth


class Seen(NamedTuple):
    """What the lines of helium see of the rest.

    Attributes
    ----------
    neutral_hydrogen_cm3 : float, cm^-3
        n_HI.
    blue : HeliumBlueSide or None
        The field on the blue sides; None: the blackbody.
    """

    neutral_hydrogen_cm3: float
    blue: HeliumBlueSide | None = None


class Chances(NamedTuple):
    """Escape probability of every line and its derivatives; arrays of shape (n_lines,).

    Attributes
    ----------
    value, by_depth, by_continuum, by_temperature : ndarray, dimensionless
        P, and by ln of tau, of the depth of the continuum per ln nu, and of T_r.
    validity : mapping of str to ndarray
        Figures per line.
    by_ground_rate, by_other_decays : ndarray, dimensionless, or None
        By ln of the rate to the ground state and of all other decays of the upper level, tau held:
        through the natural width and the incoherent fraction; None where neither counts.
    """

    value: FloatArray
    by_depth: FloatArray
    by_continuum: FloatArray
    by_temperature: FloatArray
    validity: dict[str, FloatArray]
    by_ground_rate: FloatArray | None = None
    by_other_decays: FloatArray | None = None


@dataclass(frozen=True, slots=True)
class HeliumTreatment:
    """What all treatments share; a line is lit by another where its record says so (`lit_by`).

    Attributes
    ----------
    name : str
        As in a setup file.
    absorbs : bool
        Whether neutral hydrogen absorbs, inside lines and between them.
    assumes, holds_for : tuple of str
        Short sentences; validity figures and their limits.
    leaves_out : str
        Why escape is another with the continuum, partial redistribution and diffusion; "" with
        all three.
    """

    name: ClassVar[str]
    absorbs: ClassVar[bool] = False
    assumes: ClassVar[tuple[str, ...]]
    holds_for: ClassVar[tuple[str, ...]]

    @property
    def leaves_out(self) -> str:
        """As said above."""
        return "neutral hydrogen absorbs inside the line, which this treatment leaves out"

    def couple(
        self,
        lines: HeliumGroundLines,
        kept: KeptLevels,
        conditions: Conditions,
        seen: Seen,
    ) -> GroundCoupling:
        """Give K and s of the net flow to the ground state, and their exact slopes.

        Parameters
        ----------
        lines : HeliumGroundLines
            The lines.
        kept : KeptLevels
            The kept levels of He I.
        conditions : Conditions
            Densities and fractions of helium.
        seen : Seen
            Neutral hydrogen, and the fields that lines above have sent.
        """
        radiation_k = conditions.radiation_temperature_k
        exponent = lines.energy_ev / (const.BOLTZMANN_EV_K * radiation_k)
        inverse = 1.0 / -np.expm1(-exponent)  # 1 + f
        depth = sobolev_optical_depth(
            lines.einstein_a_per_s,
            lines.wavelength_cm,
            lines.weight_ratio,
            conditions.hydrogen_density_cm3 * conditions.ground_fraction,
            conditions.hubble_rate_per_s,
        )
        chance = self.escape(lines, conditions, depth, seen.neutral_hydrogen_cm3)
        rate = lines.einstein_a_per_s * inverse
        # d ln(1+f)/d ln T = x f.
        warm = chance.value * exponent * np.exp(-exponent) * inverse
        by_line = rate * np.stack(
            [chance.value, chance.by_depth, chance.by_temperature + warm, chance.by_continuum]
        )
        validity = {
            "optical_depth": depth,
            "escape_probability": chance.value,
            **chance.validity,
        }
        log_boltzmann = log_boltzmann_populations(kept, radiation_k, conditions.ground_fraction)
        lift = None
        if seen.blue is not None:
            more, lift = _lit(lines, kept, radiation_k, depth, log_boltzmann, seen.blue)
            by_line[:3] += more
            validity["log_blue_side"] = seen.blue.log_distortion
        # Two lines may share an upper level: 2 3P1 and 2 3P2.
        onto = np.equal.outer(lines.upper, np.arange(len(kept))).astype(float)
        loss, column, heat, continuum = by_line @ onto
        coupling = blackbody_coupling(loss, column, heat, np.exp(log_boltzmann), validity)
        if lift is None:
            return replace(coupling, slope_continuum=np.diag(continuum))
        source, ground, time, between = lift @ onto
        return replace(
            coupling,
            source=coupling.source + source,
            slope_continuum=np.diag(continuum),
            excess_source=source,
            excess_by_ground=ground,
            excess_by_time=time,
            excess_by_continuum=between,
        )

    def escape(
        self,
        lines: HeliumGroundLines,
        conditions: Conditions,
        optical_depth: FloatArray,
        neutral_hydrogen_cm3: float,
    ) -> Chances:
        """Escape probability of every line and its derivatives; here Sobolev's."""
        chance = escape_probability(optical_depth)
        nothing = np.zeros_like(chance)
        return Chances(chance, chance * escape_slope(optical_depth), nothing, nothing, {})


def _lit(
    lines: HeliumGroundLines,
    kept: KeptLevels,
    radiation_temperature_k: float,
    depth: FloatArray,
    log_boltzmann: FloatArray,
    blue: HeliumBlueSide,
) -> tuple[FloatArray, FloatArray]:
    """Give what the distortion on the blue sides adds: A S f (u - 1)(x_u - g x_l).

    Returns
    -------
    ndarray, shape (3, n_lines), s^-1
        To K, and to its slopes by ln of tau and of T_r.
    ndarray, shape (4, n_lines), s^-1
        The excess source; its slopes by ln of the ground population, by ln a with the populations
        held, and by ln n_HI between the lines.
    """
    kt = const.BOLTZMANN_EV_K * radiation_temperature_k
    exponent, log_distortion = lines.energy_ev / kt, blue.log_distortion
    inverse = 1.0 / -np.expm1(-exponent)
    slope = escape_slope(depth)
    rate = lines.einstein_a_per_s * escape_probability(depth)
    # f (u - 1): each factor alone leaves the doubles in a cold field.
    more = rate * (np.exp(log_distortion - exponent) - np.exp(-exponent)) * inverse
    raised = rate * np.exp(log_boltzmann[lines.upper])
    lit = rate * np.exp(log_boltzmann[lines.upper] + log_distortion)
    lift = np.where(
        log_distortion < 1.0, raised * np.expm1(np.minimum(log_distortion, 1.0)), lit - raised
    )
    # The Boltzmann population goes by the energy of the term, the field by that of the photon.
    excited = kept.energy_ev[lines.upper] / kt
    by_time = lift * (slope * (-3.0 - blue.hubble_slope) - excited) + lit * blue.slope
    return (
        np.stack([more, more * slope, more * exponent * inverse]),
        np.stack([lift, lift * (1.0 + slope), by_time, lit * blue.by_continuum]),
    )


@dataclass(frozen=True, slots=True)
class HeliumSobolev(HeliumTreatment):
    """Each line alone, photons redshifting out of it: P = (1 - e^-tau)/tau."""

    name: ClassVar[str] = "sobolev"
    assumes: ClassVar[tuple[str, ...]] = (
        "Complete redistribution over the line profile.",
        "Lines do not overlap; the field on the blue side is the blackbody.",
        "Neutral hydrogen does not absorb inside a line.",
    )
    holds_for: ClassVar[tuple[str, ...]] = (
        "z above 2200, where neutral hydrogen is too rare to absorb inside the 584 A line; below, "
        "He I recombines much later than in truth (Switzer & Hirata 2008, Phys. Rev. D 77, "
        "083006), and x_e is up to 2 per cent too high near z = 1800.",
    )


@dataclass(frozen=True, slots=True)
class HeliumSobolevFeedback(HeliumTreatment):
    """Sobolev, each line lit from its blue side by what the line above has let through."""

    name: ClassVar[str] = "sobolev_feedback"
    assumes: ClassVar[tuple[str, ...]] = (
        "Complete redistribution over the line profile.",
        "Photons that leave a line redshift unchanged to the next one below.",
        "Neutral hydrogen absorbs neither inside a line nor between lines.",
    )
    holds_for: ClassVar[tuple[str, ...]] = HeliumSobolev.holds_for
