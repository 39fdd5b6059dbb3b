"""Lines of He I in a table: their constants, and their escape probability where hydrogen absorbs.

With hydrogen inside a line its escape probability P hangs on three dimensionless numbers besides
constants of the line: its depth, that of the continuum per Doppler width, and the profile. The
profile (damping, incoherent fraction, Doppler width) is set by T_r, the depths by n_HeI/H and
n_HI/H; so ln(P/S), S = (1 - e^-tau)/tau, is tabulated over the logarithms of these three, which are
the same for all lines and any cosmology. It is the table of one choice of redistribution.
"""

from __future__ import annotations

import dataclasses
import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from .. import constants as const
from ..arrays import FloatArray, IntArray, frozen_array
from ..background.conditions import Conditions
from ..errors import SolveError
from ..escape.helium_continuum import doppler_width
from ..escape.helium_lines import HeliumGroundLines
from ..escape.helium_treatment import HeliumTreatment
from ..escape.sobolev import escape_probability, sobolev_optical_depth
from ..kernels.effective_helium import HeliumLines, gain, locate, make_line_room
from ..pieces import Pieces, code_digest, content_key

# Spacing of the nodes in ln of the columns and in ln T_r; the error is measured, and grows as the
# fourth power. That along T_r is one-sided: with 0.2 it moved x_e by 3e-7 and x_HeII by 4e-5.
SPACING = (0.45, 0.45, 0.16)
# Depth of the strongest line, and of the continuum per Doppler width of it, that the table holds.
# Below either, P goes to S in proportion; above, there is no such universe.
_DEPTH, _CONTINUUM = (1e-2, 1e9), (1e-7, 1e5)
_SEED, _POINTS = 20_260_103, 400
# P is computed to no better than this, and the table is of no use if it errs more.
LARGEST_ERROR = 3e-3


@dataclass(frozen=True, slots=True, eq=False)
class LineTable:
    """Lines of He I to its ground state; arrays of shape (n_lines,) unless said otherwise.

    Attributes
    ----------
    names : tuple of str
        As in :class:`levelnet.escape.helium_lines.HeliumGroundLines`, by energy.
    upper, lit_by : ndarray of int
        Kept level; line above whose light is seen, or -1.
    einstein_a_per_s, energy_ev, weight_ratio, cross_section_cm2 : ndarray
        As there; the last of H I at line centre.
    absorbs : int
        Whether hydrogen absorbs, 0 or 1.
    decay : int
        Kept level that decays by two photons.
    decay_rate_per_s : float, s^-1
        Its rate.
    ion_ev : float, eV
        Ionization energy of He II, for Saha equilibrium.
    escape : ndarray, shape (n_lines, n_column, n_hydrogen, n_temperature), dimensionless
        Coefficients of uniform cubic B-splines of ln(P/S); three numbers 1: P = S.
    axis : ndarray, shape (3, 2), dimensionless
        First node and spacing along ln(n_HeI/H), ln(n_HI/H) (s cm^-3) and ln(T_r/K).
    escape_error, escape_rms : ndarray, dimensionless
        Largest and rms error of ln P at random points; 0 where P = S.
    """

    names: tuple[str, ...]
    upper: IntArray
    lit_by: IntArray
    einstein_a_per_s: FloatArray
    energy_ev: FloatArray
    weight_ratio: FloatArray
    cross_section_cm2: FloatArray
    absorbs: int
    decay: int
    decay_rate_per_s: float
    ion_ev: float
    escape: FloatArray
    axis: FloatArray
    escape_error: FloatArray
    escape_rms: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.names),)
        for name in ("upper", "lit_by"):
            frozen_array(self, name, shape, np.int64)
        for name in (
            "einstein_a_per_s",
            "energy_ev",
            "weight_ratio",
            "cross_section_cm2",
            "escape_error",
            "escape_rms",
        ):
            frozen_array(self, name, shape)
        frozen_array(self, "escape", (*shape, *self.escape.shape[1:]))
        frozen_array(self, "axis", (3, 2))

    @property
    def delay(self) -> FloatArray:
        """Ln of the energy of the line above over its own; infinite where none lights it."""
        log_energy = np.log(self.energy_ev)
        return np.where(self.lit_by >= 0, log_energy[self.lit_by] - log_energy, np.inf)

    def packed(self) -> HeliumLines:
        """Give the lines as the kernels see them."""
        depth = sobolev_optical_depth(
            self.einstein_a_per_s,
            const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S / self.energy_ev,
            self.weight_ratio,
            1.0,
            1.0,
        )
        rows = (
            self.einstein_a_per_s,
            depth,
            self.energy_ev / const.BOLTZMANN_EV_K,
            np.minimum(self.delay, 1e9),
            np.log(self.cross_section_cm2 * const.SPEED_OF_LIGHT_CM_S),
        )
        return HeliumLines(
            np.array(self.upper),
            np.array(self.lit_by),
            np.stack(rows),
            np.array(self.escape),
            np.array(self.axis),
            int(self.absorbs),
            int(self.decay),
            float(self.decay_rate_per_s),
        )


def line_table(
    lines: HeliumGroundLines,
    treatment: HeliumTreatment,
    decay: tuple[int, float],
    ion_ev: float,
    range_k: tuple[float, float],
    tell: Callable[[str, float], None],
    pieces: Pieces | None = None,
) -> LineTable:
    """Make the table of the lines of He I.

    Parameters
    ----------
    lines : HeliumGroundLines
        The lines.
    treatment : HeliumTreatment
        How their photons escape.
    decay : int and float, s^-1
        Kept level that decays by two photons, and its rate.
    ion_ev : float, eV
        Ionization energy of He II.
    range_k : tuple of float, K
        Range of T_r.
    tell : callable
        Progress.
    pieces : Pieces, optional
        Where the nodes are kept.

    Raises
    ------
    SolveError
        If the table errs too much to be of use.
    """
    nothing = np.zeros(len(lines.names))
    plain = LineTable(
        lines.names,
        lines.upper,
        lines.lit_by,
        lines.einstein_a_per_s,
        lines.energy_ev,
        lines.weight_ratio,
        lines.hydrogen_cross_section_cm2,
        int(treatment.absorbs),
        *decay,
        ion_ev,
        np.zeros((len(nothing), 1, 1, 1)),
        np.array([[0.0, 1.0]] * 3),
        nothing,
        nothing,
    )
    if not treatment.absorbs:
        return plain
    axis, counts = _axes(lines, range_k)
    values = _recalled(lines, treatment, axis, counts, tell, pieces)
    table = dataclasses.replace(plain, escape=coefficients(values), axis=axis)
    largest, rms = _errors(table, lines, treatment)
    if largest.max() > LARGEST_ERROR:
        raise SolveError(
            f"escape from He I lines: the table errs by {largest.max():.1e} in ln P; allowed is "
            f"{LARGEST_ERROR:g}"
        )
    return dataclasses.replace(table, escape_error=largest, escape_rms=rms)


def _axes(
    lines: HeliumGroundLines, range_k: tuple[float, float]
) -> tuple[FloatArray, tuple[int, ...]]:
    """First node and spacing of each axis, and the numbers of nodes."""
    strongest = int(np.argmax(lines.einstein_a_per_s * lines.wavelength_cm**3 * lines.weight_ratio))
    depth = float(_depths(lines, 1.0)[strongest])
    cross_section = float(lines.hydrogen_cross_section_cm2[strongest]) * const.SPEED_OF_LIGHT_CM_S
    per_width = [cross_section * doppler_width(kelvin) for kelvin in range_k]
    edges = (
        (math.log(_DEPTH[0] / depth), math.log(_DEPTH[1] / depth)),
        (math.log(_CONTINUUM[0] / per_width[1]), math.log(_CONTINUUM[1] / per_width[0])),
        (math.log(range_k[0]), math.log(range_k[1])),
    )
    axis, counts = np.empty((3, 2)), []
    for k, ((low, high), step) in enumerate(zip(edges, SPACING, strict=True)):
        cells = math.ceil((high - low) / step)
        axis[k] = low, (high - low) / cells
        counts.append(cells + 1)
    return axis, tuple(counts)


def _depths(lines: HeliumGroundLines, column: float) -> FloatArray:
    return sobolev_optical_depth(
        lines.einstein_a_per_s, lines.wavelength_cm, lines.weight_ratio, column, 1.0
    )


def log_gain(
    lines: HeliumGroundLines,
    treatment: HeliumTreatment,
    log_column: float,
    log_hydrogen: float,
    log_temperature: float,
) -> FloatArray:
    """Ln(P/S) of every line as the treatment has it, shape (n_lines,).

    Parameters
    ----------
    lines, treatment
        As for :func:`line_table`.
    log_column, log_hydrogen : float
        Ln of n_HeI/H and n_HI/H in s cm^-3.
    log_temperature : float
        ln(T_r/K).
    """
    kelvin, depth = math.exp(log_temperature), _depths(lines, math.exp(log_column))
    # Of these a treatment sees T_r and H alone: everything else is in the depths.
    conditions = Conditions(kelvin, kelvin, 1.0, 1.0, 1.0, 1.0, 1.0)
    chance = treatment.escape(lines, conditions, depth, math.exp(log_hydrogen))
    gained: FloatArray = np.log(chance.value / escape_probability(depth))
    return gained


def _recalled(
    lines: HeliumGroundLines,
    treatment: HeliumTreatment,
    axis: FloatArray,
    counts: tuple[int, ...],
    tell: Callable[[str, float], None],
    pieces: Pieces | None,
) -> FloatArray:
    """Ln(P/S) at all nodes, from store slice by slice where it can."""
    places = [low + step * np.arange(n) for (low, step), n in zip(axis, counts, strict=True)]
    values = np.empty((len(lines.names), *counts))
    code = code_digest(("constants", "kernels", "atomic", "escape"))
    others = lines.others.rate_per_s.ravel()
    about = (*lines.names, *_plain(lines.einstein_a_per_s), *_plain(others))
    for k, x in enumerate(places[2].tolist()):
        tell("escape from the lines of helium", k / counts[2])
        ends = (float(one) for one in axis.ravel())
        key = content_key("escape", code, repr(treatment), *about, *ends, *counts, k)
        found = None if pieces is None else pieces.get(key)
        if found is None or set(found) != {"gain"} or found["gain"].shape != values.shape[:-1]:
            pairs = itertools.product(places[0].tolist(), places[1].tolist())
            slab = np.array([log_gain(lines, treatment, q, w, x) for q, w in pairs])
            found = {"gain": slab.T.reshape(values.shape[:-1])}
            if pieces is not None:
                pieces.put(key, found)
        values[..., k] = found["gain"]
    return values


def _plain(values: FloatArray) -> list[float]:
    return [float(one) for one in values]


def coefficients(values: FloatArray) -> FloatArray:
    """Coefficients of uniform cubic B-splines through `values`, along the last three axes.

    At the ends the third derivative runs on through the first node inside (not-a-knot).
    """
    for axis in (1, 2, 3):
        count = values.shape[axis]
        matrix = np.zeros((count + 2, count + 2))
        for row in range(count):
            matrix[row, row : row + 3] = 1.0 / 6.0, 2.0 / 3.0, 1.0 / 6.0
        matrix[count, :5] = matrix[count + 1, -5:] = 1.0, -4.0, 6.0, -4.0, 1.0
        moved = np.moveaxis(values, axis, 0)
        right = np.concatenate([moved, np.zeros((2, *moved.shape[1:]))])
        solved = np.linalg.solve(matrix, right.reshape(count + 2, -1)).reshape(right.shape)
        values = np.moveaxis(solved, 0, axis)
    return np.ascontiguousarray(values)


def _errors(
    table: LineTable,
    lines: HeliumGroundLines,
    treatment: HeliumTreatment,
) -> tuple[FloatArray, FloatArray]:
    """Largest and rms error of ln P of each line at random points inside the table."""
    random, packed = np.random.default_rng(_SEED), table.packed()
    room = make_line_room(1, len(lines.names))
    cells = np.array(table.escape.shape[1:]) - 3
    errors = []
    for share in random.uniform(0.0, 1.0, (_POINTS, 3)):
        place = table.axis[:, 0] + share * cells * table.axis[:, 1]
        for k in range(3):
            locate(packed, k, float(place[k]), room)
        found = np.array([gain(packed, line, room)[0] for line in range(len(lines.names))])
        errors.append(found - log_gain(lines, treatment, *place.tolist()))
    return np.abs(errors).max(axis=0), np.sqrt(np.mean(np.square(errors), axis=0))
