"""Where the figures of a line treatment cross a limit: the warnings of a history.

One limit, on x_e, holds for all figures that are relative errors of the escape in a line. A figure
times `flow_response` is the relative error of the net flow to the ground state; and an error e of
all net flow so far changes x_HI by e x_HI at most, x_e by no more than e min(1, x_HI/x_e).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from ..arrays import BoolArray, FloatArray
from ..escape.treatment import LineTreatment
from .line_figures import LineFigures

LARGEST_X_E_ERROR = 1e-3
"""Above it a warning is written: published corrections to x_e from the transfer of Lyman photons go
from 2.2e-3 (feedback, Chluba & Sunyaev 2007, Astron. Astrophys. 475, 109) to 1.3e-2 (two-photon
wings, Hirata 2008, Phys. Rev. D 78, 023001), so that half the smallest is still seen."""
ESCAPE_FACTOR = 10.0
"""Escape this much above or below that by expansion is no correction: the largest published is 11
per cent (Chluba & Sunyaev 2010, Astron. Astrophys. 512, A53)."""

# Figure, what a treatment resolves that has no need of the limit, and what it means.
_ERRORS = (
    (
        "source_change",
        "wings",
        "while photons cross the region thick to true absorption the source function changes; "
        "a steady line misses it",
    ),
    (
        "recoil_gain",
        "scattering",
        "photons scattered in the wings lose energy by recoil and escape more often",
    ),
    (
        "unseen_feedback",
        "feedback",
        "photons that left the next line above are missing on the blue side",
    ),
)


LARGEST_FREQUENCY_ERROR = 1e-4
"""Of x_e, from the frequency step of a resolved field: a tenth of :data:`LARGEST_X_E_ERROR`. The
default step stays below it with any choice of switches."""


def field_notes(step: float, error: float) -> tuple[str, ...]:
    """Warn where the frequency step of a field is coarse; both dimensionless."""
    if error <= LARGEST_FREQUENCY_ERROR:
        return ()
    return (
        f"warning: frequency_step = {step:.2g}: x_e changes by {error:.1e} from a grid twice as "
        f"coarse (limit {LARGEST_FREQUENCY_ERROR:g}), and may be off by as much",
    )


def limit_notes(
    redshift: FloatArray,
    neutral_per_electron: FloatArray,
    figures: LineFigures,
    chosen: LineTreatment,
) -> tuple[str, ...]:
    """One warning per line and limit crossed.

    Parameters
    ----------
    redshift : ndarray, shape (n_redshift,), dimensionless
        Output redshifts, descending; between them nothing is judged.
    neutral_per_electron : ndarray, shape (n_redshift,), dimensionless
        x_HI/x_e.
    figures : LineFigures
        The figures there.
    chosen : LineTreatment
        The treatment; what it `resolves` is not held against its figures.

    Returns
    -------
    tuple of str
        Warnings that name line, redshifts, figure and limit.
    """
    bound = np.minimum(1.0, neutral_per_electron)
    resolved: Sequence[str] = getattr(chosen, "resolves", ())
    notes = []
    for line, name in enumerate(figures.names):
        depth, escape = figures.optical_depth[:, line], figures.escape_probability[:, line]
        if np.isnan(depth).all():
            notes.append(f"warning: {name}: the treatment gives no optical depth; no limit is held")
            continue
        expansion = -np.expm1(-depth) / np.where(depth > 0.0, depth, np.inf)
        ratio = np.divide(escape, expansion, out=np.ones_like(escape), where=expansion > 0.0)
        far = np.maximum(ratio, 1.0 / np.maximum(ratio, 1e-300)) > ESCAPE_FACTOR
        notes += _far_note(name, redshift, far & (bound > LARGEST_X_E_ERROR), depth, escape)
        weight = np.where(far, 0.0, np.abs(figures.flow_response[:, line]) * bound)
        for figure, without, meaning in _ERRORS:
            if without not in resolved:
                values = np.abs(getattr(figures, figure)[:, line])
                notes += _error_note(name, redshift, figure, values, weight, meaning)
    return tuple(notes)


def _error_note(
    name: str,
    redshift: FloatArray,
    figure: str,
    values: FloatArray,
    weight: FloatArray,
    meaning: str,
) -> list[str]:
    error = np.where(weight > 0.0, values * weight, 0.0)
    if not (error > LARGEST_X_E_ERROR).any():
        return []
    return [crossed_note(name, redshift, figure, values, error, meaning)]


def crossed_note(
    name: str,
    redshift: FloatArray,
    figure: str,
    values: FloatArray,
    error: FloatArray,
    meaning: str,
) -> str:
    """Warning of a line whose figure means an error of x_e above the limit somewhere.

    Parameters
    ----------
    name, figure, meaning : str
        The line, the figure, and what it says.
    redshift, values, error : ndarray, shape (n_redshift,), dimensionless
        Outputs, the figure, and the size of the error of x_e.
    """
    worst = int(np.argmax(error))
    return (
        f"warning: {name}, z = {_span(redshift, error > LARGEST_X_E_ERROR)}: {figure} = "
        f"{values[worst]:.2g} at z = {redshift[worst]:.0f}, where x_e may be off by "
        f"{100.0 * error[worst]:.1f} % (limit {100.0 * LARGEST_X_E_ERROR:g} %): {meaning}"
    )


def _far_note(
    name: str, redshift: FloatArray, far: BoolArray, depth: FloatArray, escape: FloatArray
) -> list[str]:
    if not far.any():
        return []
    worst = int(np.argmax(np.where(far, depth, -1.0)))
    return [
        f"warning: {name}, z = {_span(redshift, far)}: escape_probability = {escape[worst]:.2g} at "
        f"optical_depth = {depth[worst]:.2g}, z = {redshift[worst]:.0f}, is off that by expansion, "
        f"1/depth, by more than the limit of a factor {ESCAPE_FACTOR:g}: x_e is a bound at best"
    ]


def _span(redshift: FloatArray, where: BoolArray) -> str:
    inside = redshift[where]
    return f"{inside[0]:.0f} to {inside[-1]:.0f}"
