"""The treatment whose radiation field is resolved in frequency, as the network sees it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from scipy.interpolate import CubicSpline

from .. import constants as const
from ..arrays import FloatArray, frozen_array
from ..background.conditions import Conditions
from ..network.coupling import GroundCoupling
from ..network.reduced import KeptLevels
from ..network.solve import log_boltzmann_populations
from .treatment import ResonanceLines, Sobolev
from .two_photon import with_two_photon

# exp of more is no double.
_LARGEST_EXPONENT = 700.0


@dataclass(frozen=True, slots=True, eq=False)
class FieldRecord:
    """What a field did to the kept levels along one history, without the decay of 2s beside it.

    Attributes
    ----------
    radiation_temperature_k : ndarray, shape (n_records,), K
        T_r of the records, descending.
    loss : ndarray, shape (n_records, n_kept, n_kept), s^-1
        K.
    source : ndarray, shape (n_records, n_kept), s^-1
        s less K x_B.
    log_sides : ndarray, shape (n_records, n_lines, 2), dimensionless
        ln of the distortion on the blue and the red side of each line.
    decay_per_s : float, s^-1
        Spontaneous 2s-1s rate where that decay goes through the field, else 0.
    """

    radiation_temperature_k: FloatArray
    loss: FloatArray
    source: FloatArray
    log_sides: FloatArray
    decay_per_s: float

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        count, n_kept = self.source.shape
        frozen_array(self, "radiation_temperature_k", (count,))
        frozen_array(self, "loss", (count, n_kept, n_kept))
        frozen_array(self, "source", (count, n_kept))
        frozen_array(self, "log_sides", (count, *self.log_sides.shape[1:]))

    def spline(self, values: FloatArray) -> CubicSpline:
        """Interpolate one of the arrays over -ln T_r."""
        return CubicSpline(-np.log(self.radiation_temperature_k), values)


@dataclass(frozen=True, slots=True, eq=False)
class ResolvedField(Sobolev):
    """The field from half of Lyman-alpha to the Lyman limit, resolved in frequency.

    The field has a history of its own, so that it cannot be told from the conditions of the moment.
    While it still is a blackbody this is Sobolev's treatment; a run that has worked the field out
    (``history/field.py``) puts the record of it here.

    Attributes
    ----------
    loss, source, log_sides : CubicSpline or None
        Of the record, over -ln T_r.
    decay_per_s : float, s^-1
        As in the record.
    """

    loss: CubicSpline | None = None
    source: CubicSpline | None = None
    log_sides: CubicSpline | None = None
    decay_per_s: float = 0.0

    name: ClassVar[str] = "transfer"
    # What its switches leave out is said by published sizes (`escape/left_out.py`): in a field that
    # holds other sources beside the lines, figures of isolated lines mean nothing.
    resolves: ClassVar[tuple[str, ...]] = ("wings", "scattering", "feedback")
    assumes: ClassVar[tuple[str, ...]] = (
        "Occupation numbers of the resolved photons are far below 1 (Wien).",
        "Inside half a cell of a line the field is that of the line's own levels.",
        "Scattering by Lyman-alpha is diffusion in frequency with recoil (Fokker-Planck), in the "
        "Lorentz wings; higher lines do not scatter coherently.",
        "Soft partners of two-photon and Raman processes are blackbody photons.",
        "The field above the highest open line, before processes of its own, is the blackbody.",
    )
    holds_for: ClassVar[tuple[str, ...]] = (
        "x_e to the frequency error of the result. Left out: Thomson scattering (< 3e-5 in x_e), "
        "deuterium (1e-5), quadrupole lines and Lyman-continuum escape (few 1e-6).",
    )

    @staticmethod
    def of(record: FieldRecord) -> ResolvedField:
        """With the record of one history."""
        return ResolvedField(
            record.spline(record.loss),
            record.spline(record.source),
            record.spline(record.log_sides),
            record.decay_per_s,
        )

    def couple(
        self, lines: ResonanceLines, kept: KeptLevels, conditions: Conditions
    ) -> GroundCoupling:
        """K and s as recorded at this T_r; above the record, those of a blackbody field."""
        # A field that is a blackbody: each line by itself.
        plain = Sobolev.couple(self, lines, kept, conditions)
        if self.loss is None or self.source is None or self.log_sides is None:
            return plain
        radiation_k = conditions.radiation_temperature_k
        place = -math.log(radiation_k)
        if place < self.loss.x[0]:
            if self.decay_per_s == 0.0:
                return plain
            return with_two_photon(plain, kept, conditions, self.decay_per_s, "stimulated")
        place = min(place, float(self.loss.x[-1]))
        loss, excess = self.loss(place), self.source(place)
        boltzmann = np.exp(log_boltzmann_populations(kept, radiation_k, conditions.ground_fraction))
        blue, red = self.log_sides(place).T
        figures = plain.validity | {"log_blue_side": blue, "log_red_side": red}
        # By nothing but T_r: the record is a function of it alone.
        return GroundCoupling(
            loss,
            loss @ boltzmann + excess,
            np.zeros_like(loss),
            -self.loss(place, 1),
            excess,
            figures,
            np.zeros_like(excess),
            self.source(place, 1),
        )


def log_distortion(
    departure: FloatArray, energy_ev: FloatArray, radiation_temperature_k: FloatArray
) -> FloatArray:
    """Ln of an occupation number over that of the blackbody (Wien).

    Parameters
    ----------
    departure : ndarray, any shape, dimensionless
        Occupation number less that of the blackbody.
    energy_ev : ndarray, broadcasts, eV
        Photon energy.
    radiation_temperature_k : ndarray, broadcasts, K
        T_r.

    Returns
    -------
    ndarray, broadcast shape, dimensionless
        ln(1 + departure exp(E/kT)); finite though the exponential may overflow.
    """
    exponent = energy_ev / (const.BOLTZMANN_EV_K * radiation_temperature_k)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        above = np.logaddexp(0.0, np.log(departure) + exponent)
        # Only what lies below the blackbody, or on it: there nothing is lost by the limit.
        below = np.log1p(departure * np.exp(np.minimum(exponent, _LARGEST_EXPONENT)))
    return np.where(departure > 0.0, above, below)
