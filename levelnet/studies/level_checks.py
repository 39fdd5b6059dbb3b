"""What tells how far a study of truncations can be trusted, and what whole shells are good for."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..arrays import BoolArray, FloatArray
from .helium_ladder import Atom
from .level_records import LevelStudy
from .verdict import outputs_between

ASKED: dict[Atom, tuple[float, float]] = {"hydrogen": (200.0, 1600.0), "helium": (1600.0, 3500.0)}
"""Redshifts between which error bars are held against corrections."""

LARGE = 0.2
"""Error bar over correction above which a limit is called poorly known."""

FAR_BELOW = 1e-3
"""A correction that, bar included, is below this part of the error asked (where none was, of the
largest in the range) tells nothing of how well a limit is known."""


@dataclass(frozen=True, slots=True)
class LimitCheck:
    """How well the limit of x_e is known.

    Attributes
    ----------
    low, high : float, dimensionless
        Between which redshifts: as much of 200 to 1600 as the study covers; 1600 to 3500 of helium.
    bar_over_correction : float, dimensionless
        Largest error bar over the correction that leads from the longest rung to all levels; NaN
        where no redshift is left.
    redshift : float, dimensionless
        Where; NaN likewise.
    n_without_law, n_redshift : int
        Redshifts in the range that no law was fitted at, which are left out; and all of them.
    least : float, dimensionless
        `FAR_BELOW` of the error asked, or of the largest correction with its bar if none was.
    n_far_below : int
        Redshifts with a law at which correction and bar are below `least` of x_e, left out too.
    """

    low: float
    high: float
    bar_over_correction: float
    redshift: float
    n_without_law: int
    n_redshift: int
    least: float
    n_far_below: int


@dataclass(frozen=True, slots=True, eq=False)
class HeldOutCheck:
    """How well the shorter rungs foresee the x_e of those held out.

    Attributes
    ----------
    largest_miss_over_bar : ndarray, shape (n_held_out,), dimensionless
        At any redshift.
    largest_bar_over_correction : ndarray, shape (n_held_out,), dimensionless
        At the redshifts of :class:`LimitCheck`; NaN where none is left.
    """

    largest_miss_over_bar: FloatArray
    largest_bar_over_correction: FloatArray


def covered(redshift: FloatArray, atom: Atom = "hydrogen") -> tuple[float, float]:
    """As much of 200 to 1600 as descending redshifts cover; all of them where that is nothing.

    Of 1600 to 3500, where the atom is helium.
    """
    ends = float(redshift[-1]), float(redshift[0])
    low, high = max(ASKED[atom][0], ends[0]), min(ASKED[atom][1], ends[1])
    return (low, high) if low < high else ends


def check_limit(study: LevelStudy) -> LimitCheck:
    """Hold the error bar of the limit of x_e against the correction that was applied."""
    low, high = covered(study.redshift, study.atom)
    asked = (study.redshift >= low) & (study.redshift <= high)
    limit = study.limit.free_electron_fraction
    law = asked & (limit.fitted == 1)
    size = _correction(limit.value, study.rungs.free_electron_fraction[-1])
    least, told = _told(study, size, limit.relative_error, law)
    without, far = int(np.sum(asked & ~law)), int(np.sum(law & ~told))
    counts = without, int(np.sum(asked)), least, far
    if not np.any(told):
        return LimitCheck(low, high, np.nan, np.nan, *counts)
    shares = _shares(limit.relative_error, size, told)
    worst = int(np.argmax(shares))
    return LimitCheck(low, high, float(shares[worst]), float(study.redshift[worst]), *counts)


def check_held_out(study: LevelStudy) -> HeldOutCheck | None:
    """Hold the rungs left out against what the shorter ones foresee; None where there are none."""
    if study.held_out is None:
        return None
    count = len(study.held_out.n_max)
    seen = study.held_out.foreseen.free_electron_fraction
    actual = study.rungs.free_electron_fraction[-count:]
    before = study.rungs.free_electron_fraction[-count - 1]
    miss = np.abs(np.log(seen.value / actual)) / seen.relative_error
    low, high = covered(study.redshift, study.atom)
    law = (study.redshift >= low) & (study.redshift <= high) & (seen.fitted == 1)
    size = _correction(seen.value, before)
    bars = []
    for k in range(count):
        told = _told(study, size[k], seen.relative_error[k], law[k])[1]
        share = _shares(seen.relative_error[k], size[k], told).max()
        bars.append(share if np.any(told) else np.nan)
    return HeldOutCheck(np.max(miss, axis=1), np.array(bars))


def _correction(value: FloatArray, before: FloatArray) -> FloatArray:
    """Size of the relative correction."""
    return np.asarray(np.abs(np.log(value / before)))


def _told(
    study: LevelStudy, correction: FloatArray, bar: FloatArray, law: BoolArray
) -> tuple[float, BoolArray]:
    """What is far below, and where a law is fitted to more than that."""
    whole = np.where(law, correction + bar, 0.0)
    least = FAR_BELOW * (study.question.within if study.question else float(whole.max()))
    return least, law & (whole >= least)


def _shares(bar: FloatArray, correction: FloatArray, told: BoolArray) -> FloatArray:
    """Error bar over correction; 0 where nothing is told."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(told, bar / correction, 0.0)


def shell_changes(study: LevelStudy, low: float, high: float) -> FloatArray:
    """Largest relative change of x_e, with its sign, by the whole shells of each resolved rung.

    Between two redshifts (dimensionless), against the longest rung with every level of its own.
    """
    if study.resolved is None:
        return np.empty(0)
    inside = outputs_between(study.redshift, 1.0, low, high)
    whole = study.rungs.free_electron_fraction[-1, inside]
    changes = study.resolved.free_electron_fraction[:, inside] / whole - 1.0
    worst = np.argmax(np.abs(changes), axis=1)
    return np.asarray(changes[np.arange(len(worst)), worst])


def enough_resolved(study: LevelStudy, within: float, low: float, high: float) -> int | None:
    """Lowest n, of those tried, up to which l must be resolved; None where none is enough.

    Parameters
    ----------
    study : LevelStudy
        Any; without rungs of resolve_l_to none is enough.
    within : float, dimensionless
        Relative change of x_e allowed, against the longest rung with every level of its own.
    low, high : float, dimensionless
        Between which redshifts.
    """
    found = None
    changes = shell_changes(study, low, high).tolist()
    tried = [] if study.resolved is None else study.resolved.resolve_l_to.tolist()
    for top, change in reversed(list(zip(tried, changes, strict=True))):
        if not abs(change) <= within:
            break
        found = int(top)
    return found


def resolved_text(study: LevelStudy, within: float, low: float, high: float) -> str:
    """Say in words up to which n l must be resolved."""
    assert study.resolved is not None
    tried = ", ".join(str(top) for top in study.resolved.resolve_l_to.tolist())
    found = enough_resolved(study, within, low, high)
    goal = f"for {100.0 * within:g} % in x_e at {low:g} < z < {high:g}, against every l resolved: "
    at = f"at n_max = {study.rungs.n_max[-1]}"
    if found is None:
        return f"{goal}none of those tried is enough (l resolved to n = {tried}, {at})"
    return f"{goal}l resolved to n = {found} (of {tried} tried, {at}) is enough"
