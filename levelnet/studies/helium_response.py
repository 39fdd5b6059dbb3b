"""What flows and fields of helium hang on, at one time and state.

Two quantities phi have the same kind of derivatives: the net flow of one ion to its ground state,
and ln of the distortion on the red side of a line of He I, which lines below remember.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..background.cosmology import Cosmology
from ..background.parameters import (
    TEMPERATURE,
    helium_derivatives,
    hydrogen_derivatives,
)
from ..escape.helium_shares import line_shares
from ..escape.helium_treatment import Seen
from ..history.helium import HeliumFractions
from ..history.ion_network import HeliumIon, NeutralHelium
from ..history.local import Local
from ..network.gradient import (
    FlowGradient,
    departure_gradient,
    flow_slopes,
    net_flow_gradient,
    times,
)
from ..network.reduced import KeptLevels


class Slopes(NamedTuple):
    """Derivatives of phi by ln of what surrounds the ion; n_e is told per helium nucleus."""

    radiation_temperature: float = 0.0
    matter_temperature: float = 0.0
    helium_density: float = 0.0
    electrons_per_helium: float = 0.0
    hubble_rate: float = 0.0
    neutral_hydrogen: float = 0.0
    ion_fraction: float = 0.0
    ground_fraction: float = 0.0

    def plus(self, **more: float) -> Slopes:
        """The same with something added to some."""
        return self._replace(**{name: getattr(self, name) + one for name, one in more.items()})


class Response(NamedTuple):
    """Derivatives of phi, the slow variables held; by ln of everything.

    Attributes
    ----------
    gradient : FlowGradient
        By the reduced rates.
    slopes : Slopes
        By the surroundings.
    two_photon : float
        By the two-photon rate.
    strength, escape, others : ndarray, shape (n_lines,)
        By the Einstein A of each line to the ground state, by the net flow of each line alone, and
        by all other decays of its upper level, which set its width.
    absorption : float
        By the cross section of H I 1s, now.
    field : ndarray, shape (n_lines,)
        By the distortion on the blue side of each line.
    """

    gradient: FlowGradient
    slopes: Slopes
    two_photon: float
    strength: FloatArray
    escape: FloatArray
    others: FloatArray
    absorption: float
    field: FloatArray


def flow_response(network: NeutralHelium, local: Local, seen: Seen) -> Response:
    """Of the net flow to the ground state of He I."""
    gradient = net_flow_gradient(local.rates, local.coupling, local.solution)
    return _response(network, local, seen, gradient)


def ion_flow_response(network: HeliumIon, local: Local) -> Response:
    """Of the net flow to the ground state of He II; of its line by the escape alone."""
    gradient = net_flow_gradient(local.rates, local.coupling, local.solution)
    nothing = np.zeros(len(network.lines.names))
    return Response(
        gradient,
        _slopes(network.reduced.kept, local, gradient),
        float(gradient.channel[network.decay]),
        nothing,
        gradient.channel[network.lines.upper],
        nothing,
        0.0,
        nothing,
    )


def _slopes(kept: KeptLevels, local: Local, gradient: FlowGradient) -> Slopes:
    """Slopes by the surroundings but for the lines of He I, which see more than the ion."""
    s = flow_slopes(kept, local.rates, local.coupling, local.conditions, gradient)
    return Slopes(
        s.ln_radiation_temperature,
        s.ln_matter_temperature,
        s.ln_hydrogen_density,
        s.ln_electron_fraction,
        s.ln_hubble_rate,
        0.0,
        s.ln_ionized_fraction,
        s.ln_ground_fraction,
    )


def _response(network: NeutralHelium, local: Local, seen: Seen, gradient: FlowGradient) -> Response:
    kept, lines, conditions = network.reduced.kept, network.lines, local.conditions
    upper = lines.upper
    share = line_shares(network.treatment, lines, kept, conditions, seen, network.escape_factor)
    by_loss, by_excess = gradient.loss[upper, upper], gradient.excess[upper]
    by_field = by_excess * share.excess_by_field
    by_depth = float(by_excess @ share.excess_by_depth)
    absorption = float(by_loss @ share.loss_by_continuum)
    if seen.blue is not None:
        absorption += float(by_field @ seen.blue.by_continuum)
    excited = kept.energy_ev[upper] / (const.BOLTZMANN_EV_K * conditions.radiation_temperature_k)
    thick = share.loss_by_depth + share.loss_by_ground_rate
    escape = by_loss * share.loss + by_excess * share.excess
    return Response(
        gradient,
        _slopes(kept, local, gradient).plus(
            # Lifts go as the Boltzmann population of the term.
            radiation_temperature=float(by_excess @ (share.excess * excited)),
            helium_density=by_depth,
            hubble_rate=-by_depth - absorption,
            neutral_hydrogen=absorption,
        ),
        float(gradient.channel[network.decay]),
        escape + by_loss * thick + by_excess * share.excess_by_depth,
        escape,
        by_loss * share.loss_by_other_decays,
        absorption,
        by_field,
    )


def red_response(network: NeutralHelium, local: Local, seen: Seen, line: int) -> Response:
    """Of ln of the distortion on the red side of one line of He I.

    See :func:`levelnet.escape.blue_side.log_red_side`.
    """
    lines, solution, kept = network.lines, local.solution, network.reduced.kept
    upper = int(lines.upper[line])
    kt = const.BOLTZMANN_EV_K * local.conditions.radiation_temperature_k
    exponent = float(lines.energy_ev[line]) / kt
    depth = float(local.coupling.validity["optical_depth"][line])
    boltzmann = math.exp(solution.log_boltzmann[upper])
    population = boltzmann + float(solution.departure[upper])
    log_departure = math.log(population / boltzmann)
    blue = 0.0 if seen.blue is None else float(seen.blue.log_distortion[line])
    # u = own (1 - e^-tau) + blue e^-tau, own = (1 - e^-x) e^d/(1 - e^(d - x)).
    beyond = -math.expm1(log_departure - exponent)
    own = math.exp(log_departure) * -math.expm1(-exponent) / beyond
    made, left = own * -math.expm1(-depth), math.exp(blue - depth)
    whole = made + left
    by_departure = made / (whole * beyond)
    by_depth = depth * (own * math.exp(-depth) - left) / whole
    photons, excess = math.exp(-exponent), math.exp(log_departure - exponent)
    by_exponent = made / whole * (photons / -math.expm1(-exponent) - excess / beyond)
    gradient = times(departure_gradient(local.rates, solution, upper), by_departure / population)
    found = _response(network, local, seen, gradient)
    field, strength = found.field.copy(), found.strength.copy()
    field[line] += left / whole
    strength[line] += by_depth
    through = 0.0 if seen.blue is None else left / whole * float(seen.blue.by_continuum[line])
    # ln of the Boltzmann population falls out of ln of the departure.
    by_boltzmann = -by_departure * float(solution.departure[upper]) / population
    heat = by_boltzmann * float(kept.energy_ev[upper]) / kt - by_exponent * exponent
    slopes = found.slopes.plus(
        radiation_temperature=heat,
        helium_density=by_depth,
        hubble_rate=-by_depth - through,
        neutral_hydrogen=through,
        ground_fraction=by_depth + by_boltzmann,
    )
    return found._replace(
        slopes=slopes, field=field, strength=strength, absorption=found.absorption + through
    )


def by_state(
    slopes: Slopes, x: HeliumFractions, ionized_hydrogen: float, electrons: FloatArray
) -> FloatArray:
    """Derivative of phi by (u, v, a, b), shape (4,).

    `electrons` is that of ln n_e, `ionized_hydrogen` x_HII.
    """
    result = slopes.electrons_per_helium * electrons
    result[0] -= ionized_hydrogen * slopes.neutral_hydrogen
    result[1] += slopes.matter_temperature
    result[2] += slopes.ion_fraction * x.neutral - slopes.ground_fraction * x.charged
    result[3] -= slopes.ion_fraction * x.double_share
    return result


def by_parameter(
    slopes: Slopes, cosmology: Cosmology, hubble: FloatArray, by_ratio: float
) -> FloatArray:
    """Derivative of phi by each parameter of the cosmology, shape (n_parameters,).

    `hubble` is that of ln H, and `by_ratio` d ln n_e/d f_He.
    """
    hydrogen, ratio = hydrogen_derivatives(cosmology), helium_derivatives(cosmology)
    share = ratio / cosmology.helium_ratio()
    result = slopes.helium_density * (hydrogen + share) + slopes.neutral_hydrogen * hydrogen
    result += slopes.electrons_per_helium * (by_ratio * ratio - share)
    result += slopes.hubble_rate * hubble
    heat = slopes.radiation_temperature + slopes.matter_temperature
    result[TEMPERATURE] += heat / cosmology.cmb_temperature_k
    return np.asarray(result)
