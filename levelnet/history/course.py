"""The course of a history: where it started, its equations, and its solution at any time."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.interpolate import CubicSpline

from ..arrays import FloatArray
from ..numerics.stepping import Trajectory
from .equations import SlowEquations
from .start import Handover, equilibrium_state


@dataclass(frozen=True, slots=True, eq=False)
class Course:
    """Equations and solution of one history.

    Attributes
    ----------
    equations : SlowEquations
        The equations solved.
    handover : Handover
        Where the integration started.
    trajectory : Trajectory
        Accepted steps from the hand-over down, outputs among them; time is ln a.
    """

    equations: SlowEquations
    handover: Handover
    trajectory: Trajectory


def state_at(course: Course, log_scale: float) -> FloatArray:
    """Slow variables at an output: equilibrium above the hand-over, the integrated ones below."""
    if log_scale <= -math.log1p(course.handover.redshift):
        return equilibrium_state(course.equations, log_scale)[0]
    trajectory = course.trajectory
    nearest = int(np.argmin(np.abs(trajectory.time - log_scale)))
    state: FloatArray = trajectory.state[nearest]
    return state


def electron_fraction_at(course: Course, log_scale: FloatArray) -> FloatArray:
    """n_e/n_H (dimensionless) at any ln a of the history."""
    equations, trajectory = course.equations, course.trajectory
    # Without helium v has no part in n_e.
    variables = 1 if equations.helium is None else trajectory.state.shape[1]
    state = np.empty((len(log_scale), variables))
    below = log_scale > -math.log1p(course.handover.redshift)
    if below.any():
        spline = CubicSpline(trajectory.time, trajectory.state[:, :variables])
        state[below] = spline(log_scale[below])
    for k in np.flatnonzero(~below):
        state[k] = equilibrium_state(equations, log_scale[k])[0][:variables]
    return np.array([equations.electron_fraction(one) for one in state])
