"""Validity figures of the line treatment, from what a run has at hand.

References
----------
Sobolev 1960, Moving Envelopes of Stars (escape; from memory); Chluba & Sunyaev 2009, Astron.
Astrophys. 503, 345 (what recoil and true absorption do to it).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from scipy.interpolate import CubicSpline

from .. import constants as const
from ..arrays import FloatArray
from ..background.conditions import Conditions
from ..errors import InputError
from ..escape.blue_side import Past, log_red_side
from ..escape.treatment import ResonanceLines
from ..network.gradient import net_flow_gradient
from .equations import SlowEquations
from .integrate import Integrated
from .line_figures import LineFigures
from .local import Local
from .start import equilibrium_state

_GIVEN = ("optical_depth", "escape_probability", "log_blue_side", "log_red_side")
_STEP = 1e-3  # in ln a, of differences above the hand-over


class Steps(NamedTuple):
    """What the accepted steps of a run say about the flow to the ground state.

    Attributes
    ----------
    share : ndarray, shape (n_points, n_kept), dimensionless
        Part of each kept level in the net flow.
    log_source : ndarray, shape (n_points, n_lines), dimensionless
        Ln of each line's source function over the blackbody: the departure of its upper level from
        Boltzmann at T_r, but for stimulated emission (1e-7 of it while hydrogen recombines).
    """

    share: FloatArray
    log_source: FloatArray


class Widths(NamedTuple):
    """What the profiles of the lines say; arrays of shape (n_lines,), over the frequency.

    Attributes are those of :class:`LineFigures` with these names.
    """

    damping_parameter: FloatArray
    thick_width_scattering: FloatArray
    thick_width_absorption: FloatArray
    absorption_chance: FloatArray
    absorption_edge: FloatArray
    recoil_gain: FloatArray


def steps_of(integrated: Integrated) -> Steps:
    """Solve the kept levels at every accepted step once more."""
    equations, trajectory = integrated.equations, integrated.trajectory
    share, source = [], []
    for s, state in zip(trajectory.time.tolist(), trajectory.state, strict=True):
        here = equations.local(s, state)
        share.append(here.solution.flow / here.solution.net_flow)
        source.append(equations.line_state(here)[0])
    return Steps(np.array(share), np.array(source))


def line_figures(
    integrated: Integrated,
    steps: Steps,
    redshift: FloatArray,
    moments: Sequence[Local],
    lost_per_s: Sequence[FloatArray],
) -> LineFigures:
    """Figures of every line at the output redshifts.

    Parameters
    ----------
    integrated, steps : Integrated, Steps
        The run.
    redshift : ndarray, shape (n_redshift,), dimensionless
        Output redshifts.
    moments : sequence of Local
        The kept levels there.
    lost_per_s : sequence of ndarray, each of shape (n_kept,), s^-1
        Rate at which each kept level goes anywhere but to the ground state.
    """
    equations, lines = integrated.equations, integrated.equations.lines
    times = -np.log1p(redshift)
    slope = _source_slopes(integrated, steps, times)
    fed = "feedback" in getattr(equations.treatment, "resolves", ())
    sent = _sent_from_above(integrated, steps, times)
    columns: dict[str, list[FloatArray]] = {}
    for k, (here, lost) in enumerate(zip(moments, lost_per_s, strict=True)):
        said = _checked(here.coupling.validity, equations)
        depth = said.get("optical_depth", np.full(len(lines.names), np.nan))
        widths = line_widths(lines, here.conditions, depth, lost[lines.upper])
        blue, red = _sides(equations, float(times[k]), here)
        source = equations.line_state(here)[0]
        sent[k, -1] = blue[-1]  # no open line above the highest
        one = {
            "optical_depth": depth,
            "escape_probability": said.get("escape_probability", depth * np.nan),
            "share": here.solution.flow[lines.upper] / here.solution.net_flow,
            "flow_response": _flow_response(here)[lines.upper],
            **widths._asdict(),
            "source_slope": slope[k],
            "source_change": widths.thick_width_absorption * np.abs(slope[k]),
            "log_blue_side": blue,
            "log_red_side": red,
            "unseen_feedback": 0.0 * blue if fed else unseen_feedback(sent[k], blue, source),
        }
        for name, value in one.items():
            columns.setdefault(name, []).append(value)
    return LineFigures(lines.names, **{name: np.array(rows) for name, rows in columns.items()})


def _checked(said: dict[str, FloatArray], equations: SlowEquations) -> dict[str, FloatArray]:
    """What a treatment gives, one value per line each; a user's own may be wrong."""
    count = len(equations.lines.names)
    for name in _GIVEN:
        if name in said and np.shape(said[name]) != (count,):
            raise InputError(
                f'line treatment "{equations.treatment.name}": validity["{name}"] has shape '
                f"{np.shape(said[name])}; allowed is ({count},), one value per open line"
            )
    return said


def line_widths(
    lines: ResonanceLines, conditions: Conditions, depth: FloatArray, lost_per_s: FloatArray
) -> Widths:
    """Widths of the lines and how true absorption and recoil share them.

    Parameters
    ----------
    lines : ResonanceLines
        The lines.
    conditions : Conditions
        Temperatures.
    depth : ndarray, shape (n_lines,), dimensionless
        Sobolev optical depth; NaN where it is not known.
    lost_per_s : ndarray, shape (n_lines,), s^-1
        Rate at which each upper level goes anywhere but to the ground state.

    Notes
    -----
    From far away, a Lorentz wing of decay rate G has reached depth 1 at G tau/(4 pi^2 nu). Photons
    in a wing that only scatters diffuse as x^3 = 3 d t, t in Hubble times, with d = G tau/(4 pi^2
    nu) k T_m/(m c^2); recoil then multiplies escape by 1/int_0^inf exp(-(h nu/k T_m) x - t) dt, of
    which the first order is given. Where true absorption ends a photon further out, at the edge e,
    diffusion counts as (x/e)^2 of that: an estimate of the size, no more.
    """
    doppler = doppler_width(conditions)
    frequency_hz = lines.energy_ev / const.PLANCK_EV_S
    damping = lines.decay_rate_per_s / (4.0 * np.pi * doppler * frequency_hz)
    core = np.sqrt(np.log(np.maximum(depth, 1.0)))  # thick within so many Doppler widths
    chance = lost_per_s / (lost_per_s + lines.einstein_a_per_s)
    wing = doppler * damping * depth / np.pi
    exponent = lines.energy_ev / (const.BOLTZMANN_EV_K * conditions.matter_temperature_k)
    rest_ev = const.HYDROGEN_ATOM_MASS_G * const.SPEED_OF_LIGHT_CM_S**2 / const.ERG_PER_EV
    diffused = math.gamma(4.0 / 3.0) * np.cbrt(3.0 * wing * lines.energy_ev / rest_ev / exponent)
    first = np.minimum(1.0, diffused / np.maximum(chance * wing, 1e-99)) ** 2
    return Widths(
        damping,
        2.0 * np.maximum(doppler * core, wing),
        2.0 * np.maximum(doppler * core, chance * wing),
        chance,
        chance * wing,
        exponent * diffused * first,
    )


def doppler_width(conditions: Conditions) -> float:
    """Doppler width over frequency of a hydrogen line, sqrt(2 k T_m / m_H) / c."""
    speed = math.sqrt(
        2.0 * const.BOLTZMANN_ERG_K * conditions.matter_temperature_k / const.HYDROGEN_ATOM_MASS_G
    )
    return speed / const.SPEED_OF_LIGHT_CM_S


def unseen_feedback(sent: FloatArray, blue: FloatArray, source: FloatArray) -> FloatArray:
    """Part of what drives a line that a field left out of its blue side would take.

    Parameters
    ----------
    sent, blue, source : ndarray, shape (n_lines,), dimensionless
        Ln u of what the line above sent, of the blue side that the treatment saw, and of the line's
        own source function. The net flow of the line goes as u_source - u_blue.

    Returns
    -------
    ndarray, shape (n_lines,), dimensionless
        (u_sent - u_blue)/(u_source - u_blue); 0 where nothing drives the line.
    """
    gap, rise = source - blue, sent - blue
    near = np.expm1(np.minimum(rise, 700.0)) / np.where(gap == 0.0, np.inf, np.expm1(_below(gap)))
    far = np.exp(np.minimum(rise - gap, 700.0)) - np.exp(-np.maximum(gap, 1.0))
    return np.where(gap < 1.0, near, far / -np.expm1(-np.maximum(gap, 1.0)))


def log_red_side_by_number(
    flow_per_s: FloatArray, lines: ResonanceLines, conditions: Conditions, log_blue: FloatArray
) -> FloatArray:
    """Ln u on the red side of lines by the number of photons that their net flow makes.

    Parameters
    ----------
    flow_per_s : ndarray, shape (n_lines,), s^-1
        Net flow in each line per hydrogen nucleus.
    lines, conditions : ResonanceLines, Conditions
        The lines and where they stand.
    log_blue : ndarray, shape (n_lines,), dimensionless
        Ln u on the blue side.

    Returns
    -------
    ndarray, shape (n_lines,), dimensionless
        u_red = u_blue + flow n_H lambda^3/(8 pi H f), f the blackbody: expansion carries 8 pi nu^2
        H nu/c^3 photons per unit of occupation and time past a frequency. NaN where a line takes
        more than there is.
    """
    kt = const.BOLTZMANN_EV_K * conditions.radiation_temperature_k
    exponent = lines.energy_ev / kt
    modes = 8.0 * np.pi * conditions.hubble_rate_per_s / lines.wavelength_cm**3
    made = flow_per_s * (conditions.hydrogen_density_cm3 / modes)
    with np.errstate(divide="ignore", over="ignore", invalid="ignore"):
        log_made = np.log(np.abs(made)) + exponent + np.log(-np.expm1(-exponent))
        taken = log_blue + np.log1p(-np.exp(log_made - log_blue))
        return np.asarray(np.where(made < 0.0, taken, np.logaddexp(log_blue, log_made)))


def _below(value: FloatArray) -> FloatArray:
    return np.minimum(value, 1.0)


def _sides(equations: SlowEquations, time: float, here: Local) -> tuple[FloatArray, FloatArray]:
    """Ln u on the blue and the red side: as the treatment says, as remembered, or as it follows."""
    said, lines = here.coupling.validity, equations.lines
    blue, red = said.get("log_blue_side"), said.get("log_red_side")
    if blue is None:
        past = equations.past
        blue = (
            np.zeros(len(lines.names)) if past is None else past.blue_side(time, 0.0).log_distortion
        )
    if red is None and equations.past is not None:
        red = log_red_side(*equations.line_state(here), said["optical_depth"], blue)
    if red is None:
        flow = here.solution.flow[lines.upper]
        red = log_red_side_by_number(flow, lines, here.conditions, blue)
    return blue, red


def _flow_response(here: Local) -> FloatArray:
    gradient = net_flow_gradient(here.rates, here.coupling, here.solution)
    return np.asarray(gradient.channel / here.solution.net_flow)


def _source_slopes(integrated: Integrated, steps: Steps, times: FloatArray) -> FloatArray:
    """D ln u_source/d ln a, shape (n_redshift, n_lines): of the solution, not of the equations.

    The rate of a stiff variable is no slope of it, so the accepted steps are differentiated.
    """
    equations, start = integrated.equations, -math.log1p(integrated.handover.redshift)
    slopes = np.empty((len(times), len(equations.lines.names)))
    below = times > start
    if below.any():
        slopes[below] = CubicSpline(integrated.trajectory.time, steps.log_source)(times[below], 1)
    for k in np.flatnonzero(~below):
        ends = [float(times[k]) + side * _STEP for side in (-1.0, 1.0)]
        before, after = (
            equations.line_state(equations.local(s, equilibrium_state(equations, s)[0]))[0]
            for s in ends
        )
        slopes[k] = (after - before) / (2.0 * _STEP)
    return slopes


def _sent_from_above(integrated: Integrated, steps: Steps, times: FloatArray) -> FloatArray:
    """Ln u that the next open line above has sent, as a thick line does; 0 above the hand-over."""
    delay = Past.of(integrated.equations.lines.energy_ev).delay
    sent = np.zeros((len(times), len(delay)))
    if len(integrated.trajectory.time) < 2:
        return sent
    source = CubicSpline(integrated.trajectory.time, steps.log_source)
    for line in range(len(delay) - 1):
        then = times - delay[line]
        seen = then > integrated.trajectory.time[0]
        sent[seen, line] = source(then[seen])[:, line + 1]
    return sent
