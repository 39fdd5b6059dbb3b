"""Pieces of the kernel that marches the field, each against an independent formula."""

from __future__ import annotations

import math
import time

import mpmath
import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.sparse.linalg import splu

from levelnet import constants as const
from levelnet.history.march import make_room
from levelnet.kernels import transfer as kernel
from levelnet.kernels.transfer import Cells, Path, Track
from tests.field_sparse import random_problem, sparse_step
from tests.field_steps import (
    COARSE_STEP,
    DEFAULT_STEP,
    Step,
    atom,
    blackbody,
    moment,
    path_of,
    weight_ratio,
)
from tests.small_runs import RECOMBINING
from tests.tolerances import EQUILIBRIUM, ROUND_OFF


@pytest.mark.parametrize("spread", [0.0, 30.0, 150.0])
@pytest.mark.parametrize("size", [1, 2, 7, 20])
def test_dense_solve_against_numpy(size: int, spread: float) -> None:
    """Computed by numpy's LAPACK; rows scaled by up to exp(+-`spread`) do not matter.

    The condition of the unscaled matrix is below 1e5 for these seeds.
    """
    rng = np.random.default_rng(size)
    matrix, right = rng.normal(size=(size, size)), rng.normal(size=size)
    exact = np.linalg.solve(matrix, right)
    rows = np.exp(rng.uniform(-spread, spread, size))
    work, found = matrix * rows[:, None], right * rows
    assert kernel.solve_dense(work, found)
    np.testing.assert_allclose(found, exact, rtol=1e-10)


@pytest.mark.parametrize("spread", [5.0, 100.0])
def test_dense_solve_of_badly_scaled_rates(spread: float) -> None:
    """Closed form: a rate matrix with known solution, its columns up to exp(2 `spread`) apart."""
    rng = np.random.default_rng(4)
    size = 9
    columns = np.exp(rng.uniform(-spread, spread, size))
    rates = rng.uniform(0.1, 1.0, (size, size)) * columns
    matrix = np.diag(rates.sum(axis=0) + columns) - rates
    exact = rng.uniform(1.0, 2.0, size) / columns
    right = matrix @ exact
    assert kernel.solve_dense(matrix, right)
    np.testing.assert_allclose(right, exact, rtol=1e-11)


def test_dense_solve_needs_its_pivot() -> None:
    """Closed form: a zero on the diagonal is no reason to give up."""
    right = np.array([3.0, 5.0])
    assert kernel.solve_dense(np.array([[0.0, 1.0], [1.0, 0.0]]), right)
    np.testing.assert_array_equal(right, [5.0, 3.0])


@pytest.mark.parametrize(
    "matrix",
    [
        [[0.0, 0.0], [1.0, 2.0]],
        [[1.0, 2.0], [2.0, 4.0]],
        [[math.inf, 1.0], [1.0, 2.0]],
        [[0.0]],
    ],
    ids=["empty row", "dependent rows", "infinite", "zero"],
)
def test_dense_solve_says_singular(matrix: list[list[float]]) -> None:
    assert not kernel.solve_dense(np.array(matrix), np.ones(len(matrix)))


@pytest.mark.parametrize("which", ["all", "scattering"])
def test_a_cold_field_stays_finite(which: str) -> None:
    """At 57 K, near where a field may end, factors of soft photons reach exp(1000) and are clipped.

    Common practice: half of Lyman-alpha is 5.1 eV, and k T_r 4.9 meV.
    """
    one = atom(which)
    around = RECOMBINING._replace(
        radiation_temperature_k=57.0,
        hydrogen_density_cm3=1.8e-3,
        hubble_rate_per_s=1.2e-16,
        ground_fraction=1.0 - 2e-4,
    )
    now = moment(one.cells, 0.3, around)
    kt = const.BOLTZMANN_EV_K * 57.0
    assert one.cells.energy_ev * (1.0 - math.exp(one.cells.offset[0])) / kt > 709.0
    room, n = make_room(one.cells), len(one.kept)
    kernel.begin(one.cells, kt, room)
    ratio, loss, source = weight_ratio(one.kept), np.zeros((n, n)), np.zeros(n)
    sides = np.zeros((len(one.cells.line_cell), 2))
    for _ in range(3):
        kernel.unit_absorption(one.cells, kt, ratio, room)
        kernel.couple_field(one.cells, now, ratio, room, loss, source)
        gained = kernel.advance_field(one.cells, now, ratio, np.full(n, 1e-30), room, sides)
        assert math.isfinite(gained)
        for values in (*room, loss, source, sides):
            assert np.all(np.isfinite(values))
    assert np.all(np.diag(loss) >= 0.0)


def test_boltzmann_factors_follow_the_expansion() -> None:
    """Closed form: after steps they are those of the temperature that has fallen with each."""
    one = atom("all")
    step = Step(one, moment(one.cells), np.zeros(len(one.cells.offset)))
    kt = step.now.radiation_kt_ev
    for _ in range(199):
        step.advance(np.zeros(len(one.kept)))
        kt *= math.exp(-one.cells.step)
        step.now = step.now._replace(radiation_kt_ev=kt)
    expected = blackbody(one.cells, kt) / math.exp(-one.cells.energy_ev / kt)
    np.testing.assert_allclose(step.room.boltzmann, expected, rtol=200 * ROUND_OFF)


@pytest.mark.parametrize("depth", [1e-9, 1e-3, 0.0199, 0.0201, 1.0, 30.0, 1e5])
def test_mean_of_a_cell(depth: float) -> None:
    """Closed form: the field inside a cell relaxes as exp(-t); its mean in 40 digits (mpmath)."""
    one = atom("distorted", lyman=1)
    now = moment(one.cells, 1.0)
    step = Step(one, now, np.ones(len(one.cells.offset)))
    cell = len(one.cells.offset) // 2
    packet = now.packet_per_s * one.cells.growth
    step.room.unit[:] = 0.0
    step.room.unit[0, cell] = depth * packet[cell] / now.ground
    kernel._depths(one.cells, now, step.room)
    with mpmath.workdps(40):
        tau = mpmath.mpf(depth)
        exact = -mpmath.expm1(-tau) / tau
        mean, rest = float(exact), float((1 - exact) / tau)
    assert step.room.lit[cell] == pytest.approx(mean, rel=1e-11)
    # What emission in the cell keeps there, per unit of it; the series ends with tau^3.
    kept_back = step.room.kept_back[cell] * packet[cell] / step.room.boltzmann[cell]
    assert kept_back == pytest.approx(rest, rel=1e-8)


@pytest.mark.parametrize("before", [0.0, -1e-4, -0.5, -3.0])
@pytest.mark.parametrize("compton", [1e7, 10.0, 0.3, 0.0])
def test_lag_of_matter(before: float, compton: float) -> None:
    """The implicit midpoint rule for dv/ds = -1 + c (e^-v - 1), its root by scipy's brentq."""
    step = 1e-3

    def excess(v: float) -> float:
        return 2.0 * (v - before) - step * (-1.0 + compton * math.expm1(-v))

    expected = brentq(excess, before - 1.0, 1.0, xtol=1e-15, rtol=1e-14)
    assert kernel._matter_lag(before, compton, step) == pytest.approx(
        expected, rel=1e-10, abs=1e-13
    )


def test_fractions() -> None:
    """Closed form: x_HII/x_HI = exp(u), both to full precision; their sum is 1."""
    for log_odds in (-30.0, -1.0, 0.0, 2.0, 25.0):
        ionized, neutral = kernel._fractions(log_odds)
        assert ionized + neutral == pytest.approx(1.0, rel=ROUND_OFF)
        assert math.log(ionized / neutral) == pytest.approx(log_odds, rel=EQUILIBRIUM)


def march(cells: Cells, path: Path, steps: int = 3, most: int = 20) -> tuple[int, Track]:
    """March a few steps from z = 1100."""
    n, n_lines = len(path.weight_ratio), len(cells.line_cell)
    track = Track(
        np.zeros((steps + 1, 2)),
        np.zeros((steps, n, n)),
        np.zeros((steps, n)),
        np.zeros((steps, n_lines, 2)),
        np.zeros((1, len(cells.offset))),
        np.zeros(4),
    )
    first = np.array([path.start, math.log(0.15 / 0.85), math.log(0.98)])
    last = np.array([steps])
    room, carried, limits = make_room(cells), np.zeros(kernel.N_CARRIED), (1e-9, most)
    status = kernel.march(cells, path, first, (0, steps), 1, last, limits, room, carried, track)
    return status, track


def test_march_ends_well() -> None:
    one = atom("all", COARSE_STEP)
    status, track = march(one.cells, path_of(one))
    assert status == kernel.DONE
    assert track.report[kernel.STEPS] == 3.0
    assert 3.0 <= track.report[kernel.ELIMINATIONS] <= 30.0
    # Closed form: photons and atoms are conserved in every step.
    assert track.report[kernel.PHOTON_ERROR] < 1e-9
    assert track.report[kernel.ATOM_ERROR] <= 1e-9
    assert np.all(np.diff(track.state[:, 0]) < 0.0)
    assert np.any(track.spectra[0] != 0.0)


def test_march_says_that_it_did_not_converge() -> None:
    one = atom("all", COARSE_STEP)
    status, track = march(one.cells, path_of(one), most=1)
    assert status == kernel.NOT_CONVERGED
    assert track.report[kernel.STEPS] == 0.0


def test_march_says_singular() -> None:
    """Levels without any rate: nothing leaves, and the matrix is empty."""
    one = atom("lines alone", COARSE_STEP, lyman=1)
    path = path_of(one)
    series = path.series.copy()
    n = len(path.weight_ratio)
    # ln of ionization, exchange and decay of 2s.
    series[:, :, 2 * n : -3] = 0.0
    series[:, 3, 2 * n : -3] = -2000.0
    series[:, :3, -1], series[:, 3, -1] = 0.0, -2000.0
    closed = one.cells._replace(line_depth=np.zeros(1))
    status, track = march(closed, path._replace(series=series))
    assert status == kernel.SINGULAR
    assert track.report[kernel.STEPS] == 0.0


@pytest.mark.slow
def test_elimination_is_fast() -> None:
    """Frozen: 20 to 30 times faster than scipy's splu on the same step; half of the 15 asked.

    Best of several, in process time, alternating; `benchmarks/field.py` prints the figures.
    """
    problem = random_problem("all", DEFAULT_STEP, 3)
    field = problem.step.room.field.copy()
    system = sparse_step(*problem)
    best = [math.inf, math.inf]
    for _ in range(7):
        start = time.process_time()
        for _ in range(20):
            problem.step.room.field[:] = field
            problem.eliminate()
        between = time.process_time()
        splu(system.matrix).solve(system.right)
        best[0] = min(best[0], (between - start) / 20.0)
        best[1] = min(best[1], time.process_time() - between)
    assert best[1] > 7.5 * best[0]
