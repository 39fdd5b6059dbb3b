"""What a history delivers: channels, populations, line figures, and how they hang together."""

from __future__ import annotations

import math
from functools import lru_cache
from types import SimpleNamespace

import numpy as np
import pytest
from scipy import constants as si
from scipy.integrate import cumulative_simpson, simpson

from levelnet.atomic.physics import UNCHANGED
from levelnet.errors import AccuracyWarning
from levelnet.history import outputs
from levelnet.history.atom import build_ladder, lyman_lines
from levelnet.history.integrate import integrate_history
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.history.validity import steps_of
from tests.small_runs import COSMOLOGY, small_history, small_setup
from tests.tolerances import ROUND_OFF


@lru_cache(maxsize=1)
def open_history() -> History:
    """Every Lyman line open, many outputs."""
    return solve(small_setup(4, 100.0, 501, lines={"lyman_lines": "all"}))


def test_shares_add_up_to_one() -> None:
    channels = open_history().channels
    assert channels.names == ("2s-1s", "2p-1s", "3p-1s", "4p-1s")
    np.testing.assert_allclose(channels.share.sum(axis=1), 1.0, rtol=ROUND_OFF)
    np.testing.assert_allclose(channels.cumulative_share.sum(axis=1), 1.0, rtol=ROUND_OFF)
    total = channels.net_rate_per_s.sum(axis=1, keepdims=True)
    np.testing.assert_allclose(channels.share * total, channels.net_rate_per_s, rtol=ROUND_OFF)


def test_each_recombination_leaves_by_one_channel() -> None:
    # The integral of all net rates over time equals the electrons that are gone.
    history = open_history()
    rate = history.channels.net_rate_per_s / history.hubble_rate_per_s[:, None]
    log_scale = -np.log1p(history.redshift)
    by_channel = cumulative_simpson(rate, x=log_scale, axis=0, initial=0.0)
    gone = history.neutral_hydrogen_fraction - history.neutral_hydrogen_fraction[0]
    # Simpson's rule on 500 steps of 0.0058 in ln a. Near equilibrium a net rate is the fastest
    # relaxation rate times the error of u (1e-3 of it at z = 1800), hence the absolute part.
    np.testing.assert_allclose(by_channel.sum(axis=1)[1:], gone[1:], rtol=2e-6, atol=3e-6)
    # Since 1e-4 of all recombine before the first output, the shares agree only so far.
    started = gone > 0.01
    shares = by_channel[started] / by_channel[started].sum(axis=1, keepdims=True)
    before = history.neutral_hydrogen_fraction[0] / gone[started][:, None]
    assert np.all(np.abs(shares - history.channels.cumulative_share[started]) < before + 1e-5)
    np.testing.assert_allclose(
        shares[-1], history.channels.cumulative_share[-1], atol=3.0 * before[-1, 0]
    )


def test_electrons_gone_since_the_hand_over_are_counted() -> None:
    # By the code's own sum: 1 - x_e(end) less 1 - x_e(hand-over).

    done = integrate_history(small_setup(4), lambda stage, part: None)
    ends = done.trajectory.time[[0, -1]]
    total = outputs._cumulative(done.trajectory, steps_of(done).share)(ends).sum(axis=1)
    neutral = [1.0 / (1.0 + math.exp(u)) for u in done.trajectory.state[[0, -1], 0]]
    assert total[0] == 0.0
    assert total[1] == pytest.approx(neutral[1] - neutral[0], rel=1e-5)


def test_fractions_are_those_of_one_atom() -> None:
    history = small_history()
    both = history.ionized_hydrogen_fraction + history.neutral_hydrogen_fraction
    np.testing.assert_allclose(both, 1.0, rtol=ROUND_OFF)
    assert np.array_equal(history.free_electron_fraction, history.ionized_hydrogen_fraction)
    # Helium is inert.
    assert np.all(history.neutral_helium_fraction == 1.0)
    assert not history.singly_ionized_helium_fraction.any()
    assert not history.doubly_ionized_helium_fraction.any()
    expected = 2.7255 * (1.0 + history.redshift)
    np.testing.assert_allclose(history.radiation_temperature_k, expected, rtol=ROUND_OFF)
    np.testing.assert_allclose(history.cosmic_time_s, COSMOLOGY.cosmic_time_s(history.redshift))


def test_populations_and_departures_belong_together() -> None:
    # b = x n_H^-1 / [n_e n_p (g/2) lambda^3 e^(I/kT_m)], lambda the thermal wavelength of relative
    # motion (Saha-Boltzmann), from scipy's constants; in logarithms.
    history = small_history()
    population, log_b = history.populations("H I"), history.log_departures("H I")
    levels = history.levels("H I")
    assert np.all(np.isfinite(log_b))
    assert np.all(population > 0.0)
    mass = si.m_e / (1.0 + si.value("electron-proton mass ratio"))
    kt = si.k * history.matter_temperature_k
    log_volume = 1.5 * np.log(si.h**2 / (2.0 * np.pi * mass * kt))
    density = history.hydrogen_density_cm3 * 1e6
    pairs = np.log(density * history.ionized_hydrogen_fraction**2) + log_volume
    binding = np.outer(si.e / kt, levels.ionization_energy_ev)
    log_saha = pairs[:, None] + np.log(levels.statistical_weight / 2.0) + binding
    # Rounding of ln x (up to 700) and of I/kT (up to 2e4 at 8 K).
    np.testing.assert_allclose(np.log(population) - log_saha, log_b, rtol=1e-9, atol=1e-9)


def test_ground_state_is_the_neutral_fraction() -> None:
    history = small_history()
    np.testing.assert_allclose(
        history.populations("H I")[:, 0], history.neutral_hydrogen_fraction, rtol=1e-13
    )
    excited = history.populations("H I")[:, 1:].sum(axis=1)
    # Common practice: excited atoms are very rare, 1e-12 of all and less.
    assert np.all(excited < 1e-11)


def test_high_levels_approach_saha_when_recombination_is_fast() -> None:
    history = small_history()
    # Highest level at z = 1800 (first output): in equilibrium with the continuum to a part in 1e5.
    assert abs(history.log_departures("H I")[0, -1]) < 1e-5
    # At the end the field is too weak to hold them there: below Saha.
    assert history.log_departures("H I")[-1, -1] < -1.0


def test_populations_below_the_smallest_are_nothing() -> None:
    logs = np.log(1e-300) + np.array([-50.0, -1e-9, 1e-9, 100.0])
    level = SimpleNamespace(log_population=logs, log_departure=np.arange(4.0))
    history = small_history(8)
    levels = history.levels("H I")
    four = type(levels)(
        *(
            getattr(levels, name)[:4]
            for name in ("n", "l", "statistical_weight", "energy_ev", "ionization_energy_ev")
        )
    )
    integrated = SimpleNamespace(
        ladder=SimpleNamespace(species="H I", levels=four),
        equations=SimpleNamespace(scales=UNCHANGED),
    )
    found = outputs._species(integrated, [SimpleNamespace(levels=level)])  # type: ignore[arg-type]
    assert found.population[0, :2].tolist() == [0.0, 0.0]
    assert found.population[0, 2] == pytest.approx(1e-300, rel=1e-6)
    np.testing.assert_allclose(np.log(found.population[0, 2:]), logs[2:], rtol=ROUND_OFF)
    assert found.log_departure[0].tolist() == [0.0, 1.0, 2.0, 3.0]


def test_diagnostics_are_those_of_this_run() -> None:
    history = small_history()
    figures = history.diagnostics
    assert figures.handover_redshift > 1800.0
    assert 0.0 < figures.handover_departure <= 1e-7
    assert figures.steps > 49
    assert figures.evaluations == 6 * figures.steps + 5 * figures.rejected_steps
    assert 10 < figures.nodes < 100
    assert 0.0 < figures.interpolation_error <= 1e-8
    assert figures.conservation_error < 1e-12
    assert figures.slowest_relaxation_hubble > 100.0


def test_visibility_adds_up_to_all_that_is_scattered() -> None:
    # int g d eta = 1 - exp(-tau) of the range, over the cosmology's own conformal time; Simpson's
    # rule on 501 outputs.
    history = open_history()
    eta = COSMOLOGY.conformal_time_mpc(history.redshift)
    scattered = 1.0 - math.exp(-history.optical_depth[0])
    assert simpson(history.visibility, x=eta) == pytest.approx(scattered, rel=1e-5)


def test_a_run_that_ended_at_its_first_output_has_no_milestones() -> None:
    # Step limit: only the output above the hand-over is there.
    setup = small_setup(
        3,
        grid={"redshift_start": 5000.0, "redshift_end": 20.0, "redshifts": [5000.0, 20.0]},
        accuracy={"max_steps": 10},
    )
    with pytest.warns(AccuracyWarning, match="step limit"):
        history = solve(setup)
    assert history.redshift.tolist() == [5000.0]
    assert history.optical_depth[0] == 0.0
    # g = n_e sigma_T/(1 + z) where there is no depth yet.
    electrons = history.free_electron_fraction[0] * COSMOLOGY.hydrogen_density_cm3(5000.0)
    per_m = electrons * 1e6 * si.value("Thomson cross section") / 5001.0
    assert history.visibility[0] == pytest.approx(per_m * 1e6 * si.parsec, rel=1e-9)
    assert all(math.isnan(getattr(history.milestones, k)) for k in history.milestones.__slots__)


def test_optical_depth_falls_with_redshift_to_nothing() -> None:
    history = small_history()
    assert np.all(np.diff(history.optical_depth) < 0.0)
    assert history.optical_depth[-1] == 0.0
    assert np.all(history.visibility >= 0.0)


def test_kept_lines_carry_the_names_of_the_channels() -> None:
    history = open_history()
    assert lyman_lines(build_ladder(history.setup)).names == history.channels.names[1:]
