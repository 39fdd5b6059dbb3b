"""Names of what can be asked of a history, the same in files, on screens and in figures.

How each is computed stands elsewhere: :mod:`levelnet.background.last_scattering`.
"""

from __future__ import annotations

from typing import NamedTuple


class Observable(NamedTuple):
    """How an observable is written.

    Attributes
    ----------
    unit : str
        "1" where there is none; Mpc are comoving.
    alias : str
        Short name that users may write; "" where there is none.
    short : str
        Head of a narrow column.
    label : str
        In front of a value on a line of its own.
    """

    unit: str
    alias: str
    short: str
    label: str


OBSERVABLES = {
    "last_scattering_redshift": Observable("1", "z_*", "z_*", "z_* (tau = 1)"),
    "visibility_peak_redshift": Observable("1", "", "peak of g", "visibility peak"),
    "visibility_width": Observable("1", "", "width of g", "visibility width"),
    "last_scattering_time_s": Observable("s", "", "t at z_*", "time at z_*"),
    "sound_horizon_mpc": Observable("Mpc", "r_s", "r_s", "sound horizon r_s"),
    "damping_per_mpc": Observable("Mpc^-1", "k_D", "k_D", "damping k_D"),
    "drag_redshift": Observable("1", "z_drag", "z_drag", "drag epoch z_drag"),
    "drag_horizon_mpc": Observable("Mpc", "r_drag", "r_drag", "sound horizon r_drag"),
}
"""Every observable that needs no redshift, by its canonical name."""
AT_REDSHIFT = {"x_e": "1", "T_m": "K", "optical_depth": "1"}
"""Quantities that need a redshift, and their units."""
ALIASES = {one.alias: name for name, one in OBSERVABLES.items() if one.alias}
ALIASES["tau"] = "optical_depth"
"""Short names that users may write, and what they stand for; results carry the long ones."""


def at_redshift(quantity: str, redshift: float) -> str:
    """Name of a quantity at a redshift (dimensionless): "x_e(900)", "optical_depth(1100.5)"."""
    return f"{quantity}({repr(float(redshift)).removesuffix('.0')})"


def known_targets() -> str:
    """List in one line what can be asked for."""
    scalars = [f"{one.alias} or {name}" for name, one in OBSERVABLES.items() if one.alias]
    scalars += [name for name, one in OBSERVABLES.items() if not one.alias]
    return ", ".join(["x_e(Z)", "T_m(Z)", "optical_depth(Z) or tau(Z)", *scalars, "line(3d-2p)"])
