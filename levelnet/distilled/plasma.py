"""Hydrogen and helium together from a table: packing, and the call of the kernel."""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np

from .. import constants as const
from ..arrays import FloatArray, IntArray
from ..atomic.bound_bound import einstein_a
from ..atomic.detailed_balance import log_saha_factor
from ..atomic.helium_bound_free import ION_WEIGHT
from ..atomic.two_photon import two_photon_rate
from ..background.cosmology import Cosmology
from ..background.quadrature import Quadrature
from ..errors import InputError, RangeError
from ..escape.sobolev import sobolev_optical_depth
from ..history.helium import COLDEST_K, EBB, FADING, GONE, PULL
from ..kernels.effective import Atom
from ..kernels.effective_helium import HeliumLines
from ..kernels.effective_plasma import Plasma
from ..kernels.plasma_steps import OUTSIDE_ESCAPE, Steps, plasma_history
from .fast import FastHelium, fractions
from .helium_escape import LineTable
from .stage import StageTable, stage_atom
from .table import EffectiveTable
from .universe import make_universe

# Local errors allowed in a step over the error asked, of u, v, a and b; with them x_e was measured
# to 0.8 of what is asked.
_LOCAL = np.array([2.0, 2.0, 60.0, 20.0])
_FIRST_STEP, _MAX_STEPS = 1e-3, 20_000
# T_r above which a start is not looked for, and below; at the first helium is doubly ionized in any
# universe that the table admits.
HOTTEST_K, _COLDEST_START_K = 27_500.0, 8000.0
# The start carries the first-order lag behind equilibrium; what it leaves out is the square of it.
_START, _LARGEST_LAG = 0.1, 0.03


class PlasmaRun:
    """What the kernel gave: states (u, v, a, b) at outputs and at the points of the observables.

    `steps` are those it took through `plasma`.
    """

    def __init__(self, plasma: Plasma, outputs: int, points: int) -> None:
        self.plasma = plasma
        self.state, self.grid_state = np.empty((outputs, 4)), np.empty((points, 4))
        self.report, self.status = np.zeros(6), 0
        room = _MAX_STEPS + 1
        self.steps = Steps(np.empty(room), np.empty((room, 3), dtype=np.int64), 0)


def run_plasma(
    table: EffectiveTable,
    hydrogen: Atom,
    cosmology: Cosmology,
    s: FloatArray,
    grid: Quadrature | None,
    relative: float,
) -> PlasmaRun:
    """Integrate hydrogen and helium.

    Parameters
    ----------
    table : EffectiveTable
        With helium.
    hydrogen : Atom
        Its hydrogen, packed.
    cosmology : Cosmology
        The background.
    s : ndarray, ascending
        ln a of the outputs.
    grid : Quadrature or None
        Where observables want the history.
    relative : float, dimensionless
        Error of x_e asked.

    Raises
    ------
    InputError
        Where the table ends before helium is in Saha equilibrium.
    RangeError
        Where a line is deeper than the table of escape probabilities holds.
    """
    top_k = min(HOTTEST_K, math.exp(float(hydrogen.span[1])))
    hottest = math.log(cosmology.cmb_temperature_k / top_k)
    low = min(hottest, float(s[0]), float(hydrogen_top(hydrogen, cosmology)))
    plasma = plasma_of(table, hydrogen, cosmology, low - 1e-3, float(s[-1]))
    points = np.empty(0) if grid is None else grid.points
    run = PlasmaRun(plasma, len(s), len(points))
    assert table.helium_lines is not None
    run.status = plasma_history(
        plasma,
        s,
        points,
        np.array([top_k, _COLDEST_START_K]),
        math.sqrt(_START * relative),
        _LOCAL * relative,
        float(np.min(table.helium_lines.delay, initial=10.0)),
        _FIRST_STEP,
        run.state,
        run.grid_state,
        run.report,
        run.steps,
    )
    taken = int(run.report[2]) + 1
    run.steps = Steps(run.steps.time[:taken], run.steps.mode[:taken], 1)
    if run.report[1] > _LARGEST_LAG:
        raise InputError(
            f"table: it ends at T_r = {top_k:.0f} K, where helium is not in Saha equilibrium; "
            f"distill it up to {HOTTEST_K:g} K"
        )
    if run.status == OUTSIDE_ESCAPE:
        raise RangeError(
            f"cosmology: lines of He I leave the table of escape probabilities below redshift "
            f"{math.expm1(-float(run.report[4])):g}"
        )
    return run


def plasma_of(
    table: EffectiveTable, hydrogen: Atom, cosmology: Cosmology, low: float, high: float
) -> Plasma:
    """Pack a table with helium and a universe from s = ln a = `low` to `high` for the kernels."""
    first, second, lines, saha = packed(table)
    return Plasma(
        hydrogen,
        first,
        second,
        lines,
        make_universe(cosmology, low, high),
        int(table.helium_ion is not None),
        saha,
        np.array([COLDEST_K, EBB, PULL, GONE, FADING]),
    )


def hydrogen_top(hydrogen: Atom, cosmology: Cosmology) -> float:
    """Ln a at the hottest T_r of the table."""
    return math.log(cosmology.cmb_temperature_k) - float(hydrogen.span[1])


def helium_of(state: FloatArray) -> FastHelium:
    """Fractions of helium nuclei from states, each to full relative precision."""
    charged, neutral = fractions(state[:, 2])
    double, single = fractions(state[:, 3])
    return FastHelium(neutral, charged * single, charged * double)


def electrons_of(state: FloatArray, cosmology: Cosmology) -> FloatArray:
    """Give n_e/n_H of states."""
    return electrons_with(fractions(state[:, 0])[0], helium_of(state), cosmology)


def electrons_with(ionized: FloatArray, helium: FastHelium, cosmology: Cosmology) -> FloatArray:
    """Give n_e/n_H of fractions of hydrogen and helium."""
    single = helium.singly_ionized_helium_fraction
    double = helium.doubly_ionized_helium_fraction
    return ionized + cosmology.helium_ratio() * (single + 2.0 * double)


@lru_cache(maxsize=8)
def packed(table: EffectiveTable) -> tuple[Atom, Atom, HeliumLines, FloatArray]:
    """He I, He II (or He I again, unused), the lines, and Saha coefficients of the three ions."""
    stage, ion, lines = table.helium, table.helium_ion, table.helium_lines
    assert stage is not None and lines is not None
    first = stage_atom(stage, 1.0, ION_WEIGHT)
    second = first if ion is None else _second(ion)
    return first, second, lines.packed(), _saha(table, stage, lines)


def _second(ion: StageTable) -> Atom:
    rate = float(einstein_a(2, 1, 1, 0, 2))
    upper = np.flatnonzero((ion.n == 2) & (ion.l == 1)).astype(np.int64)
    energy_ev = ion.energy_ev[upper]
    wavelength = const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S / energy_ev
    depth = sobolev_optical_depth(
        np.array([rate]), wavelength, ion.statistical_weight[upper] / 2.0, 1.0, 1.0
    )
    line: tuple[IntArray, FloatArray] = (
        upper,
        np.stack([np.array([rate]), depth, energy_ev / const.BOLTZMANN_EV_K]),
    )
    return stage_atom(ion, 2.0, 1.0, line, two_photon_rate(2))


def _saha(table: EffectiveTable, stage: StageTable, lines: LineTable) -> FloatArray:
    """Offset and I/k of ln(ratio) = offset + 1.5 ln T - I/kT - ln n_e, for H, He I and He II."""
    kept = table.kept
    ions = (
        (2.0, float(kept.energy_ev[0] + kept.ionization_energy_ev[0]), 1),
        (1.0 / ION_WEIGHT, stage.ionization_ev, 2),
        (2.0, lines.ion_ev, 2),
    )
    rows = []
    for weight, energy_ev, charge in ions:
        reach = energy_ev / const.BOLTZMANN_EV_K
        rows.append((-float(log_saha_factor(weight, energy_ev, 1e4, charge)), reach))
    return np.array([(log + reach / 1e4 - 1.5 * math.log(1e4), reach) for log, reach in rows])
