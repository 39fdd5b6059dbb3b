"""From adjoint weights at the stages of a history to derivatives by rates and parameters."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..arrays import BoolArray, FloatArray
from ..background.conditions import Conditions
from ..background.parameters import (
    TEMPERATURE,
    helium_derivatives,
    hubble_derivatives,
    hydrogen_derivatives,
)
from ..history.equations import Linearized
from ..network.gradient import FlowGradient, FlowSlopes
from ..network.helium import HeliumReduction
from ..network.rates import RateConstants
from ..network.reduction import WARM_K, beyond_doubles, exchange_pairs
from ..network.tabulation import TabulatedReduction
from ..numerics.chebyshev import ChebyshevSeries
from .frozen import FrozenHistory
from .scalars import NetTransitions


@dataclass(frozen=True, slots=True, eq=False)
class StageRates:
    """Derivatives of du/ds and dv/ds at every stage, helium's own left out; n_points = 3 n_steps.

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
    cosmology = history.setup.cosmology
    flow = [_by_background(one.slopes, 0.0) for one in here]
    electrons = np.array([c.electron_fraction for c in conditions])
    helium = helium_electrons(history)
    by_electrons = np.array([one.slopes.ln_electron_fraction for one in here])
    by_u = _by_parameter(history, np.array(flow))
    by_u += np.outer(by_electrons * helium / electrons, helium_derivatives(cosmology))
    by_u *= scale[:, None]
    # The prefactor of du/ds falls as 1/H.
    by_u -= np.array([one.rate[0] for one in here])[:, None] * hubble_of(history)
    # The Compton rate goes as x_e/(1 + f_He + x_e).
    bare = 1.0 + cosmology.helium_ratio()
    share = (bare * helium / electrons - 1.0) / (bare + electrons)
    by_v = -hubble_of(history) + np.outer(share, helium_derivatives(cosmology))
    by_v[:, TEMPERATURE] += 4.0 / cosmology.cmb_temperature_k
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
    result += by_background[:, 2, None] * hubble_of(history)
    result[:, TEMPERATURE] += by_background[:, 0] / cosmology.cmb_temperature_k
    return np.asarray(result)


def helium_electrons(history: FrozenHistory) -> FloatArray:
    """Electrons per helium nucleus at every stage, shape (n_points,); 0 where helium is inert."""
    helium, states = history.equations.helium, history.solution.stages
    if helium is None:
        return np.zeros(states.shape[0] * states.shape[1])
    flat = states.reshape(-1, states.shape[2])
    return np.array([helium.fractions(one[2:]).electrons for one in flat])


def hubble_of(history: FrozenHistory) -> FloatArray:
    """D ln H by each parameter at every stage, shape (n_points, n_parameters)."""
    return hubble_at(history, history.solution.times.ravel())


def hubble_at(history: FrozenHistory, log_scale: FloatArray) -> FloatArray:
    """D ln H by each parameter at some ln a, shape (n, n_parameters)."""
    return hubble_derivatives(history.setup.cosmology, np.exp(-log_scale))


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


class Table(NamedTuple):
    """A table of reductions as derivatives by its nodes need it.

    Attributes
    ----------
    series : tuple of ChebyshevSeries
        Stored values over ln T_r, by piece, coldest first.
    constants : RateConstants
        What turns them into rates.
    held : tuple of ndarray of bool
        Of each piece, pairs held at their value at WARM_K.
    unit : float, dimensionless
        T_r here over T_r as the measured atom sees it.
    """

    series: tuple[ChebyshevSeries, ...]
    constants: RateConstants
    held: tuple[BoolArray, ...]
    unit: float = 1.0


def ladder_table(table: TabulatedReduction, unit: float = 1.0) -> Table:
    """Table of a hydrogenic ladder."""
    pairs = exchange_pairs(table.ladder)
    held = tuple(beyond_doubles(pairs, float(np.exp(one.low))) for one in table.series)
    return Table(table.series, table.constants, held, unit)


def helium_table(table: HeliumReduction) -> Table:
    """Table of He I, of which nothing is held."""
    nothing = np.zeros(len(table.constants.lower), dtype=np.bool_)
    return Table((table.series,), table.constants, (nothing,))


class Flowing(NamedTuple):
    """A quantity at one time: the conditions, and its gradient by the reduced rates."""

    conditions: Conditions
    gradient: FlowGradient


def hydrogen_results(
    history: FrozenHistory, weights: FloatArray, gradients: list[FlowGradient]
) -> NodeResults:
    """Of flows of hydrogen at the stages; see :func:`node_results`."""
    points = [
        Flowing(one.local.conditions, gradient)
        for one, gradient in zip(stages(history), gradients, strict=True)
    ]
    return node_results(
        ladder_table(history.table, history.equations.scales.energy), points, weights
    )


def node_results(table: Table, points: Sequence[Flowing], weights: FloatArray) -> NodeResults:
    """Collect derivatives at the nodes that a network was interpolated from.

    Parameters
    ----------
    table : Table
        The network.
    points : sequence of Flowing, length n_points
        What hangs on it, and where.
    weights : ndarray, shape (n_scalars, n_points)
        What each counts.
    """
    x = np.log([one.conditions.radiation_temperature_k / table.unit for one in points])
    inner = np.array([piece.high for piece in table.series[:-1]])
    piece_of = np.searchsorted(inner, x, side="right")
    temperatures, collected = [], []
    for number, (series, held) in enumerate(zip(table.series, table.held, strict=True)):
        here = np.flatnonzero(piece_of == number)
        to_nodes = series.interpolation_weights(x[here])
        value = to_nodes @ series.values_at_nodes
        derivative = _by_stored(table, [points[k] for k in here.tolist()], value)
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


def _by_stored(table: Table, points: Sequence[Flowing], value: FloatArray) -> FloatArray:
    """Derivative of each quantity by what the table stores, shape (n, n_results)."""
    constants, unit = table.constants, table.unit
    n_pairs = len(constants.lower)
    result = np.empty(value.shape)
    for row, (c, gradient), stored in zip(result, points, value, strict=True):
        exchange = gradient.exchange
        lower, upper = constants.lower, constants.upper
        row[:n_pairs] = exchange[lower, upper] + exchange[upper, lower]
        spectrum = np.exp(stored[n_pairs:]).reshape(constants.n_kept, -1)
        share = [
            _share(spectrum * np.exp(-constants.electron_k[:, 0] * unit / temperature))
            for temperature in (c.matter_temperature_k, c.radiation_temperature_k)
        ]
        # Recombination at T_m, photoionization through it at T_r: net first, then what T_m changes.
        change = gradient.net_capture[:, None] * share[1]
        change += gradient.capture[:, None] * (share[0] - share[1])
        row[n_pairs:] = change.ravel()
    return result


def _share(spectrum: FloatArray) -> FloatArray:
    """Each energy's part of the capture."""
    shares: FloatArray = spectrum / spectrum.sum(axis=1, keepdims=True)
    return shares
