"""The rate matrix of the interior at one radiation temperature, factored; and the whole as CSR.

Symmetric form. With Boltzmann weights w_i = g_i exp(-E_i/kT_r) detailed balance gives R_ij w_i =
R_ji w_j, and the geometric mean of both directions of a line is S = A sqrt(g_u/g_l) / (2 sinh(h nu
/ 2kT_r)). The row matrix A = D - R (D total outflow) is then A = V^-1 D^1/2 H D^1/2 V with V =
diag(sqrt w) and H = 1 - D^-1/2 S D^-1/2, symmetric positive definite. Below COLD_K the weights
leave the doubles and the same matrix is factored without symmetry.
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
from ..atomic.levels import ionization_scale_ev
from ..errors import Outcome, SolveError
from ..kernels.assembly import symmetric_blocks
from ..numerics.block_cholesky import BlockCholesky, factor_symmetric
from ..numerics.block_lu import BlockLU, factor_general
from .ladder import Ladder, lines_of, transition_over_kt

# sqrt(w) spans e^(1.51 eV / 2kT), which reaches e^320 here; doubles end at e^709 and products of
# two such factors occur.
COLD_K = 27.4


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

    position: np.ndarray
    log_out: FloatArray
    log_in: FloatArray


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
    solver : BlockCholesky or BlockLU
        The factors.
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
    solver: BlockCholesky | BlockLU
    diagonal: FloatArray
    log_root_weight: FloatArray

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
        if isinstance(self.solver, BlockLU):
            return self.solver.solve(rates)
        root = np.exp(self.log_root_weight)
        scale = np.sqrt(self.diagonal)
        chance: FloatArray = self.solver.solve(rates * (root / scale)) / (root * scale)
        return chance

    def log_populations(self, log_source: FloatArray) -> FloatArray:
        """Natural log of interior populations fed by exp(`log_source`), shape (n_unknowns,).

        Sources are per second; where a level has none, -inf.
        """
        if isinstance(self.solver, BlockLU):
            top = log_source.max()
            cold: FloatArray = self.solver.solve_transposed(np.exp(log_source - top)[None])[0]
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

    coupling: FloatArray
    factor: FloatArray

    @staticmethod
    def of(ladder: Ladder) -> Workspace:
        """Buffers for one ladder."""
        shape = ladder.interior.shape
        return Workspace(np.empty(shape.n_couplings), np.empty(shape.n_factors))


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
    for n in range(2, ladder.n_max + 1):
        first = n * (n - 1) // 2
        alpha[first : first + n] = ladder.bound_free.cross_section_cm2[n - 1] @ weights[n - 1]
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
        Buffers to reuse; the result refers to them until they are used again.

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
    solver: BlockCholesky | BlockLU
    if radiation_temperature_k < COLD_K:
        solver = _factor_cold(ladder, radiation_temperature_k, sink)
        diagonal = solver.diagonal
    else:
        work = workspace or Workspace.of(ladder)
        solver, diagonal = _factor_warm(ladder, radiation_temperature_k, sink, log_root, work)
    return FactoredInterior(
        ladder, radiation_temperature_k, kept_lines, to_kept, photo, solver, diagonal, log_root
    )


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


def _factor_warm(
    ladder: Ladder, temperature_k: float, sink: FloatArray, log_root: FloatArray, work: Workspace
) -> tuple[BlockCholesky, FloatArray]:
    inside = ladder.interior
    root = np.exp(log_root)
    kt = const.BOLTZMANN_EV_K * temperature_k
    geometric, stretch = half_angle_tables(ladder, kt)
    n_unknowns = inside.shape.n_unknowns
    upward, downward, diagonal = np.empty((3, n_unknowns))
    symmetric_blocks(
        ladder.n_max,
        inside.first_n,
        ladder.dipole.strength_per_s,
        ladder.dipole.offset,
        geometric,
        stretch,
        inside.shape.start,
        inside.shape.coupling_start,
        root,
        ladder.energy_excess_ev[inside.position] / kt,
        np.where(inside.idle, 0.0, 1.0),
        sink,
        upward,
        downward,
        diagonal,
        work.coupling,
    )
    if np.any(diagonal <= 0.0):
        raise SolveError(Outcome.SINGULAR.value)
    scale = np.sqrt(diagonal)
    solver = factor_symmetric(
        inside.shape, work.coupling, root * scale, downward, sink * root / scale, work.factor
    )
    return solver, diagonal


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


def _factor_cold(ladder: Ladder, temperature_k: float, sink: FloatArray) -> BlockLU:
    upward, downward = rate_blocks(ladder, temperature_k)
    return factor_general(ladder.interior.shape, upward, downward, sink)


def rate_blocks(ladder: Ladder, temperature_k: float) -> tuple[list[FloatArray], list[FloatArray]]:
    """Rates between the interior blocks l and l + 1, both directions."""
    inside = ladder.interior
    above, below = [], []
    for l in range(ladder.n_max - 1):
        rows = np.arange(inside.first_n[l], ladder.n_max + 1)
        columns = np.arange(inside.first_n[l + 1], ladder.n_max + 1)
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
    for l in range(ladder.n_max - 1):
        n, other = np.meshgrid(
            np.arange(max(l + 1, 2), ladder.n_max + 1),
            np.arange(l + 2, ladder.n_max + 1),
            indexing="ij",
        )
        strength = ladder.dipole.block(l)[n - l - 1, other - l - 2]
        real = strength > 0.0
        own = (n * (n - 1) // 2 + l)[real]
        partner = (other * (other - 1) // 2 + l + 1)[real]
        rises = (other > n)[real]
        lower, upper = np.where(rises, own, partner), np.where(rises, partner, own)
        log_up, log_down = log_line_rates(
            ladder, lower, upper, strength[real], radiation_temperature_k
        )
        rows += [upper - 1, lower - 1]
        columns += [lower - 1, upper - 1]
        values += [np.exp(log_up), np.exp(log_down)]
    size = len(ladder.levels) - 1
    row, column, value = (np.concatenate(part) for part in (rows, columns, values))
    lines = np.bincount(column, weights=value, minlength=size).astype(np.float64)
    outflow = lines + interior_photoionization(ladder, radiation_temperature_k)[1:]
    rates = sparse.coo_array((value, (row, column)), shape=(size, size))
    return sparse.csr_array(sparse.diags_array(outflow) - rates)
