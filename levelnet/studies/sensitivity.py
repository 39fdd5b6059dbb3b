"""From adjoint weights at the stages of a history to derivatives by rates and parameters."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray, IntArray
from ..background.parameters import (
    TEMPERATURE,
    helium_derivatives,
    hubble_derivatives,
    hydrogen_derivatives,
)
from ..history.equations import Linearized
from ..network.gradient import FlowGradient, FlowSlopes
from ..network.reduction import WARM_K, beyond_doubles, exchange_pairs
from .frozen import FrozenHistory
from .scalars import NetTransitions


@dataclass(frozen=True, slots=True, eq=False)
class StageRates:
    """Derivatives of du/ds and dv/ds at every stage; n_points = 3 n_steps.

    Attributes
    ----------
    scale : ndarray, shape (n_points,), s
        du/ds = scale * (net flow to the ground state).
    two_photon : ndarray, shape (n_points,)
        Of du/ds by ln of the 2s-1s rate.
    escape : ndarray, shape (n_points, n_lines)
        Of du/ds by ln of the escape rate of each line.
    compton : ndarray, shape (n_points,)
        Of dv/ds by ln of the Compton rate.
    parameter : ndarray, shape (n_points, 2, n_parameters)
        Of both by each parameter of the cosmology.
    """

    scale: FloatArray
    two_photon: FloatArray
    escape: FloatArray
    compton: FloatArray
    parameter: FloatArray


def stages(history: FrozenHistory) -> list[Linearized]:
    """The equations at every stage, in order of time."""
    return [one.here for row in history.solution.linear for one in row]


def stage_rates(history: FrozenHistory) -> StageRates:
    """Derivatives of the slow equations by what stands outside the reduced network."""
    here = stages(history)
    conditions = [one.local.conditions for one in here]
    scale = np.array(
        [-1.0 / (c.hubble_rate_per_s * c.ionized_fraction * c.ground_fraction) for c in conditions]
    )
    channels = np.array([one.gradient.channel for one in here])
    compton = np.array([one.rate[1] + 1.0 for one in here])
    flow = [_by_background(one.slopes, 0.0) for one in here]
    by_u = scale[:, None] * _by_parameter(history, np.array(flow))
    # The prefactor of du/ds falls as 1/H.
    by_u -= np.array([one.rate[0] for one in here])[:, None] * _hubble(history)
    electrons = np.array([c.electron_fraction for c in conditions])
    helium = 1.0 + history.setup.cosmology.helium_ratio() + electrons
    by_v = -_hubble(history) - helium_derivatives(history.setup.cosmology) / helium[:, None]
    by_v[:, TEMPERATURE] += 4.0 / history.setup.cosmology.cmb_temperature_k
    upper = history.equations.lines.upper
    return StageRates(
        scale,
        scale * channels[:, 0],
        scale[:, None] * channels[:, upper],
        compton,
        np.stack([by_u, compton[:, None] * by_v], axis=1),
    )


def line_parameters(history: FrozenHistory, line: NetTransitions) -> FloatArray:
    """Derivative of a line's strength by each parameter at fixed states, shape (n_parameters,)."""
    own = line.own_slope.tolist()
    slopes = [_by_background(s, o) for s, o in zip(line.slopes, own, strict=True)]
    summed: FloatArray = line.weight @ _by_parameter(history, np.array(slopes))
    return summed


def _by_background(slopes: FlowSlopes, own_slope: float) -> tuple[float, float, float]:
    """Derivative of a flow by ln T (of both, in step), ln n_H and ln H."""
    heat = slopes.ln_radiation_temperature + slopes.ln_matter_temperature + own_slope
    return heat, slopes.ln_hydrogen_density, slopes.ln_hubble_rate


def _by_parameter(history: FrozenHistory, by_background: FloatArray) -> FloatArray:
    """The same by each parameter, shape (n_points, n_parameters)."""
    cosmology = history.setup.cosmology
    result = by_background[:, 1, None] * hydrogen_derivatives(cosmology)
    result += by_background[:, 2, None] * _hubble(history)
    result[:, TEMPERATURE] += by_background[:, 0] / cosmology.cmb_temperature_k
    return np.asarray(result)


def _hubble(history: FrozenHistory) -> FloatArray:
    """D ln H by each parameter at every stage, shape (n_points, n_parameters)."""
    growth = np.exp(-history.solution.times.ravel())
    return hubble_derivatives(history.setup.cosmology, growth)


@dataclass(frozen=True, slots=True, eq=False)
class NodeResults:
    """Derivatives of scalars by the results of the exact reductions.

    Attributes
    ----------
    temperature_k : ndarray, shape (n_nodes,), K
        T_r of each reduction.
    by_result : ndarray, shape (n_nodes, n_scalars, n_results)
        In the order of :func:`levelnet.network.rates.stack`.
    """

    temperature_k: FloatArray
    by_result: FloatArray


def node_results(
    history: FrozenHistory, weights: FloatArray, gradients: list[FlowGradient]
) -> NodeResults:
    """Collect flows' derivatives at the nodes that the network was interpolated from.

    Parameters
    ----------
    history : FrozenHistory
        The history.
    weights : ndarray, shape (n_scalars, n_points)
        What each flow counts.
    gradients : list of FlowGradient, length n_points
        Of the flow at every stage.
    """
    table = history.table
    x = np.log([_radiation_k(history, one) for one in stages(history)])
    inner = np.array([piece.high for piece in table.series[:-1]])
    piece_of = np.searchsorted(inner, x, side="right")
    pairs = exchange_pairs(table.ladder)
    temperatures, collected = [], []
    for number, series in enumerate(table.series):
        here = np.flatnonzero(piece_of == number)
        to_nodes = series.interpolation_weights(x[here])
        value = to_nodes @ series.values_at_nodes
        derivative = _by_stored(history, here, value, gradients)
        held = beyond_doubles(pairs, float(np.exp(series.low)))
        spread = np.zeros((len(weights), series.coefficients.shape[0] + 1, value.shape[1]))
        for row, weight in zip(spread, weights[:, here], strict=True):
            row[:-1] = to_nodes.T @ (weight[:, None] * derivative)
            # Pairs held constant in the cold hang on their value at the edge alone.
            edge = row[:-1, : len(held)].sum(axis=0)
            row[-1, : len(held)] = np.where(held, edge, 0.0)
            row[:-1, : len(held)] *= ~held
        last = slice(None) if held.any() else slice(-1)
        temperatures.append(np.append(np.exp(series.nodes), WARM_K)[last])
        collected.append(spread.transpose(1, 0, 2)[last])
    return NodeResults(np.concatenate(temperatures), np.concatenate(collected))


def _radiation_k(history: FrozenHistory, here: Linearized) -> float:
    """T_r as the measured atom sees it."""
    return here.local.conditions.radiation_temperature_k / history.equations.scales.energy


def _by_stored(
    history: FrozenHistory, points: IntArray, value: FloatArray, gradients: list[FlowGradient]
) -> FloatArray:
    """Derivative of the flow at some stages by what the table stores, shape (n, n_results)."""
    constants, unit = history.table.constants, history.equations.scales.energy
    n_pairs = len(constants.lower)
    everything = stages(history)
    result = np.empty(value.shape)
    for row, (point, stored) in enumerate(zip(points.tolist(), value, strict=True)):
        c, gradient = everything[point].local.conditions, gradients[point]
        exchange = gradient.exchange
        lower, upper = constants.lower, constants.upper
        result[row, :n_pairs] = exchange[lower, upper] + exchange[upper, lower]
        spectrum = np.exp(stored[n_pairs:]).reshape(constants.n_kept, -1)
        share = [
            _share(spectrum * np.exp(-constants.electron_k[:, 0] * unit / temperature))
            for temperature in (c.matter_temperature_k, c.radiation_temperature_k)
        ]
        # Recombination at T_m, photoionization through it at T_r: net first, then what T_m changes.
        change = gradient.net_capture[:, None] * share[1]
        change += gradient.capture[:, None] * (share[0] - share[1])
        result[row, n_pairs:] = change.ravel()
    return result


def _share(spectrum: FloatArray) -> FloatArray:
    """Each energy's part of the capture."""
    shares: FloatArray = spectrum / spectrum.sum(axis=1, keepdims=True)
    return shares
