"""Facts about recombination that stand in the literature or belong to the trade.

Ranges are those of the facts: our universe is an invented one close to those they were found in.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
import pytest
from scipy import constants as si
from scipy.integrate import solve_ivp
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq
from scipy.special import zeta

from levelnet.atomic.bound_bound import einstein_a
from levelnet.atomic.levels import hydrogenic_levels
from levelnet.background.conditions import Conditions
from levelnet.distilled.build import distill
from levelnet.distilled.history import history_from_table
from levelnet.errors import InputError
from levelnet.escape.treatment import Sobolev
from levelnet.escape.two_photon import with_two_photon
from levelnet.history.atom import build_ladder, lyman_lines
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.network.solve import solve_kept
from levelnet.network.tabulation import live_reduction
from levelnet.studies.weigh import weigh
from tests.fast_tables import small_table
from tests.small_runs import COSMOLOGY, small_setup
from tests.tolerances import published

YEAR_S = 365.25 * 86400.0
EV_K = si.k / si.e
TWO_PHOTON = 8.2246


@lru_cache(maxsize=4)
def history(n_max: int = 60) -> History:
    return solve(small_setup(n_max, 100.0, 120))


def at(found: History, redshift: float) -> float:
    """x_e at a redshift between outputs: a spline of ln(x_p/x_1s) over ln(1 + z)."""
    return float(1.0 / (1.0 + math.exp(-log_odds(found)(math.log1p(redshift)))))


def log_odds(found: History) -> CubicSpline:
    odds = np.log(found.ionized_hydrogen_fraction / found.neutral_hydrogen_fraction)
    return CubicSpline(np.log1p(found.redshift[::-1]), odds[::-1])


def redshift_of(found: History, fraction: float) -> float:
    spline, goal = log_odds(found), math.log(fraction / (1.0 - fraction))
    return math.expm1(brentq(lambda y: float(spline(y)) - goal, math.log(201.0), math.log(1801.0)))


# --- what an observer sees ---


def test_visibility_peak_and_width() -> None:
    # z = 1089 +- 1 and width 195 +- 2, both of g(eta), first-year WMAP (Bennett et al. 2003,
    # Astrophys. J. Suppl. 148, 1; from memory).
    found = history().milestones
    assert found.visibility_peak_redshift == pytest.approx(1089.0, abs=1.0)
    assert found.visibility_width == pytest.approx(195.0, abs=2.0)


def test_last_scattering_and_its_age() -> None:
    # z_* = 1089.9 (Planck Collaboration 2020, Astron. Astrophys. 641, A6; from memory); the depth
    # left below z = 100 would move ours by a few tenths.
    found = history().milestones
    assert found.last_scattering_redshift == pytest.approx(1089.9, abs=1.5)
    # 372 kyr (WMAP, as above: 379 +- 8 for its own universe; from memory).
    assert found.last_scattering_time_s / YEAR_S == pytest.approx(372e3, rel=0.03)


def test_last_scattering_near_the_fit() -> None:
    # Hu & Sugiyama 1996, Astrophys. J. 471, 542, eq. E-1 (from memory), good to about 1 %.
    b, m = 0.0224, 0.142
    g1 = 0.0783 * b**-0.238 / (1.0 + 39.5 * b**0.763)
    g2 = 0.560 / (1.0 + 21.1 * b**1.81)
    fit = 1048.0 * (1.0 + 0.00124 * b**-0.738) * (1.0 + g1 * m**g2)
    assert history().milestones.last_scattering_redshift == pytest.approx(fit, rel=0.01)


def test_half_ionized() -> None:
    # z ~ 1270, well below the 1370 of Saha equilibrium (common practice).
    assert history().milestones.half_ionized_redshift == pytest.approx(1270.0, abs=10.0)


def test_neutral_near_3000_k_and_380000_years() -> None:
    # Common practice, where "neutral" means x_e = 0.1: 2900 K and 388,000 yr here.
    z = redshift_of(history(), 0.1)
    assert COSMOLOGY.radiation_temperature_k(z) == pytest.approx(3000.0, rel=0.05)
    assert COSMOLOGY.cosmic_time_s(z) / YEAR_S == pytest.approx(380e3, rel=0.05)
    # The transition takes over 100,000 yr: from 90 % to 10 % here.
    begun = COSMOLOGY.cosmic_time_s(redshift_of(history(), 0.9))
    assert 1e5 < (COSMOLOGY.cosmic_time_s(z) - begun) / YEAR_S < 3e5


def test_a_billion_photons_per_nucleus() -> None:
    # Common practice: about 1e9. Photons of a blackbody: 16 pi zeta(3) (kT/hc)^3.
    photons = 16.0 * math.pi * float(zeta(3.0)) * (si.k * 2.7255 / (si.h * si.c)) ** 3
    hydrogen = COSMOLOGY.hydrogen_density_cm3(0.0) * 1e6
    nucleons = hydrogen * (1.0 + 4.0 * COSMOLOGY.helium_ratio())
    assert 1e9 < photons / nucleons < 2.5e9


# --- the atom ---


def test_energies_of_the_trade() -> None:
    levels = hydrogenic_levels(400, "measured")
    ground = levels.ionization_energy_ev[0]
    # Common practice: 13.6 eV, that is 158,000 K; 3.4 eV from n = 2; Lyman photons 10.2 to 13.6 eV.
    assert ground == pytest.approx(13.6, rel=published(3))
    assert ground / EV_K == pytest.approx(158e3, rel=published(3))
    assert levels.ionization_energy_ev[1] == pytest.approx(3.4, rel=published(2))
    assert levels.energy_ev[2] == pytest.approx(10.2, rel=published(3))
    assert levels.energy_ev[-1] == pytest.approx(13.6, rel=published(3))


def test_two_photon_decay_is_slow() -> None:
    # Common practice: about 1e-8 as fast as Lyman-alpha.
    ratio = small_setup(2).hydrogen.two_photon_rate_per_s / einstein_a(2, 1, 1, 0)
    assert 1e-8 < ratio < 2e-8


# --- how atoms get down ---


def test_most_atoms_through_the_two_photon_channel() -> None:
    # 57 %: Chluba & Sunyaev 2006, Astron. Astrophys. 458, L29 (from memory).
    channels = history().channels
    assert channels.names[0] == "2s-1s"
    assert channels.cumulative_share[-1, 0] == pytest.approx(0.57, abs=0.01)


def test_without_that_channel_recombination_comes_later() -> None:
    # Computed, not assumed. At n_max = 50 this code has x_e = 0.5 at z = 1211.7 instead of 1272.9,
    # tau = 1 at 1017 instead of 1090. Here the direction and the rough size only.
    without = solve(small_setup(8, 400.0, 60, hydrogen={"two_photon_rate_per_s": 0.0}))
    with_it = solve(small_setup(8, 400.0, 60))
    assert without.outcome.ok
    for fraction, least, most in ((0.5, 50.0, 75.0), (0.1, 65.0, 100.0), (0.01, 45.0, 75.0)):
        delay = redshift_of(with_it, fraction) - redshift_of(without, fraction)
        assert least < delay < most, (fraction, delay)
    assert without.channels.cumulative_share[-1, 1] == pytest.approx(1.0, abs=1e-12)


def test_p_states_outnumber_s_states_late() -> None:
    # x_2p/(3 x_2s) rises above 1 below z ~ 800 (Rubino-Martin, Chluba & Sunyaev 2006, Mon. Not. R.
    # Astron. Soc. 371, 1939; from memory): 2s and 2p fall out of equilibrium.
    found = history()
    levels = found.levels("H I")
    x = found.populations("H I")
    ratio = x[:, levels.index(2, 1)] / (3.0 * x[:, levels.index(2, 0)])
    early, late = (int(np.argmin(np.abs(found.redshift - z))) for z in (1100.0, 600.0))
    assert ratio[early] == pytest.approx(1.0, abs=0.01)
    assert ratio[late] > 1.5


# --- many levels against three ---


def case_b_cm3(temperature_k: float) -> float:
    """Pequignot, Petitjean & Boisson 1991, Astron. Astrophys. 251, 680 (from memory)."""
    t = temperature_k / 1e4
    return 1e-13 * 4.309 * t**-0.6166 / (1.0 + 0.6703 * t**0.5300)


def three_level(redshift: list[float]) -> np.ndarray:
    """Peebles 1968, Astrophys. J. 153, 1 (from memory), T_m = T_r (1 - H/Gamma) where it counts."""
    energy_2 = 13.598434 / 4.0
    alpha_ev = 0.75 * 13.598434
    wavelength = si.h * si.c / (alpha_ev * si.e) * 100.0

    def rate(s: float, y: np.ndarray) -> list[float]:
        z, x, ratio = math.expm1(-s), float(y[0]), float(y[1])
        t_r, density = 2.7255 * (1.0 + z), COSMOLOGY.hydrogen_density_cm3(z)
        hubble = COSMOLOGY.hubble_rate_per_s(z)
        volume = (2.0 * math.pi * si.m_e * si.k * t_r / si.h**2) ** 1.5 * 1e-6
        beta = case_b_cm3(t_r) * volume * math.exp(-energy_2 / (EV_K * t_r))
        k = wavelength**3 / (8.0 * math.pi * hubble) * density * (1.0 - x)
        c = (1.0 + k * TWO_PHOTON) / (1.0 + k * (TWO_PHOTON + beta))
        up = beta * (1.0 - x) * math.exp(-alpha_ev / (EV_K * t_r))
        flow = c * (case_b_cm3(t_r * ratio) * density * x * x - up)
        compton = 8.0 * si.value("Thomson cross section") * 4.0 * si.Stefan_Boltzmann * t_r**4
        compton *= x / (1.0 + COSMOLOGY.helium_ratio() + x) / (3.0 * si.m_e * si.c**2)
        return [-flow / hubble, -ratio + compton / hubble * (1.0 - ratio)]

    s = [-math.log1p(z) for z in redshift]
    start = -math.log1p(1750.0)
    t = 2.7255 * 1751.0
    saha = (2.0 * math.pi * si.m_e * si.k * t / si.h**2) ** 1.5 * 1e-6
    saha *= math.exp(-13.598434 / (EV_K * t)) / COSMOLOGY.hydrogen_density_cm3(1750.0)
    first = 2.0 / (1.0 + math.sqrt(1.0 + 4.0 / saha))
    found = solve_ivp(rate, (start, s[-1]), [first, 1.0], "Radau", s, rtol=1e-8, atol=1e-11)
    assert found.success
    return found.y[0]


def test_many_levels_leave_a_tenth_fewer_electrons() -> None:
    # About 10 % below the three-level atom at z < 800 (Seager, Sasselov & Scott 2000, Astrophys. J.
    # Suppl. 128, 407; abstract), and alike where the bottleneck is n = 2 -> 1.
    redshifts = [1300.0, 1100.0, 500.0, 200.0]
    simple = three_level(redshifts)
    change = [at(history(), z) / x - 1.0 for z, x in zip(redshifts, simple, strict=True)]
    assert abs(change[0]) < 1e-3
    assert abs(change[1]) < 3e-3
    assert change[2] == pytest.approx(-0.10, abs=0.02)
    assert change[3] == pytest.approx(-0.10, abs=0.03)


def test_more_levels_fewer_electrons() -> None:
    # x_e falls with n_max, ever more slowly: still by a per cent at z = 200 from 100 to 300 levels
    # (Chluba, Vasil & Dursi 2010, Mon. Not. R. Astron. Soc. 407, 599; from memory).
    few = [solve(small_setup(n, 190.0, 30, accuracy={"relative": 1e-5})) for n in (4, 8, 16)]
    found = np.array([at(one, 200.0) for one in (*few, history())])
    assert np.all(np.diff(found) < 0.0)
    # Per doubling, the last step being almost two of them.
    steps = -np.diff(np.log(found)) / np.log2([2.0, 2.0, 60.0 / 16.0])
    assert np.all(np.diff(steps) < 0.0), steps
    assert 0.01 < steps[-1] < 0.15, steps


@pytest.mark.parametrize("redshift", [1400.0, 1100.0, 800.0, 400.0])
def test_three_level_limit(redshift: float) -> None:
    # With 2s and 2p in Boltzmann balance the two kept levels are one: the net flow is Peebles's,
    # with A_2s + A_2p in place of alpha_B (Peebles 1968, as above), and 1/K for the escape.
    setup = small_setup(8, hydrogen={"energies": "nonrelativistic"})
    ladder = build_ladder(setup)
    kept, lines = ladder.kept, lyman_lines(ladder)
    t_r = COSMOLOGY.radiation_temperature_k(redshift)
    density = COSMOLOGY.hydrogen_density_cm3(redshift)
    hubble = COSMOLOGY.hubble_rate_per_s(redshift)
    x = 0.9 if redshift > 1300.0 else 0.1
    here = Conditions(t_r, 0.97 * t_r, density, hubble, x, x, 1.0 - x)
    rates = live_reduction(ladder).rates(t_r, 0.97 * t_r)
    coupling = Sobolev().couple(lines, kept, here)
    coupling = with_two_photon(coupling, kept, here, TWO_PHOTON, "spontaneous")
    forced = rates._replace(exchange=np.array([[0.0, 3e10], [1e10, 0.0]]))
    found = solve_kept(kept, forced, coupling, here).net_flow
    total = float(rates.recombination.sum())
    in_field = float(live_reduction(ladder).rates(t_r, t_r).recombination.sum())
    mass = si.m_e / (1.0 + si.value("electron-proton mass ratio"))
    volume = (2.0 * math.pi * mass * si.k * t_r / si.h**2) ** 1.5 * 1e-6
    chi = kept.energy_ev[0] + kept.ionization_energy_ev[0]
    beta = in_field * volume * math.exp(-0.25 * chi / (EV_K * t_r))
    wavelength = si.h * si.c / (0.75 * chi * si.e) * 100.0
    k = wavelength**3 / (8.0 * math.pi * hubble) * density * (1.0 - x)
    c = (1.0 + k * TWO_PHOTON) / (1.0 + k * (TWO_PHOTON + beta))
    up = beta * (1.0 - x) * math.exp(-0.75 * chi / (EV_K * t_r))
    expected = c * (total * density * x * x - up)
    # Peebles leaves out the stimulated part of Lyman-alpha (e^-30); exchange at 1e10 per s leaves
    # 1e-7 of balance open, and its rounding as much.
    assert found / expected == pytest.approx(1.0, rel=1e-6)


def test_feedback_among_lyman_lines() -> None:
    # Chluba & Sunyaev 2007, Astron. Astrophys. 475, 109 (abstract): photons of higher lines,
    # absorbed in the next line below, raise x_e by at most 0.22 per cent, near z = 1050, mostly
    # from Lyman-beta to Lyman-alpha. Their atom and lines are not ours: held to a fifth of it.
    redshifts = (1300.0, 1200.0, 1100.0, 1050.0, 1000.0, 900.0, 400.0)
    grid = {"redshift_start": 1300.0, "redshift_end": 400.0, "redshifts": redshifts}

    def x_e(name: str, count: int, relative: float = 1e-6) -> np.ndarray:
        lines = {"hydrogen": name, "lyman_lines": count}
        accuracy = {"relative": relative}
        setup = small_setup(8, lines=lines, grid=grid, accuracy=accuracy)
        return solve(setup).free_electron_fraction

    lit = x_e("sobolev_feedback", 5)
    change = lit / x_e("sobolev", 5) - 1.0
    assert redshifts[int(np.argmax(change))] in {1100.0, 1050.0, 1000.0}
    assert change.max() == pytest.approx(2.2e-3, rel=0.2)
    two = x_e("sobolev_feedback", 2) / x_e("sobolev", 2) - 1.0
    assert two.max() > 0.8 * change.max()
    # The step control holds with what the run remembers, and steps are shorter than the delays.
    np.testing.assert_allclose(x_e("sobolev_feedback", 5, 1e-8), lit, rtol=1e-6)
    # One open line sees the blackbody: nothing changes.
    np.testing.assert_allclose(x_e("sobolev_feedback", 1), x_e("sobolev", 1), rtol=1e-12)


def test_feedback_is_refused_where_nothing_is_remembered() -> None:
    setup = small_setup(4, lines={"hydrogen": "sobolev_feedback", "lyman_lines": 2})
    with pytest.raises(InputError, match="remember nothing"):
        distill(setup)
    with pytest.raises(InputError, match="no memory"):
        weigh(setup, "x_e(900)")
    with pytest.raises(InputError, match="remember nothing"):
        history_from_table(small_table(4), COSMOLOGY, lines=setup.lines)
