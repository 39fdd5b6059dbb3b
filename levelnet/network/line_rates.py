"""Rates of dipole lines in a blackbody: of pairs, of kept levels, and of whole shells."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray, IntArray
from ..atomic.levels import ionization_scale_ev
from ..kernels import assembly
from ..numerics.bordered import BorderRates
from .ladder import Ladder, lines_of, transition_over_kt


@dataclass(frozen=True, slots=True, eq=False)
class KeptLines:
    """Rates between one kept level and its dipole partners, at one T_r.

    Attributes
    ----------
    position : ndarray of int, shape (n_partners,)
        Where the partners stand in the LevelSet.
    log_out, log_in : ndarray, shape (n_partners,)
        ln of the rate from the kept level to the partner, and back, in s^-1.
    """

    position: IntArray
    log_out: FloatArray
    log_in: FloatArray


def kept_line_rates(ladder: Ladder, kept: int, temperature_k: float) -> KeptLines:
    """Rates of every line between one kept level and the other excited levels."""
    own = int(ladder.kept_position[kept])
    position, strength = lines_of(ladder, int(ladder.kept.n[kept]), int(ladder.kept.l[kept]))
    rises = ladder.levels.n[position] > ladder.levels.n[own]
    lower, upper = np.where(rises, own, position), np.where(rises, position, own)
    log_up, log_down = log_line_rates(ladder, lower, upper, strength, temperature_k)
    return KeptLines(position, np.where(rises, log_up, log_down), np.where(rises, log_down, log_up))


def log_line_rates(
    ladder: Ladder,
    lower: np.ndarray,
    upper: np.ndarray,
    strength: FloatArray,
    temperature_k: float,
) -> tuple[FloatArray, FloatArray]:
    """Ln of the rates up and down of lines in a blackbody, s^-1.

    The same expansion in the fine structure as the compiled assembly: exact in the Boltzmann
    factor, third order in the occupation number.
    """
    plain, actual = transition_over_kt(ladder, lower, upper, temperature_k)
    # 1/(2 sinh(x/2)) = e^(-x/2) / (1 - e^-x): the first factor exact, the second expanded.
    a = (actual - plain) * np.exp(-plain) / -np.expm1(-plain)
    mean = np.log(strength) - np.log(-np.expm1(-plain)) - 0.5 * actual + np.log((2 - a) / (2 + a))
    weight = ladder.levels.statistical_weight
    half_ratio = 0.5 * (np.log(weight[upper] / weight[lower]) - actual)
    return mean + half_ratio, mean - half_ratio


class BlockLines(NamedTuple):
    """Lines among the resolved interior levels at one T_r, as kernels take them, in their order.

    The fields are those of :func:`levelnet.kernels.assembly.symmetric_blocks`.
    """

    top: int
    first_n: IntArray
    strength: FloatArray
    strength_start: IntArray
    geometric: FloatArray
    stretch: FloatArray
    start: IntArray
    coupling_start: IntArray
    root_weight: FloatArray
    shift: FloatArray
    live: FloatArray


def block_lines(
    ladder: Ladder, tables: tuple[FloatArray, FloatArray], root_weight: FloatArray, kt_ev: float
) -> BlockLines:
    """Collect the lines among resolved levels.

    Parameters
    ----------
    ladder : Ladder
        The atom.
    tables : tuple of ndarray
        Those of :func:`half_angle_tables`.
    root_weight : ndarray, shape (n_unknowns,)
        Square root of the Boltzmann weights of the blocks, whole shells not counted.
    kt_ev : float, eV
        k T_r.
    """
    inside = ladder.interior
    blocks = slice(inside.shape.n_unknowns)
    return BlockLines(
        ladder.resolve_l_to,
        inside.first_n,
        ladder.dipole.strength_per_s,
        ladder.dipole.offset,
        *tables,
        inside.shape.start,
        inside.shape.coupling_start,
        root_weight,
        ladder.energy_excess_ev[inside.position[blocks]] / kt_ev,
        np.where(inside.idle[blocks], 0.0, 1.0),
    )


def half_angle_tables(ladder: Ladder, kt_ev: float) -> tuple[FloatArray, FloatArray]:
    """1/(2 sinh(x/2)) and 1/(e^x - 1) over (n, n'), shape (n_max + 1, n_max + 1)."""
    term = np.zeros(ladder.n_max + 1)
    term[1:] = ionization_scale_ev(ladder.charge) / kt_ev / np.arange(1.0, ladder.n_max + 1) ** 2
    half = 0.5 * np.abs(term[:, None] - term[None, :])
    half[0], half[:, 0] = 1.0, 1.0
    np.fill_diagonal(half, 1.0)  # no line there: its strength is 0
    # 1/(2 sinh y) = e^-y / (1 - e^-2y): no overflow for the coldest fields.
    whole = -np.expm1(-2.0 * half)
    return np.exp(-half) / whole, np.exp(-2.0 * half) / whole


def shell_means(
    ladder: Ladder, geometric: FloatArray, stretch: FloatArray, kt_ev: float
) -> tuple[FloatArray, FloatArray]:
    """Geometric mean of both directions of every line of the whole shells, s^-1.

    Parameters
    ----------
    ladder : Ladder
        The atom.
    geometric, stretch : ndarray, shape (n_max + 1, n_max + 1)
        From :func:`half_angle_tables`; with the expansion of :func:`log_line_rates` in the fine
        structure.
    kt_ev : float, eV
        k T_r.

    Returns
    -------
    to_blocks : ndarray, shape (n_shells, n_unknowns of the blocks)
        Lines with the levels of the interior's blocks; 0 for idle ones.
    among : ndarray, shape (n_shells, n_shells)
        Lines among shells.
    """
    inside, shells = ladder.interior, ladder.shells
    blocks = slice(inside.shape.n_unknowns)
    position = inside.position[blocks]
    shift = ladder.energy_excess_ev / kt_ev
    own = shift[ladder.shell_position]
    to_blocks = np.empty((len(shells), len(position)))
    assembly.shell_means(
        shells.n,
        own,
        inside.n[blocks],
        position,
        shift[position],
        np.where(inside.idle[blocks], 0.0, 1.0),
        shells.to_levels,
        geometric,
        stretch,
        to_blocks,
    )
    square = np.ix_(shells.n, shells.n)
    # Upper less lower, on both sides of the diagonal.
    rise = np.subtract.outer(own, own) * np.sign(np.subtract.outer(shells.n, shells.n))
    a = stretch[square] * rise
    among = shells.among * geometric[square] * np.exp(-0.5 * rise) * ((2.0 - a) / (2.0 + a))
    return to_blocks, among


def shell_rates(ladder: Ladder, temperature_k: float) -> BorderRates:
    """Rates between whole shells and the interior's blocks, and among whole shells."""
    inside, shells = ladder.interior, ladder.shells
    blocks = slice(inside.shape.n_unknowns)
    strength = shells.to_levels[:, inside.position[blocks]] * ~inside.idle[blocks]
    into, out = np.zeros(strength.shape), np.zeros(strength.shape)
    shell, level = np.nonzero(strength)
    log_up, log_down = log_line_rates(
        ladder,
        inside.position[level],
        ladder.shell_position[shell],
        strength[shell, level],
        temperature_k,
    )
    into[shell, level], out[shell, level] = np.exp(log_up), np.exp(log_down)
    among = np.zeros(shells.among.shape)
    low, high = np.triu_indices(len(shells), 1)
    place = ladder.shell_position
    log_up, log_down = log_line_rates(
        ladder, place[low], place[high], shells.among[low, high], temperature_k
    )
    among[low, high], among[high, low] = np.exp(log_up), np.exp(log_down)
    return BorderRates(into, out, among)
