"""Escape from lines of He I inside which neutral hydrogen absorbs."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Literal, get_args

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..background.conditions import Conditions
from ..errors import InputError
from .helium_lines import HeliumGroundLines
from .helium_profile import LARGEST_DAMPING, continuum_escape
from .helium_treatment import Chances, HeliumSobolev, HeliumSobolevFeedback, HeliumTreatment

Redistribution = Literal["doppler", "complete", "partial"]


@dataclass(frozen=True, slots=True)
class HeliumContinuum(HeliumTreatment):
    """Photoionization of hydrogen inside the lines and, where one lights another, between them.

    Parameters
    ----------
    redistribution : "doppler", "complete" or "partial"
        Over which profile a line makes and destroys photons: its Doppler core alone (coherent
        wings); the Voigt profile of the whole natural width; or that with the damping scaled by
        the incoherent fraction, the chance that the upper level leaves to another level than the
        ground state.
    """

    redistribution: Redistribution = "partial"
    name: ClassVar[str] = "continuum"
    absorbs: ClassVar[bool] = True
    assumes: ClassVar[tuple[str, ...]] = (
        "Coherent scattering in the wings neither makes nor destroys photons, nor moves them.",
        "Continuum, source function and Doppler width constant across a line, and the continuum a "
        "blackbody at T_r; the Doppler width is that of T_r.",
        "Photons from a line above are absorbed as in Sobolev's line.",
    )
    holds_for: ClassVar[tuple[str, ...]] = (
        "Continuum thin across the Doppler core (continuum_depth << 1). Doppler-only and complete "
        "redistribution bracket the truth: they change x_e by 1 to 1.3 and 1 to 3.8 per cent "
        "against partial redistribution (Kholupenko, Ivanchik & Varshalovich 2008, Astron. Lett. "
        "34, 725; volume and page from memory).",
    )

    def __post_init__(self) -> None:
        """Refuse what is not known."""
        known = get_args(Redistribution)
        if self.redistribution not in known:
            raise InputError(f'redistribution = "{self.redistribution}": known are {known}')

    def escape(
        self,
        lines: HeliumGroundLines,
        conditions: Conditions,
        optical_depth: FloatArray,
        neutral_hydrogen_cm3: float,
    ) -> Chances:
        """P of every line, with the continuum inside it."""
        width = doppler_width(conditions.radiation_temperature_k)
        per_log = continuum_depth(lines, neutral_hydrogen_cm3, conditions.hubble_rate_per_s)
        incoherent, damping, damping_slope = self._damping(lines, conditions)
        found = [
            continuum_escape(*one)
            for one in zip(
                optical_depth.tolist(), (per_log * width).tolist(), damping.tolist(), strict=True
            )
        ]
        value, by_depth, by_continuum, by_damping = np.array(found).reshape(-1, 4).T
        validity = {
            "continuum_depth": per_log * width,
            "damping": damping,
            "incoherent_fraction": incoherent,
        }
        # The Doppler width goes as the square root of T.
        by_temperature = 0.5 * by_continuum + by_damping * damping_slope
        return Chances(value, by_depth, by_continuum, by_temperature, validity)

    def _damping(
        self, lines: HeliumGroundLines, conditions: Conditions
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Incoherent fraction, Voigt parameter and its derivative by ln T_r."""
        radiation_k = conditions.radiation_temperature_k
        other, slope = lines.others.total(radiation_k)
        total = lines.ground_rate_per_s + other
        frequency = lines.energy_ev / const.PLANCK_EV_S
        scale = 1.0 / (4.0 * np.pi * frequency * doppler_width(radiation_k))
        if self.redistribution == "doppler":
            return other / total, np.zeros_like(total), np.zeros_like(total)
        rate = total if self.redistribution == "complete" else other
        damping, by = rate * scale, (slope - 0.5 * rate) * scale
        # Reached below 30 K alone, where no helium is left to recombine.
        within = damping < LARGEST_DAMPING
        return other / total, np.where(within, damping, LARGEST_DAMPING), np.where(within, by, 0.0)


def doppler_width(temperature_k: float) -> float:
    """Doppler width of helium in ln nu, sqrt(2 k T/M)/c (dimensionless)."""
    mass_g = const.HELIUM_MASS_U * const.ELECTRON_MASS_G / const.ELECTRON_MASS_U
    speed = np.sqrt(2.0 * const.BOLTZMANN_ERG_K * temperature_k / mass_g)
    return float(speed / const.SPEED_OF_LIGHT_CM_S)


def continuum_depth(
    lines: HeliumGroundLines, neutral_hydrogen_cm3: float, hubble_rate_per_s: float
) -> FloatArray:
    """Depth n_HI sigma c/H of the H I continuum per ln nu at each line (dimensionless)."""
    column = neutral_hydrogen_cm3 * const.SPEED_OF_LIGHT_CM_S / hubble_rate_per_s
    depth: FloatArray = lines.hydrogen_cross_section_cm2 * column
    return depth


HELIUM_TREATMENTS: tuple[HeliumTreatment, ...] = (
    HeliumSobolev(),
    HeliumSobolevFeedback(),
    HeliumContinuum("doppler"),
    HeliumContinuum("complete"),
    HeliumContinuum("partial"),
)
