"""The course of a history: where it started, its equations, and its solution at any time."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.interpolate import CubicSpline

from ..arrays import FloatArray
from ..numerics.stepping import Trajectory
from .equations import SlowEquations, ionized_and_neutral
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
    log_odds = np.empty(len(log_scale))
    below = log_scale > -math.log1p(course.handover.redshift)
    trajectory = course.trajectory
    if below.any():
        log_odds[below] = CubicSpline(trajectory.time, trajectory.state[:, 0])(log_scale[below])
    for k in np.flatnonzero(~below):
        log_odds[k] = equilibrium_state(course.equations, log_scale[k])[0][0]
    return np.array([ionized_and_neutral(u)[0] for u in log_odds.tolist()])
