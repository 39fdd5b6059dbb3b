"""The part of a setup that changes constants of nature, and what follows for atomic rates."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated

from pydantic import Field

from .. import constants as const
from ..records import checked_record


@checked_record
class Physics:
    """Constants of nature other than measured.

    Parameters
    ----------
    fine_structure_change : float, -0.2 to 0.2 (dimensionless)
        Relative change of the fine-structure constant.
    electron_mass_change : float, -0.2 to 0.2 (dimensionless)
        Relative change of the electron mass; the nuclei keep theirs.
    """

    fine_structure_change: Annotated[float, Field(ge=-0.2, le=0.2)] = 0.0
    electron_mass_change: Annotated[float, Field(ge=-0.2, le=0.2)] = 0.0


@dataclass(frozen=True, slots=True)
class Scales:
    """Factors by which changed constants multiply what the measured ones give; dimensionless.

    With a the changed fine-structure constant and m the changed reduced mass of the electron, each
    over the measured one:

    Attributes
    ----------
    energy : float
        a^2 m, of every level energy. Temperatures count in the same unit: a rate of the changed
        atom at T is a factor times that of the measured atom at T / energy.
    line_rate : float
        a^5 m, of Einstein coefficients, photoionization and exchange.
    recombination : float
        a^2 m^-2, of recombination coefficients.
    two_photon_rate : float
        a^8 m, of the 2s-1s decay.
    compton_rate : float
        a^2 m_e^-3, of the Compton rate (a^2 m_e^-2 of the cross section, m_e^-1 of the recoil).
    thomson : float
        a^2 m_e^-2, of the Thomson cross section.
    reduced_mass : float
        m.

    Notes
    -----
    A unit of length is 1/(a m), of energy a^2 m, of time 1/(a^2 m); an electric dipole rate has a^3
    more, the two-photon rate a^6. The fine structure of the levels, 1e-5 of the energies, is scaled
    like the rest, so that the whole network follows exactly.

    References
    ----------
    Kaplinghat, Scherrer & Turner 1999, Phys. Rev. D 60, 023516; Hannestad 1999, Phys. Rev. D 60,
    023515 (fine structure); Ichikawa et al. 2006, Phys. Rev. D 74, 023515 (both).
    """

    energy: float = 1.0
    line_rate: float = 1.0
    recombination: float = 1.0
    two_photon_rate: float = 1.0
    compton_rate: float = 1.0
    thomson: float = 1.0
    reduced_mass: float = 1.0

    @property
    def density(self) -> float:
        """(a m)^-3: a density of the changed atom at T acts on populations as this times it."""
        return self.recombination / self.line_rate


UNCHANGED = Scales()


def scales(physics: Physics) -> Scales:
    """Factors that follow from changed constants; all exactly 1 where nothing is changed."""
    a = 1.0 + physics.fine_structure_change
    electron = 1.0 + physics.electron_mass_change
    ratio = const.ELECTRON_PROTON_MASS_RATIO
    m = electron * ((1.0 + ratio) / (1.0 + ratio * electron))
    return Scales(
        a**2 * m,
        a**5 * m,
        a**2 / m**2,
        a**8 * m,
        a**2 / electron**3,
        a**2 / electron**2,
        m,
    )
