"""A few redshifts that stand for a whole history on a screen or a page."""

from __future__ import annotations

from typing import Literal

import numpy as np

from ..arrays import FloatArray

_SAMPLES = {
    "hydrogen": (
        *(1700.0, 1400.0, 1300.0, 1200.0, 1100.0, 1000.0),
        *(800.0, 500.0, 200.0, 100.0, 50.0, 20.0),
    ),
    "helium": (
        *(3000.0, 2500.0, 2300.0, 2200.0, 2100.0),
        *(2000.0, 1900.0, 1800.0, 1700.0, 1600.0),
    ),
}
_SAMPLES["both"] = (
    *(8000.0, 7000.0, 6000.0, 5500.0, 5000.0, 3000.0, 2500.0, 2200.0, 2000.0, 1900.0, 1800.0),
    *_SAMPLES["hydrogen"],
)

# Where the lines of He I are worth a row.
_HELIUM_LINES = (3000.0, 2600.0, 2300.0, 2000.0, 1900.0, 1800.0, 1700.0, 1600.0)


def helium_rows(redshift: FloatArray) -> list[int]:
    """Outputs nearest to a few redshifts at which He I recombines; each once, ascending.

    Parameters
    ----------
    redshift : ndarray, shape (n_redshift,), dimensionless
        Descending.
    """
    wanted = [z for z in _HELIUM_LINES if redshift[-1] <= z <= redshift[0]]
    return sorted({int(np.argmin(np.abs(redshift - z))) for z in wanted})


def sample_rows(
    redshift: FloatArray, atom: Literal["hydrogen", "helium", "both"] = "hydrogen"
) -> list[int]:
    """Find the outputs nearest to a few round redshifts.

    Parameters
    ----------
    redshift : ndarray, shape (n_redshift,), dimensionless
        Descending.
    atom : "hydrogen", "helium" or "both"
        Whose recombination they are to show.

    Returns
    -------
    list of int
        Positions, each once, ascending; the last output, which most readers ask for, is among them.
    """
    low, high = redshift[-1], redshift[0]
    wanted = [z for z in _SAMPLES[atom] if low <= z <= high] or [float(high)]
    nearest = {int(np.argmin(np.abs(redshift - z))) for z in wanted}
    return sorted(nearest | {len(redshift) - 1})
