"""What errors of the lines of He I do to x_e, and where that crosses a limit: warnings.

A relative error e of the net recombination to He I changes a = ln[(x_HeII + x_HeIII)/x_HeI] by

    d(da)/ds = e a' - k da,

k the rate at which deviations die out (`settling_hubble`): first order in da, for e and k that are
known at the outputs. Against differences of whole runs (n_max 5, outputs every 50 in z) it is right
to 3 per cent while it is below 0.3 per cent of x_e, and within a factor of 1.6 where it is largest,
up to 4 per cent.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from ..arrays import FloatArray
from ..escape.helium_treatment import HeliumTreatment
from .helium_moment import HeliumMoment
from .helium_record import HeliumLineFigures
from .limits import LARGEST_X_E_ERROR, crossed_note

# Share of He I above which its recombination has begun: near z = 2750.
_BEGUN = 0.02


def electron_errors(
    redshift: FloatArray, moments: Sequence[HeliumMoment], helium_ratio: float, flow: FloatArray
) -> FloatArray:
    """Relative change of x_e by relative changes of the net recombination to He I.

    Parameters
    ----------
    redshift : ndarray, shape (n_redshift,), dimensionless
        Outputs, descending; between them everything is taken to be linear in ln a.
    moments : sequence of HeliumMoment
        Helium there.
    helium_ratio : float, dimensionless
        Helium nuclei per hydrogen nucleus.
    flow : ndarray, shape (n_redshift, n_lines), dimensionless
        Relative changes, each alone; NaN where helium is held.

    Returns
    -------
    ndarray, shape (n_redshift, n_lines), dimensionless
        NaN where `flow` is, and everywhere if the outputs begin after He I has begun to recombine:
        what it did before is not known.
    """
    x = [one.fractions for one in moments]
    if x[0].neutral > _BEGUN:
        return np.full_like(flow, np.nan)
    ratio = np.array([np.log(one.charged) - np.log(one.neutral) for one in x])
    k, s = np.array([one.settling_hubble for one in moments]), -np.log1p(redshift)
    moved = np.zeros_like(flow)
    for i in range(1, len(moments)):
        fade = 0.5 * (k[i] + k[i - 1]) * (s[i] - s[i - 1])
        mean = -np.expm1(-fade) / fade if fade else 1.0
        gain = 0.5 * (flow[i] + flow[i - 1]) * (ratio[i] - ratio[i - 1])
        moved[i] = moved[i - 1] * np.exp(-fade) + gain * mean
    charged = np.array([one.charged for one in x])[:, None]
    neutral = np.array([one.neutral for one in x])[:, None]
    # Of a logit: y' - y = y (1 - y)(e^d - 1)/(1 - y + y e^d), each factor to full precision.
    grown = np.expm1(np.minimum(moved, 700.0))
    change = charged * neutral * grown / (1.0 + charged * grown)
    electrons = np.array([one.electrons_per_hydrogen for one in moments])[:, None]
    return np.asarray(helium_ratio * change / electrons)


def helium_limit_notes(
    redshift: FloatArray, figures: HeliumLineFigures, chosen: HeliumTreatment
) -> tuple[str, ...]:
    """One warning per line and limit crossed.

    Parameters
    ----------
    redshift : ndarray, shape (n_redshift,), dimensionless
        Output redshifts, descending; between them nothing is judged.
    figures : HeliumLineFigures
        The figures there.
    chosen : HeliumTreatment
        The treatment.

    Returns
    -------
    tuple of str
        Warnings that name line, redshifts, figure, limit and what is left out.
    """
    notes = []
    if np.isnan(figures.escape_error).all() and not np.isnan(figures.escape_change).all():
        notes.append(
            "what the lines of He I do to x_e is not estimated, and no limit of theirs judged: the "
            "outputs begin after He I has begun to recombine; give some 50 from z = 3400 to 1600"
        )
    for line, name in enumerate(figures.names):
        for figure, error, meaning in (
            ("escape_change", "escape_error", chosen.leaves_out),
            ("unseen_feedback", "feedback_error", "photons that left the line above are missing"),
        ):
            values = np.nan_to_num(getattr(figures, figure)[:, line])
            size = np.abs(np.nan_to_num(getattr(figures, error)[:, line]))
            if np.any(size > LARGEST_X_E_ERROR):
                notes.append(crossed_note(name, redshift, figure, values, size, meaning))
    return tuple(notes)
