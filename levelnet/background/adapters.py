"""Other descriptions of the expanding universe, at the door: a callable H(z), an astropy cosmology.

astropy is never imported: its objects are read by their attributes.
"""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np

from ..errors import InputError
from .cosmology import Cosmology
from .expansion import ExpansionTable, sample_rate_per_s, tabulate_expansion

# Where H of the parameters differs more than this from astropy's, H is tabulated.
_SAME = 1e-6


def with_expansion(cosmology: Cosmology, expansion: Any, redshift_max: float = 1e6) -> Cosmology:
    """Give a cosmology another expansion rate; its densities stay.

    Parameters
    ----------
    cosmology : Cosmology
        The parameters.
    expansion : callable, ExpansionTable, or an astropy cosmology
        H(z) in s^-1; see :func:`levelnet.background.expansion.tabulate_expansion`.
    redshift_max : float, dimensionless, 3000 to 1e9
        How far a callable is tabulated; H is not known beyond.

    Returns
    -------
    Cosmology
        The same parameters with H(z) as an inline table, which a setup writes out and reads back.

    Raises
    ------
    InputError
        If a sample is not positive and finite, or H today is not near `hubble_km_s_mpc`.
    """
    if isinstance(expansion, ExpansionTable):
        table = expansion
    else:
        table = tabulate_expansion(expansion, redshift_max)
    changed: Cosmology = dataclasses.replace(
        cosmology,
        expansion_redshift=tuple(table.redshift.tolist()),
        expansion_hubble_rate_per_s=tuple(table.hubble_rate_per_s.tolist()),
    )
    return changed


def from_astropy(
    astropy_cosmology: Any,
    helium_mass_fraction: float | None = None,
    helium_nucleon_fraction: float | None = None,
    redshift_max: float = 1e6,
) -> Cosmology:
    """Take over an astropy cosmology.

    Parameters
    ----------
    astropy_cosmology : an FLRW object of astropy.cosmology
        Read are H0, Ob0 and Tcmb0 (which must be set), Om0, Ok0, Neff, m_nu, w0 and wa where it has
        them, and H(z).
    helium_mass_fraction, helium_nucleon_fraction : float, dimensionless, 0 to below 1, optional
        As in :class:`Cosmology`; astropy knows no helium.
    redshift_max : float, dimensionless, 3000 to 1e9
        How far H(z) is compared, and tabulated if need be.

    Returns
    -------
    Cosmology
        With H(z) from the parameters where they give astropy's to 1e-6 for all redshifts to
        `redshift_max`, and tabulated otherwise. With massive neutrinos it is always tabulated:
        astropy fits their energy.

    Raises
    ------
    InputError
        If an attribute is missing or not set, or a parameter is out of range.
    """
    if not callable(getattr(astropy_cosmology, "H", None)):
        name = type(astropy_cosmology).__name__
        raise InputError(f"astropy cosmology: a {name} has no method H")
    hubble = _number(astropy_cosmology, "H0", "km/(s Mpc)")
    scale = (hubble / 100.0) ** 2
    plain = Cosmology(
        hubble_km_s_mpc=hubble,
        baryon_density_h2=_positive(astropy_cosmology, "Ob0") * scale,
        matter_density_h2=_positive(astropy_cosmology, "Om0") * scale,
        cmb_temperature_k=_positive(astropy_cosmology, "Tcmb0", "K"),
        helium_mass_fraction=helium_mass_fraction,
        effective_neutrinos=_number(astropy_cosmology, "Neff"),
        helium_nucleon_fraction=helium_nucleon_fraction,
        curvature_density=_number(astropy_cosmology, "Ok0"),
        dark_energy_w0=_number(astropy_cosmology, "w0", default=-1.0),
        dark_energy_wa=_number(astropy_cosmology, "wa", default=0.0),
        neutrino_masses_ev=_masses_ev(astropy_cosmology),
    )
    redshift = np.expm1(np.linspace(0.0, np.log1p(redshift_max), 300))
    theirs = sample_rate_per_s(astropy_cosmology, redshift)
    if np.all(np.abs(plain.hubble_rate_per_s(redshift) / theirs - 1.0) <= _SAME):
        return plain
    return with_expansion(plain, astropy_cosmology, redshift_max)


def _number(source: Any, name: str, unit: str | None = None, default: float | None = None) -> float:
    """Attribute `name` of an astropy cosmology as a float, in `unit`."""
    value = getattr(source, name, default)
    if value is None:
        raise InputError(f"astropy cosmology: {name} is not set")
    try:
        return float(value.to_value(unit) if hasattr(value, "to_value") else value)
    except (TypeError, ValueError):
        raise InputError(f"astropy cosmology: {name} = {value!r} is not a number") from None


def _positive(source: Any, name: str, unit: str | None = None) -> float:
    value = _number(source, name, unit)
    if value <= 0.0:
        raise InputError(f"astropy cosmology: {name} = {value:g} must be set and positive")
    return value


def _masses_ev(source: Any) -> tuple[float, ...]:
    masses = getattr(source, "m_nu", None)
    if masses is None:
        return ()
    values = np.atleast_1d(masses.to_value("eV") if hasattr(masses, "to_value") else masses)
    positive = tuple(float(mass) for mass in values if mass > 0.0)
    # Zeros are kept where they make more than three species.
    return tuple(float(mass) for mass in values) if positive and len(values) > 3 else positive
