"""What a study of truncations says: how many levels for the accuracy that is asked."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray, IntArray
from ..errors import InputError
from .convergence import smallest_n_max, truncation_error
from .helium_ladder import HIGHEST, Atom
from .level_records import LevelStudy

# Below it numerical errors count.
_LEAST = 1e-8


@dataclass(frozen=True, slots=True)
class Verdict:
    """How many levels x_e needs.

    Attributes
    ----------
    within : float, dimensionless
        Relative error allowed in x_e.
    low, high : float, dimensionless
        Between which redshifts.
    n_max : int or None
        The smallest n_max whose truncation error with its bar is within; None where the rungs
        do not tell.
    beyond : bool
        True where it is longer than any rung, and so extrapolated.
    redshift : float, dimensionless
        Where it is decided.
    error : float, dimensionless
        Truncation error with its bar there, at `n_max`; of ten times the longest rung where
        `n_max` is None.
    """

    within: float
    low: float
    high: float
    n_max: int | None
    beyond: bool
    redshift: float
    error: float


def verdict(study: LevelStudy, within: float, low: float, high: float) -> Verdict:
    """Find the smallest n_max that gives x_e to an accuracy over a range of redshift.

    Parameters
    ----------
    study : LevelStudy
        The ladder.
    within : float, above 1e-8 to 1 (dimensionless)
        Relative error allowed in x_e: truncation alone.
    low, high : float, dimensionless
        Redshifts, ends included.

    Raises
    ------
    InputError
        If `within` is out of range, or the outputs do not cover the range of redshift.
    """
    inside = outputs_between(study.redshift, within, low, high)
    rungs = study.rungs
    logs = np.log(rungs.free_electron_fraction[:, inside])
    noise = study.noise.free_electron_fraction[inside]
    found = smallest_n_max(rungs.n_max, logs, noise, np.full(len(inside), within))
    return Verdict(
        within,
        low,
        high,
        found.n_max,
        found.beyond,
        float(study.redshift[inside][found.quantity]),
        found.share * within,
    )


def rung_errors(study: LevelStudy, low: float, high: float) -> FloatArray:
    """Largest truncation error of x_e, its bar included, of each rung between two redshifts."""
    inside = outputs_between(study.redshift, 1.0, low, high)
    rungs = study.rungs
    logs = np.log(rungs.free_electron_fraction[:, inside])
    noise = study.noise.free_electron_fraction[inside]
    pairs = [truncation_error(rungs.n_max, logs, noise, n) for n in rungs.n_max.tolist()]
    return np.array([np.max(np.abs(error) + bar) for error, bar in pairs])


def population_changes(study: LevelStudy) -> FloatArray:
    """Largest relative difference of any low excited level from the longest rung, of each rung."""
    excited = study.rungs.population[:, :, study.level_n > 1]
    changes = np.abs(excited / excited[-1] - 1.0)
    return np.asarray(changes.max(axis=(1, 2)))


def outputs_between(redshift: FloatArray, within: float, low: float, high: float) -> IntArray:
    """Which outputs lie between two redshifts; InputError where the question makes no sense."""
    if not _LEAST < within <= 1.0:
        raise InputError(f"within = {within:g}: allowed are values above {_LEAST:g} up to 1")
    if not low <= high:
        raise InputError(f"between = {low:g}, {high:g}: the lower redshift comes first")
    if not redshift[-1] <= low <= high <= redshift[0]:
        raise InputError(
            f"between = {low:g}, {high:g}: the outputs of the setup do not cover that; they run "
            f"from {redshift[-1]:g} to {redshift[0]:g}"
        )
    inside = np.flatnonzero((redshift >= low) & (redshift <= high))
    if not len(inside):
        raise InputError(f"between = {low:g}, {high:g}: no redshift of the study lies there")
    return inside


def verdict_text(found: Verdict, longest: int, atom: Atom = "hydrogen") -> str:
    """Say a verdict in words and numbers; `longest` is the longest rung, of this atom."""
    name = n_max_name(atom)
    goal = f"for {100.0 * found.within:g} % in x_e at {found.low:g} < z < {found.high:g}: "
    if found.n_max is None:
        return (
            f"{goal}not known from these rungs; error with its bar is still "
            f"{100.0 * found.error:.2g} % at z = {found.redshift:.0f} with ten times {name} = "
            f"{longest}; run longer rungs"
        )
    text = (
        f"{goal}{name} = {found.n_max} (truncation with its error bar {100.0 * found.error:.2g} % "
        f"at z = {found.redshift:.0f}, where it is largest)"
    )
    if found.beyond:
        text += f"; beyond the longest rung, {longest}: by extrapolation"
    if found.n_max > HIGHEST[atom]:
        text += f"; more than the {HIGHEST[atom]} that can be computed"
    return text


def n_max_name(atom: Atom) -> str:
    """What n_max is called: that of hydrogen has no other name."""
    return "n_max" if atom == "hydrogen" else "helium n_max"
