"""Scalars of a frozen history: their values, and what they hang on directly."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.interpolate import make_interp_spline

from ..arrays import FloatArray
from ..background.last_scattering import Observed, observe
from ..background.parameters import COSMOLOGICAL, TEMPERATURE, helium_derivatives
from ..background.quadrature import quadrature
from ..constants import BOLTZMANN_EV_K
from ..history.equations import Linearized, ionized_and_neutral
from ..network.gradient import (
    FlowGradient,
    FlowSlopes,
    channel_gradient,
    flow_slopes,
    less,
    line_gradient,
)
from ..network.line_rates import kept_line_rates
from ..numerics.collocation import WEIGHTS, stage_slopes
from ..quantities import OBSERVABLES
from .frozen import FrozenHistory
from .targets import Target


@dataclass(frozen=True, slots=True, eq=False)
class NetTransitions:
    """Net transitions in one line, summed over the history; n_points = 3 n_steps stages.

    The strength is the integral of flow/F over the change of x_HI, with F the net flow to the
    ground state: near equilibrium the flows themselves hold the error of a stiff state times its
    relaxation rate, their ratio does not.

    Attributes
    ----------
    scalar : int
        Which scalar it is.
    weight : ndarray, shape (n_points,), s
        What a change of flow - (flow/F) F counts.
    gradient : list of FlowGradient, length n_points
        Of flow - (flow/F) F by the rates, those of the line itself held.
    slopes : list of FlowSlopes, length n_points
        Of the same by the conditions.
    own_slope : ndarray, shape (n_points,), s^-1
        Derivative by ln T_r through the line's own rates.
    ends : tuple of int, or None
        Positions of upper and lower among the kept levels; None for a line to the ground state.
    """

    scalar: int
    weight: FloatArray
    gradient: list[FlowGradient]
    slopes: list[FlowSlopes]
    own_slope: FloatArray
    ends: tuple[int, int] | None


@dataclass(frozen=True, slots=True, eq=False)
class Scalars:
    """Several scalars J of one history, and the direct part of their derivatives.

    Attributes
    ----------
    value : ndarray, shape (n_scalars,)
        J.
    by_state : ndarray, shape (n_scalars, n_steps, 3, n)
        dJ by the states at the stages.
    by_parameter : ndarray, shape (n_scalars, n_parameters)
        dJ by each parameter of the cosmology, states held.
    lines : tuple of NetTransitions
        Line strengths among the scalars, which hang on the rates directly.
    """

    value: FloatArray
    by_state: FloatArray
    by_parameter: FloatArray
    lines: tuple[NetTransitions, ...]


def scalars_of(history: FrozenHistory, targets: Sequence[Target]) -> Scalars:
    """Evaluate every target on a history."""
    steps = history.solution.stages.shape[0]
    made = Scalars(
        np.zeros(len(targets)),
        np.zeros((len(targets), steps, 3, history.solution.start.size)),
        np.zeros((len(targets), len(COSMOLOGICAL))),
        (),
    )
    lines = []
    for k, target in enumerate(targets):
        if target.kind in {"x_e", "T_m"}:
            _put_state(history, target, k, made)
        elif target.kind == "line":
            lines.append(_put_line(history, target, k, made))
    _put_observables(history, targets, made)
    return Scalars(made.value, made.by_state, made.by_parameter, tuple(lines))


def _put_state(history: FrozenHistory, target: Target, k: int, made: Scalars) -> None:
    """x_e or T_m at the end of a step."""
    edge = history.edge(target.redshift)
    state = history.solution.state_at(edge)
    if target.kind == "x_e":
        electrons = _electrons(history, state[None, :])
        made.value[k] = electrons.fraction[0]
        made.by_state[k, edge - 1, 2] = electrons.fraction[0] * electrons.by_state[0]
        made.by_parameter[k] = electrons.fraction[0] * electrons.by_parameter[0]
        return
    cosmology = history.setup.cosmology
    radiation_k = float(cosmology.radiation_temperature_k(target.redshift))
    made.value[k] = radiation_k * math.exp(float(state[1]))
    made.by_state[k, edge - 1, 2, 1] = made.value[k]
    made.by_parameter[k, TEMPERATURE] = made.value[k] / cosmology.cmb_temperature_k


def _put_observables(history: FrozenHistory, targets: Sequence[Target], made: Scalars) -> None:
    """Everything that is an integral over x_e."""
    wanted = [k for k, t in enumerate(targets) if t.name in OBSERVABLES]
    depths = [k for k, t in enumerate(targets) if t.kind == "optical_depth"]
    if not wanted and not depths:
        return
    solution, cosmology = history.solution, history.setup.cosmology
    grid = quadrature(cosmology, float(solution.edges[0]), float(solution.edges[-1]))
    at_edges = np.concatenate([solution.start[None, :], solution.stages[:, 2]])
    # A quintic spline is linear in the values at the edges and smooth enough for slopes of g.
    spread = make_interp_spline(solution.edges, np.eye(len(solution.edges)), k=5)(grid.points)
    electrons = _electrons(history, spread @ at_edges)
    ratio = cosmology.helium_ratio() if history.equations.helium is not None else 0.0
    early = 1.0 + 2.0 * ratio
    seen: Observed = observe(
        cosmology,
        grid,
        electrons.fraction,
        history.equations.scales.thomson,
        [targets[k].redshift for k in depths],
        [targets[k].name for k in wanted],
        early,
    )
    for row, k in enumerate((*wanted, *depths)):
        made.value[k] = seen.value[row]
        made.by_parameter[k] = seen.by_parameter[row]
        made.by_parameter[k] += seen.gradient[row] @ electrons.by_parameter
        if ratio:
            # Before the grid helium is ionized twice.
            before = seen.by_thomson[row] - seen.gradient[row].sum()
            made.by_parameter[k] += before * 2.0 / early * helium_derivatives(cosmology)
        moved = np.einsum("p,pi,pe->ei", seen.gradient[row], electrons.by_state, spread)
        made.by_state[k, :, 2] += moved[1:]


class _Electrons(NamedTuple):
    """x_e at some states, and the derivatives of its ln."""

    fraction: FloatArray  # (n_points,)
    by_state: FloatArray  # (n_points, n)
    by_parameter: FloatArray  # (n_points, n_parameters)


def _electrons(history: FrozenHistory, states: FloatArray) -> _Electrons:
    """Count electrons at `states`, shape (n_points, n)."""
    equations, cosmology = history.equations, history.setup.cosmology
    by_state, helium = np.zeros(states.shape), np.zeros(len(states))
    pairs = np.array([ionized_and_neutral(u) for u in states[:, 0].tolist()])
    fraction = pairs[:, 0].copy()
    by_state[:, 0] = pairs.prod(axis=1)
    if equations.helium is not None:
        ratio = cosmology.helium_ratio()
        ions = [equations.helium.fractions(one[2:]) for one in states]
        helium = np.array([one.electrons for one in ions])
        fraction += ratio * helium
        by_state[:, 2:] = ratio * np.array([one.electrons_by for one in ions])
    by_parameter = np.outer(helium / fraction, helium_derivatives(cosmology))
    return _Electrons(fraction, by_state / fraction[:, None], by_parameter)


def _put_line(history: FrozenHistory, target: Target, k: int, made: Scalars) -> NetTransitions:
    """Put one line strength; what it hangs on directly is returned."""
    kept = list(history.equations.reduced.kept)
    upper = kept.index(target.upper)
    lower = None if target.lower == (1, 0) else kept.index(target.lower)
    weight, own_slope = [], []
    gradients: list[FlowGradient] = []
    slopes: list[FlowSlopes] = []
    for j, row in enumerate(history.solution.linear):
        # Loss of x_HI at the stages over the step, by the slope of the cubic of u.
        gain, share = _gain(history, j), np.empty(3)
        for i, one in enumerate(row):
            here, total = one.here, one.here.local.solution.net_flow
            found = _channel(here, upper) if lower is None else _line(history, here, upper, lower)
            share[i] = found[0] / total
            own_slope.append(found[1])
            gradients.append(less(found[2], share[i], here.gradient))
            slopes.append(_slopes(history, here, gradients[-1]))
            weight.append(WEIGHTS[i] * gain.value[i] / total)
            electrons = history.equations.electrons_by(
                here.local.conditions, history.solution.stages[j, i]
            )
            made.by_state[k, j, i] += weight[-1] * _by_state(here, slopes[-1], electrons)
        made.value[k] += WEIGHTS @ (share * gain.value)
        _put_gain(made.by_state[k, :, :, 0], j, WEIGHTS * share, gain)
    ends = None if lower is None else (upper, lower)
    return NetTransitions(k, np.array(weight), gradients, slopes, np.array(own_slope), ends)


class _Gain(NamedTuple):
    """Growth of x_HI over one step at its stages, times its length, and its slopes."""

    value: FloatArray  # (3,)
    by_knot: FloatArray  # (3, 4): by u at the start and at the stages


def _gain(history: FrozenHistory, step: int) -> _Gain:
    solution = history.solution
    knots = np.append(solution.state_at(step)[0], solution.stages[step, :, 0])
    pairs = np.array([ionized_and_neutral(u) for u in knots[1:].tolist()])
    product = pairs.prod(axis=1)
    slopes = stage_slopes()
    value = -(slopes @ knots) * product
    by_knot = -slopes * product[:, None]
    by_knot[:, 1:] += np.diag(value * (pairs[:, 1] - pairs[:, 0]))
    return _Gain(value, by_knot)


def _put_gain(by_odds: FloatArray, step: int, weight: FloatArray, gain: _Gain) -> None:
    """Add what a sum over the gains at the stages hangs on: `by_odds` has shape (n_steps, 3)."""
    moved = weight @ gain.by_knot
    by_odds[step] += moved[1:]
    if step:
        by_odds[step - 1, 2] += moved[0]


def _channel(here: Linearized, kept: int) -> tuple[float, float, FlowGradient]:
    local = here.local
    gradient = channel_gradient(local.rates, local.coupling, local.solution, kept)
    return float(local.solution.flow[kept]), 0.0, gradient


def _line(
    history: FrozenHistory, here: Linearized, upper: int, lower: int
) -> tuple[float, float, FlowGradient]:
    """Flow between two kept levels in their line alone."""
    ladder, local, scales = history.integrated.ladder, here.local, history.equations.scales
    temperature_k = local.conditions.radiation_temperature_k / scales.energy
    lines = kept_line_rates(ladder, upper, temperature_k)
    at = int(np.flatnonzero(lines.position == ladder.kept_position[lower])[0])
    down, up = (scales.line_rate * math.exp(rate[at]) for rate in (lines.log_out, lines.log_in))
    d = local.solution.departure
    kept = ladder.kept
    exponent = float(kept.energy_ev[upper] - kept.energy_ev[lower])
    exponent /= BOLTZMANN_EV_K * temperature_k
    # d ln(1 + f)/d ln T = x f, f the occupation number; e^-x first, for x may be large.
    stimulated = exponent * math.exp(-exponent) / -math.expm1(-exponent)
    slope = down * d[upper] * stimulated - up * d[lower] * (stimulated + exponent)
    gradient = line_gradient(local.rates, local.solution, upper, lower, down, up)
    return float(down * d[upper] - up * d[lower]), float(slope), gradient


def _slopes(history: FrozenHistory, here: Linearized, gradient: FlowGradient) -> FlowSlopes:
    local = here.local
    kept = history.equations.reduced.kept
    return flow_slopes(kept, local.rates, local.coupling, local.conditions, gradient)


def _by_state(here: Linearized, slopes: FlowSlopes, electrons: FloatArray) -> FloatArray:
    """Derivative of a flow by the state; `electrons` is that of ln n_e, shape (n,)."""
    c = here.local.conditions
    result = slopes.ln_electron_fraction * electrons
    result[0] += c.ground_fraction * slopes.ln_ionized_fraction
    result[0] -= c.ionized_fraction * slopes.ln_ground_fraction
    result[1] += slopes.ln_matter_temperature
    return np.asarray(result)
