"""Scalars of a frozen history with one rate changed, for differences that hold a weighing."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numpy as np

from levelnet.arrays import FloatArray, IntArray
from levelnet.escape.treatment import Sobolev
from levelnet.history.setup import Setup
from levelnet.network.assembly import Workspace
from levelnet.network.ladder import Ladder
from levelnet.network.rates import rate_constants
from levelnet.network.reduction import exchange_pairs
from levelnet.network.tabulation import HeldSource, NodeSource, TabulatedReduction
from levelnet.numerics.chebyshev import ChebyshevSeries
from levelnet.studies.frozen import FrozenHistory, freeze, on_steps
from levelnet.studies.scalars import scalars_of
from levelnet.studies.targets import parse_target
from levelnet.studies.weigh import reach
from tests.small_runs import small_setup

TARGETS = (
    "x_e(900)",
    "x_e(200)",
    "T_m(100)",
    "last_scattering_redshift",
    "visibility_width",
    "damping_per_mpc",
    "drag_redshift",
    "optical_depth(200)",
    "line(2p-1s)",
    "line(2s-1s)",
    "line(3d-2p)",
)
PARSED = [parse_target(name) for name in TARGETS]


@lru_cache(maxsize=2)
def frozen_run(n_max: int = 8, end: float = 20.0) -> tuple[Setup, FrozenHistory]:
    """A small history on frozen steps, with 3d kept for its line."""
    setup = small_setup(n_max, end)
    return setup, freeze(setup, *reach(setup, PARSED), lambda stage, fraction: None)


def with_strengths(ladder: Ladder, place: IntArray, factor: float) -> Ladder:
    """The atom with some line strengths changed, those of whole shells among them."""
    strength, shells = ladder.dipole.strength_per_s.copy(), ladder.shells
    to_levels, among = shells.to_levels.copy(), shells.among.copy()
    start, middle = len(strength), len(strength) + to_levels.size
    strength[place[place < start]] *= factor
    to_levels.reshape(-1)[place[(place >= start) & (place < middle)] - start] *= factor
    among.reshape(-1)[place[place >= middle] - middle] *= factor
    among = np.tril(among) + np.tril(among, -1).T
    return dataclasses.replace(
        ladder,
        dipole=dataclasses.replace(ladder.dipole, strength_per_s=strength),
        shells=dataclasses.replace(shells, to_levels=to_levels, among=among),
    )


def with_cross_sections(ladder: Ladder, levels: IntArray, factor: float) -> Ladder:
    """The atom with the cross sections of some levels changed."""
    sigma = [one.copy() for one in ladder.bound_free.cross_section_cm2]
    for level in levels.tolist():
        sigma[int(ladder.levels.n[level]) - 1][max(0, int(ladder.levels.l[level]))] *= factor
    changed = dataclasses.replace(ladder.bound_free, cross_section_cm2=tuple(sigma))
    return dataclasses.replace(ladder, bound_free=changed)


def tabulated_again(table: TabulatedReduction, ladder: Ladder) -> TabulatedReduction:
    """The same nodes with another atom."""
    pairs = exchange_pairs(ladder)
    source = NodeSource(ladder, pairs, None, None, Workspace.of(ladder))
    series = []
    for piece in table.series:
        held = HeldSource.of(source, math.exp(piece.low))
        values = np.array([held(x) for x in piece.nodes.tolist()])
        series.append(ChebyshevSeries.fit(piece.low, piece.high, values))
    return TabulatedReduction(ladder, rate_constants(ladder, pairs), tuple(series), 0.0)


@dataclasses.dataclass(frozen=True)
class ScaledSobolev(Sobolev):
    """Sobolev's escape with every line's rate times a factor."""

    factor: float = 1.0

    def couple(self, *arguments: Any) -> Any:
        found = super().couple(*arguments)
        names = ("loss", "source", "slope_column", "slope_temperature")
        return dataclasses.replace(
            found, **{name: self.factor * getattr(found, name) for name in names}
        )


def log_scalars(run: FrozenHistory, **changes: Any) -> FloatArray:
    """Ln of every target on the same steps; changes are fields of the equations, or `ladder`."""
    setup, integrated, equations = run.setup, run.integrated, run.equations
    if "ladder" in changes:
        ladder = changes.pop("ladder")
        table = tabulated_again(run.table, ladder)
        integrated = dataclasses.replace(integrated, ladder=ladder, measured=table)
        changes["reduced"] = table
    if "cosmology" in changes:
        setup = dataclasses.replace(setup, cosmology=changes["cosmology"])
    equations = dataclasses.replace(equations, **changes)
    integrated = dataclasses.replace(integrated, equations=equations)
    again = on_steps(setup, integrated, run.solution.edges)
    return np.log(scalars_of(again, PARSED).value)


def slope(of_log_factor: Callable[[float], FloatArray], step: float = 0.02) -> FloatArray:
    """Derivative at 0 by central differences of three sizes, Richardson-extrapolated (order 6)."""
    first, second, third = (
        (of_log_factor(h) - of_log_factor(-h)) / (2.0 * h) for h in (step, 2 * step, 3 * step)
    )
    return (15.0 * first - 6.0 * second + third) / 10.0
