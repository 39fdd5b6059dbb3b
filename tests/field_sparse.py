"""One step of the field as one sparse system of all cells and levels, for a general solver.

Unknowns are the mean occupation of every cell, then the departures of the kept levels. The
coefficients are written anew from the grid and the conditions; nothing is eliminated.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import splu

from levelnet.kernels import transfer as kernel
from levelnet.kernels.transfer import STIFF, Cells, Moment
from tests.field_steps import Step, atom, blackbody, boltzmann_populations, moment, path_of


class SparseStep(NamedTuple):
    """Matrix and right side, balanced; `unit` is that of the unknowns."""

    matrix: sparse.csc_array
    right: np.ndarray
    unit: np.ndarray
    emission: np.ndarray
    absorption: np.ndarray
    theta: np.ndarray

    def solve(self, step: Step) -> tuple[np.ndarray, np.ndarray]:
        """Departures of the levels, and the field that enters every cell but the top one next."""
        cells, now, field = step.cells, step.now, step.room.field
        mean, departure = np.split(splu(self.matrix).solve(self.right) * self.unit, [len(field)])
        packet = now.packet_per_s * cells.growth
        tau = self.absorption / packet
        emitted = departure[cells.level] @ self.emission / packet
        out = field * np.exp(-tau) + emitted * _means(tau)[0]
        near = _near(cells)
        out[near] = field[near] + (mean[near] - field[near]) / self.theta
        seen = slice(0, 1 if cells.forget_above else None)
        share, own = line_sources(cells, now, step.ratio)
        place, upper = cells.line_cell[seen], cells.line_upper[seen]
        out[place] = field[place] + share[seen] * (own[seen] * departure[upper] - field[place])
        return departure, out[1:]


class Problem(NamedTuple):
    """One step to be solved: what the field does, and M and excess captures of the kept levels."""

    step: Step
    interior: np.ndarray
    excess: np.ndarray

    def eliminate(self) -> tuple[np.ndarray, np.ndarray]:
        """Departures, and the field that enters every cell but the top one next, by elimination."""
        step = self.step
        step.loss[:], step.source[:] = self.interior, self.excess
        kernel.couple_field(step.cells, step.now, step.ratio, step.room, step.loss, step.source)
        assert kernel.solve_dense(step.loss, step.source)
        _, out, _ = step.advance(step.source)
        return step.source, out


def random_problem(which: str, width: float, lyman: int, seed: int = 3, n_max: int = 5) -> Problem:
    """A step at z = 1100 with any field and any captures."""
    rng = np.random.default_rng(seed)
    one = atom(which, width, lyman, n_max)
    path, now, n = path_of(one), moment(one.cells), len(one.kept)
    stored, interior = np.empty(path.series.shape[2]), np.empty((n, n))
    kernel._stored(path, path.start + 0.02, stored)
    kernel._interior(path, now.radiation_kt_ev, stored, interior)
    excess = np.diag(interior) * boltzmann_populations(one, now) * rng.uniform(0.0, 1.0, n)
    thermal = blackbody(one.cells, now.radiation_kt_ev)
    field = thermal * rng.uniform(-1.0, 3.0, len(thermal))
    return Problem(Step(one, now, field), interior, excess)


def sparse_step(step: Step, interior: np.ndarray, excess: np.ndarray) -> SparseStep:
    """Assemble one step; `interior` and `excess` are what levels do without the field."""
    cells, now, ratio, field = step.cells, step.now, step.ratio, step.room.field
    n_cells, kt = len(field), now.radiation_kt_ev
    exponent = cells.energy_ev * np.expm1(cells.offset) / kt
    packet = now.packet_per_s * cells.growth
    gap = cells.gap_ev[:, None] / kt
    weight = ratio[cells.level][:, None] * cells.weight
    # Of the soft photon; where it has no energy the weight is zero.
    soft = np.abs(np.expm1(gap - exponent))
    alpha = now.ground * np.divide(weight, soft, out=np.zeros_like(weight), where=weight > 0.0)
    population = now.ground * ratio[cells.level][:, None] * np.exp(-gap)
    emission = alpha * np.exp(-exponent) / population
    absorption = alpha.sum(axis=0)

    lit, kept_back = _means(absorption / packet)
    own, right = np.ones(n_cells), lit * field
    given = emission * kept_back / packet
    near = _near(cells)
    spread, drift = _scattering(cells, now, exponent)
    theta = _theta(absorption[near], packet[near], spread.diagonal())
    own[near] = packet[near] / theta + absorption[near]
    right[near] = packet[near] / theta * field[near] + drift
    given[:, near] = emission[:, near]

    levels = np.zeros((len(ratio), n_cells))
    np.add.at(levels, cells.level, alpha)
    kept = interior.copy()
    np.add.at(kept, (cells.level, cells.level), emission.sum(axis=1))
    across = np.zeros((len(ratio), n_cells))
    np.add.at(across, cells.level, given)
    balance = excess.copy()

    share, source = line_sources(cells, now, ratio)
    carried = share * packet[cells.line_cell]
    kept[cells.line_upper, cells.line_upper] += carried * source
    seen = slice(0, 1 if cells.forget_above else None)
    balance[cells.line_upper[seen]] += (carried * field[cells.line_cell])[seen]
    among = sparse.lil_array((n_cells, n_cells))
    among[near, near] = spread
    if len(drift):
        # The core of Lyman-alpha has the occupation of the line, and 2p pays for what leaves it.
        core, upper = int(cells.line_cell[0]), int(cells.line_upper[0])
        levels[upper] -= among[[core]].toarray().ravel()
        balance[upper] += drift[core - cells.first_scattering]
        among[[core]] = 0.0
        own[core], right[core], across[:, core] = 1.0, 0.0, 0.0
        across[upper, core] = source[0]
    matrix = sparse.block_array(
        [
            [sparse.diags_array(own) + sparse.csr_array(among), sparse.csr_array(-across.T)],
            [sparse.csr_array(-levels), sparse.csr_array(kept)],
        ]
    )
    thermal = np.exp(-cells.energy_ev / kt)
    unit = np.append(thermal * np.exp(-exponent), np.full(len(ratio), thermal))
    unit[n_cells:] *= now.ground * ratio * _boltzmann(step)
    scaled = sparse.csr_array(matrix @ sparse.diags_array(unit))
    rows = 1.0 / abs(scaled).max(axis=1).toarray().ravel()
    system = sparse.csc_array(sparse.diags_array(rows) @ scaled)
    system.eliminate_zeros()
    return SparseStep(
        system, np.concatenate([right, balance]) * rows, unit, emission, absorption, theta
    )


def _boltzmann(step: Step) -> np.ndarray:
    gap = step.one.kept.energy_ev - step.cells.energy_ev
    return np.exp(-gap / step.now.radiation_kt_ev)


def _near(cells: Cells) -> slice:
    return slice(cells.first_scattering, cells.first_scattering + len(cells.conductance) - 1)


def line_sources(cells: Cells, now: Moment, ratio: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """1 - exp(-tau) of each line, and its occupation per unit population of its upper level."""
    depth = cells.line_depth * now.column * now.ground
    return -np.expm1(-depth), 1.0 / (now.ground * ratio[cells.line_upper])


def _means(tau: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """g = (1 - exp(-tau))/tau and (1 - g)/tau; by series where these cancel."""
    thick, few = np.maximum(tau, 0.05), np.arange(12)
    mean = -np.expm1(-thick) / thick
    sign = (-1.0) ** few / np.cumprod(np.maximum(few, 1))
    powers = tau[:, None] ** few
    small = tau < 0.05
    return (
        np.where(small, powers @ (sign / (few + 1)), mean),
        np.where(small, powers @ (sign / ((few + 1) * (few + 2))), (1.0 - mean) / thick),
    )


def _theta(absorption: np.ndarray, packet: np.ndarray, spread: np.ndarray) -> np.ndarray:
    """Weight of the end of a step in its mean: exact for absorption, leaning where it is stiff."""
    tau = absorption / packet
    thick = np.maximum(tau, 0.05)
    exact = np.where(tau > 0.05, 1.0 / -np.expm1(-thick) - 1.0 / thick, 0.5 + tau / 12.0)
    stiff = ((absorption + spread) / packet) ** 2
    return np.maximum(exact, 0.5 + 0.5 * stiff / (stiff + STIFF**2))


def _scattering(
    cells: Cells, now: Moment, exponent: np.ndarray
) -> tuple[sparse.csr_array, np.ndarray]:
    """Loss matrix of the cells with scattering, and what it brings to a blackbody at T_r."""
    near = _near(cells)
    energy_ev = cells.energy_ev * np.exp(cells.offset[near])
    # exp(h nu/kT_m) of either cell over that half-way between them.
    rise = np.exp(
        cells.energy_ev
        * np.exp(cells.offset[near][1:] - 0.5 * cells.step)
        * np.sinh(0.5 * cells.step)
        / now.matter_kt_ev
    )
    flux = now.scattering_per_s * now.ground * cells.conductance[1:-1]
    if not len(energy_ev):
        return sparse.csr_array((0, 0)), np.empty(0)
    diagonal = np.append(flux / rise, 0.0) + np.append(0.0, flux * rise)
    spread = sparse.diags_array([-flux / rise, diagonal, -flux * rise], offsets=[-1, 0, 1])
    blackbody = np.exp(-energy_ev / now.radiation_kt_ev)
    down = flux * (rise * blackbody[1:] - blackbody[:-1] / rise)
    return sparse.csr_array(spread), np.append(down, 0.0) - np.append(0.0, down)
