"""Laws of one step of the field resolved in frequency.

Every law is exact for the discretized step, on any grid, unless its test states an order.
"""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.integrate import quad

from levelnet import constants as const
from levelnet.atomic.bound_bound import einstein_a
from levelnet.escape.sobolev import escape_probability, sobolev_optical_depth
from levelnet.history.atom import resonance_lines
from levelnet.kernels import transfer as kernel
from tests.field_sparse import random_problem, sparse_step
from tests.field_steps import (
    COARSE_STEP,
    DEFAULT_STEP,
    SWITCHES,
    Step,
    atom,
    blackbody,
    boltzmann_populations,
    moment,
    path_of,
    steady_escape,
    weight_ratio,
)
from tests.small_runs import RECOMBINING
from tests.tolerances import ELIMINATION, EQUILIBRIUM

# Sums over a thousand cells of terms of either sign.
_PHOTONS = 1e-12
_FEEDBACK = ("feedback", "all")


@pytest.mark.parametrize("which", SWITCHES)
def test_thermal_equilibrium_is_exact(which: str) -> None:
    """Closed form: in equilibrium at one temperature every departure is zero, and stays so."""
    one = atom(which)
    now = moment(one.cells, matter=1.0)
    step = Step(one, now, np.zeros(len(one.cells.offset)))
    assert not np.any(step.source)
    gained, field, sides = step.advance(np.zeros(len(one.kept)))
    assert gained == 0.0
    assert not np.any(field)
    assert not np.any(sides)


@pytest.mark.parametrize("which", SWITCHES)
def test_a_common_factor_is_stationary(which: str) -> None:
    """Closed form: excited levels and photons with one chemical potential are in balance.

    Where a Boltzmann factor, a soft photon's factor, a weight or an inverse rate is wrong, flows do
    not cancel: departures are of the size of the blackbody itself here. Without feedback the lines
    above Lyman-alpha see a blackbody instead, so that they are closed there.
    """
    one = atom(which, lyman=2 if which in _FEEDBACK else 1)
    now = moment(one.cells, matter=1.0)
    thermal, populations = (
        blackbody(one.cells, now.radiation_kt_ev),
        boltzmann_populations(one, now),
    )
    step = Step(one, now, 0.3 * thermal)
    gross = np.abs(step.loss) @ populations
    assert np.all(np.abs(step.net(0.3 * populations)) <= EQUILIBRIUM * gross)
    _, field, _ = step.advance(0.3 * populations)
    np.testing.assert_allclose(field, 0.3 * thermal[1:], rtol=EQUILIBRIUM)


@pytest.mark.parametrize("matter", [0.8, 1.1])
@pytest.mark.parametrize("width", [COARSE_STEP, DEFAULT_STEP])
def test_scattering_drives_to_the_temperature_of_matter(matter: float, width: float) -> None:
    """Closed form: exp(-h nu/k T_m) is stationary, whatever T_r (Rybicki 2006, ApJ 647, 709).

    Nothing else acts: there are no levels and hardly any expansion.
    """
    one = atom("scattering", width, lyman=1)
    cells, upper = one.cells, one.cells.line_upper[0]
    now = moment(cells, matter)._replace(packet_per_s=1e-20)
    energy_ev = cells.energy_ev * np.exp(cells.offset)
    at_line = math.exp(-cells.energy_ev / now.radiation_kt_ev)
    shape = 2.0 * at_line * np.exp((cells.energy_ev - energy_ev) / now.matter_kt_ev)
    departure = np.zeros(len(one.kept))
    departure[upper] = at_line * now.ground * weight_ratio(one.kept)[upper]
    step = Step(one, now, shape - blackbody(cells, now.radiation_kt_ev))
    before = step.room.field.copy()
    flow = step.net(departure)[upper]
    assert abs(flow) <= EQUILIBRIUM * step.loss[upper, upper] * departure[upper]
    step.advance(departure)
    # What left each cell entered the next one below.
    moved = np.abs(step.room.field[:-1] - before[1:])
    near = slice(cells.first_scattering, cells.first_scattering + len(step.room.theta) - 1)
    assert np.all(moved[near] <= EQUILIBRIUM * shape[1:][near])
    # The blackbody at T_r is not, so that the law can fail.
    away = Step(one, now, np.zeros(len(cells.offset)))
    assert abs(away.source[upper]) > 1e3 * EQUILIBRIUM * step.loss[upper, upper] * departure[upper]


@pytest.mark.parametrize("matter", [0.8, 1.0])
@pytest.mark.parametrize("which", SWITCHES)
def test_photon_number(which: str, matter: float) -> None:
    """Closed form: sum_j N_j (f_out - f_in) = net flow x dt, for any populations and any field.

    Occupation numbers are alike in all cells: rounding of the blackbody's own at half the energy,
    exp(20) times more, would hide the photons of Lyman-alpha.
    """
    rng = np.random.default_rng(5)
    one = atom(which)
    now = moment(one.cells, matter)
    at_line = math.exp(-one.cells.energy_ev / now.radiation_kt_ev)
    field = at_line * rng.uniform(-1.0, 3.0, len(one.cells.offset))
    departure = boltzmann_populations(one, now) * rng.uniform(-1.0, 3.0, len(one.kept))
    step = Step(one, now, field)
    flow = step.net(departure).sum()
    gross = np.abs(step.loss @ np.diag(departure)).sum()
    gained, _, _ = step.advance(departure)
    assert abs(gained - flow) <= _PHOTONS * gross


@pytest.mark.parametrize("which", SWITCHES)
def test_atom_number(which: str) -> None:
    """Closed form: what reaches the ground state is what the continuum gave and did not take back.

    Captures and ionizations are summed from the path's own coefficients, with populations and not
    with departures.
    """
    rng = np.random.default_rng(6)
    one, around = atom(which), RECOMBINING
    path, n = path_of(one), len(one.kept)
    stored, square, line = np.empty(path.series.shape[2]), np.empty((2, n, n)), np.empty((2, n))
    kernel._stored(path, path.start + 0.013, stored)
    slow = kernel.Slow(
        around.hubble_rate_per_s,
        around.hydrogen_density_cm3,
        const.BOLTZMANN_EV_K * around.radiation_temperature_k,
        around.electron_fraction,
        around.ionized_fraction,
        around.ground_fraction,
        math.log(0.99),
    )
    now = kernel._moment(path, slow)
    kernel._interior(path, now.radiation_kt_ev, stored, square[0])
    at_line = math.exp(-one.cells.energy_ev / now.radiation_kt_ev)
    step = Step(one, now, at_line * rng.uniform(0.0, 3.0, len(one.cells.offset)))
    balance = kernel.Balance(stored, square[0], square[1], line[0], line[1])
    flow = kernel._flow(one.cells, path, slow, step.room, balance)
    shift = slow.lag - stored[kernel.LOG_LAG]
    capture = np.exp(stored[:n] + stored[n : 2 * n] * shift)
    capture *= around.hydrogen_density_cm3 * around.electron_fraction**2
    boltzmann = boltzmann_populations(one, now)
    # B_i x_B,i/x_1s is what is stored.
    ionization = np.exp(stored[2 * n : 3 * n]) * now.ground / boltzmann
    net = capture - ionization * (boltzmann + balance.departure)
    assert abs(net.sum() - flow) <= 1e-9 * capture.sum()
    assert flow > 1e-6 * capture.sum()


@pytest.mark.parametrize("width", [COARSE_STEP, DEFAULT_STEP])
def test_diffusion_without_recoil_changes_nothing(width: float) -> None:
    """Closed form: with a constant source the red side is that of the line and escape is Sobolev's.

    Recoil is h/kT_m against the slope of the field: at kT far above the photon's energy it is gone.
    """
    escape, step, _ = steady_escape(width, recoil=False)
    assert escape == pytest.approx(1.0, rel=EQUILIBRIUM)
    red = step.room.field[step.cells.first_scattering : step.cells.line_cell[0]]
    np.testing.assert_allclose(red, 1.0, rtol=EQUILIBRIUM)


def _steady_law(x: float, strength: float) -> float:
    """Escape over Sobolev's at D_nu = d0/delta^2, delta from the line in ln nu; strength d0/H.

    Where nothing is absorbed the flux through each frequency is the same, f (H + x D_nu) + D_nu f'
    in the direction of low ones; the solution that stays finite gives the occupation number at the
    line (Grachev & Dubrovich 2008, Astron. Lett. 34, 439, in the same approximation; from memory).
    """
    integral = quad(lambda t: math.exp(-x * (3.0 * strength * t) ** (1.0 / 3.0) - t), 0.0, math.inf)
    return 1.0 / integral[0]


def test_recoil_against_its_integral() -> None:
    """Closed form, at the default step and nearer on a finer grid.

    The law takes h nu/kT and the distance from the line to be linear in ln nu, which is worth 2e-5;
    the test of the order has it without.
    """
    errors = []
    for width in (2.0 * DEFAULT_STEP, DEFAULT_STEP):
        escape, _, (x, strength) = steady_escape(width)
        law = _steady_law(x, strength)
        assert 1.04 < law < 1.07
        errors.append(abs(escape / law - 1.0))
    assert errors[1] < 1e-4
    assert errors[1] < errors[0] < 1e-3


@pytest.mark.parametrize("which", ["3s", "3d", "4s", "4d"])
def test_wing_absorption_is_stimulated_excitation_of_2p(which: str) -> None:
    """Closed form: near the line, two-photon absorption over scattering is the chance p_ab that 2p
    is lifted before it decays: g_i/g_2p A(i-2p) f(soft)/A(2p-1s).

    The mean of both sides, since interference with other resonances is odd in the distance from the
    line; what is left falls with its square. The A are those of the recurrence, the two-photon
    rates those of a Sturmian basis.
    """
    n, l = int(which[0]), "spdf".index(which[1])
    errors = [_wing_error(n, l, width) for width in (2.0 * DEFAULT_STEP, DEFAULT_STEP)]
    assert abs(errors[1]) < 1e-4
    assert math.log2(errors[0] / errors[1]) == pytest.approx(2.0, abs=0.1)


def _wing_error(n: int, l: int, width: float) -> float:
    one = atom("excited", width, lyman=1)
    cells, now = one.cells, moment(one.cells, 1.0)
    step = Step(one, now, np.zeros(len(cells.offset)))
    place = list(one.kept).index((n, l))
    row = step.room.unit[cells.level.tolist().index(place)]
    frequency_hz = cells.energy_ev / const.PLANCK_EV_S
    decay = float(einstein_a(2, 1, 1, 0))
    # Of one packet, n_1s c sigma over the modes of a cell: the Lorentz wing, with the mean of
    # 1/delta^2 over the first cell beside the line's.
    scattering = 3.0 * decay**2 / (4.0 * math.pi**2 * frequency_hz * cells.step * 0.75)
    soft = 1.0 / math.expm1((one.kept.energy_ev[place] - cells.energy_ev) / now.radiation_kt_ev)
    chance = (2 * l + 1) / 3.0 * float(einstein_a(n, l, 2, 1)) * soft / decay
    core = cells.line_cell[0]
    return float(0.5 * (row[core - 1] + row[core + 1]) / scattering / chance - 1.0)


@pytest.mark.parametrize("lyman", [1, 2, 4])
def test_lines_alone_are_sobolev(lyman: int) -> None:
    """Closed form: without anything in the wings every line escapes with A (1 - e^-tau)/tau.

    Lines above Lyman-beta stand up to half a cell from the middle of theirs, whose nu^3 they get.
    """
    one = atom("lines alone", lyman=lyman)
    step = Step(one, moment(one.cells), np.zeros(len(one.cells.offset)))
    lines = resonance_lines(one.kept, lyman)
    depth = sobolev_optical_depth(
        lines.einstein_a_per_s,
        lines.wavelength_cm,
        lines.weight_ratio,
        RECOMBINING.hydrogen_density_cm3 * RECOMBINING.ground_fraction,
        RECOMBINING.hubble_rate_per_s,
    )
    expected = np.zeros(len(one.kept))
    expected[lines.upper] = lines.einstein_a_per_s * escape_probability(depth)
    found = np.diag(step.loss)
    np.testing.assert_allclose(found, expected, rtol=1.5 * one.cells.step)
    centred = lines.upper[:2]
    np.testing.assert_allclose(found[centred], expected[centred], rtol=EQUILIBRIUM)
    assert not np.any(step.loss - np.diag(np.diag(step.loss)))
    assert not np.any(step.source)


@pytest.mark.parametrize(
    ("which", "width", "lyman"),
    [*itertools.product(SWITCHES, [COARSE_STEP], [1, 3]), ("all", DEFAULT_STEP, 3)],
)
def test_elimination_against_general_sparse_solver(which: str, width: float, lyman: int) -> None:
    """Computed independently: scipy's sparse LU of all cells and levels, written anew."""
    problem = random_problem(which, width, lyman)
    before = problem.step.room.field.copy()
    departure, out = sparse_step(*problem).solve(problem.step)
    own, moved = problem.eliminate()
    np.testing.assert_allclose(own, departure, rtol=ELIMINATION)
    size = np.maximum(np.abs(moved), np.abs(before[1:]))
    assert np.all(np.abs(moved - out) <= ELIMINATION * size)
