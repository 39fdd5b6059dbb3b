"""Every way a run can end, and the edges of what may be asked."""

from __future__ import annotations

import dataclasses
import math
from functools import lru_cache
from typing import ClassVar

import numpy as np
import pytest

from levelnet.background.adapters import with_expansion
from levelnet.background.matter import saha_log_odds
from levelnet.errors import AccuracyWarning, InputError, Outcome, RangeError, SolveError
from levelnet.escape.treatment import Closed, Sobolev
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.network import tabulation
from tests.small_runs import COSMOLOGY, small_history, small_setup
from tests.tolerances import HISTORY, STEPPING

# Steps that reach below z = 1800 and not to z = 20.
FEW = {"max_steps": 100}


@lru_cache(maxsize=1)
def to_today() -> History:
    """A run to z = 0."""
    return solve(small_setup(3, 0.0, 60))


def test_converged() -> None:
    history = small_history()
    assert history.outcome is Outcome.CONVERGED
    history.require_converged()
    assert len(history.redshift) == 50
    assert (history.redshift[0], history.redshift[-1]) == (1800.0, 20.0)
    assert "converged" in repr(history)


def test_step_limit_gives_what_there_is() -> None:
    with pytest.warns(AccuracyWarning, match="step limit"):
        history = solve(small_setup(3, accuracy=FEW))
    assert history.outcome is Outcome.STEP_LIMIT
    assert 0 < len(history.redshift) < 50
    assert history.redshift[0] == 1800.0
    assert history.diagnostics.steps + history.diagnostics.rejected_steps <= 101
    whole = solve(small_setup(3))
    n = len(history.redshift)
    np.testing.assert_allclose(
        history.free_electron_fraction, whole.free_electron_fraction[:n], rtol=10 * STEPPING
    )
    assert history.populations("H I").shape == (n, 6)


def test_step_limit_before_the_first_output_leaves_nothing_to_return() -> None:
    with pytest.raises(SolveError, match="step limit") as caught:
        solve(small_setup(3, accuracy={"max_steps": 10}))
    assert caught.value.partial is None


def test_strict_raises_with_the_partial_history() -> None:
    with pytest.raises(SolveError, match="step limit") as caught:
        solve(small_setup(3, accuracy=FEW), strict=True)
    assert isinstance(caught.value.partial, History)
    assert caught.value.partial.outcome is Outcome.STEP_LIMIT
    assert solve(small_setup(3, 800.0, 5), strict=True).outcome.ok


def test_quasi_steady_state_is_lost_behind_closed_lines() -> None:
    # 2p has no exit but the climb over n = 3: below z ~ 300 no atom does it in a Hubble time.
    with pytest.warns(AccuracyWarning, match="relaxes more slowly"):
        history = solve(small_setup(4, 100.0, 20, lines={"hydrogen": "closed"}))
    assert history.outcome is Outcome.QUASI_STEADY_LOST
    assert len(history.redshift) == 20
    assert history.diagnostics.slowest_relaxation_hubble < 100.0
    higher = solve(small_setup(4, 700.0, 20, lines={"hydrogen": "closed"}))
    assert higher.outcome is Outcome.CONVERGED
    assert any('lines: "closed"' in note for note in higher.notes)


def test_two_photon_alone_and_lyman_alpha_alone_both_slow_recombination() -> None:
    both, closed, without = (
        solve(small_setup(3, 800.0, 2, **parts)).free_electron_fraction[-1]
        for parts in (
            {},
            {"lines": {"hydrogen": "closed"}},
            {"hydrogen": {"two_photon_rate_per_s": 0.0}},
        )
    )
    assert both < closed
    assert both < without


def test_quasi_steady_state_is_lost_without_two_photon_decay() -> None:
    # 2s then leaves over n = 3 only.
    with pytest.warns(AccuracyWarning, match="relaxes more slowly"):
        history = solve(small_setup(4, 20.0, 20, hydrogen={"two_photon_rate_per_s": 0.0}))
    assert history.outcome is Outcome.QUASI_STEADY_LOST


def test_nothing_open_is_refused() -> None:
    setup = small_setup(4, hydrogen={"two_photon_rate_per_s": 0.0}, lines={"hydrogen": "closed"})
    with pytest.raises(InputError, match="no channel to the ground state"):
        solve(setup)


def test_open_lines_follow_saha_far_longer() -> None:
    history = solve(small_setup(4, 1000.0, 20, lines={"hydrogen": "open"}))
    odds = saha_log_odds(history.hydrogen_density_cm3, history.radiation_temperature_k, 13.598434)
    saha = 1.0 / (1.0 + np.exp(-odds))
    at = history.redshift > 1300.0
    # Without trapped photons the ions stay within 2 % of equilibrium down to x_e = 0.3; with them
    # they lag by half as much again.
    np.testing.assert_allclose(history.free_electron_fraction[at], saha[at], rtol=0.02)
    trapped = small_history()
    expected = np.interp(1300.0, history.redshift[::-1], saha[::-1])
    found = np.interp(1300.0, trapped.redshift[::-1], trapped.free_electron_fraction[::-1])
    assert found > 1.5 * expected
    assert any('lines: "open"' in note for note in history.notes)


def test_matter_cools_adiabatically_to_well_below_a_kelvin() -> None:
    history = to_today()
    assert history.outcome is Outcome.CONVERGED
    assert history.redshift[-1] == 0.0
    assert history.matter_temperature_k[-1] < 0.1
    # Without heating T_m ~ (1 + z)^2 (adiabatic index 5/3; common practice). Compton heating still
    # counts a little below z = 20.
    low = history.redshift < 20.0
    power = np.gradient(np.log(history.matter_temperature_k[low]), np.log1p(history.redshift[low]))
    assert np.all(np.diff(power) > 0.0)
    assert 1.9 < power[0] < power[-1] < 2.0
    assert power[-1] > 1.998
    # Matter and radiation part near z ~ 150 (Peebles 1993, Principles of Physical Cosmology; from
    # memory): equal to 1 % above z = 500 and far apart at z = 30.
    ratio = history.matter_temperature_k / history.radiation_temperature_k
    assert np.all(np.abs(ratio[history.redshift > 500.0] - 1.0) < 0.02)
    assert ratio[np.argmin(np.abs(history.redshift - 30.0))] < 0.4


@pytest.mark.parametrize("history", [small_history, to_today])
def test_ions_only_become_fewer_and_matter_only_colder(history) -> None:  # type: ignore[no-untyped-def]
    found = history()
    assert np.all(np.diff(found.free_electron_fraction) < 0.0)
    assert np.all(np.diff(found.neutral_hydrogen_fraction) > 0.0)
    assert np.all(np.diff(found.matter_temperature_k) < 0.0)
    # Matter is never warmer than the radiation.
    assert np.all(found.matter_temperature_k < found.radiation_temperature_k)


def test_outputs_above_the_hand_over_only() -> None:
    grid = {"redshift_start": 6000.0, "redshift_end": 5000.0, "n_redshifts": 7}
    history = solve(small_setup(4, grid=grid))
    assert history.outcome is Outcome.CONVERGED
    assert history.diagnostics.steps == 0
    odds = saha_log_odds(history.hydrogen_density_cm3, history.radiation_temperature_k, 13.598434)
    np.testing.assert_allclose(history.neutral_hydrogen_fraction, np.exp(-odds), rtol=1e-6)
    # Every level in equilibrium, but for what the expansion cools the matter below the radiation.
    assert np.all(np.abs(history.log_departures("H I")) < 3e-6)
    # In equilibrium the channels are no more than rounding.
    assert np.isnan(history.channels.cumulative_share).all()
    assert math.isnan(history.milestones.half_ionized_redshift)
    assert math.isnan(history.milestones.visibility_width)


def test_a_background_of_100_k_today() -> None:
    # Recombination at z ~ 35; above, the fastest rate is 1e19 Hubble rates and its product with the
    # smallest error of u is no slope to interpolate with.
    hot = dataclasses.replace(COSMOLOGY, cmb_temperature_k=100.0)
    grid = {"redshift_start": 100.0, "redshift_end": 0.0, "n_redshifts": 12}
    history = solve(small_setup(3, cosmology=hot, grid=grid))
    assert history.outcome is Outcome.CONVERGED
    assert np.all(np.diff(history.free_electron_fraction) <= 0.0)
    # Thomson depth of fully ionized hydrogen, from below: tau grows by n_e sigma_T c dt.
    assert np.all(np.diff(history.optical_depth) < 0.0)
    early = slice(0, 3)
    electrons = history.hydrogen_density_cm3[early] * 6.6524587e-25 * 2.99792458e10
    slope = electrons / history.hubble_rate_per_s[early]
    steps = np.diff(np.log1p(history.redshift[early]))
    found = np.diff(history.optical_depth[early]) / steps
    assert np.all((found < slope[:-1]) & (found > slope[1:]))


def test_outputs_across_the_hand_over_join_smoothly() -> None:
    grid = {"redshift_start": 2300.0, "redshift_end": 1700.0, "n_redshifts": 61}
    history = solve(small_setup(4, grid=grid))
    start = history.diagnostics.handover_redshift
    assert 1700.0 < start < 2300.0
    odds = saha_log_odds(history.hydrogen_density_cm3, history.radiation_temperature_k, 13.598434)
    lag = np.log(history.ionized_hydrogen_fraction / history.neutral_hydrogen_fraction) - odds
    at = int(np.argmax(history.redshift < start))
    # Both sides of the join lag behind Saha by the same little, within what was asked.
    assert abs(lag[at] - lag[at - 1]) < 0.3 * STEPPING


def test_redshifts_are_hit_exactly_in_descending_order() -> None:
    asked = (700.0, 1234.5678, 1000.0, 1800.0)
    grid = {"redshift_start": 1800.0, "redshift_end": 500.0, "redshifts": asked}
    history = solve(small_setup(3, grid=grid))
    assert history.redshift.tolist() == sorted(asked, reverse=True)
    alone = solve(
        small_setup(3, grid={"redshift_start": 1800.0, "redshift_end": 700.0, "n_redshifts": 2})
    )
    assert history.free_electron_fraction[-1] == pytest.approx(
        alone.free_electron_fraction[-1], rel=STEPPING
    )


class Twice(Sobolev):
    """A user's own treatment: twice the Sobolev escape."""

    __slots__ = ()
    name: ClassVar[str] = "twice"

    def escape(self, optical_depth):  # type: ignore[no-untyped-def]
        chance, slope = Sobolev.escape(self, optical_depth)
        return 2.0 * chance, slope


def test_a_treatment_of_your_own() -> None:
    setup = small_setup(3, 900.0, 3)
    named, own, twice = (solve(setup, line_treatment=t) for t in (None, Sobolev(), Twice()))
    assert np.array_equal(named.free_electron_fraction, own.free_electron_fraction)
    assert np.all(twice.free_electron_fraction[1:] < named.free_electron_fraction[1:])
    np.testing.assert_allclose(
        twice.lines.escape_probability * twice.lines.optical_depth, 2.0, rtol=1e-12
    )
    # The setup's own choice gives way: closed by object is closed by name.
    closed = solve(setup, line_treatment=Closed()).free_electron_fraction
    by_name = solve(small_setup(3, 900.0, 3, lines={"hydrogen": "closed"})).free_electron_fraction
    assert np.array_equal(closed, by_name)


def test_tabulated_expansion_gives_the_same_history() -> None:
    tabulated = with_expansion(COSMOLOGY, COSMOLOGY.hubble_rate_per_s)
    assert tabulated.expansion_redshift is not None
    plain, table = (solve(small_setup(4, 20.0, 30, cosmology=c)) for c in (COSMOLOGY, tabulated))
    for name in ("free_electron_fraction", "neutral_hydrogen_fraction", "matter_temperature_k"):
        np.testing.assert_allclose(getattr(table, name), getattr(plain, name), rtol=STEPPING)


def test_every_lyman_line_open_runs_without_a_murmur() -> None:
    one, every = (solve(small_setup(10, 800.0, 5, lines={"lyman_lines": n})) for n in (1, "all"))
    change = every.free_electron_fraction / one.free_electron_fraction - 1.0
    # More exits, fewer ions: some 1e-4 to 1e-3.
    assert np.all((change[1:] < 0.0) & (change[1:] > -2e-3))
    assert every.channels.cumulative_share.shape == (5, 10)


def test_progress_goes_from_nothing_to_all() -> None:
    told: list[tuple[str, float]] = []
    solve(small_setup(3, 1000.0, 5), progress=lambda stage, part: told.append((stage, part)))
    assert {stage for stage, _ in told} == {
        "atomic data",
        "reducing the network",
        "integrating",
        "level populations",
    }
    assert all(0.0 <= part <= 1.0 for _, part in told)
    assert told[-1] == ("level populations", 1.0)


def test_stimulated_two_photon_decay_speeds_recombination_and_says_what_it_lacks() -> None:
    plain, stimulated = (
        solve(small_setup(4, 900.0, 5, lines={"two_photon": mode}))
        for mode in ("spontaneous", "stimulated")
    )
    change = stimulated.free_electron_fraction[-1] / plain.free_electron_fraction[-1] - 1.0
    # About a per cent (Chluba & Sunyaev 2006, Astron. Astrophys. 446, 39; from memory).
    assert -0.02 < change < -0.005
    assert any("Kholupenko" in note for note in stimulated.notes)


def test_same_setup_same_bits() -> None:
    one, other = (solve(small_setup(3, 900.0, 5)) for _ in range(2))
    assert np.array_equal(one.free_electron_fraction, other.free_electron_fraction)
    assert np.array_equal(one.populations("H I"), other.populations("H I"))


def test_nonrelativistic_energies_change_little() -> None:
    measured, plain = (
        solve(small_setup(4, 1000.0, 3, hydrogen={"energies": e}))
        for e in ("measured", "nonrelativistic")
    )
    change = measured.free_electron_fraction / plain.free_electron_fraction - 1.0
    assert HISTORY < np.abs(change[-1]) < 1e-3


def test_sealed_lines_end_as_an_outcome_down_to_today() -> None:
    # Every exit of 2p underflows: an outcome with what there is, no warning from the arithmetic.
    setup = small_setup(4, 0.0, 20, lines={"hydrogen": "closed"})
    with pytest.warns(AccuracyWarning):
        history = solve(setup)
    assert history.outcome in {Outcome.SINGULAR, Outcome.QUASI_STEADY_LOST}
    assert np.all(np.isfinite(history.free_electron_fraction))


def test_a_cold_background_finds_its_start() -> None:
    cold = dataclasses.replace(COSMOLOGY, cmb_temperature_k=0.1)
    grid = {"redshift_start": 9000.0, "redshift_end": 3000.0}
    history = solve(small_setup(4, cosmology=cold, grid=grid))
    assert history.outcome.ok


def test_no_last_scattering_where_the_grid_ends_early() -> None:
    assert math.isnan(solve(small_setup(3, 1200.0, 5)).milestones.last_scattering_redshift)


def test_a_table_too_coarse_is_an_outcome(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(tabulation, "_MOST_NODES", 6)
    monkeypatch.setattr(tabulation, "node_count", lambda low, high, tolerance: 6)
    with pytest.raises(SolveError, match="could not be interpolated") as caught:
        solve(small_setup(4), strict=True)
    assert caught.value.outcome is Outcome.TABLE_TOO_COARSE


def test_matter_colder_than_recombination_is_known_is_refused() -> None:
    cold = dataclasses.replace(COSMOLOGY, cmb_temperature_k=0.1)
    with pytest.raises(RangeError, match=r"T_m = .* K: recombination is known down to 0.02 K"):
        solve(small_setup(4, 0.0, 20, cosmology=cold))


def test_own_treatment_is_told_of_in_the_notes_and_may_keep_levels() -> None:
    class Mine(Sobolev):
        """Sobolev, with the n = 3 levels kept."""

        name: ClassVar[str] = "mine"
        keeps: ClassVar[tuple[tuple[int, int], ...]] = ((3, 0), (3, 1), (3, 2))

    history = solve(small_setup(6), line_treatment=Mine())
    assert any("treatment of one's own" in note for note in history.notes)
    assert not any("mine" in note.lower() for note in history.notes)
    assert history.channels.names == ("2s-1s", "2p-1s", "3s-1s", "3p-1s", "3d-1s")
    # Kept or eliminated, the physics is the same: only Lyman-alpha is open.
    assert history.lines.names == ("2p-1s",)
    plain = solve(small_setup(6))
    np.testing.assert_allclose(
        history.free_electron_fraction, plain.free_electron_fraction, rtol=STEPPING
    )
    np.testing.assert_allclose(
        history.log_departures("H I"), plain.log_departures("H I"), rtol=0, atol=1e-4
    )


def test_threads_restore_the_blas_limit() -> None:
    from concurrent.futures import ThreadPoolExecutor

    from threadpoolctl import threadpool_info, threadpool_limits

    with threadpool_limits(limits=2, user_api="blas"):
        before = [pool["num_threads"] for pool in threadpool_info() if pool["user_api"] == "blas"]
        with ThreadPoolExecutor(2) as pool:
            first, second = pool.map(solve, [small_setup(3), small_setup(4)])
        after = [pool["num_threads"] for pool in threadpool_info() if pool["user_api"] == "blas"]
    assert before == after
    assert first.outcome.ok
    assert second.outcome.ok
