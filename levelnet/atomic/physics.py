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
    fine_structure : float
        a.

    Notes
    -----
    A unit of length is 1/(a m), of energy a^2 m, of time 1/(a^2 m); an electric dipole rate has a^3
    more, the two-photon rate a^6. The fine structure of the levels, 1e-5 of the energies, is scaled
    like the rest, so that the whole network follows exactly. So it does for helium: its quantum
    defects are those of charges that attract and repel, pure numbers; what relativity and the
    motion of the nucleus (m_e/M) add to its energies, 1e-4 of them, is scaled like the rest.

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
    fine_structure: float = 1.0

    def line_to_ground(self, kind: str) -> float:
        """Factor on the rate of a line of He I to its ground state, to leading order in alpha.

        Parameters
        ----------
        kind : str
            As in :class:`levelnet.atomic.helium_ground.GroundLines`.

        Notes
        -----
        Over an electric dipole rate, a^5 m: a^4 for the intercombination line, whose amplitude is
        the mixing of 2 1P into 2 3P1 by the spin-orbit interaction (energy a^4 m over a gap a^2 m);
        a^4 for the magnetic quadrupole, where a magnetic moment takes the place of the electric one
        (a in the amplitude) and the size of the atom over the wavelength comes in once more (a);
        a^6 for the magnetic dipole, which vanishes without relativity (a^2 in the amplitude, beside
        a for the moment).

        References
        ----------
        Drake 1971, Phys. Rev. A 3, 908 (magnetic dipole); Drake 1969, Astrophys. J. 158, 1199
        (magnetic quadrupole); Drake & Dalgarno 1969, Astrophys. J. 157, 459 (intercombination).
        All from memory; the powers are counted here.
        """
        return self.line_rate * self.fine_structure ** _BEYOND_DIPOLE[kind]

    @property
    def cross_section(self) -> float:
        """a^-1 m^-2, of photoionization cross sections at energies that scale too."""
        return self.recombination / self.fine_structure**3

    @property
    def density(self) -> float:
        """(a m)^-3: a density of the changed atom at T acts on populations as this times it."""
        return self.recombination / self.line_rate


UNCHANGED = Scales()
# Powers of alpha by which lines to the ground state of He I differ from an electric dipole.
_BEYOND_DIPOLE = {
    "resonance": 0,
    "intercombination": 4,
    "magnetic quadrupole": 4,
    "magnetic dipole": 6,
}


def scales(physics: Physics, charge: int = 1) -> Scales:
    """Factors that follow from changed constants; all exactly 1 where nothing is changed.

    Parameters
    ----------
    physics : Physics
        The changes.
    charge : int, 1 or 2
        Nuclear charge: 1 hydrogen, 2 helium, atom and ion; it sets the mass of the nucleus alone.
    """
    a = 1.0 + physics.fine_structure_change
    electron = 1.0 + physics.electron_mass_change
    heavy = 1.0 / const.ALPHA_ELECTRON_MASS_RATIO
    ratio = const.ELECTRON_PROTON_MASS_RATIO if charge == 1 else heavy
    m = electron * ((1.0 + ratio) / (1.0 + ratio * electron))
    return Scales(
        a**2 * m,
        a**5 * m,
        a**2 / m**2,
        a**8 * m,
        a**2 / electron**3,
        a**2 / electron**2,
        m,
        a,
    )
