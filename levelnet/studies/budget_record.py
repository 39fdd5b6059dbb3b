"""The record of an error budget: errors of targets from uncertain rates, by source."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray, frozen_array
from ..errors import InputError
from .targets import parse_target


class Contribution(NamedTuple):
    """What one group adds to the error of a target: its relative error at +1 sigma, with sign."""

    group: str
    contribution: float
    source: str


class Band(NamedTuple):
    """x_e(z) with its relative error, redshift descending.

    Attributes
    ----------
    redshift, free_electron_fraction : ndarray, shape (n_redshift,), dimensionless
        Each redshift once.
    sigma : ndarray, shape (n_redshift,), dimensionless
        Relative 1-sigma error.
    contribution : ndarray, shape (n_redshift, n_groups), dimensionless
        Relative change where the rates of one group are higher by 1 sigma.
    """

    redshift: FloatArray
    free_electron_fraction: FloatArray
    sigma: FloatArray
    contribution: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class ErrorBudget:
    """Errors of targets from uncertain rates, by source; n_targets is the first axis.

    Attributes
    ----------
    targets, units : tuple of str, length n_targets
        As in the weighing.
    value : ndarray, shape (n_targets,)
        The targets, in their units.
    sigma : ndarray, shape (n_targets,), dimensionless
        Relative 1-sigma error: contributions added in squares.
    groups : tuple of str, length n_groups
        What errs together: a group of the table, or a row of its own named by its selector.
    contribution : ndarray, shape (n_targets, n_groups), dimensionless
        Relative change of each target where the rates of one group are higher by 1 sigma.
    sources : tuple of str, length n_groups
        Where the uncertainties come from.
    rows : tuple of str
        What was assumed, row by row: selector, sigma, group.
    """

    targets: tuple[str, ...]
    units: tuple[str, ...]
    value: FloatArray
    sigma: FloatArray
    groups: tuple[str, ...]
    contribution: FloatArray
    sources: tuple[str, ...]
    rows: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        count = len(self.targets)
        for name in ("value", "sigma"):
            frozen_array(self, name, (count,))
        frozen_array(self, "contribution", (count, len(self.groups)))

    def ranked(self, target: str) -> tuple[Contribution, ...]:
        """Contributions to the error of one target, the largest first."""
        name = target if target in self.targets else parse_target(target).name
        if name not in self.targets:
            raise InputError(f'target "{target}": in the budget are {", ".join(self.targets)}')
        row = self.contribution[self.targets.index(name)]
        order = np.argsort(-np.abs(row), kind="stable").tolist()
        return tuple(Contribution(self.groups[k], float(row[k]), self.sources[k]) for k in order)

    def band(self) -> Band:
        """x_e(z) with its relative error, from the targets "x_e(Z)"; empty without any."""
        asked = [parse_target(name) for name in self.targets]
        rows = {one.redshift: k for k, one in enumerate(asked) if one.kind == "x_e"}
        redshift = sorted(rows, reverse=True)
        order = [rows[z] for z in redshift]
        return Band(
            np.array(redshift), self.value[order], self.sigma[order], self.contribution[order]
        )
