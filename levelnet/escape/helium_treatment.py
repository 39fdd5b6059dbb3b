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
        loss, column, heat, continuum = np.zeros((4, len(kept)))
        # Two lines may share an upper level: 2 3P1 and 2 3P2.
        np.add.at(loss, lines.upper, rate * chance.value)
        np.add.at(column, lines.upper, rate * chance.by_depth)
        np.add.at(continuum, lines.upper, rate * chance.by_continuum)
        # d ln(1+f)/d ln T = x f.
        warm = exponent * np.exp(-exponent) * inverse
        np.add.at(heat, lines.upper, rate * (chance.by_temperature + chance.value * warm))
        boltzmann = np.exp(log_boltzmann_populations(kept, radiation_k, conditions.ground_fraction))
        validity = {
            "optical_depth": depth,
            "escape_probability": chance.value,
            **chance.validity,
        }
        coupling = blackbody_coupling(loss, column, heat, boltzmann, validity)
        coupling = replace(coupling, slope_continuum=np.diag(continuum))
        if seen.blue is None:
            return coupling
        return _lit(coupling, lines, kept, conditions, seen.blue)

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
    plain: GroundCoupling,
    lines: HeliumGroundLines,
    kept: KeptLevels,
    conditions: Conditions,
    blue: HeliumBlueSide,
) -> GroundCoupling:
    """Add what the distortion on the blue sides does: A S f (u - 1)(x_u - g x_l)."""
    upper, radiation_k = lines.upper, conditions.radiation_temperature_k
    exponent = lines.energy_ev / (const.BOLTZMANN_EV_K * radiation_k)
    inverse = 1.0 / -np.expm1(-exponent)
    depth = plain.validity["optical_depth"]
    rate, slope = lines.einstein_a_per_s * escape_probability(depth), escape_slope(depth)
    # f (u - 1): each factor alone leaves the doubles in a cold field.
    more = (np.exp(blue.log_distortion - exponent) - np.exp(-exponent)) * inverse
    log_all = log_boltzmann_populations(kept, radiation_k, conditions.ground_fraction)
    log_boltzmann = log_all[upper]
    lit = rate * np.exp(log_boltzmann + blue.log_distortion)
    lift = np.where(
        blue.log_distortion < 1.0,
        rate * np.exp(log_boltzmann) * np.expm1(np.minimum(blue.log_distortion, 1.0)),
        lit - rate * np.exp(log_boltzmann),
    )
    loss, column, heat, source, ground, time, continuum = np.zeros((7, len(kept)))
    np.add.at(loss, upper, rate * more)
    np.add.at(column, upper, rate * more * slope)
    np.add.at(heat, upper, rate * more * exponent * inverse)
    np.add.at(source, upper, lift)
    np.add.at(ground, upper, lift * (1.0 + slope))
    # The Boltzmann population goes by the energy of the term, the field by that of the photon.
    excited = kept.energy_ev[upper] / (const.BOLTZMANN_EV_K * radiation_k)
    by_time = lift * (slope * (-3.0 - blue.hubble_slope) - excited) + lit * blue.slope
    np.add.at(time, upper, by_time)
    np.add.at(continuum, upper, lit * blue.by_continuum)
    return replace(
        plain,
        loss=plain.loss + np.diag(loss),
        source=plain.source + loss * np.exp(log_all) + source,
        slope_column=plain.slope_column + np.diag(column),
        slope_temperature=plain.slope_temperature + np.diag(heat),
        excess_source=source,
        excess_by_ground=ground,
        excess_by_time=time,
        excess_by_continuum=continuum,
        validity={**plain.validity, "log_blue_side": blue.log_distortion},
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
