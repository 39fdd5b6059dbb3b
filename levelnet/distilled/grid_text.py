"""A table of effective rates as comma-separated text: logarithms on a regular grid.

A grid, because every language has a cubic spline, while coefficients of patches would have to be
programmed anew; who needs the coefficients takes the C or Fortran source.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from .about import about_lines, level_names, pair_names
from .effective import NEVER
from .series import COLLISIONS_K, local_series
from .table import EffectiveTable

# So that the spline errs by little more than the table at its default tolerance.
_ROWS, _RATIOS = 241, 97


class Grid(NamedTuple):
    """Logarithms on a grid, even in x = ln(T_r/K) and y = ln(T_m/T_r).

    Attributes
    ----------
    x, y : ndarray, shapes (n_x,) and (n_y,), dimensionless
        The grid.
    recombination : ndarray, shape (n_x, n_y, n_kept)
        ln of A_i in cm^3 s^-1.
    others : ndarray, shape (n_x, n_others)
        ln of photoionization times exp(I/kT_r) and of downward exchange times exp(barrier/kT_r),
        in s^-1, since a spline cannot follow a Boltzmann factor; -inf for no exchange at all.
    """

    x: FloatArray
    y: FloatArray
    recombination: FloatArray
    others: FloatArray


class Sheet(NamedTuple):
    """What the head of a grid says of its rates; energies over the Boltzmann constant in K.

    Attributes
    ----------
    levels : list of str
        Names of the kept levels.
    pairs : list of (str, str)
        Names of each pair, lower level first.
    ionization_k : ndarray, shape (n_kept,), K
        Of each kept level.
    barrier_k, rise_k, log_weight_ratio : ndarray, shape (n_pairs,)
        As in :class:`levelnet.distilled.table.EffectiveTable`.
    hottest_k : float, K
        Matter above this and above the radiation is ionized by collisions.
    """

    levels: list[str]
    pairs: list[tuple[str, str]]
    ionization_k: FloatArray
    barrier_k: FloatArray
    rise_k: FloatArray
    log_weight_ratio: FloatArray
    hottest_k: float


def table_grid(table: EffectiveTable, x: FloatArray, y: FloatArray) -> Grid:
    """Evaluate a table on a grid inside its rectangle of ln T_r and ln(T_m/T_r).

    The rectangle is filled to its corner, where matter is hotter than the table allows, because a
    spline needs it whole; the figures there are those of an atom without collisions.
    """
    # Past the check of `effective_rates`, which refuses the hot corner.
    here = local_series(table, *np.meshgrid(x - math.log(table.scales.energy), y, indexing="ij"))
    unit = table.scales
    recombination = here.equilibrium + y[:, None] * here.departure + math.log(unit.recombination)
    temperature = np.exp(x)[:, None]
    saha, reduced_k = table.saha, temperature / unit.energy
    photo = here.equilibrium[:, 0] - saha.log_factor(reduced_k) + saha.ionization_k / reduced_k
    down = np.where(here.exchange[:, 0] > NEVER + 1.0, here.exchange[:, 0], -np.inf)
    others = np.concatenate([photo, down], axis=1) + math.log(unit.line_rate)
    return Grid(x, y, recombination, others)


def grid_text(table: EffectiveTable, n_x: int = _ROWS, n_y: int = _RATIOS) -> str:
    """Return a table as comma-separated text, comment lines first.

    Parameters
    ----------
    table : EffectiveTable
        The table.
    n_x, n_y : int, at least 8
        Points in ln T_r and in ln(T_m/T_r).
    """
    low, high = np.log(table.radiation_range_k)
    x = np.linspace(low, high, n_x)
    y = np.linspace(table.ratio_low, table.ratio_high, n_y)
    unit = table.scales.energy
    pairs = [(one.split("-")[0], one.split("-")[1]) for one in pair_names(table)]
    sheet = Sheet(
        level_names(table.kept),
        pairs,
        table.saha.ionization_k * unit,
        table.barrier_k * unit,
        table.rise_k * unit,
        table.log_weight_ratio,
        COLLISIONS_K * unit,
    )
    return sheet_text(about_lines(table), sheet, lambda x, y: table_grid(table, x, y), x, y)


def sheet_text(
    head: list[str],
    sheet: Sheet,
    evaluate: Callable[[FloatArray, FloatArray], Grid],
    x: FloatArray,
    y: FloatArray,
) -> str:
    """Return rates on a grid as comma-separated text, comment lines first.

    Parameters
    ----------
    head : list of str
        First lines of the text.
    sheet : Sheet
        Names and energies.
    evaluate : callable
        Gives the grid at x and y, which it measures the error of a spline with.
    x, y : ndarray
        The grid, even in either.
    """
    grid = evaluate(x, y)
    blocks = [grid.others]
    blocks += [grid.recombination[:, :, k] for k in range(len(sheet.levels))]
    middle = evaluate(0.5 * (x[1:] + x[:-1]), 0.5 * (y[1:] + y[:-1]))
    said = [*head, "", *_explanation(sheet, grid, spline_error(grid, middle)), ""]
    lines = [f"# {line}".rstrip() for line in (*said, ",".join(_names(sheet, grid)))]
    lines += [
        f"{x:.17g}," + ",".join(f"{value:.12g}" for value in row)
        for x, row in zip(grid.x, np.hstack(blocks), strict=True)
    ]
    return "\n".join(lines) + "\n"


def _others(sheet: Sheet) -> list[tuple[str, str]]:
    """Name and meaning of each column that depends on T_r alone."""
    told = [
        (f"ln_photoionization_{name}", f"photoionization of {name}", f"exp({depth:.17g}/T_r)")
        for name, depth in zip(sheet.levels, sheet.ionization_k, strict=True)
    ]
    for (lower, upper), barrier in zip(sheet.pairs, sheet.barrier_k, strict=True):
        told.append(
            (
                f"ln_exchange_{upper}_to_{lower}",
                f"rate from {upper} to {lower}",
                f"exp({barrier:.17g}/T_r)",
            )
        )
    return [(name, f"ln of {what} in 1/s, times {factor}") for name, what, factor in told]


def _upward(sheet: Sheet) -> list[str]:
    rows = zip(sheet.pairs, sheet.log_weight_ratio, sheet.rise_k, strict=True)
    return [
        f"ln of rate {' to '.join(names)} = ln of the rate down + {weights:.17g} - {rise:.17g}/T_r"
        for names, weights, rise in rows
    ]


def _names(sheet: Sheet, grid: Grid) -> list[str]:
    ratios = [f"{ratio:.6g}" for ratio in np.exp(grid.y)]
    captures = [f"ln_recombination_{name}_at_{ratio}" for name in sheet.levels for ratio in ratios]
    return ["ln_radiation_temperature", *(name for name, _ in _others(sheet)), *captures]


def _explanation(sheet: Sheet, grid: Grid, error: float) -> list[str]:
    n_x, n_y, _ = grid.recombination.shape
    first = grid.others.shape[1] + 2
    lines = [
        f"{n_x} rows, one for each radiation temperature T_r (K), even in ln T_r; lines that start",
        "with # are comments, the last of them names the columns. Natural logarithms throughout.",
        "Column 1 has 17 significant digits, the others have 12.",
        "column 1: ln T_r",
    ]
    lines += [f"column {number}: {what}" for number, (_, what) in enumerate(_others(sheet), 2)]
    for k, name in enumerate(sheet.levels):
        start = first + k * n_y
        lines.append(
            f"columns {start} to {start + n_y - 1}: ln of recombination into {name} in cm^3/s, "
            f"{n_y} values of T_m/T_r"
        )
    step = (grid.y[-1] - grid.y[0]) / (n_y - 1)
    lines += [
        *_upward(sheet),
        f"values of T_m/T_r: exp({grid.y[0]:.17g} + k {step:.17g}), k = 0 to {n_y - 1}",
        f"matter above {sheet.hottest_k:g} K and above T_r: there to fill the",
        "  rectangle for splines, not to be used; collisional ionization is left out",
        "interpolation rule: cubic spline (not-a-knot ends) in ln T_r and ln(T_m/T_r); nothing",
        "  outside. Largest error of the logarithms, measured half-way between the grid points",
        f"  against the table: {error:.1e}",
    ]
    return lines


def spline_error(grid: Grid, middle: Grid) -> float:
    """Largest error of the logarithms from the spline through `grid`, at the points of `middle`."""
    from scipy.interpolate import CubicSpline

    between = CubicSpline(grid.y, CubicSpline(grid.x, grid.recombination)(middle.x), axis=1)
    errors = [between(middle.y) - middle.recombination]
    known = np.isfinite(grid.others).all(axis=0)
    errors.append(CubicSpline(grid.x, grid.others[:, known])(middle.x) - middle.others[:, known])
    return max(float(np.max(np.abs(one), initial=0.0)) for one in errors)
