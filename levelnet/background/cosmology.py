"""The expanding universe: parameters, densities, expansion rate, times."""

from __future__ import annotations

import math
import warnings
from functools import cached_property
from typing import Annotated, Any, NamedTuple

import numpy as np
from pydantic import Field

from .. import constants as const
from ..arrays import FloatArray
from ..errors import AccuracyWarning, RangeError
from ..records import FIRST_FAULT, TUPLES, checked_record
from .clock import Clock, law_clock, table_clock
from .expansion import ExpansionTable, inline_table, read_expansion_table
from .friedmann import (
    CRITICAL_DENSITY_G_CM3,
    HUBBLE_100_PER_S,
    FriedmannLaw,
    friedmann_law,
    photon_density_h2,
)
from .neutrinos import Number, energy_ratio

DEFAULT_HELIUM_MASS_FRACTION = 0.245
# Above it electron pairs are plentiful and neither law of radiation holds.
MAX_REDSHIFT = 1e9
# A table coarser than this (left-out rows, in ln H) is used with a warning.
EXPANSION_ERROR_LIMIT = 1e-4

Density = Annotated[float, Field(gt=0.0, le=100.0)]
Fraction = Annotated[float, Field(ge=0.0, lt=1.0)]
Mass = Annotated[float, Field(ge=0.0, le=100.0)]
Masses = Annotated[tuple[Mass, ...], FIRST_FAULT, Field(max_length=20), TUPLES]
Column = Annotated[tuple[float, ...], FIRST_FAULT, TUPLES]


class DensityParameters(NamedTuple):
    """Densities today over the critical density, dimensionless; they add up to 1."""

    baryons: float
    dark_matter: float
    photons: float
    massless_neutrinos: float
    massive_neutrinos: float
    curvature: float
    dark_energy: float


@checked_record
class Cosmology:
    """Parameters of the expanding universe; derived quantities are methods.

    Parameters
    ----------
    hubble_km_s_mpc : float, km/s/Mpc, 1 to 1000
        Hubble constant.
    baryon_density_h2, matter_density_h2 : float, dimensionless, above 0 to 100
        Omega h^2 of baryons, and of baryons with dark matter; neutrinos are not in it.
    cmb_temperature_k : float, K, 0.1 to 100
        Temperature of the background radiation today.
    helium_mass_fraction : float, dimensionless, 0 to below 1, or None
        The true mass fraction m_He n_He/rho_b. None: 0.245, unless `helium_nucleon_fraction` is
        given.
    effective_neutrinos : float, dimensionless, 0 to 20
        Effective number of neutrino species while they are relativistic.
    helium_nucleon_fraction : float, dimensionless, 0 to below 1, or None
        Instead of `helium_mass_fraction`: 4 n_He/n_b, the number that nucleosynthesis codes print.
    curvature_density : float, dimensionless, -1 to 1
        Omega_k; dark energy closes the budget.
    dark_energy_w0, dark_energy_wa : float, dimensionless, -5 to 0 and -10 to 10
        Equation of state w(a) = w0 + wa (1 - a); w0 + wa must not be above 0.
    neutrino_masses_ev : tuple of float, eV, 0 to 100 each
        Masses; species up to three that are not named are massless. The species share
        `effective_neutrinos` equally, see :mod:`levelnet.background.neutrinos`.
    expansion_table, expansion_table_sha256 : str or None
        A file with a tabulated H(z), relative to the current directory, and its SHA-256, which must
        be given with it. The file is read at once and becomes the next two fields, so that a setup
        and every result carry their expansion with them; both are None afterwards.
    expansion_redshift, expansion_hubble_rate_per_s : tuple of float, or None
        A tabulated H(z), dimensionless and s^-1. Where there is one, H comes from it and is not
        known outside; all densities still come from the parameters.

    Raises
    ------
    InputError
        If a value is out of range, both helium fractions are given, matter is less than baryons,
        H^2 is not positive for all redshifts to 1e5, or the table is wrong.

    Notes
    -----
    Mind the two helium fractions. A nucleon fraction of 0.2454 is a mass fraction of 0.2441, for a
    helium nucleus is lighter than four of hydrogen; to mistake one for the other changes the
    electron fraction by 1e-3.
    """

    hubble_km_s_mpc: Annotated[float, Field(ge=1.0, le=1000.0)]
    baryon_density_h2: Density
    matter_density_h2: Density
    cmb_temperature_k: Annotated[float, Field(ge=0.1, le=100.0)] = 2.7255
    helium_mass_fraction: Fraction | None = None
    effective_neutrinos: Annotated[float, Field(ge=0.0, le=20.0)] = 3.046
    helium_nucleon_fraction: Fraction | None = None
    curvature_density: Annotated[float, Field(ge=-1.0, le=1.0)] = 0.0
    dark_energy_w0: Annotated[float, Field(ge=-5.0, le=0.0)] = -1.0
    dark_energy_wa: Annotated[float, Field(ge=-10.0, le=10.0)] = 0.0
    neutrino_masses_ev: Masses = ()
    expansion_table: str | None = None
    expansion_table_sha256: str | None = None
    expansion_redshift: Column | None = None
    expansion_hubble_rate_per_s: Column | None = None

    def __post_init__(self) -> None:
        """Check the rules about several fields, and read the expansion table."""
        _check_parameters(self)
        _take_table(self)
        _check_budget(self)

    def hubble_rate_per_s(self, redshift: Number) -> Number:
        """Expansion rate H.

        Parameters
        ----------
        redshift : float or ndarray, any shape, dimensionless, 0 to 1e9
            Redshift; with a tabulated expansion, no further than the table.

        Returns
        -------
        float or ndarray, same shape, s^-1
            H(z).

        Raises
        ------
        RangeError
            Outside the range.

        References
        ----------
        Peebles 1993, Principles of Physical Cosmology, sec. 5 (from memory).
        """
        law = self.law if self._table is None else self._table
        growth: Number = _growth(redshift)
        return law.rate_per_s(growth)

    def unbounded_hubble_rate_per_s(self, growth: FloatArray) -> FloatArray:
        """Expansion rate at any time, for integrals from the Big Bang on.

        Parameters
        ----------
        growth : ndarray, any shape, dimensionless, 1 and above
            1 + redshift, without upper limit.

        Returns
        -------
        ndarray, same shape, s^-1
            H; above a table as in `cosmic_time_s`.
        """
        if self._table is None:
            return np.asarray(self.law.rate_per_s(growth))
        return self._clock.rate_per_s(growth)

    def hubble_log_slope(self, redshift: Number) -> Number:
        """Logarithmic slope of the expansion rate, dln H/dln(1 + z).

        Parameters
        ----------
        redshift : float or ndarray, any shape, dimensionless, 0 to 1e9
            Redshift; with a tabulated expansion, no further than the table.

        Returns
        -------
        float or ndarray, same shape, dimensionless
            The derivative, not a difference: 2 for radiation alone, 3/2 for matter alone.
        """
        law = self.law if self._table is None else self._table
        growth: Number = _growth(redshift)
        return law.log_slope(growth)

    def radiation_temperature_k(self, redshift: Number) -> Number:
        """Temperature of the background radiation in K, T0 (1 + z).

        Parameters
        ----------
        redshift : float or ndarray, any shape, dimensionless, 0 to 1e9
            Redshift.
        """
        growth: Number = _growth(redshift)
        return self.cmb_temperature_k * growth

    def hydrogen_density_cm3(self, redshift: Number) -> Number:
        """Hydrogen nuclei per cm^3, ionized or not.

        Parameters
        ----------
        redshift : float or ndarray, any shape, dimensionless, 0 to 1e9
            Redshift.

        Returns
        -------
        float or ndarray, same shape, cm^-3
            rho_b (1 - Y)/m_H (1 + z)^3 with the mass of the atom, m_p + m_e.
        """
        helium_mass = const.HELIUM_HYDROGEN_MASS_RATIO * self.helium_ratio()
        mass_per_hydrogen_g = const.HYDROGEN_ATOM_MASS_G * (1.0 + helium_mass)
        today = self.baryon_density_h2 * CRITICAL_DENSITY_G_CM3 / mass_per_hydrogen_g
        growth: Number = _growth(redshift)
        return today * growth**3

    def helium_ratio(self) -> float:
        """Helium nuclei per hydrogen nucleus, f_He = n_He/n_H (dimensionless)."""
        if self.helium_nucleon_fraction is not None:
            return self.helium_nucleon_fraction / (4.0 * (1.0 - self.helium_nucleon_fraction))
        mass_fraction = self.helium_mass_fraction
        if mass_fraction is None:
            mass_fraction = DEFAULT_HELIUM_MASS_FRACTION
        return mass_fraction / (const.HELIUM_HYDROGEN_MASS_RATIO * (1.0 - mass_fraction))

    def density_parameters(self) -> DensityParameters:
        """Densities today over the critical density (dimensionless)."""
        law, scale = self.law, (self.hubble_km_s_mpc / 100.0) ** 2
        photons = photon_density_h2(self.cmb_temperature_k)
        massive = sum(density * energy_ratio(ratio) for density, ratio in law.massive)
        return DensityParameters(
            self.baryon_density_h2 / scale,
            (self.matter_density_h2 - self.baryon_density_h2) / scale,
            photons / scale,
            (law.radiation - photons) / scale,
            massive / scale,
            self.curvature_density,
            law.dark_energy / scale,
        )

    def cosmic_time_s(self, redshift: Number) -> Number:
        """Time since the Big Bang.

        Parameters
        ----------
        redshift : float or ndarray, any shape, dimensionless, 0 to 1e9
            Redshift; with a tabulated expansion, no further than the table.

        Returns
        -------
        float or ndarray, same shape, s
            Integral of dz/((1 + z) H) from the redshift up, exact to 1e-10 relative; with a
            tabulated expansion, the part above the last row follows from the densities of the
            parameters.
        """
        return self._integral(redshift, 0, 1.0)

    def conformal_time_mpc(self, redshift: Number) -> Number:
        """Conformal time since the Big Bang, times the speed of light.

        Parameters
        ----------
        redshift : float or ndarray, any shape, dimensionless, 0 to 1e9
            Redshift; with a tabulated expansion, no further than the table.

        Returns
        -------
        float or ndarray, same shape, Mpc (comoving)
            Integral of c dz/H from the redshift up, exact to 1e-10 relative; above a table as in
            `cosmic_time_s`.
        """
        return self._integral(redshift, 1, const.SPEED_OF_LIGHT_CM_S / const.CM_PER_MPC)

    def _integral(self, redshift: Number, which: int, scale: float) -> Number:
        growth: Number = _growth(redshift)
        if self._table is not None:
            self._table.check_range(growth)
        values = scale * self._clock.integrals_s(-np.log(np.ravel(growth)))[which]
        if isinstance(growth, float):
            return float(values[0])
        shaped: FloatArray = values.reshape(growth.shape)
        return shaped

    @cached_property
    def law(self) -> FriedmannLaw:
        """Friedmann's law of the parameters: densities and H^2, whatever table there is."""
        return friedmann_law(
            total_h2=(self.hubble_km_s_mpc / 100.0) ** 2,
            matter_h2=self.matter_density_h2,
            curvature_density=self.curvature_density,
            cmb_temperature_k=self.cmb_temperature_k,
            effective_neutrinos=self.effective_neutrinos,
            neutrino_masses_ev=self.neutrino_masses_ev,
            dark_energy=(self.dark_energy_w0, self.dark_energy_wa),
        )

    @cached_property
    def _table(self) -> ExpansionTable | None:
        if self.expansion_redshift is None or self.expansion_hubble_rate_per_s is None:
            return None
        return inline_table(self.expansion_redshift, self.expansion_hubble_rate_per_s)

    @cached_property
    def _clock(self) -> Clock:
        if self._table is None:
            return law_clock(self.law)
        return table_clock(self.law, self._table)


def _growth(redshift: Any) -> Any:
    """1 + redshift as a float or an array; RangeError outside 0 to `MAX_REDSHIFT`."""
    if isinstance(redshift, (float, int)) or np.ndim(redshift) == 0:
        number = float(redshift)
        if 0.0 <= number <= MAX_REDSHIFT:
            return 1.0 + number
        raise RangeError(f"redshift = {number:g}: allowed are 0 to {MAX_REDSHIFT:g}")
    values = np.asarray(redshift, dtype=float)
    good = (values >= 0.0) & (values <= MAX_REDSHIFT)
    if not np.all(good):
        wrong = values[~good][0]
        raise RangeError(f"redshift = {wrong:g}: allowed are 0 to {MAX_REDSHIFT:g}")
    return 1.0 + values


def _check_parameters(cosmology: Cosmology) -> None:
    if cosmology.matter_density_h2 < cosmology.baryon_density_h2:
        raise ValueError(
            f"matter_density_h2 = {cosmology.matter_density_h2:g} counts the baryons too, so it "
            f"must not be below baryon_density_h2 = {cosmology.baryon_density_h2:g}"
        )
    mass, nucleon = cosmology.helium_mass_fraction, cosmology.helium_nucleon_fraction
    if mass is not None and nucleon is not None:
        raise ValueError(
            f"helium_mass_fraction = {mass:g} and helium_nucleon_fraction = {nucleon:g}: "
            "give one of them, not both"
        )
    early = cosmology.dark_energy_w0 + cosmology.dark_energy_wa
    if early > 0.0:
        raise ValueError(
            f"dark_energy_w0 + dark_energy_wa = {early:g} must not be above 0, or dark energy "
            "would outweigh matter early"
        )
    if any(cosmology.neutrino_masses_ev) and cosmology.effective_neutrinos == 0.0:
        raise ValueError("neutrino_masses_ev: effective_neutrinos = 0 leaves no neutrinos")


def _take_table(cosmology: Cosmology) -> None:
    """Read the expansion file into the inline fields, and check the table there is."""
    path, sha256 = cosmology.expansion_table, cosmology.expansion_table_sha256
    redshift, rate = cosmology.expansion_redshift, cosmology.expansion_hubble_rate_per_s
    if (path is None) != (sha256 is None):
        raise ValueError("expansion_table and expansion_table_sha256 must be given together")
    if (redshift is None) != (rate is None):
        raise ValueError(
            "expansion_redshift and expansion_hubble_rate_per_s must be given together"
        )
    if path is not None and sha256 is not None:
        if redshift is not None:
            raise ValueError("expansion_table and expansion_redshift: give one of them, not both")
        table = read_expansion_table(path, sha256)
        # Frozen for users; here the record is still being made.
        for name, value in (
            ("expansion_table", None),
            ("expansion_table_sha256", None),
            ("expansion_redshift", tuple(table.redshift.tolist())),
            ("expansion_hubble_rate_per_s", tuple(table.hubble_rate_per_s.tolist())),
        ):
            object.__setattr__(cosmology, name, value)
    if cosmology._table is not None:
        _check_table(cosmology._table, cosmology.hubble_km_s_mpc)


def _check_table(table: ExpansionTable, hubble_km_s_mpc: float) -> None:
    today = table.hubble_rate_per_s[0] / HUBBLE_100_PER_S * 100.0
    if not 0.5 < today / hubble_km_s_mpc < 2.0:
        raise ValueError(
            f"expansion table: {table.hubble_rate_per_s[0]:g} s^-1 at redshift 0 is {today:g} "
            f"km/s/Mpc, but hubble_km_s_mpc = {hubble_km_s_mpc:g}; is the table in s^-1?"
        )
    if table.interpolation_error > EXPANSION_ERROR_LIMIT:
        warnings.warn(
            f"expansion table: leaving out every second row changes H by "
            f"{table.interpolation_error:.1e}, above {EXPANSION_ERROR_LIMIT:g}; add rows",
            AccuracyWarning,
            stacklevel=2,
        )


def _check_budget(cosmology: Cosmology) -> None:
    growth = np.exp(np.linspace(0.0, math.log(1e5 + 1.0), 2000))
    square = cosmology.law.square(growth)
    if not np.all(square > 0.0):
        wrong = growth[np.argmin(square > 0.0)] - 1.0
        left = cosmology.density_parameters().dark_energy
        raise ValueError(
            f"H^2 is not positive at redshift {wrong:.4g}: the densities leave {left:.4g} of the "
            "critical density for dark energy; check hubble_km_s_mpc, matter_density_h2, "
            "curvature_density"
        )
