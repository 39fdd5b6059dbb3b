"""A history by collocation on frozen steps: what a weighing differentiates."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.interpolate import CubicSpline

from ..arrays import FloatArray
from ..errors import InputError, SolveError
from ..escape.treatment import LineTreatment
from ..history.equations import Linearized, SlowEquations
from ..history.integrate import Integrated, Progress, integrate_history
from ..history.setup import Setup
from ..history.start import equilibrium_state
from ..network.tabulation import TabulatedReduction
from ..numerics.collocation import Collocated, Linear, collocate, stage_times
from ..pieces import Pieces

# The integration starts this far in 1 + z above the highest redshift asked for, so that the start
# itself, in equilibrium, has no part in any derivative.
_HEADROOM = 1.05
# Of the steps of the integration this many become one: collocation is of higher order.
_THINNING = 2


@dataclass(frozen=True, slots=True, eq=False)
class FrozenHistory:
    """One history on a given sequence of steps.

    Attributes
    ----------
    setup : Setup
        What was asked, with the output redshifts that are edges.
    integrated : Integrated
        The run that chose the steps: ladder, table, equations.
    solution : Collocated
        Its equations solved again by collocation; time is ln a. What they remember of lines, they
        remember of its edges.
    """

    setup: Setup
    integrated: Integrated
    solution: Collocated[Linearized]

    @property
    def equations(self) -> SlowEquations:
        """The equations solved."""
        return self.integrated.equations

    @property
    def table(self) -> TabulatedReduction:
        """The reduced network with the measured constants."""
        table = self.integrated.measured
        assert isinstance(table, TabulatedReduction)
        return table

    def edge(self, redshift: float) -> int:
        """Position of the edge at an output redshift."""
        return int(np.argmin(np.abs(self.solution.edges + math.log1p(redshift))))


def freeze(
    setup: Setup,
    redshifts: Sequence[float],
    keeps: tuple[tuple[int, int], ...],
    start_above: float,
    tell: Progress,
    pieces: Pieces | None = None,
    line_treatment: LineTreatment | None = None,
) -> FrozenHistory:
    """Integrate a setup, then solve it again on the steps that were found.

    Parameters
    ----------
    setup : Setup
        The run; its network must be interpolated.
    redshifts : sequence of float
        Redshifts that must be edges of steps.
    keeps : tuple of (n, l)
        Levels to keep from elimination.
    start_above : float, dimensionless
        Redshift above which the integration must start.
    tell, pieces, line_treatment
        As for :func:`levelnet.solve`.
    """
    if not setup.accuracy.interpolate:
        raise InputError("accuracy.interpolate = false: a weighing needs the interpolated network")
    end = setup.grid.redshift_end
    low = [z for z in redshifts if z < end]
    if low:
        raise InputError(f"redshift {low[0]:g}: below grid.redshift_end = {end:g}")
    wanted = sorted({*redshifts, end, setup.grid.redshift_start})
    grid = replace(
        setup.grid, redshift_start=wanted[-1], redshifts=tuple(wanted), n_redshifts=len(wanted)
    )
    above = max(start_above, _HEADROOM * (1.0 + wanted[-1]) - 1.0)
    chosen = replace(setup, grid=grid)
    integrated = integrate_history(
        chosen, tell, pieces, line_treatment, keeps=keeps, start_above=above
    )
    trajectory = integrated.trajectory
    if not trajectory.outcome.ok:
        raise SolveError(trajectory.outcome.value, outcome=trajectory.outcome)
    longest = integrated.equations.longest_step
    edges = _thinned(trajectory.time, -np.log1p(np.array(wanted)), longest)
    return on_steps(chosen, integrated, edges)


def on_steps(setup: Setup, integrated: Integrated, edges: FloatArray) -> FrozenHistory:
    """Solve the equations of a run by collocation on given steps (ends in ln a)."""
    curve = CubicSpline(integrated.trajectory.time, integrated.trajectory.state)
    guess = curve(stage_times(edges))
    equations = integrated.equations.forgetful()
    integrated = replace(integrated, equations=equations)
    start, _ = equilibrium_state(equations, float(edges[0]))

    def linearize(log_scale: float, state: FloatArray) -> Linear[Linearized]:
        here = equations.linearized(log_scale, state)
        return Linear(here.rate, here.matrix, here)

    solution = collocate(linearize, edges, start, guess, equations.remember)
    return FrozenHistory(setup, integrated, solution)


def _thinned(
    times: FloatArray, outputs: FloatArray, longest: Callable[[float], float]
) -> FloatArray:
    """Merge steps, but not across an output, and to none above the longest from where it starts."""
    is_output = np.min(np.abs(times[:, None] - outputs), axis=1) < 1e-12
    keep, run = [0], 0
    for k in range(1, len(times)):
        run += 1
        last = k == len(times) - 1
        begin = times[keep[-1]]
        full = run == _THINNING or (not last and times[k + 1] - begin > longest(begin))
        if is_output[k] or full or last:
            keep.append(k)
            run = 0
    return np.asarray(times[keep])
