"""Derivatives of a weighing summed and ranked: by level, shell, l; maps over levels."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray, IntArray, frozen_array
from ..atomic.levels import level_name
from .weighing import Weighing


@dataclass(frozen=True, slots=True, eq=False)
class Shares:
    """Derivatives of one target summed over groups of levels; every array has shape (n_groups,).

    A transition joins two levels, so it stands once in `as_upper` and once in `as_lower`: each of
    the two adds up to the whole of the bound-bound process, and they are not to be added.

    Attributes
    ----------
    names : tuple of str, length n_groups
        What each group is called.
    key : ndarray of int
        What its levels have in common: a position, n or l (-1 stands for whole shells).
    as_upper, as_lower : ndarray, dimensionless
        Sum over the dipole transitions whose upper, or lower, level is in the group.
    bound_free : ndarray, dimensionless
        Sum over its levels of the derivative by the cross section.
    """

    names: tuple[str, ...]
    key: IntArray
    as_upper: FloatArray
    as_lower: FloatArray
    bound_free: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.names),)
        frozen_array(self, "key", shape, np.int64)
        for name in ("as_upper", "as_lower", "bound_free"):
            frozen_array(self, name, shape)

    def ranked(self) -> IntArray:
        """Positions of the groups, that with the largest single derivative first."""
        size = np.max(np.abs([self.as_upper, self.as_lower, self.bound_free]), axis=0, initial=0.0)
        return np.argsort(-size, kind="stable")


class Transition(NamedTuple):
    """One dipole transition: its name ("3d-2p") and derivative (dimensionless)."""

    name: str
    weight: float


@dataclass(frozen=True, slots=True, eq=False)
class LevelMap:
    """Derivatives of one target over (n, l); NaN where there is no level.

    Attributes
    ----------
    n : ndarray of int, shape (n_shells,)
        Principal quantum numbers of the rows, from 2.
    l : ndarray of int, shape (n_columns,)
        Of the columns, from 0; the last is -1 where there are whole shells, which stand in it.
    bound_free : ndarray, shape (n_shells, n_columns), dimensionless
        By the cross section of each level.
    out : ndarray, shape (n_shells, n_columns), dimensionless
        By all dipole transitions out of each level to excited levels below, together.
    """

    n: IntArray
    l: IntArray
    bound_free: FloatArray
    out: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        frozen_array(self, "n", (len(self.n),), np.int64)
        frozen_array(self, "l", (len(self.l),), np.int64)
        for name in ("bound_free", "out"):
            frozen_array(self, name, (len(self.n), len(self.l)))


def by_level(weighing: Weighing, target: str) -> Shares:
    """Sum by level, in the order of the levels.

    Parameters
    ----------
    weighing : Weighing
        Any.
    target : str
        One of its targets.

    Returns
    -------
    Shares
        Names such as "3d"; "n=40" is a whole shell.

    Raises
    ------
    InputError
        If the target was not weighed.
    """
    levels = weighing.levels
    names = tuple(map(level_name, levels.n.tolist(), levels.l.tolist()))
    return _shares(weighing, target, np.arange(len(levels)), names)


def by_shell(weighing: Weighing, target: str) -> Shares:
    """Sum by principal quantum number, ascending; whole shells among the rest. See `by_level`."""
    n = weighing.levels.n
    return _shares(weighing, target, n, tuple(f"n={k}" for k in np.unique(n)))


def by_l(weighing: Weighing, target: str) -> Shares:
    """Sum by l, ascending; whole shells first, if any, as a group of their own. See `by_level`."""
    l = weighing.levels.l
    names = tuple("whole shells" if k < 0 else f"l={k}" for k in np.unique(l))
    return _shares(weighing, target, l, names)


def _shares(weighing: Weighing, target: str, key: IntArray, names: tuple[str, ...]) -> Shares:
    at = weighing.index(target)
    found, group = np.unique(key, return_inverse=True)

    def summed(where: IntArray, values: FloatArray) -> FloatArray:
        return np.asarray(np.bincount(where, values, minlength=len(found)), np.float64)

    transitions = weighing.bound_bound[at]
    return Shares(
        names=names,
        key=found,
        as_upper=summed(group[weighing.upper], transitions),
        as_lower=summed(group[weighing.lower], transitions),
        bound_free=summed(group, weighing.bound_free[at]),
    )


def top_transitions(weighing: Weighing, target: str, count: int) -> tuple[Transition, ...]:
    """List the transitions with the largest derivatives, either sign, largest first.

    Parameters
    ----------
    weighing : Weighing
        Any.
    target : str
        One of its targets.
    count : int
        How many; fewer where there are fewer, and those of no weight at all are left out.

    Returns
    -------
    tuple of Transition
        Names such as "3d-2p", and signed derivatives.
    """
    weights = weighing.bound_bound[weighing.index(target)]
    first = np.argsort(-np.abs(weights), kind="stable")[:count]
    return tuple(
        Transition(transition_name(weighing, int(k)), float(weights[k]))
        for k in first
        if weights[k] != 0.0
    )


def transition_name(weighing: Weighing, position: int) -> str:
    """Name of the transition at a position: upper level, lower level, as in "3d-2p"."""
    levels = weighing.levels
    ends = (int(weighing.upper[position]), int(weighing.lower[position]))
    return "-".join(level_name(int(levels.n[k]), int(levels.l[k])) for k in ends)


def level_map(weighing: Weighing, target: str) -> LevelMap:
    """Lay the derivatives of one target out over (n, l), the ground state left out.

    Parameters
    ----------
    weighing : Weighing
        Any.
    target : str
        One of its targets.

    Returns
    -------
    LevelMap
        Rows n, columns l; whole shells in a last column of their own.
    """
    levels, shares = weighing.levels, by_level(weighing, target)
    excited = levels.n > 1
    n = np.unique(levels.n[excited])
    l = np.unique(levels.l[excited])
    l = np.roll(l, -1) if len(l) and l[0] < 0 else l
    # l runs from 0 without gaps, so that -1 is the last column by Python's own indexing.
    row, column = np.searchsorted(n, levels.n[excited]), levels.l[excited]
    maps = {}
    for name, values in (("bound_free", shares.bound_free), ("out", shares.as_upper)):
        maps[name] = np.full((len(n), len(l)), np.nan)
        maps[name][row, column] = values[excited]
    return LevelMap(n, l, **maps)


def shell_map(weighing: Weighing, target: str) -> tuple[IntArray, FloatArray]:
    """Sum the transitions of each pair of shells.

    Parameters
    ----------
    weighing : Weighing
        Any.
    target : str
        One of its targets.

    Returns
    -------
    n : ndarray of int, shape (n_shells,)
        Principal quantum numbers, from 2; whole shells stand with the rest.
    weights : ndarray, shape (n_shells, n_shells), dimensionless
        Upper shell along axis 0, lower along axis 1, summed over both l; NaN where the weighing has
        no transition.
    """
    levels = weighing.levels
    n = np.unique(levels.n[levels.n > 1])
    upper, lower = (np.searchsorted(n, levels.n[k]) for k in (weighing.upper, weighing.lower))
    weights, found = np.zeros((len(n), len(n))), np.zeros((len(n), len(n)), bool)
    np.add.at(weights, (upper, lower), weighing.bound_bound[weighing.index(target)])
    found[upper, lower] = True
    return n, np.where(found, weights, np.nan)
