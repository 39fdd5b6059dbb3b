"""Time and conformal time since the Big Bang, by quadrature over the expansion."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray
from .expansion import ExpansionTable
from .friedmann import FriedmannLaw

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(12)
# The same rule on 0 to 1.
_NODES, _WEIGHTS = 0.5 * (_NODES + 1.0), 0.5 * _WEIGHTS


@dataclass(frozen=True, slots=True, eq=False)
class Clock:
    """Integrals of dln a/H and dln a/(a H) from a = 0, summed up at the edges of panels in ln a.

    Gauss-Legendre rules on panels: 1/H is smooth in ln a, its singularities lie about a unit from
    the real axis. Before the first edge it is smooth in a itself (a^2 H is nearly constant there).

    Attributes
    ----------
    edges : ndarray, shape (n_edges,), dimensionless
        Panel edges in ln a, ascending, the last at or above 0.
    sums : ndarray, shape (2, n_edges), s
        Both integrals from a = 0 to each edge.
    rate_per_s : callable
        H in s^-1 of an array of 1 + redshift.
    """

    edges: FloatArray
    sums: FloatArray
    rate_per_s: Callable[[FloatArray], FloatArray]

    def integrals_s(self, log_scale: FloatArray) -> FloatArray:
        """Both integrals in s, shape (2, n), from a = 0 to `log_scale` = ln a <= 0, shape (n,)."""
        panel = np.searchsorted(self.edges, log_scale, side="right") - 1
        early = panel < 0
        start = self.edges[np.maximum(panel, 0)]
        result = self.sums[:, np.maximum(panel, 0)]
        result = result + panel_integrals_s(self.rate_per_s, start, log_scale)
        if np.any(early):
            result[:, early] = early_integrals_s(self.rate_per_s, log_scale[early])
        return result


def make_clock(rate_per_s: Callable[[FloatArray], FloatArray], edges: FloatArray) -> Clock:
    """Sum the integrals up over the panels between `edges` (ln a, dimensionless)."""
    pieces = panel_integrals_s(rate_per_s, edges[:-1], edges[1:])
    first = early_integrals_s(rate_per_s, edges[:1])
    return Clock(edges, np.cumsum(np.concatenate([first, pieces], axis=1), axis=1), rate_per_s)


def panel_integrals_s(
    rate_per_s: Callable[[FloatArray], FloatArray], start: FloatArray, end: FloatArray
) -> FloatArray:
    """Both integrals in s, shape (2, n), from ln a = `start` to `end` of shape (n,)."""
    width = end - start
    growth = np.exp(-(start[:, None] + width[:, None] * _NODES))
    weighed = _WEIGHTS * width[:, None] / rate_per_s(growth)
    return np.stack([weighed.sum(axis=1), (weighed * growth).sum(axis=1)])


def early_integrals_s(
    rate_per_s: Callable[[FloatArray], FloatArray], log_scale: FloatArray
) -> FloatArray:
    """Both integrals in s, shape (2, n), from a = 0 to ln a = `log_scale` of shape (n,)."""
    growth = 1.0 / (np.exp(log_scale)[:, None] * _NODES)
    # dln a = da/a, and a/a_end is the node itself.
    weighed = _WEIGHTS / _NODES / rate_per_s(growth)
    return np.stack([weighed.sum(axis=1), (weighed * growth).sum(axis=1)])


@dataclass(frozen=True, slots=True, eq=False)
class JoinedRate:
    """The rate of a table, and of Friedmann's law above it."""

    # A class, since closures do not pickle.

    law: FriedmannLaw
    table: ExpansionTable

    def __call__(self, growth: FloatArray) -> FloatArray:
        """H in s^-1 at growth = 1 + redshift, any shape."""
        last = 1.0 + self.table.last_redshift
        above = growth > last
        # Rounding may put a node a hair outside either end of the table.
        rate = self.table.rate_per_s(np.clip(growth, 1.0, last))
        rate[above] = self.law.rate_per_s(growth[above])
        return rate


def law_clock(law: FriedmannLaw) -> Clock:
    """Clock of Friedmann's law."""
    first = _first_edge(law)
    return make_clock(law.rate_per_s, np.linspace(first, 0.0, 2 - int(4.0 * first)))


def table_clock(law: FriedmannLaw, table: ExpansionTable) -> Clock:
    """Clock of a tabulated expansion; before its last redshift the law holds."""
    # An edge on every row: a spline is smooth between its knots only.
    within = -np.log1p(table.redshift[::-1])
    before = np.linspace(min(_first_edge(law), within[0] - 1.0), within[0], 60)
    return make_clock(JoinedRate(law, table), np.concatenate([before, within[1:]]))


def _first_edge(law: FriedmannLaw) -> float:
    """Choose an ln a well inside the radiation era."""
    return math.log(min(1e-8, 0.1 * law.radiation / law.matter))
