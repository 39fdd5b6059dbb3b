"""What the history looks like to an observer: optical depth, visibility, milestones.

Definitions, limits and sources: :mod:`levelnet.background.last_scattering`. Every integral runs
over the integrated range only, from the lowest redshift of the run upwards; there is no
reionization in it.
"""

from __future__ import annotations

import math

import numpy as np

from ..arrays import FloatArray
from ..background.cosmology import Cosmology
from ..background.last_scattering import observe
from ..background.quadrature import Place, Quadrature, root
from ..background.scattering import DEPTH, Scattering
from .result import Milestones

_OBSERVED = (
    "last_scattering_redshift",
    "visibility_peak_redshift",
    "visibility_width",
    "last_scattering_time_s",
)


def optical_depth(
    cosmology: Cosmology,
    grid: Quadrature,
    electron_fraction: FloatArray,
    redshift: FloatArray,
    thomson: float = 1.0,
) -> FloatArray:
    """Optical depth (dimensionless) from the end of the panels up to each redshift.

    Parameters
    ----------
    cosmology : Cosmology
        The background.
    grid : Quadrature
        Panels over the history.
    electron_fraction : ndarray, shape (n_points,), dimensionless
        n_e/n_H at their points.
    redshift : ndarray, shape (n,), dimensionless
        Where, within the panels.
    thomson : float, dimensionless
        Thomson cross section over the measured one.
    """
    per_log = Scattering(cosmology, grid, electron_fraction, thomson).late(DEPTH)
    # Rounding may leave less than nothing at the end.
    return np.maximum(grid.to_end_from(per_log, -np.log1p(redshift)), 0.0)


def milestones(
    cosmology: Cosmology, grid: Quadrature, electron_fraction: FloatArray, thomson: float = 1.0
) -> Milestones:
    """Sum up a history in a few numbers; NaN where the panels do not reach the event.

    Parameters are those of :func:`optical_depth`.
    """
    seen = observe(cosmology, grid, electron_fraction, thomson, names=_OBSERVED)
    last, peak, width, age = seen.value.tolist()
    begin, half, end = (_ionized_to(grid, electron_fraction, level) for level in (0.9, 0.5, 0.1))
    duration = _time(cosmology, end) - _time(cosmology, begin)
    return Milestones(last, peak, width, half, age, duration)


def _ionized_to(grid: Quadrature, electron_fraction: FloatArray, level: float) -> float:
    """Highest redshift where x_e falls through `level`; NaN where the panels do not reach it."""
    first, later = grid.edge_values(electron_fraction)
    at_edges = np.append(first[0], later)
    found = np.flatnonzero((at_edges[:-1] >= level) & (at_edges[1:] < level))
    if not len(found):
        return math.nan
    panel = int(found[0])
    fraction = grid.function(electron_fraction, panel)
    place = Place(panel, root(lambda x: fraction(x) - level))
    return math.expm1(-grid.log_scale(place))


def _time(cosmology: Cosmology, redshift: float) -> float:
    return float(cosmology.cosmic_time_s(redshift)) if math.isfinite(redshift) else math.nan
