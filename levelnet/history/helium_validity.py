"""Validity figures of the lines of He I at the output redshifts.

References
----------
Switzer & Hirata 2008, Phys. Rev. D 77, 083006 (the H I continuum inside the lines; from memory).
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..escape.helium_continuum import HeliumContinuum, continuum_depth, doppler_width
from ..escape.helium_lines import HeliumGroundLines
from ..escape.helium_past import attenuated
from ..escape.sobolev import escape_probability
from ..network.gradient import net_flow_gradient
from .course import state_at
from .helium_atom import HeliumAtoms
from .helium_limits import electron_errors
from .helium_moment import HeliumMoment
from .helium_record import HeliumLineFigures
from .integrate import Integrated
from .local import Local
from .validity import unseen_feedback

# The best that is known of escape in one line; what other treatments leave out is told by it.
_BEST = HeliumContinuum("partial", diffusion=True)


def helium_line_figures(
    integrated: Integrated,
    atoms: HeliumAtoms,
    moments: Sequence[HeliumMoment],
    redshift: FloatArray,
) -> HeliumLineFigures:
    """Figures of every line of He I to its ground state.

    Parameters
    ----------
    integrated : Integrated
        The run.
    atoms : HeliumAtoms
        Helium of it.
    moments : sequence of HeliumMoment
        Helium at the outputs.
    redshift : ndarray, shape (n_redshift,), dimensionless
        Output redshifts.
    """
    names = atoms.equations.first.lines.names
    shape = len(moments), len(names)
    table: dict[str, FloatArray] = {}
    for k, one in enumerate(moments):
        if one.first is not None:
            for name, value in _figures(integrated, atoms, one.first, float(redshift[k])).items():
                table.setdefault(name, np.full(shape, np.nan))[k] = value
    if not table:
        every = HeliumLineFigures.__slots__[1:]
        return HeliumLineFigures(names, *(np.full(shape, np.nan) for _ in every))
    by_helium = integrated.equations.cosmology.helium_ratio()
    response = table["flow_response"]
    escape = np.expm1(response * np.log1p(table["escape_change"]))
    errors = {
        "escape_error": electron_errors(redshift, moments, by_helium, escape),
        "feedback_error": electron_errors(
            redshift, moments, by_helium, -response * table["unseen_feedback"]
        ),
    }
    return HeliumLineFigures(names, **table, **errors)


def _figures(
    integrated: Integrated, atoms: HeliumAtoms, here: Local, redshift: float
) -> dict[str, FloatArray]:
    helium, lines = atoms.equations, atoms.equations.first.lines
    log_scale = -math.log1p(redshift)
    state = state_at(integrated, log_scale)
    around = integrated.equations.helium_around(log_scale, state)
    said = helium.line_figures(around, state[2:])
    depth, escape = said["optical_depth"], said["escape_probability"]
    best = _BEST.escape(lines, here.conditions, depth, around.neutral_hydrogen_cm3)
    part = _part_of_level(lines, escape)
    gradient = net_flow_gradient(here.rates, here.coupling, here.solution)
    continuum = continuum_depth(lines, around.neutral_hydrogen_cm3, around.hubble_rate_per_s)
    doppler = doppler_width(around.radiation_temperature_k)
    widths = _widths(lines, around.radiation_temperature_k, depth, doppler)
    return {
        "optical_depth": depth,
        "escape_probability": escape,
        "share": part * here.solution.flow[lines.upper] / here.solution.net_flow,
        "flow_response": part * gradient.channel[lines.upper] / here.solution.net_flow,
        **widths,
        "continuum_depth": continuum,
        "continuum_in_core": continuum * doppler,
        "continuum_in_line": continuum * widths["thick_width_absorption"],
        "escape_change": best.value / escape - 1.0,
        "log_blue_side": said["log_blue_side"],
        "log_red_side": said["log_red_side"],
        "unseen_feedback": _unseen(integrated, atoms, here, log_scale, said),
    }


def _part_of_level(lines: HeliumGroundLines, escape: FloatArray) -> FloatArray:
    """Part of each line in all that leaves its upper level by lines: 2 3P has two."""
    rate = lines.einstein_a_per_s * escape
    total = np.array([rate[lines.upper == level].sum() for level in lines.upper])
    return np.asarray(rate / total)


def _widths(
    lines: HeliumGroundLines, radiation_k: float, depth: FloatArray, doppler: float
) -> dict[str, FloatArray]:
    """Shape of the lines; what is thick, from far away: see :func:`.validity.line_widths`."""
    other = lines.others.total(radiation_k)[0]
    total = lines.ground_rate_per_s + other
    incoherent = other / total
    damping = total / (4.0 * np.pi * doppler * lines.energy_ev / const.PLANCK_EV_S)
    core = doppler * np.sqrt(np.log(np.maximum(depth, math.e)))
    wing = doppler * damping * depth / np.pi
    return {
        "damping_parameter": damping,
        "incoherent_fraction": incoherent,
        "thick_width_scattering": 2.0 * np.maximum(core, wing),
        "thick_width_absorption": 2.0 * np.maximum(core, incoherent * wing),
    }


def _unseen(
    integrated: Integrated,
    atoms: HeliumAtoms,
    here: Local,
    log_scale: float,
    said: dict[str, FloatArray],
) -> FloatArray:
    """What lines above have sent and the treatment leaves out, over what drives each line."""
    lines = atoms.equations.first.lines
    departure = here.solution.log_population - here.solution.log_boltzmann
    source, blue, found = departure[lines.upper], said["log_blue_side"], np.zeros(len(lines.names))
    # What comes is absorbed with the escape of Sobolev, what the line makes leaves with its own.
    ratio = escape_probability(said["optical_depth"]) / said["escape_probability"]
    for line in np.flatnonzero((lines.next_above >= 0) & (lines.lit_by < 0)).tolist():
        sent = _sent(integrated, atoms, line, log_scale)
        one = slice(line, line + 1)
        found[one] = unseen_feedback(np.array([sent]), blue[one], source[one]) * ratio[one]
    return found


def _sent(integrated: Integrated, atoms: HeliumAtoms, line: int, log_scale: float) -> float:
    """Ln u of what the next line above sent, where hydrogen has taken its part on the way."""
    lines, equations = atoms.equations.first.lines, integrated.equations
    above = int(lines.next_above[line])
    delay = math.log(lines.energy_ev[above] / lines.energy_ev[line])
    if log_scale - delay <= -math.log1p(integrated.handover.redshift):
        return 0.0  # from equilibrium comes the blackbody
    ends = []
    for time, place in ((log_scale - delay, above), (log_scale, line)):
        around = equations.helium_around(time, state_at(integrated, time))
        depth = continuum_depth(lines, around.neutral_hydrogen_cm3, around.hubble_rate_per_s)
        ends.append((math.log(max(float(depth[place]), 1e-300)), 0.0))
    before = state_at(integrated, log_scale - delay)
    around = equations.helium_around(log_scale - delay, before)
    red = atoms.equations.line_figures(around, before[2:])["log_red_side"]
    return attenuated(delay, ends[0], ends[1], (float(red[above]), 0.0))[0]
