"""The slow equations: derivatives against differences, equilibrium, and both ends of the range."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest
from scipy import constants as si

from levelnet.background.matter import saha_log_odds
from levelnet.escape.family import TREATMENTS
from levelnet.history.atom import build_ladder, lyman_lines
from levelnet.history.equations import SlowEquations, ionized_and_neutral
from levelnet.history.start import equilibrium_state
from levelnet.network.tabulation import live_reduction
from tests.small_runs import COSMOLOGY, RECOMBINING, small_equations, small_history, small_setup
from tests.tolerances import ROUND_OFF

# Central differences of fourth order; the step makes truncation and rounding alike.
STEP = 2e-4
SLOPES = 1e-7
each_treatment = pytest.mark.parametrize("lines", [t.name for t in TREATMENTS])
each_mode = pytest.mark.parametrize("two_photon", ["spontaneous", "stimulated"])


def states() -> list[tuple[float, np.ndarray]]:
    """Where a Sobolev history really is, from hand-over to its end."""
    history = small_history()
    odds = np.log(history.ionized_hydrogen_fraction / history.neutral_hydrogen_fraction)
    ratio = np.log(history.matter_temperature_k / history.radiation_temperature_k)
    rows = zip(history.redshift, odds, ratio, strict=True)
    return [(-math.log1p(z), np.array([u, v])) for z, u, v in list(rows)[::6]]


def difference(function, step: float = STEP) -> np.ndarray:  # type: ignore[no-untyped-def]
    near, far = (function(k * step) - function(-k * step) for k in (1, 2))
    return (8.0 * near - far) / (12.0 * step)


def check_derivatives(equations: SlowEquations, s: float, y: np.ndarray) -> None:
    matrix, drift = equations.jacobian(s, y)
    rate = equations.rate(s, y)
    # Rounding of the rate, magnified by the difference: next to equilibrium the rate is itself a
    # difference in u of about 1e-16 of the fastest time scale.
    noise = 1e-15 * (np.abs(rate) + np.abs(np.diag(matrix))) / STEP
    for k in range(2):
        unit = np.eye(2)[k]
        found = difference(lambda h, unit=unit: equations.rate(s, y + h * unit))
        assert np.all(np.abs(matrix[:, k] - found) <= SLOPES * np.abs(found) + noise), (s, k)
    found = difference(lambda h: equations.rate(s + h, y))
    assert np.all(np.abs(drift - found) <= SLOPES * np.abs(found) + noise), s


@each_treatment
@each_mode
def test_jacobian_over_the_whole_history(lines: str, two_photon: str) -> None:
    equations = small_equations(lines, two_photon)
    for s, y in states():
        check_derivatives(equations, s, y)


@each_treatment
def test_jacobian_far_from_any_history(lines: str) -> None:
    # Hot and cold matter, mostly neutral and mostly ionized: what a rejected step may ask.
    equations = small_equations(lines, "stimulated")
    for z, u, v in (
        (1900.0, -1.0, 0.1),
        (1300.0, 4.0, -0.2),
        (700.0, 1.0, 0.05),
        (40.0, -3.0, -0.3),
    ):
        check_derivatives(equations, -math.log1p(z), np.array([u, v]))


def test_jacobian_without_a_table() -> None:
    setup = small_setup(4)
    ladder = build_ladder(setup)
    live = live_reduction(ladder)
    equations = SlowEquations(
        COSMOLOGY, live, lyman_lines(ladder), TREATMENTS[2], 8.2246, "spontaneous"
    )
    table = small_equations(n_max=4, lyman=1)
    for s, y in states()[::3]:
        check_derivatives(equations, s, y)
        np.testing.assert_allclose(equations.rate(s, y), table.rate(s, y), rtol=1e-7, atol=1e-7)


@each_treatment
@each_mode
def test_saha_equilibrium_is_at_rest(lines: str, two_photon: str) -> None:
    equations = small_equations(lines, two_photon)
    kept = equations.reduced.kept
    energy = float(kept.energy_ev[0] + kept.ionization_energy_ev[0])
    for z in (3000.0, 2000.0, 1200.0, 600.0):
        s = -math.log1p(z)
        around = equations.background(s)
        u = saha_log_odds(around.hydrogen_density_cm3, around.radiation_temperature_k, energy)
        here = equations.local(s, np.array([float(u), 0.0]))
        # Against all that recombines one way: exchanges of equal size cancel to rounding of E/kT.
        assert abs(here.solution.net_flow) < 1e-11 * here.solution.capture.sum()


def test_stiff_balance() -> None:
    # Far above the hand-over both variables sit where the expansion is just balanced; the true
    # rates there are those of the equilibrium, found by differences.
    equations = small_equations()
    for z in (3000.0, 2200.0):
        s, step = -math.log1p(z), 1e-3
        before, _ = equilibrium_state(equations, s - step)
        after, _ = equilibrium_state(equations, s + step)
        state, _ = equilibrium_state(equations, s)
        matrix, _ = equations.jacobian(s, state)
        assert matrix[0, 0] < -1e6
        assert matrix[1, 1] < -1e4
        slope = (after - before) / (2.0 * step)
        # The lag is of first order in 1/J: the rest is of the order of slope/J.
        assert np.all(np.abs(equations.rate(s, state) - slope) < 1e-2 * (1.0 + np.abs(slope)))


def test_slope_of_x_e_is_the_net_flow() -> None:
    equations = small_equations()
    s, y = -math.log1p(1100.0), np.array([-1.7, -1e-4])
    here = equations.local(s, y)
    ionized = 1.0 / (1.0 + math.exp(1.7))
    by_odds = ionized * (1.0 - ionized)
    expected = -here.solution.flow.sum() / equations.background(s).hubble_rate_per_s / by_odds
    assert equations.rate(s, y)[0] == pytest.approx(expected, rel=ROUND_OFF)
    assert expected < 0.0


def test_compton_heating_and_adiabatic_cooling() -> None:
    # dT_m/dln a = -2 T_m + (8 sigma_T a T_r^4/(3 m_e c H)) x_e/(1 + f_He + x_e) (T_r - T_m)
    # (Peebles 1968, Astrophys. J. 153, 1; from memory), with scipy's constants in SI.
    equations = small_equations()
    z, y = 60.0, np.array([-8.3, -0.4])
    s, t = -math.log1p(z), 2.7255 * 61.0
    energy = 4.0 * si.Stefan_Boltzmann / si.c * t**4
    ionized = math.exp(-8.3) / (1.0 + math.exp(-8.3))
    gamma = 8.0 * si.value("Thomson cross section") * energy / (3.0 * si.m_e * si.c)
    gamma *= ionized / (1.0 + COSMOLOGY.helium_ratio() + ionized)
    matter = t * math.exp(-0.4)
    heating = -2.0 * matter + gamma / COSMOLOGY.hubble_rate_per_s(z) * (t - matter)
    # v = ln(T_m/T_r) and T_r ~ 1/a.
    assert equations.rate(s, y)[1] == pytest.approx(heating / matter + 1.0, rel=1e-8)


@pytest.mark.parametrize("odds", [-700.0, -40.0, -1e-9, 0.0, 1e-9, 3.0, 40.0, 700.0])
def test_both_fractions_to_full_precision(odds: float) -> None:
    with mpmath.workdps(400):
        exact = mpmath.exp(odds)
        expected = float(exact / (1 + exact)), float(1 / (1 + exact))
    assert ionized_and_neutral(odds) == pytest.approx(expected, rel=ROUND_OFF)


def test_background_is_that_of_the_cosmology() -> None:
    around = small_equations().background(-math.log1p(1100.0))
    assert around.radiation_temperature_k == pytest.approx(2.7255 * 1101.0, rel=ROUND_OFF)
    assert around.hydrogen_density_cm3 == pytest.approx(COSMOLOGY.hydrogen_density_cm3(1100.0))
    # H falls as a^-3/2 to a^-2.
    assert -2.0 < around.hubble_slope < -1.5
    assert around.hubble_rate_per_s == pytest.approx(RECOMBINING.hubble_rate_per_s, rel=0.1)
