"""Neutral helium reduced to the levels that talk to its ground state.

Singlets and triplets are two ladders without a line between them, each block tridiagonal in l like
hydrogen and eliminated in the same symmetric form; they meet in the ground state and the continuum.
Quantum defects are no small shift, so that every line takes the energies of its own levels, and
lines with n = n' take part.
"""

from __future__ import annotations

import functools
import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from .. import constants as const
from ..arrays import FloatArray, IntArray
from ..atomic.detailed_balance import log_upward_ratio, saha_coefficients, thermal_volume_cm3
from ..atomic.helium_bound_free import (
    ION_WEIGHT,
    HeliumBoundFree,
    captured_spectrum,
    helium_bound_free,
    helium_photoionization_per_s,
)
from ..atomic.helium_levels import HeliumLevels, helium_levels
from ..atomic.helium_lines import HeliumLines, helium_lines
from ..atomic.helium_transitions import with_helium_overrides
from ..atomic.overrides import Override
from ..errors import RangeError
from ..numerics.block_cholesky import BlockCholesky, factor_symmetric
from ..numerics.chebyshev import ChebyshevSeries, chebyshev_nodes
from .ladder import Interior, interior_of
from .rates import NEVER, RateConstants, assemble_rates, largest_rate_error
from .reduced import KeptLevels, ReducedRates

KeptTerms = tuple[tuple[int, int, int], ...]
# Where the error is measured, as fractions of the range: off every set of nodes.
_CHECKS = (0.0071, 0.0413, 0.1237, 0.2719, 0.4873, 0.7331, 0.9717)
_MOST_NODES = 200


class SpinLines(NamedTuple):
    """Lines between the eliminated levels of one spin, as a coupling buffer of their blocks.

    Attributes
    ----------
    strength_per_s : ndarray, shape (n_couplings,), s^-1
        Strengths from l (rows) to l + 1, block after block; 0 where there is no line.
    gap_ev : ndarray, shape (n_couplings,), eV
        Their energies; 1 where there is no line.
    """

    strength_per_s: FloatArray
    gap_ev: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class HeliumLadders:
    """He I with the split into kept levels and interior.

    Attributes
    ----------
    levels, lines, bound_free : HeliumLevels, HeliumLines, HeliumBoundFree
        The atom.
    kept : KeptLevels
        The kept levels, by energy.
    kept_position : ndarray of int, shape (n_kept,)
        Where they stand in `levels`.
    interior : tuple of two Interior
        Singlets and triplets; `position` counts in `levels`.
    between : tuple of two SpinLines
        Lines between their eliminated levels; follows from the rest.
    """

    levels: HeliumLevels
    lines: HeliumLines
    bound_free: HeliumBoundFree
    kept: KeptLevels
    kept_position: IntArray
    interior: tuple[Interior, Interior]
    between: tuple[SpinLines, SpinLines] = field(init=False)

    def __post_init__(self) -> None:
        """Cut the lines between eliminated levels out of all."""
        own = [
            _spin_lines(self.levels, self.lines, side, s) for s, side in enumerate(self.interior)
        ]
        object.__setattr__(self, "between", tuple(own))


class KeptLines(NamedTuple):
    """Rates between one kept level and all levels of its spin; shape (n_levels,), s^-1."""

    out: FloatArray
    back: FloatArray


@functools.lru_cache(maxsize=2)
def _atom(n_max: int, hydrogenic: bool) -> tuple[HeliumLevels, HeliumLines, HeliumBoundFree]:
    levels = helium_levels(n_max, hydrogenic)
    return levels, helium_lines(levels), helium_bound_free(levels)


def helium_ladders(
    n_max: int,
    kept: KeptTerms,
    hydrogenic: bool = False,
    overrides: tuple[Override, ...] = (),
) -> HeliumLadders:
    """Build He I.

    Parameters
    ----------
    n_max : int, dimensionless
        Highest n, 2 to 100.
    kept : tuple of (n, l, spin)
        Levels to keep.
    hydrogenic : bool
        The limit in which all must equal hydrogen.
    overrides : tuple of Override, optional
        Factors on lines and cross sections of He I.
    """
    levels, lines, continuum = _atom(n_max, hydrogenic)
    lines, continuum = with_helium_overrides(lines, continuum, overrides)
    position = np.array(
        sorted((levels.index(*one) for one in kept), key=lambda i: _order(levels, i))
    )
    chosen = KeptLevels(
        levels.n[position],
        levels.l[position],
        levels.statistical_weight[position],
        levels.energy_ev[position],
        levels.ionization_energy_ev[position],
        1.0,
        levels.spin[position],
    )
    first_triplet = int(np.flatnonzero(levels.spin == 1)[0])
    sides = []
    for spin, shift in ((0, 0), (1, first_triplet - 1)):
        own = {(n, l) for n, l, s in kept if s == spin}
        sides.append(interior_of(n_max, np.zeros(0, dtype=np.int64), own, shift))
    return HeliumLadders(levels, lines, continuum, chosen, position, (sides[0], sides[1]))


def _spin_lines(levels: HeliumLevels, lines: HeliumLines, inside: Interior, spin: int) -> SpinLines:
    shape, where = inside.shape, inside.position
    strengths, gaps = np.zeros((2, shape.n_couplings))
    for l in range(len(shape.size) - 1):
        rows, columns = shape.slice(l), shape.slice(l + 1)
        own, other = where[rows], where[columns]
        gap = np.abs(levels.energy_ev[own][:, None] - levels.energy_ev[other])
        strength = lines.block(spin, l)[np.ix_(levels.n[own] - l - 1, levels.n[other] - l - 2)]
        # Levels of one n and high l may have one energy: no photon goes between them.
        line = (strength > 0.0) & (gap > 0.0) & ~inside.idle[rows, None] & ~inside.idle[columns]
        shape.coupling(strengths, l)[...] = np.where(line, strength, 0.0)
        shape.coupling(gaps, l)[...] = np.where(line, gap, 1.0)
    for one in (strengths, gaps):
        one.setflags(write=False)
    return SpinLines(strengths, gaps)


def _order(levels: HeliumLevels, index: int) -> float:
    return float(levels.energy_ev[index])


def line_rates(
    ladders: HeliumLadders, own: IntArray, other: IntArray, strength: FloatArray, kt_ev: float
) -> tuple[FloatArray, FloatArray]:
    """Rates from `own` to `other` and back, s^-1; zero where there is no line."""
    levels = ladders.levels
    gap = levels.energy_ev[other] - levels.energy_ev[own]
    x = np.abs(gap) / kt_ev
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = np.where(strength > 0.0, strength / (2.0 * np.sinh(0.5 * x)), 0.0)
    ratio = levels.statistical_weight[other] / levels.statistical_weight[own]
    rise = np.sqrt(ratio) * np.exp(-0.5 * gap / kt_ev)
    return mean * rise, mean / rise


def _kept_lines(ladders: HeliumLadders, k: int, kt_ev: float) -> KeptLines:
    levels, own = ladders.levels, int(ladders.kept_position[k])
    out, back = np.zeros((2, len(levels)))
    n, l, spin = (int(q[own]) for q in (levels.n, levels.l, levels.spin))
    for other_l in (l - 1, l + 1):
        if not 0 <= other_l < levels.n_max:
            continue
        partner = levels.series(other_l, spin)
        partner = partner[levels.n[partner] > 1]
        block = ladders.lines.block(spin, min(l, other_l))
        if other_l > l:
            strength = block[n - l - 1, levels.n[partner] - other_l - 1]
        else:
            strength = block[levels.n[partner] - other_l - 1, n - l - 1]
        out[partner], back[partner] = line_rates(
            ladders, np.full_like(partner, own), partner, strength, kt_ev
        )
    return KeptLines(out, back)


class SpinInterior(NamedTuple):
    """The eliminated levels of one spin, factored.

    Attributes
    ----------
    solver : BlockCholesky
        Of the symmetric form.
    weight : ndarray, shape (n_unknowns,)
        Boltzmann weights of the levels, over that of the lowest energy among them.
    scale : ndarray, shape (n_unknowns,), s^-1/2
        Root of the whole outflow.
    """

    solver: BlockCholesky
    weight: FloatArray
    scale: FloatArray

    def fates(self, leaving: FloatArray) -> FloatArray:
        """Solve (D - R) p = `leaving`, shape (n_right, n_unknowns) in s^-1; R from row to column.

        With the rate at which each level goes to a place, p is its chance to end there.
        """
        root = np.sqrt(self.weight)
        chance: FloatArray = self.solver.solve(leaving * (root / self.scale)) / (root * self.scale)
        return chance

    def populations(self, fed: FloatArray) -> FloatArray:
        """Populations, shape (n_unknowns,), of levels fed at these rates: (D - R)^T x = `fed`."""
        found: FloatArray = self.weight * self.fates((fed / self.weight)[None, :])[0]
        return found


def factor_spin(ladders: HeliumLadders, spin: int, kt_ev: float, sink: FloatArray) -> SpinInterior:
    """Factor the eliminated levels of one spin, which leave it at the rates `sink` in s^-1."""
    inside = ladders.interior[spin]
    shape, levels = inside.shape, ladders.levels
    sink = np.where(inside.idle, 1.0, sink)
    energy = levels.energy_ev[inside.position]
    statistical = levels.statistical_weight[inside.position]
    log_weight = np.log(statistical) - (energy - energy.min()) / kt_ev
    root = np.exp(0.5 * log_weight)
    strength, gap_ev = ladders.between[spin]
    coupling = strength / (2.0 * np.sinh(0.5 / kt_ev * gap_ev))
    between = [
        (shape.slice(l), shape.slice(l + 1), shape.coupling(coupling, l))
        for l in range(len(shape.size) - 1)
    ]
    outflow = sink.copy()
    for rows, columns, mean in between:
        outflow[rows] += mean @ root[columns] / root[rows]
        outflow[columns] += root[rows] @ mean / root[columns]
    scale = np.sqrt(outflow)
    sent = np.zeros(shape.n_unknowns)
    weight = root * scale
    for rows, columns, mean in between:
        mean[...] /= np.outer(scale[rows], scale[columns])
        sent[columns] = weight[rows] @ mean
    solver = factor_symmetric(shape, coupling, weight, sent, sink * root / scale)
    return SpinInterior(solver, root * root, scale)


class Reduction(NamedTuple):
    """He I at one T_r.

    Attributes
    ----------
    captured : ndarray, shape (n_levels, n_energies), s^-1
        What :func:`levelnet.atomic.helium_bound_free.captured_spectrum` gives.
    photoionization_per_s : ndarray, shape (n_levels,), s^-1
        Of every level.
    kept_lines : tuple of KeptLines
        Lines of every kept level.
    to_kept : ndarray, shape (n_kept, n_levels), s^-1
        Rates to the kept levels; 0 from levels that are kept.
    interior : tuple of two SpinInterior or None
        Singlets and triplets; None: no level is eliminated.
    """

    captured: FloatArray
    photoionization_per_s: FloatArray
    kept_lines: tuple[KeptLines, ...]
    to_kept: FloatArray
    interior: tuple[SpinInterior | None, SpinInterior | None]


def factor_helium(ladders: HeliumLadders, radiation_temperature_k: float) -> Reduction:
    """Rates of He I at one T_r, and its interior ready to be solved."""
    kt = const.BOLTZMANN_EV_K * radiation_temperature_k
    captured = captured_spectrum(ladders.bound_free, radiation_temperature_k)
    photo = helium_photoionization_per_s(ladders.bound_free, radiation_temperature_k, captured)
    rows = tuple(_kept_lines(ladders, k, kt) for k in range(len(ladders.kept)))
    to_kept = np.array([row.back for row in rows])
    to_kept[:, ladders.kept_position] = 0.0
    sides: list[SpinInterior | None] = []
    for spin in (0, 1):
        inside = ladders.interior[spin]
        sink = photo[inside.position] + to_kept[:, inside.position].sum(axis=0)
        sides.append(factor_spin(ladders, spin, kt, sink) if inside.shape.n_unknowns else None)
    return Reduction(captured, photo, rows, to_kept, (sides[0], sides[1]))


def reduce_helium(ladders: HeliumLadders, radiation_temperature_k: float) -> FloatArray:
    """Reduce He I at one T_r.

    Returns
    -------
    ndarray, shape (n_pairs + n_kept * n_energies,)
        ln of the downward exchange (s^-1) of each pair of kept levels, then ln of the spectral
        capture into each, as :func:`levelnet.network.rates.assemble_rates` takes them.
    """
    here = factor_helium(ladders, radiation_temperature_k)
    found = reduce_factored(ladders, here)
    lower, upper = np.triu_indices(len(ladders.kept), 1)
    with np.errstate(divide="ignore"):
        exchange = np.maximum(np.log(found.exchange[upper, lower]), NEVER)
    return np.concatenate([exchange, np.log(np.maximum(found.spectrum, 1e-300)).ravel()])


class ReducedHelium(NamedTuple):
    """Results of one reduction of He I, and the fates behind them.

    Attributes
    ----------
    fates : ndarray, shape (n_kept, n_levels), dimensionless
        Chance of each level to reach each kept level first; a kept level has its own.
    exchange : ndarray, shape (n_kept, n_kept), s^-1
        From row to column, directly and through eliminated levels.
    spectrum : ndarray, shape (n_kept, n_energies), s^-1
        Spectral capture into each kept level.
    """

    fates: FloatArray
    exchange: FloatArray
    spectrum: FloatArray


def reduce_factored(ladders: HeliumLadders, here: Reduction) -> ReducedHelium:
    """Reduce He I at one T_r, given what :func:`factor_helium` made of it there."""
    rows = here.kept_lines
    fates = np.zeros((len(rows), len(ladders.levels)))
    for side, inside in zip(here.interior, ladders.interior, strict=True):
        if side is not None:
            fates[:, inside.position] = side.fates(here.to_kept[:, inside.position])
    detour = np.array([row.out for row in rows]) @ fates.T
    direct = np.array([row.out[ladders.kept_position] for row in rows])
    fates[:, ladders.kept_position] = np.eye(len(rows))
    spectrum = fates @ here.captured
    return ReducedHelium(fates, detour + direct, spectrum)


def helium_rate_constants(ladders: HeliumLadders) -> RateConstants:
    """What turns the stored values of :func:`reduce_helium` into rates."""
    kept, charge = ladders.kept, ladders.levels.nuclear_charge
    lower, upper = np.triu_indices(len(kept), 1)
    weights = kept.statistical_weight[upper], kept.statistical_weight[lower]
    unit_k = ladders.levels.chi_ev / const.BOLTZMANN_EV_K
    return RateConstants(
        len(kept),
        lower,
        upper,
        np.zeros(len(lower)),
        (kept.energy_ev[upper] - kept.energy_ev[lower]) / const.BOLTZMANN_EV_K,
        log_upward_ratio(*weights, 0.0, 1.0),
        ladders.bound_free.grid.energy[:, None] * unit_k,
        float(thermal_volume_cm3(1.0, charge)),
        saha_coefficients(kept.statistical_weight / ION_WEIGHT, kept.ionization_energy_ev, charge),
    )


@dataclass(frozen=True, slots=True, eq=False)
class HeliumReduction:
    """He I reduced and interpolated in ln T_r.

    Attributes
    ----------
    kept : KeptLevels
        The kept levels.
    constants : RateConstants
        What turns stored values into rates.
    series : ChebyshevSeries
        Stored values over ln T_r.
    interpolation_error : float
        Largest error off the nodes of the ln of any rate.
    """

    kept: KeptLevels
    constants: RateConstants
    series: ChebyshevSeries
    interpolation_error: float

    def rates(self, radiation_temperature_k: float, matter_temperature_k: float) -> ReducedRates:
        """Effective rates; RangeError outside the tabulated T_r."""
        x = math.log(radiation_temperature_k)
        if not self.series.low - 1e-12 <= x <= self.series.high + 1e-12:
            low, high = math.exp(self.series.low), math.exp(self.series.high)
            raise RangeError(
                f"T_r = {radiation_temperature_k:g} K: helium is tabulated from {low:g} to "
                f"{high:g} K"
            )
        value, slope = self.series.evaluate(x)
        return assemble_rates(
            self.constants, value, slope, radiation_temperature_k, matter_temperature_k
        )


def tabulate_helium(
    ladders: HeliumLadders,
    low_k: float,
    high_k: float,
    tolerance: float,
    recall: Callable[[float, Callable[[float], FloatArray]], FloatArray] | None = None,
) -> HeliumReduction:
    """Reduce He I at Chebyshev nodes in ln T_r until the error off the nodes is below `tolerance`.

    Parameters
    ----------
    ladders : HeliumLadders
        The atom.
    low_k, high_k : float, K
        Range of T_r.
    tolerance : float, dimensionless
        Largest error in the ln of any rate.
    recall : callable, optional
        ``recall(T_r, compute)`` gives stored values or computes and stores them.
    """

    def exact(x: float) -> FloatArray:
        temperature_k = math.exp(x)
        compute = functools.partial(reduce_helium, ladders)
        return compute(temperature_k) if recall is None else recall(temperature_k, compute)

    low, high = math.log(low_k), math.log(high_k)
    constants = helium_rate_constants(ladders)
    truth = {x: exact(x) for x in (low + (high - low) * part for part in _CHECKS)}
    # Eleven nodes per e-fold of T_r for 1e-8 (measured).
    first = math.ceil(2.0 - 1.3 * math.log10(tolerance) * (high - low))
    for count in itertools.accumulate(itertools.repeat(8), initial=first):
        values = np.array([exact(x) for x in chebyshev_nodes(low, high, count)])
        series = ChebyshevSeries.fit(low, high, values)
        error = max(
            largest_rate_error(constants, series.evaluate(x)[0], value, x)
            for x, value in truth.items()
        )
        if error <= tolerance or count >= _MOST_NODES:
            break
    return HeliumReduction(ladders.kept, constants, series, error)
