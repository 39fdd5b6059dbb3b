"""The rate matrix of the interior at one radiation temperature, factored; and the whole as CSR.

Symmetric form. With Boltzmann weights w_i = g_i exp(-E_i/kT_r) detailed balance gives R_ij w_i =
R_ji w_j, and the geometric mean of both directions of a line is S = A sqrt(g_u/g_l) / (2 sinh(h nu
/ 2kT_r)). The row matrix A = D - R (D total outflow) is then A = V^-1 D^1/2 H D^1/2 V with V =
diag(sqrt w) and H = 1 - D^-1/2 S D^-1/2, symmetric positive definite. Below COLD_K the weights
leave the doubles and the same matrix is factored without symmetry. Whole shells stand last, as a
border of the blocks.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from .. import constants as const
from ..arrays import FloatArray
from ..atomic.bound_free import recombination_weights
from ..atomic.detailed_balance import log_saha_factor, thermal_volume_cm3
from ..atomic.electron_grid import maxwell_factor
from ..errors import Outcome, SolveError
from ..kernels.assembly import symmetric_blocks
from ..numerics.block_cholesky import BlockCholesky, factor_symmetric
from ..numerics.block_lu import BlockLU, factor_general
from ..numerics.block_system import BlockShape
from ..numerics.bordered import BorderedCholesky, BorderedLU, border_general, border_symmetric
from .ladder import Ladder, line_groups
from .line_rates import (
    KeptLines,
    block_lines,
    half_angle_tables,
    kept_line_rates,
    log_line_rates,
    shell_means,
    shell_rates,
)

SymmetricSolver = BlockCholesky | BorderedCholesky
GeneralSolver = BlockLU | BorderedLU

# sqrt(w) spans e^(1.51 eV / 2kT), which reaches e^326 here; doubles end at e^709 and products of
# two such factors occur. Just below a point of the lattice to which histories reduce, 2^4.75 K.
# Per charge^2: energies of an ion go as that.
COLD_K = 26.9


@dataclass(frozen=True, slots=True, eq=False)
class FactoredInterior:
    """The interior at one T_r, ready to be solved.

    Attributes
    ----------
    ladder : Ladder
        The atom.
    radiation_temperature_k : float, K
        T_r.
    kept_lines : tuple of KeptLines
        Lines of each kept level.
    to_kept : ndarray, shape (n_kept, n_unknowns), s^-1
        Rates from the interior to each kept level.
    photoionization : ndarray, shape (n_unknowns,), s^-1
        Rates to the continuum.
    solver : Solver
        The factors: symmetric or general, with a border where there are whole shells.
    diagonal : ndarray, shape (n_unknowns,), s^-1
        Total outflow of each level.
    log_root_weight : ndarray, shape (n_unknowns,)
        ln sqrt(w), w = 1 scale at the lowest interior level.
    """

    ladder: Ladder
    radiation_temperature_k: float
    kept_lines: tuple[KeptLines, ...]
    to_kept: FloatArray
    photoionization: FloatArray
    solver: SymmetricSolver | GeneralSolver
    diagonal: FloatArray
    log_root_weight: FloatArray

    @property
    def is_cold(self) -> bool:
        """Whether weights leave the doubles, so that the symmetric form is not in use."""
        return isinstance(self.solver, GeneralSolver)

    @property
    def weight(self) -> FloatArray:
        """What turns a feed into populations, shape (n_unknowns,): w, and ones when cold."""
        if self.is_cold:
            return np.ones(len(self.log_root_weight))
        return np.exp(2.0 * self.log_root_weight)

    def fates(self, rates: FloatArray) -> FloatArray:
        """Chance that an atom in each interior level leaves through `rates`.

        Parameters
        ----------
        rates : ndarray, shape (n_right, n_unknowns), s^-1
            Rates out of the interior through each exit.

        Returns
        -------
        ndarray, shape (n_right, n_unknowns), dimensionless
            Probabilities; over all exits they sum to 1.
        """
        if self.is_cold:
            return self.solver.solve(rates)
        root = np.exp(self.log_root_weight)
        scale = np.sqrt(self.diagonal)
        chance: FloatArray = self.solver.solve(rates * (root / scale)) / (root * scale)
        return chance

    def feed(self, source: FloatArray) -> FloatArray:
        """Populations fed by `source`, over `weight`.

        Parameters
        ----------
        source : ndarray, shape (n_right, n_unknowns), s^-1
            What enters each interior level; 0 for those that are idle.

        Returns
        -------
        ndarray, shape (n_right, n_unknowns)
            x / weight, with A^T x = source.
        """
        if isinstance(self.solver, GeneralSolver):
            return self.solver.solve_transposed(source)
        return self.fates(source / self.weight)

    def log_populations(self, log_source: FloatArray) -> FloatArray:
        """Natural log of interior populations fed by exp(`log_source`), shape (n_unknowns,).

        Sources are per second; where a level has none, -inf.
        """
        if self.is_cold:
            top = log_source.max()
            cold = self.feed(np.exp(log_source - top)[None])[0]
            with np.errstate(divide="ignore"):
                return np.asarray(top + np.log(cold))
        scaled = log_source - self.log_root_weight - 0.5 * np.log(self.diagonal)
        top = scaled.max()
        solution = self.solver.solve(np.exp(scaled - top)[None])[0]
        log_scale = self.log_root_weight - 0.5 * np.log(self.diagonal)
        with np.errstate(divide="ignore"):
            return np.asarray(top + np.log(solution) + log_scale)


@dataclass(slots=True, eq=False)
class Workspace:
    """Buffers reused from one temperature to the next; contents mean nothing in between."""

    shape: BlockShape
    _buffers: tuple[FloatArray, FloatArray] | None = None

    @staticmethod
    def of(ladder: Ladder) -> Workspace:
        """Buffers for one ladder, made when they are first used."""
        return Workspace(ladder.interior.shape)

    def buffers(self) -> tuple[FloatArray, FloatArray]:
        """For the couplings and for the factors."""
        if self._buffers is None:
            self._buffers = np.empty(self.shape.n_couplings), np.empty(self.shape.n_factors)
        return self._buffers

    def release(self) -> None:
        """Give the memory back."""
        self._buffers = None


def interior_photoionization(ladder: Ladder, temperature_k: float) -> FloatArray:
    """Photoionization rate of every level but the ground state, s^-1, shape (n_levels,); [0] = 0.

    By detailed balance from the recombination coefficient at T_m = T_r.
    """
    alpha = recombination_coefficients(ladder, temperature_k, temperature_k)
    levels = ladder.levels
    log_saha = log_saha_factor(
        levels.statistical_weight[1:], levels.ionization_energy_ev[1:], temperature_k, ladder.charge
    )
    rate = np.zeros(len(levels))
    rate[1:] = np.exp(np.log(alpha[1:]) - log_saha)
    return rate


def recombination_coefficients(
    ladder: Ladder, radiation_temperature_k: float, matter_temperature_k: float
) -> FloatArray:
    """Alpha of every level but the ground state, cm^3 s^-1, shape (n_levels,); [0] = 0."""
    spread = maxwell_factor(ladder.bound_free.grid, matter_temperature_k, ladder.charge)
    weights = recombination_weights(ladder.bound_free, radiation_temperature_k) * spread
    alpha = np.zeros(len(ladder.levels))
    for n, place in ladder.by_n():
        alpha[place] = ladder.bound_free.cross_section_cm2[n - 1] @ weights[n - 1]
    volume = thermal_volume_cm3(matter_temperature_k, ladder.charge)
    return alpha * (0.5 * ladder.levels.statistical_weight * volume)


def factor_interior(
    ladder: Ladder, radiation_temperature_k: float, workspace: Workspace | None = None
) -> FactoredInterior:
    """Assemble and factor the interior at one T_r.

    Parameters
    ----------
    ladder : Ladder
        The atom.
    radiation_temperature_k : float, K
        T_r, above 0.
    workspace : Workspace, optional
        Buffers to reuse; the result refers to them until they are used again. Below COLD_K times
        charge^2, where they are of no use, their memory is given back.

    Returns
    -------
    FactoredInterior
        Ready to be solved.
    """
    inside = ladder.interior
    kept_lines = tuple(
        kept_line_rates(ladder, k, radiation_temperature_k) for k in range(len(ladder.kept))
    )
    to_level = np.zeros((len(kept_lines), len(ladder.levels)))
    for row, lines in zip(to_level, kept_lines, strict=True):
        row[lines.position] = np.exp(lines.log_in)
    to_kept = to_level[:, inside.position]
    to_kept[:, inside.idle] = 0.0
    photo = interior_photoionization(ladder, radiation_temperature_k)[inside.position]
    photo[inside.idle] = 0.0
    sink = photo + to_kept.sum(axis=0)
    sink[inside.idle] = 1.0
    kt = const.BOLTZMANN_EV_K * radiation_temperature_k
    energy = ladder.levels.energy_ev[inside.position]
    weight = ladder.levels.statistical_weight[inside.position]
    log_root = 0.5 * (np.log(weight) - (energy - energy.min(initial=np.inf)) / kt)
    solver: SymmetricSolver | GeneralSolver
    if radiation_temperature_k < COLD_K * ladder.charge**2:
        if workspace is not None:  # of no use without symmetry, which itself takes more memory
            workspace.release()
        cold = _factor_cold(ladder, radiation_temperature_k, sink)
        solver, diagonal = cold, cold.diagonal
    else:
        work = workspace or Workspace.of(ladder)
        solver, diagonal = _factor_warm(ladder, radiation_temperature_k, sink, log_root, work)
    return FactoredInterior(
        ladder, radiation_temperature_k, kept_lines, to_kept, photo, solver, diagonal, log_root
    )


def _factor_warm(
    ladder: Ladder, temperature_k: float, sink: FloatArray, log_root: FloatArray, work: Workspace
) -> tuple[SymmetricSolver, FloatArray]:
    root = np.exp(log_root)
    kt = const.BOLTZMANN_EV_K * temperature_k
    tables = half_angle_tables(ladder, kt)
    if not len(ladder.shells):
        return _factor_blocks(ladder, kt, tables, sink, root, work)
    n_inner = ladder.interior.shape.n_unknowns
    inner_root, shell_root = root[:n_inner], root[n_inner:]
    to_blocks, among = shell_means(ladder, *tables, kt)
    leak = sink[:n_inner] + (shell_root @ to_blocks) / inner_root
    blocks, diagonal = _factor_blocks(ladder, kt, tables, leak, inner_root, work)
    outflow = (to_blocks @ inner_root + among @ shell_root) / shell_root + sink[n_inner:]
    diagonal = np.concatenate([diagonal, outflow])
    scale = np.sqrt(diagonal)
    to_blocks /= np.outer(scale[n_inner:], scale[:n_inner])
    among /= np.outer(scale[n_inner:], scale[n_inner:])
    whole = border_symmetric(blocks, to_blocks, among, root * scale, sink * root / scale)
    return whole, diagonal


def _factor_blocks(
    ladder: Ladder,
    kt_ev: float,
    tables: tuple[FloatArray, FloatArray],
    sink: FloatArray,
    root: FloatArray,
    work: Workspace,
) -> tuple[BlockCholesky, FloatArray]:
    """Factor the blocks of levels resolved in l; what they lose to whole shells is in `sink`."""
    shape = ladder.interior.shape
    scale, downward, diagonal = np.empty((3, shape.n_unknowns))
    lines = block_lines(ladder, tables, root, kt_ev)
    coupling, factor = work.buffers()
    symmetric_blocks(*lines, sink, scale, downward, diagonal, coupling)
    if np.any(diagonal <= 0.0):
        raise SolveError(Outcome.SINGULAR.value)
    weight, excess = root * np.sqrt(diagonal), sink * root * scale
    solver = factor_symmetric(shape, coupling, weight, downward, excess, factor, scale)
    return solver, diagonal


def _factor_cold(ladder: Ladder, temperature_k: float, sink: FloatArray) -> GeneralSolver:
    upward, downward = rate_blocks(ladder, temperature_k)
    if not len(ladder.shells):
        return factor_general(ladder.interior.shape, upward, downward, sink)
    border = shell_rates(ladder, temperature_k)
    leak = sink[: ladder.interior.shape.n_unknowns] + border.into.sum(axis=0)
    inner = factor_general(ladder.interior.shape, upward, downward, leak)
    return border_general(inner, border, sink)


def rate_blocks(ladder: Ladder, temperature_k: float) -> tuple[list[FloatArray], list[FloatArray]]:
    """Rates between the interior blocks l and l + 1, both directions."""
    inside = ladder.interior
    above, below = [], []
    top = ladder.resolve_l_to
    for l in range(top - 1):
        rows = np.arange(inside.first_n[l], top + 1)
        columns = np.arange(inside.first_n[l + 1], top + 1)
        strength = ladder.dipole.block(l)[np.ix_(rows - l - 1, columns - l - 2)].copy()
        strength[inside.shape.part(inside.idle, l)] = 0.0
        strength[:, inside.shape.part(inside.idle, l + 1)] = 0.0
        own = inside.shape.part(inside.position, l)[:, None] + 0 * columns
        other = inside.shape.part(inside.position, l + 1)[None, :] + 0 * rows[:, None]
        out, back = np.zeros(strength.shape), np.zeros(strength.shape)
        real = strength > 0.0
        rises = columns[None, :] > rows[:, None]
        lower, upper = np.where(rises, own, other)[real], np.where(rises, other, own)[real]
        log_up, log_down = log_line_rates(ladder, lower, upper, strength[real], temperature_k)
        out[real] = np.exp(np.where(rises[real], log_up, log_down))
        back[real] = np.exp(np.where(rises[real], log_down, log_up))
        above.append(out)
        below.append(back.T)
    return above, below


def rate_matrix(ladder: Ladder, radiation_temperature_k: float) -> sparse.csr_array:
    """The whole excited network as one sparse matrix, for inspection and independent checks.

    Parameters
    ----------
    ladder : Ladder
        The atom; kept levels are included like all others.
    radiation_temperature_k : float, K
        T_r.

    Returns
    -------
    csr_array, shape (n_levels - 1, n_levels - 1), s^-1
        M of dx/dt = -M x + sources, over all levels but the ground state in the order of
        `ladder.levels`: the diagonal is the total outflow (lines between excited levels and
        photoionization; nothing to the ground state), M[j, i] is minus the rate from i to j.
    """
    rows, columns, values = [], [], []
    for own, partner, strength in line_groups(ladder):
        rises = ladder.levels.n[partner] > ladder.levels.n[own]
        lower, upper = np.where(rises, own, partner), np.where(rises, partner, own)
        log_up, log_down = log_line_rates(ladder, lower, upper, strength, radiation_temperature_k)
        rows += [upper - 1, lower - 1]
        columns += [lower - 1, upper - 1]
        values += [np.exp(log_up), np.exp(log_down)]
    size = len(ladder.levels) - 1
    row, column, value = (np.concatenate(part) for part in (rows, columns, values))
    lines = np.bincount(column, weights=value, minlength=size).astype(np.float64)
    outflow = lines + interior_photoionization(ladder, radiation_temperature_k)[1:]
    rates = sparse.coo_array((value, (row, column)), shape=(size, size))
    return sparse.csr_array(sparse.diags_array(outflow) - rates)
