"""The family of line-escape treatments: one interface, one tuple of all members."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import ClassVar, Protocol

import numpy as np

from .. import constants as const
from ..arrays import FloatArray, IntArray, frozen_array
from ..background.conditions import Conditions
from ..network.coupling import GroundCoupling, blackbody_coupling
from ..network.reduced import KeptLevels
from ..network.solve import log_boltzmann_populations
from .blue_side import BlueSide
from .sobolev import escape_probability, escape_slope, sobolev_optical_depth


@dataclass(frozen=True, slots=True, eq=False)
class ResonanceLines:
    """Lines between kept levels and the ground state; every array has shape (n_lines,).

    Attributes
    ----------
    names : tuple of str
        "2p-1s", "3p-1s", ...
    upper : ndarray of int
        Position of the upper level among the kept levels.
    einstein_a_per_s : ndarray, s^-1
        Spontaneous rate.
    energy_ev : ndarray, eV
        Transition energy.
    weight_ratio : ndarray, dimensionless
        Statistical weight of the upper level over that of the ground state.
    decay_rate_per_s : ndarray, s^-1
        Spontaneous decay rate of the upper level in all its lines; sets the natural width.
    """

    names: tuple[str, ...]
    upper: IntArray
    einstein_a_per_s: FloatArray
    energy_ev: FloatArray
    weight_ratio: FloatArray
    decay_rate_per_s: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.names),)
        frozen_array(self, "upper", shape, int)
        for name in ("einstein_a_per_s", "energy_ev", "weight_ratio", "decay_rate_per_s"):
            frozen_array(self, name, shape)

    @property
    def wavelength_cm(self) -> FloatArray:
        """Vacuum wavelengths, cm."""
        return const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S / self.energy_ev


class LineTreatment(Protocol):
    """How photons of the resonance lines escape; a member of the family or a user's own object.

    A treatment answers from the conditions of the moment, and, if it `sees_blue_side`, from the
    field that the lines above have sent; what is remembered of them the run keeps. It may have
    `resolves`, of "wings" (true absorption and emission there, in time), "scattering" (with recoil)
    and "feedback": limits on what it resolves raise no warnings (`levelnet.history.limits`).

    Attributes
    ----------
    name : str
        As in a setup file.
    assumes : tuple of str
        Short sentences.
    holds_for : tuple of str
        Validity figures and their limits.
    keeps : tuple of (n, l)
        Levels to keep from elimination beyond 2s and the np of the open lines.
    """

    name: ClassVar[str]
    assumes: ClassVar[tuple[str, ...]]
    holds_for: ClassVar[tuple[str, ...]]
    keeps: ClassVar[tuple[tuple[int, int], ...]]

    def couple(
        self,
        lines: ResonanceLines,
        kept: KeptLevels,
        conditions: Conditions,
    ) -> GroundCoupling:
        """Give K and s of the net flow K x - s to the ground state at these conditions.

        The slopes of K by ln(n_1s/H) and ln T_r must be exact: the implicit step rests on them.
        `validity` may hold "optical_depth" and "escape_probability" per line, and "log_blue_side"
        and "log_red_side" where the treatment has a field of its own. One that `sees_blue_side`
        must give the depth: what a line sends down follows from it.
        """
        ...


@dataclass(frozen=True, slots=True)
class _Isolated:
    """What treatments share whose lines are alone and see the blackbody."""

    keeps: ClassVar[tuple[tuple[int, int], ...]] = ()

    def couple(
        self,
        lines: ResonanceLines,
        kept: KeptLevels,
        conditions: Conditions,
    ) -> GroundCoupling:
        """Couple each line by A P (1 + f) and the blackbody that fills it."""
        kt = const.BOLTZMANN_EV_K * conditions.radiation_temperature_k
        exponent = lines.energy_ev / kt
        emptiness = -np.expm1(-exponent)  # 1 + f = 1 / (1 - e^-x)
        depth = sobolev_optical_depth(
            lines.einstein_a_per_s,
            lines.wavelength_cm,
            lines.weight_ratio,
            conditions.hydrogen_density_cm3 * conditions.ground_fraction,
            conditions.hubble_rate_per_s,
        )
        chance, slope = self.escape(depth)
        rate = lines.einstein_a_per_s * chance / emptiness
        loss, by_column, by_temperature = np.zeros((3, len(kept)))
        # Two lines may share their upper level, so that each must be added.
        np.add.at(loss, lines.upper, rate)
        np.add.at(by_column, lines.upper, rate * slope)
        # d ln(1+f) / d ln T = x f; f underflows long before x f matters.
        heat = rate * exponent * np.exp(-exponent) / emptiness
        np.add.at(by_temperature, lines.upper, heat)
        boltzmann = np.exp(
            log_boltzmann_populations(
                kept, conditions.radiation_temperature_k, conditions.ground_fraction
            )
        )
        validity = {"optical_depth": depth, "escape_probability": chance}
        return blackbody_coupling(loss, by_column, by_temperature, boltzmann, validity)

    def escape(self, optical_depth: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Give the escape probability and its logarithmic slope in the optical depth."""
        raise NotImplementedError


@dataclass(frozen=True, slots=True)
class Closed(_Isolated):
    """No line photon escapes: atoms reach the ground state by two-photon decay alone."""

    name: ClassVar[str] = "closed"
    assumes: ClassVar[tuple[str, ...]] = (
        "Every photon of a resonance line is absorbed again in the same line.",
    )
    holds_for: ClassVar[tuple[str, ...]] = (
        "A lower bound on the speed of recombination; 2p has no exit below z ~ 300, where the "
        "quasi-steady state loses its meaning.",
    )

    def escape(self, optical_depth: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Nothing escapes."""
        return np.zeros_like(optical_depth), np.zeros_like(optical_depth)


@dataclass(frozen=True, slots=True)
class Open(_Isolated):
    """Every line photon escapes: the optically thin limit."""

    name: ClassVar[str] = "open"
    assumes: ClassVar[tuple[str, ...]] = ("No photon of a resonance line is absorbed again.",)
    holds_for: ClassVar[tuple[str, ...]] = (
        "Optical depth far below 1; in a recombining universe an upper bound on the speed only.",
    )

    def escape(self, optical_depth: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Everything escapes."""
        return np.ones_like(optical_depth), np.zeros_like(optical_depth)


@dataclass(frozen=True, slots=True)
class Sobolev(_Isolated):
    """Each line alone, photons redshifting out of it: P = (1 - e^-tau) / tau."""

    name: ClassVar[str] = "sobolev"
    assumes: ClassVar[tuple[str, ...]] = (
        "Complete redistribution over the line profile.",
        "Conditions stay constant while a photon crosses the line.",
        "Lines do not overlap; the field on the blue side is the blackbody.",
        "No continuum absorbs inside the line.",
    )
    holds_for: ClassVar[tuple[str, ...]] = (
        "Source functions steady over the width thick to true absorption (source_change << 1) and "
        "wings without recoil (recoil_gain << 1). Two-photon wings, "
        "recoil and diffusion in Lyman-alpha change x_e by 1 to 2 per cent (Hirata 2008, "
        "Phys. Rev. D 78, 023001; Chluba & Sunyaev 2009, "
        "Astron. Astrophys. 503, 345).",
    )

    def escape(self, optical_depth: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Sobolev's escape probability."""
        return escape_probability(optical_depth), escape_slope(optical_depth)


@dataclass(frozen=True, slots=True)
class SobolevFeedback(Sobolev):
    """Sobolev, each line lit from its blue side by what the next line above has let through."""

    name: ClassVar[str] = "sobolev_feedback"
    sees_blue_side: ClassVar[bool] = True
    resolves: ClassVar[tuple[str, ...]] = ("feedback",)
    assumes: ClassVar[tuple[str, ...]] = (
        "Complete redistribution over the line profile.",
        "Conditions stay constant while a photon crosses the line.",
        "Lines do not overlap; photons that leave a line redshift unchanged to the next one below.",
        "The highest open line sees the blackbody.",
        "No continuum absorbs inside a line or between lines.",
    )

    def couple(
        self,
        lines: ResonanceLines,
        kept: KeptLevels,
        conditions: Conditions,
        blue: BlueSide | None = None,
    ) -> GroundCoupling:
        """Couple each line to the field on its blue side; None: the blackbody.

        With u the distortion there and f the blackbody, K = A P (1 + f u), and what the field
        lifts beyond the blackbody is A P x_B (u - 1): the product of a rate and a departure.
        """
        plain = _Isolated.couple(self, lines, kept, conditions)
        if blue is None:
            return plain
        upper, radiation_k = lines.upper, conditions.radiation_temperature_k
        exponent = lines.energy_ev / (const.BOLTZMANN_EV_K * radiation_k)
        depth, chance = plain.validity["optical_depth"], plain.validity["escape_probability"]
        rate, slope = lines.einstein_a_per_s * chance, escape_slope(depth)
        log_boltzmann = log_boltzmann_populations(kept, radiation_k, conditions.ground_fraction)
        occupied = np.exp(blue.log_distortion - exponent) / -np.expm1(-exponent)  # f u
        # A P x_B u and A P x_B (u - 1): each factor alone leaves the doubles in a cold field.
        lit = rate * np.exp(log_boltzmann[upper] + blue.log_distortion)
        lift = np.where(
            blue.log_distortion < 1.0,
            rate * np.exp(log_boltzmann[upper]) * np.expm1(np.minimum(blue.log_distortion, 1.0)),
            lit - rate * np.exp(log_boltzmann[upper]),
        )
        loss, column, heat, source, ground, time = np.zeros((6, len(kept)))
        loss[upper] = rate * (1.0 + occupied)
        column[upper] = loss[upper] * slope
        # d(f u)/d ln T at constant u: x f (1 + f) u.
        heat[upper] = rate * occupied * exponent / -np.expm1(-exponent)
        source[upper] = lift
        ground[upper] = lift * (1.0 + slope)
        time[upper] = lift * (slope * (-3.0 - blue.hubble_slope) - exponent) + lit * blue.slope
        plain = blackbody_coupling(loss, column, heat, np.exp(log_boltzmann), plain.validity)
        return replace(
            plain,
            source=plain.source + source,
            excess_source=source,
            excess_by_ground=ground,
            excess_by_time=time,
        )
