"""What an observer measures of an ionization history, with its exact derivatives.

With s = ln a, n_e = x_e n_H, H the expansion rate, R = 3 rho_b/(4 rho_gamma),
c_s = c/sqrt(3 (1 + R)), eta conformal time, and z_end the lowest redshift of the history:

    tau(z)   = int_{z_end}^{z} c sigma_T n_e dz/(H (1 + z))          tau(z_*) = 1
    tau_d(z) = int_{z_end}^{z} c sigma_T n_e dz/(H (1 + z) R)        tau_d(z_drag) = 1
    g(eta)   = (d tau/d eta) exp(-tau)                               peak; width at half maximum
    r_s(z)   = int_{z}^{infinity} c_s dz/H                           at z_* and at z_drag
    1/k_D^2  = int_0^{eta_*} d eta [R^2/(1 + R) + 16/15]/[6 (1 + R) a n_e sigma_T]
    t(z)     = int_{z}^{infinity} dz/(H (1 + z))                     at z_*

There is no reionization in any of them. Above the first point x_e counts as 1, or, with helium, as
1 + 2 f_He: only k_D sees it, by a relative error below half the neutral fraction there (1.4e-10 at
T_r = 9000 K, 1.4e-8 at 7000 K, 5e-7 at 6000 K, in Saha equilibrium). Where helium is inert x_e
misses its electrons: before z = 1800 they raise k_D by about 0.5 per cent. Tight coupling, on which
k_D rests, is taken to hold up to z_*, as in the references, although it ceases there.

Every observable is a functional of ln(sigma_T n_e), ln H and ln R; its change is kept as weights on
these three at the points of the quadrature, from which all derivatives follow.

References
----------
Hu & Sugiyama 1996, ApJ 471, 542 (tau, visibility, drag epoch, damping); Kaiser 1983, MNRAS 202,
1169 (16/15: with polarization); Eisenstein & Hu 1998, ApJ 496, 605 (r_s at the drag epoch).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray, frozen_array
from ..errors import InputError
from ..quantities import OBSERVABLES, at_redshift
from .cosmology import Cosmology
from .parameters import (
    COSMOLOGICAL,
    hubble_derivatives,
    hydrogen_derivatives,
    loading_derivatives,
)
from .quadrature import Quadrature
from .scattering import DAMPING, DEPTH, DRAG, SOUND, TIME, Event, Found, Scattering

# T_r from which integrals over a history may start: 1.4e-8 of hydrogen is neutral there.
_IONIZED_K = 7000.0
# The same with helium: 1e-5 of it is not ionized twice.
_HELIUM_IONIZED_K = 24_000.0


@dataclass(frozen=True, slots=True, eq=False)
class Observed:
    """Observables and their derivatives; NaN where the history does not reach the event.

    Attributes
    ----------
    names, units : tuple of str, length n_observables
        As in :data:`levelnet.quantities.OBSERVABLES`, then "optical_depth(Z)".
    value : ndarray, shape (n_observables,)
        Values in these units.
    gradient : ndarray, shape (n_observables, n_points)
        By ln x_e at each point of the quadrature, in these units: a weight vector, so that the
        observable changes by gradient @ (d ln x_e). x_e above the first point is held.
    by_parameter : ndarray, shape (n_observables, n_parameters)
        By each of `COSMOLOGICAL`, per unit of each, at fixed x_e(s).
    by_thomson : ndarray, shape (n_observables,)
        By ln sigma_T, at fixed x_e(s).
    missing : tuple of str, length n_observables
        Why the history does not reach the event; "" where it does.
    """

    names: tuple[str, ...]
    units: tuple[str, ...]
    value: FloatArray
    gradient: FloatArray
    by_parameter: FloatArray
    by_thomson: FloatArray
    missing: tuple[str, ...]

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        n = len(self.names)
        frozen_array(self, "value", (n,))
        frozen_array(self, "gradient", (n, self.gradient.shape[-1]))
        frozen_array(self, "by_parameter", (n, len(COSMOLOGICAL)))
        frozen_array(self, "by_thomson", (n,))


def ionized_redshift(cosmology: Cosmology, helium: bool = False) -> float:
    """Redshift (dimensionless) from which integrals start.

    Above it hydrogen is ionized to 1e-8, and, with `helium`, that to 1e-5 and twice.
    """
    hot_k = _HELIUM_IONIZED_K if helium else _IONIZED_K
    return hot_k / cosmology.cmb_temperature_k - 1.0


def observe(
    cosmology: Cosmology,
    grid: Quadrature,
    electron_fraction: FloatArray,
    thomson: float = 1.0,
    optical_depth_to: Sequence[float] = (),
    names: Sequence[str] = tuple(OBSERVABLES),
    early_electron_fraction: float = 1.0,
) -> Observed:
    """Observables of a history, with derivatives by x_e at every point.

    Parameters
    ----------
    cosmology : Cosmology
        The background.
    grid : Quadrature
        From :func:`levelnet.background.quadrature.quadrature`; from where hydrogen is fully ionized
        to the lowest redshift.
    electron_fraction : ndarray, shape (n_points,), dimensionless
        n_e/n_H at its points, positive.
    thomson : float, dimensionless
        Thomson cross section over the measured one.
    optical_depth_to : sequence of float, dimensionless
        Redshifts Z for optical_depth(Z), from z_end up to Z; NaN outside the grid.
    names : sequence of str
        Which of :data:`levelnet.quantities.OBSERVABLES`.
    early_electron_fraction : float, dimensionless
        n_e/n_H before the grid: 1 + 2 f_He where the history has helium.

    Raises
    ------
    InputError
        If an electron fraction is not positive and finite, their number is wrong, or a name is not
        known.
    """
    if unknown := [name for name in names if name not in OBSERVABLES]:
        known = ", ".join(OBSERVABLES)
        raise InputError(f'observable "{unknown[0]}" is not known; known are {known}')
    ionized = np.asarray(electron_fraction, dtype=float)
    if ionized.shape != grid.points.shape or not np.all((ionized > 0.0) & np.isfinite(ionized)):
        raise InputError(f"electron_fraction: {len(grid.points)} positive numbers are needed")
    seen = Scattering(cosmology, grid, ionized, thomson, early_electron_fraction)
    found = [_MAKERS[name](seen) for name in names]
    found += [_optical_depth(seen, z) for z in optical_depth_to]
    nothing = math.nan, np.full((3, len(seen.s)), math.nan)
    found_or_nan = [nothing if one is None else one for one in found]
    value = np.array([one[0] for one in found_or_nan])
    change = np.array([one[1] for one in found_or_nan]).reshape(-1, 3, len(seen.s))
    by_opacity, by_load = change[:, 0].sum(axis=1), change[:, 2].sum(axis=1)
    by_parameter = change[:, 1] @ hubble_derivatives(cosmology, np.exp(-seen.s))
    by_parameter += np.outer(by_opacity, hydrogen_derivatives(cosmology))
    by_parameter += np.outer(by_load, loading_derivatives(cosmology))
    depths = [at_redshift("optical_depth", z) for z in optical_depth_to]
    return Observed(
        (*names, *depths),
        (*(OBSERVABLES[name].unit for name in names), *("1" for _ in depths)),
        value,
        change[:, 0, seen.n_early :],
        by_parameter,
        by_opacity,
        tuple(
            _why_missing(seen, name) if one is None else ""
            for name, one in zip((*names, *depths), found, strict=True)
        ),
    )


def _why_missing(seen: Scattering, name: str) -> str:
    """Why a history does not reach an event."""
    if name in _VISIBLE:
        return seen.why_no_width()
    if name in OBSERVABLES:
        return seen.why_no_depth(DRAG if name in _OF_DRAG else DEPTH)
    return "that redshift is outside the grid"


def _redshift(seen: Scattering, event: Event | None) -> Found | None:
    return None if event is None else _reached(seen, event)


def _reached(seen: Scattering, event: Event) -> Found:
    growth = math.exp(-seen.grid.log_scale(event.place))
    return growth - 1.0, -growth * event.shift


def _horizon(seen: Scattering, event: Event | None) -> Found | None:
    return None if event is None else seen.integral(SOUND, event)


def _damping(seen: Scattering, event: Event | None) -> Found | None:
    if event is None:
        return None
    square, change = seen.integral(DAMPING, event)
    return square**-0.5, -0.5 * square**-1.5 * change


def _time(seen: Scattering, event: Event | None) -> Found | None:
    if event is None:
        return None
    # The clock of the cosmology is exact with a tabulated expansion too.
    redshift = math.expm1(-seen.grid.log_scale(event.place))
    return seen.cosmology.cosmic_time_s(redshift), seen.integral(TIME, event)[1]


def _width(seen: Scattering) -> Found | None:
    """Full width at half maximum of g(eta), in redshift."""
    if seen.peak is None:
        return None
    ends = seen.half_maximum(seen.peak)
    if ends is None:
        return None
    (high, by_high), (low, by_low) = (_reached(seen, end) for end in ends)
    return high - low, by_high - by_low


def _optical_depth(seen: Scattering, redshift: float) -> Found | None:
    place = seen.grid.place(-math.log1p(redshift)) if redshift > -1.0 else None
    if place is None:
        return None
    weight = seen.after(place)
    return float(seen.value[DEPTH] @ weight), seen.change(DEPTH, weight)


_VISIBLE = ("visibility_peak_redshift", "visibility_width")
_OF_DRAG = ("drag_redshift", "drag_horizon_mpc")
_MAKERS: dict[str, Callable[[Scattering], Found | None]] = {
    "last_scattering_redshift": lambda seen: _redshift(seen, seen.last),
    "visibility_peak_redshift": lambda seen: _redshift(seen, seen.peak),
    "visibility_width": _width,
    "last_scattering_time_s": lambda seen: _time(seen, seen.last),
    "sound_horizon_mpc": lambda seen: _horizon(seen, seen.last),
    "damping_per_mpc": lambda seen: _damping(seen, seen.last),
    "drag_redshift": lambda seen: _redshift(seen, seen.drag),
    "drag_horizon_mpc": lambda seen: _horizon(seen, seen.drag),
}
