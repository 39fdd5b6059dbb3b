"""Helium of a table as comma-separated text: rates of He I and He II, and escape from the lines.

Files of their own, because helium recombines in a narrower range of temperatures than the table of
hydrogen covers.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from .. import constants as const
from ..arrays import FloatArray
from ..atomic.helium_levels import term_name
from ..history.setup import Setup
from ..kernels.effective import Atom
from .about import about_lines
from .certificate import level_name
from .effective import NEVER
from .grid_text import Grid, Sheet, sheet_text
from .helium_escape import LineTable
from .plasma import packed
from .series import COLLISIONS_K, local_series
from .stage import StageTable
from .table import EffectiveTable

# So that the spline errs by little more than the table at its default tolerance.
_ROWS, _RATIOS = 181, 33
# Decimals of ln(P/S), which errs by 1e-4 itself.
DECIMALS = 10


def helium_endings(setup: Setup) -> tuple[str, ...]:
    """Endings of the files that :func:`helium_texts` makes for a table of this setup."""
    if not setup.helium_recombines:
        return ()
    ion = ("-he2.csv",) if setup.helium.helium_ion == "network" else ()
    lines = ("-he1-lines.csv",) if setup.lines.helium == "continuum" else ()
    return ("-he1.csv", *ion, *lines)


def helium_texts(table: EffectiveTable) -> dict[str, str]:
    """Return the files of a table's helium by their endings; none if it has no levels of helium.

    Parameters
    ----------
    table : EffectiveTable
        The table.
    """
    stage, ion, lines = table.helium, table.helium_ion, table.helium_lines
    if stage is None or lines is None:
        return {}
    first, second, _, _ = packed(table)
    texts = {"-he1.csv": _stage_text(table, stage, first, ("He I", stage_names(stage, 1)))}
    if ion is not None:
        texts["-he2.csv"] = _stage_text(table, ion, second, ("He II", stage_names(ion, 2)))
    if lines.absorbs:
        texts["-he1-lines.csv"] = _escape_text(table, lines)
    return texts


def stage_names(stage: StageTable, charge: int) -> list[str]:
    """Names of the kept levels without blanks: 2_1P and so on of He I (charge 1), 2p of He II."""
    numbers = zip(stage.n.tolist(), stage.l.tolist(), stage.spin.tolist(), strict=True)
    if charge == 1:
        return [term_name(*one).replace(" ", "_") for one in numbers]
    return [level_name(n, l).replace(", ", "_") for n, l, _ in numbers]


def line_said(lines: LineTable, stage: StageTable) -> list[str]:
    """How kept levels of He I decay to the ground state, in words."""
    names = stage_names(stage, 1)
    row = lines.packed().line
    said = [
        "Lines to the ground state, tau = depth n_HeI/H, S = (1 - exp(-tau))/tau; the upper level",
        "loses A P/(1 - exp(-E/T_r)) of what it has above equilibrium with the ground state:",
    ]
    for k, name in enumerate(lines.names):
        said.append(
            f"  {name}: from {names[int(lines.upper[k])]}, A = {row[0, k]:.17g} 1/s, depth = "
            f"{row[1, k]:.17g} cm^3/s,"
        )
        said.append(
            f"    E = {row[2, k]:.17g} K, H I cross section {lines.cross_section_cm2[k]:.17g} cm^2"
        )
        above = int(lines.lit_by[k])
        if above >= 0:
            said.append(
                f"    lit by what {lines.names[above]} sent {lines.delay[k]:.17g} of ln a before"
            )
    said.append(
        f"  two photons from {names[lines.decay]}: {lines.decay_rate_per_s:.17g} 1/s, spontaneous"
    )
    return said


def _stage_text(
    table: EffectiveTable, stage: StageTable, atom: Atom, called: tuple[str, list[str]]
) -> str:
    species, names = called
    pairs = zip(stage.lower.tolist(), stage.upper.tolist(), strict=True)
    sheet = Sheet(
        names,
        [(names[lower], names[upper]) for lower, upper in pairs],
        atom.level[3],
        stage.barrier_k,
        stage.rise_k,
        stage.log_weight_ratio,
        COLLISIONS_K,
    )
    head = [*about_lines(table), "", f"Rates of {species}.", *_decays(table, species, atom)]
    x = np.linspace(stage.log_low, stage.log_high, _ROWS)
    y = np.linspace(stage.ratio_low, stage.ratio_high, _RATIOS)
    return sheet_text(head, sheet, lambda x, y: stage_grid(stage, atom, x, y), x, y)


def _decays(table: EffectiveTable, species: str, atom: Atom) -> list[str]:
    if species == "He I":
        assert table.helium is not None and table.helium_lines is not None
        said = line_said(table.helium_lines, table.helium)
        if table.helium_lines.absorbs:
            return [*said, "  P: from the file -he1-lines.csv, ln P = ln S + ln(P/S)"]
        return [*said, "  P = S"]
    rate, depth, energy = atom.line[:, 0]
    return [
        f"2p-1s: A = {rate:.17g} 1/s, tau = {depth:.17g} cm^3/s n_HeII/H, E = {energy:.17g} K,",
        f"escape (1 - exp(-tau))/tau; two photons from 2s: {atom.constants[0]:.17g} 1/s",
    ]


def stage_grid(stage: StageTable, atom: Atom, x: FloatArray, y: FloatArray) -> Grid:
    """Evaluate one stage of helium on a grid, as :func:`levelnet.distilled.grid_text.table_grid`.

    Parameters
    ----------
    stage : StageTable
        The table.
    atom : Atom
        The same, packed.
    x, y : ndarray, shapes (n_x,) and (n_y,), dimensionless
        ln(T_r/K) and ln(T_m/T_r) inside the table.
    """
    here = local_series(stage, *np.meshgrid(x, y, indexing="ij"))
    recombination = here.equilibrium + y[:, None] * here.departure
    photo = here.equilibrium[:, 0] - atom.level[2] + 1.5 * x[:, None]
    down = np.where(here.exchange[:, 0] > NEVER + 1.0, here.exchange[:, 0], -np.inf)
    return Grid(x, y, recombination, np.concatenate([photo, down], axis=1))


def escape_nodes(lines: LineTable) -> tuple[list[FloatArray], FloatArray]:
    """Nodes of ln n_HeI/H, ln n_HI/H, ln T_r, and ln(P/S) there, shape (n_lines, ...)."""
    values = np.array(lines.escape)
    for axis in (1, 2, 3):
        moved = np.moveaxis(values, axis, 0)
        values = np.moveaxis((moved[:-2] + 4.0 * moved[1:-1] + moved[2:]) / 6.0, 0, axis)
    counts = values.shape[1:]
    nodes = [low + step * np.arange(n) for (low, step), n in zip(lines.axis, counts, strict=True)]
    return nodes, values


def _escape_text(table: EffectiveTable, lines: LineTable) -> str:
    (column, hydrogen, temperature), values = escape_nodes(lines)
    kelvin = [f"{one:.6g}" for one in np.exp(temperature)]
    names = [f"ln_gain_{name.replace(' ', '_')}_at_{one}" for name in lines.names for one in kelvin]
    columns = ["ln_helium_column", "ln_hydrogen_column", *names]
    head = [*about_lines(table), "", *_escape_said(table, lines, len(column), len(hydrogen)), ""]
    rows = [f"# {line}".rstrip() for line in (*head, ",".join(columns))]
    rows += list(_escape_rows(column, hydrogen, values))
    return "\n".join(rows) + "\n"


def _escape_rows(column: FloatArray, hydrogen: FloatArray, values: FloatArray) -> Iterator[str]:
    for i, q in enumerate(column):
        for j, w in enumerate(hydrogen):
            here = np.round(values[:, i, j].ravel(), DECIMALS) + 0.0
            yield f"{q:.12g},{w:.12g}," + ",".join(f"{one:.12g}" for one in here)


def _escape_said(table: EffectiveTable, lines: LineTable, n_q: int, n_w: int) -> list[str]:
    stage = table.helium
    assert stage is not None
    (q, dq), (w, dw), (x, dx) = lines.axis.tolist()
    n_x = lines.escape.shape[3] - 2
    errors = ", ".join(
        f"{name} {largest:.1e} ({rms:.1e})"
        for name, largest, rms in zip(
            lines.names, lines.escape_error, lines.escape_rms, strict=True
        )
    )
    speed = const.SPEED_OF_LIGHT_CM_S
    return [
        "Escape of photons from the lines of He I, inside which neutral hydrogen absorbs.",
        *line_said(lines, stage),
        "P = S exp(gain). The gain, ln(P/S), hangs on three numbers, the same for all lines, and",
        "is given on their grid:",
        "  column 1: q = ln(n_HeI/H), in s/cm^3; column 2: w = ln(n_HI/H), in s/cm^3; then for",
        f"  each line {n_x} values of x = ln T_r; H is the expansion rate in 1/s, T_r in K",
        f"  q = {q:.17g} + k {dq:.17g}, k = 0 to {n_q - 1}, changing slowest",
        f"  w = {w:.17g} + k {dw:.17g}, k = 0 to {n_w - 1}",
        f"  x = {x:.17g} + k {dx:.17g}, k = 0 to {n_x - 1}",
        "interpolation rule: cubic spline (not-a-knot ends) in q, w and x, which is the table",
        "  itself. Below the grid in q, w or both take the gain at its edge times exp(q - edge),",
        "  exp(w - edge) or both: the gain is proportional to either. Nothing above, nothing",
        f"  outside in x. Decimals: {DECIMALS}. Largest (rms) error of ln P at random points",
        f"  against the calculation: {errors}",
        "between two lines, one of which lights the other, hydrogen absorbs as well: depth per",
        f"  unit of ln a = {speed:.12g} cm/s times the cross section times n_HI/H",
    ]
