"""The part of a weighing that is about helium."""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from typing import Any, TypeVar

import numpy as np

from ..arrays import FloatArray, IntArray, frozen_array
from ..atomic.helium_levels import HeliumLevels
from ..atomic.levels import LevelSet


@dataclass(frozen=True, slots=True, eq=False)
class IonWeights:
    """Derivatives d ln J/d ln R by the rates of He II; n_targets is the first axis.

    Attributes
    ----------
    levels : LevelSet
        Every level.
    upper, lower : ndarray of int, shape (n_transitions,)
        Positions in `levels` of both ends of every dipole transition between excited levels.
    bound_bound : ndarray, shape (n_targets, n_transitions), dimensionless
        By the strength of each dipole transition.
    bound_free : ndarray, shape (n_targets, n_levels), dimensionless
        By each level's cross section.
    escape : ndarray, shape (n_targets,), dimensionless
        By the rate at which photons of 2p-1s escape.
    two_photon : ndarray, shape (n_targets,), dimensionless
        By the 2s-1s rate.
    """

    levels: LevelSet
    upper: IntArray
    lower: IntArray
    bound_bound: FloatArray
    bound_free: FloatArray
    escape: FloatArray
    two_photon: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        count = len(self.two_photon)
        for name in ("escape", "two_photon"):
            frozen_array(self, name, (count,))
        for name in ("upper", "lower"):
            frozen_array(self, name, (len(self.upper),), np.int64)
        frozen_array(self, "bound_bound", (count, len(self.upper)))
        frozen_array(self, "bound_free", (count, len(self.levels)))

    def processes(self, at: int) -> dict[str, float]:
        """Derivative of one target by a common factor on each process."""
        return {
            "two_photon": float(self.two_photon[at]),
            "bound_bound": float(self.bound_bound[at].sum()),
            "bound_free": float(self.bound_free[at].sum()),
            "escape": float(self.escape[at]),
        }


@dataclass(frozen=True, slots=True, eq=False)
class HeliumWeights:
    """Derivatives d ln J/d ln R by the rates of helium; n_targets is the first axis.

    Attributes
    ----------
    levels : HeliumLevels
        Every term of He I.
    upper, lower : ndarray of int, shape (n_transitions,)
        Positions in `levels` of both ends of every dipole transition between excited terms.
    lines : tuple of str, length n_lines
        Lines to 1 1S that exchange photons: "2 1P-1 1S", "2 3P1-1 1S", ...
    line_upper : ndarray of int, shape (n_lines,)
        Positions in `levels` of their upper terms.
    bound_bound : ndarray, shape (n_targets, n_transitions), dimensionless
        By the strength of each dipole transition, through the widths of lines to 1 1S too.
    bound_free : ndarray, shape (n_targets, n_levels), dimensionless
        By each level's cross section: recombination and photoionization together.
    strength : ndarray, shape (n_targets, n_lines), dimensionless
        By the Einstein A of each line to 1 1S: its depth, its escape and its width.
    escape : ndarray, shape (n_targets, n_lines), dimensionless
        By the rate at which photons of each line escape, its depth held.
    two_photon : ndarray, shape (n_targets,), dimensionless
        By the two-photon rate of 2 1S.
    absorption : ndarray, shape (n_targets,), dimensionless
        By the cross section of H I 1s inside the lines of He I and between them.
    """

    levels: HeliumLevels
    upper: IntArray
    lower: IntArray
    lines: tuple[str, ...]
    line_upper: IntArray
    bound_bound: FloatArray
    bound_free: FloatArray
    strength: FloatArray
    escape: FloatArray
    two_photon: FloatArray
    absorption: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        count = len(self.two_photon)
        for name in ("two_photon", "absorption"):
            frozen_array(self, name, (count,))
        for name in ("upper", "lower"):
            frozen_array(self, name, (len(self.upper),), np.int64)
        frozen_array(self, "line_upper", (len(self.lines),), np.int64)
        frozen_array(self, "bound_bound", (count, len(self.upper)))
        frozen_array(self, "bound_free", (count, len(self.levels)))
        for name in ("strength", "escape"):
            frozen_array(self, name, (count, len(self.lines)))

    def processes(self, at: int) -> dict[str, float]:
        """Derivative of one target by a common factor on each process of He I."""
        return {
            "two_photon": float(self.two_photon[at]),
            "bound_bound": float(self.bound_bound[at].sum()),
            "bound_free": float(self.bound_free[at].sum()),
            "line_strength": float(self.strength[at].sum()),
            "escape": float(self.escape[at].sum()),
            "absorption": float(self.absorption[at]),
        }


_BY_TARGET = ("bound_bound", "bound_free", "strength", "escape", "two_photon", "absorption")

Part = TypeVar("Part", HeliumWeights, IonWeights)


def first_of(part: Part | None, count: int) -> Part | None:
    """The same for the first `count` targets alone."""
    if part is None:
        return None
    cut: Any = {name: values[:count] for name, values in _by_target(part).items()}
    return replace(part, **cut)


def over(part: Part | None, value: FloatArray) -> Part | None:
    """Every derivative divided by `value`, shape (n_targets,)."""
    if part is None:
        return None
    divided: Any = {name: (values.T / value).T for name, values in _by_target(part).items()}
    return replace(part, **divided)


def _by_target(part: HeliumWeights | IonWeights) -> dict[str, FloatArray]:
    return {f.name: getattr(part, f.name) for f in fields(part) if f.name in _BY_TARGET}
