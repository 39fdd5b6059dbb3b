"""The bare right-hand side at given local conditions, for those who integrate it themselves."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..errors import InputError, RangeError
from ..escape.lines import Lines
from ..kernels.effective import Atom, local_rates, make_room
from .kept import check_without_helium
from .prepared import choose_physics, make_atom, rate_names, scale_factors
from .series import COLLISIONS_K
from .table import EffectiveTable

ARGUMENTS = (
    "hydrogen_density_cm3",
    "electron_fraction",
    "matter_temperature_k",
    "radiation_temperature_k",
    "hubble_rate_per_s",
    "helium_ratio",
    "fine_structure_change",
    "electron_mass_change",
)


@dataclass(frozen=True, slots=True)
class LocalRates:
    """Rates of change at one place, and their partial derivatives.

    Attributes
    ----------
    electron_fraction_per_s : float, s^-1
        dx_e/dt.
    matter_temperature_k_per_s : float, K/s
        dT_m/dt.
    electron_fraction_by, matter_temperature_by : mapping of str to float
        Partial derivatives of either (s^-1 and K/s) by each argument, per unit of the argument
        under its own name, and by the ln of a factor on each effective rate
        ("ln recombination_2s", ...).
    """

    electron_fraction_per_s: float
    matter_temperature_k_per_s: float
    electron_fraction_by: Mapping[str, float]
    matter_temperature_by: Mapping[str, float]


def rate_of_change(  # noqa: PLR0913 (each is a condition or a choice of the caller)
    table: EffectiveTable,
    *,
    hydrogen_density_cm3: float,
    electron_fraction: float,
    matter_temperature_k: float,
    radiation_temperature_k: float,
    hubble_rate_per_s: float,
    helium_ratio: float,
    fine_structure_change: float | None = None,
    electron_mass_change: float | None = None,
    lines: Lines | None = None,
    two_photon_rate_per_s: float | None = None,
    rate_scales: Mapping[str, float] | None = None,
) -> LocalRates:
    """Rates of change of x_e and T_m where the caller says what the conditions are.

    Parameters
    ----------
    table : EffectiveTable
        The table.
    hydrogen_density_cm3 : float, cm^-3, positive
        All hydrogen nuclei.
    electron_fraction : float, above 0 and below 1 (dimensionless)
        x_e; hydrogen gives all electrons.
    matter_temperature_k, radiation_temperature_k : float, K
        T_m and T_r, inside the table.
    hubble_rate_per_s : float, s^-1, positive
        H: a third of the local divergence of the velocity, which thins Lyman-alpha and cools.
    helium_ratio : float, dimensionless, not negative
        n_He/n_H; neutral.
    fine_structure_change, electron_mass_change : float, -0.2 to 0.2 (dimensionless)
        Relative changes of constants; None: those of the table.
    lines : Lines, optional
        Line treatment; None: the table's.
    two_photon_rate_per_s : float, s^-1, optional
        2s-1s decay rate before any change of constants; None: the table's.
    rate_scales : mapping of str to float, dimensionless, optional
        Factors on effective rates, named as :func:`rate_names` names them.

    Returns
    -------
    LocalRates
        dx_e/dt in s^-1 and dT_m/dt in K/s with all partial derivatives, each analytic.

    Raises
    ------
    InputError
        For arguments out of range; RangeError for temperatures the table does not hold.
    """
    given = (
        hydrogen_density_cm3,
        electron_fraction,
        matter_temperature_k,
        radiation_temperature_k,
        hubble_rate_per_s,
    )
    check_without_helium(table, "rate_of_change")
    _check(given, helium_ratio)
    physics = choose_physics(table, fine_structure_change, electron_mass_change)
    factors = scale_factors(table, rate_scales)
    atom = make_atom(table, lines, two_photon_rate_per_s, physics, factors)
    _check_range(atom, matter_temperature_k, radiation_temperature_k)
    names = tuple(f"ln {name}" for name in rate_names(table))
    room = make_room(len(table.kept), len(table.lower))
    rates, by = np.zeros(2), np.zeros((2, 9 + len(names)))
    local_rates(atom, float(helium_ratio), np.array(given, dtype=float), room, rates, by)
    _to_arguments(by, physics.fine_structure_change, physics.electron_mass_change)
    labels = (*ARGUMENTS, *names)
    first, second = (dict(zip(labels, np.delete(row, 8).tolist(), strict=True)) for row in by)
    return LocalRates(float(rates[0]), float(rates[1]), first, second)


def _to_arguments(by: FloatArray, structure: float, mass: float) -> None:
    """From ln a, ln m and ln Compton to the two relative changes, in place."""
    electron = 1.0 + mass
    # d ln m/d ln m_e of the reduced mass.
    reduced = 1.0 / (1.0 + const.ELECTRON_PROTON_MASS_RATIO * electron)
    by[:, 6] = (by[:, 6] + 2.0 * by[:, 8]) / (1.0 + structure)
    by[:, 7] = (by[:, 7] * reduced - 3.0 * by[:, 8]) / electron


def _check(given: tuple[float, ...], helium_ratio: float) -> None:
    for name, value in zip(ARGUMENTS, (*given, helium_ratio), strict=False):
        zero_allowed = name == "helium_ratio"
        if not (0.0 < value < np.inf or (zero_allowed and value == 0.0)):
            raise InputError(f"{name} = {value:g}: must be positive and finite")
    if not given[1] < 1.0:
        raise InputError(f"electron_fraction = {given[1]:g}: must be above 0 and below 1")


def _check_range(atom: Atom, matter_k: float, radiation_k: float) -> None:
    unit = float(np.exp(atom.constants[1]))
    low, high = np.exp(atom.span[:2]) * unit
    if not low * (1 - 1e-12) <= radiation_k <= high * (1 + 1e-12):
        raise RangeError(
            f"radiation_temperature_k = {radiation_k:g}: the table holds {low:g} to {high:g} K"
        )
    least, most = np.exp(atom.span[2:]) * radiation_k
    most = min(most, max(COLLISIONS_K * unit, radiation_k))
    if not least * (1 - 1e-12) <= matter_k <= most * (1 + 1e-12):
        raise RangeError(
            f"matter_temperature_k = {matter_k:g}: the table holds {least:g} to {most:g} K at "
            f"T_r = {radiation_k:g} K"
        )
