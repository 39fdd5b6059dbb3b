"""Escape from lines of He I inside which neutral hydrogen absorbs."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Literal, NamedTuple, get_args

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..background.conditions import Conditions
from ..errors import InputError
from .helium_lines import HeliumGroundLines
from .helium_profile import LARGEST_DAMPING, continuum_escapes, diffusive_escape
from .helium_treatment import Chances, HeliumSobolev, HeliumSobolevFeedback, HeliumTreatment
from .lines import Lines

Redistribution = Literal["doppler", "complete", "partial"]

# p tau above which a line is thick to true absorption, so that P of diffusing photons joins the
# other within 1/(p tau): near z = 3000 for 584 A, while He I is in Saha equilibrium.
_THICK = 1e3


_LEAVES_OUT: dict[Redistribution, str] = {
    "doppler": "photons made in the wings, from which hydrogen takes them sooner, are missing",
    "complete": "coherent wings neither make nor destroy photons, and here they do",
    "partial": "coherent scattering shifts photons into the wings; diffusion = true has that",
}


class _Shapes(NamedTuple):
    """Voigt parameter and incoherent fraction of each line, and their slopes.

    By ln T_r; by ln of the rate to the ground state and of the other decays of the upper level.
    """

    damping: FloatArray
    damping_slopes: FloatArray  # (3, n_lines)
    incoherent: FloatArray
    incoherent_slopes: FloatArray  # (3, n_lines)


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
    diffusion : bool
        Of "partial" alone: coherent scattering in the whole natural profile shifts photons by
        Doppler widths (rms), from the core into the wings. In lines with p tau above 1000, p the
        incoherent fraction: 2 1P and higher.
    """

    redistribution: Redistribution = "partial"
    diffusion: bool = False
    name: ClassVar[str] = "continuum"
    absorbs: ClassVar[bool] = True
    assumes: ClassVar[tuple[str, ...]] = (
        "Coherent scattering makes and destroys no photons; without `diffusion` it moves none.",
        "Continuum, source function and Doppler width are constant across a line; the continuum is "
        "a blackbody at T_r, the Doppler width that of T_r.",
        "Photons from a line above are absorbed as in Sobolev's line.",
    )
    holds_for: ClassVar[tuple[str, ...]] = (
        "Doppler core alone and complete redistribution change x_e by 1 to 1.3 and 1 to 3.8 per "
        "cent against partial redistribution (Kholupenko, Ivanchik & Varshalovich 2008, Astron. "
        "Lett. 34, 725; volume and page from memory).",
        "Diffusion raises the escape from 584 A by 14 per cent at z = 2000 and 44 at 1850, and "
        "lowers x_e by up to 0.28 per cent near z = 1830 (n_max 10).",
    )

    @property
    def leaves_out(self) -> str:
        """Why escape is another with partial redistribution and diffusion; "" with both."""
        return "" if self.diffusion else _LEAVES_OUT[self.redistribution]

    def __post_init__(self) -> None:
        """Refuse what is not known."""
        known = get_args(Redistribution)
        if self.redistribution not in known:
            raise InputError(f'redistribution = "{self.redistribution}": known are {known}')
        if self.diffusion and self.redistribution != "partial":
            raise InputError('diffusion: only with redistribution = "partial"')

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
        shape = self._shapes(lines, conditions)
        continuum = per_log * width
        columns = np.stack([optical_depth, continuum, shape.damping, shape.incoherent], axis=1)
        found = self._chances(columns).T
        value, by_depth, by_continuum, by_damping, by_incoherent = found
        by_shape, by_ground, by_others = (
            by_damping * shape.damping_slopes + by_incoherent * shape.incoherent_slopes
        )
        validity = {
            "continuum_depth": continuum,
            "damping": shape.damping,
            "incoherent_fraction": shape.incoherent,
        }
        # The Doppler width goes as the square root of T.
        by_temperature = 0.5 * by_continuum + by_shape
        return Chances(
            value, by_depth, by_continuum, by_temperature, validity, by_ground, by_others
        )

    def _chances(self, columns: FloatArray) -> FloatArray:
        """P of each line, its derivatives by ln tau and ln c, by damping and incoherent fraction.

        `columns`, shape (n_lines, 4), are tau, c, damping and incoherent fraction.
        """
        found = np.zeros((len(columns), 5))
        found[:, :4] = continuum_escapes(columns[:, :3].copy())
        if self.diffusion:
            for line, (depth, continuum, damping, incoherent) in enumerate(columns.tolist()):
                natural = damping / incoherent
                if depth * incoherent >= _THICK and natural <= LARGEST_DAMPING:
                    found[line] = _diffusing(depth, continuum, natural, incoherent)
        return found

    def _shapes(self, lines: HeliumGroundLines, conditions: Conditions) -> _Shapes:
        radiation_k = conditions.radiation_temperature_k
        ground, (other, slope) = lines.ground_rate_per_s, lines.others.total(radiation_k)
        total, nothing = ground + other, np.zeros_like(other)
        incoherent, turn = other / total, ground * other / total**2
        turns = np.stack([slope * ground / total**2, -turn, turn])
        if self.redistribution == "doppler":
            return _Shapes(nothing, np.zeros_like(turns), incoherent, turns)
        frequency = lines.energy_ev / const.PLANCK_EV_S
        scale = 1.0 / (4.0 * np.pi * frequency * doppler_width(radiation_k))
        whole = self.redistribution == "complete"
        rate = total if whole else other
        slopes = np.stack([slope - 0.5 * rate, ground if whole else nothing, other])
        damping, by = rate * scale, slopes * scale
        # Reached below 30 K alone, where no helium is left to recombine.
        beyond = damping > LARGEST_DAMPING
        damping, by = np.where(beyond, LARGEST_DAMPING, damping), np.where(beyond, 0.0, by)
        return _Shapes(damping, by, incoherent, turns)


def _diffusing(
    depth: float, continuum: float, natural: float, incoherent: float
) -> tuple[float, ...]:
    """P of a line with diffusion and its derivatives, that by damping at given fraction."""
    moved, by_incoherent = diffusive_escape(depth, continuum, natural, incoherent)
    by_damping = moved.by_damping / incoherent
    return (*moved[:3], by_damping, by_incoherent - by_damping * natural)


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
    HeliumContinuum("partial", diffusion=True),
)


def helium_treatment(lines: Lines) -> HeliumTreatment:
    """How photons escape in the lines of He I to its ground state: the one place of the choice."""
    choice = lines.helium_continuum
    if choice is not None:
        return HeliumContinuum(choice.redistribution, choice.diffusion)
    return HeliumSobolevFeedback() if lines.helium == "sobolev_feedback" else HeliumSobolev()
