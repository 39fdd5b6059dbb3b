"""The distilled history against the full network of the same atom."""

from __future__ import annotations

import dataclasses
import math
from typing import Any

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from levelnet.distilled.build import distill
from levelnet.distilled.history import history_from_table
from levelnet.history.atom import build_ladder
from levelnet.history.integrate import slow_equations
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from levelnet.network.tabulation import tabulate
from tests.fast_tables import small_table
from tests.small_runs import COSMOLOGY, small_setup

# x_e from z = 1600 to 20, default tolerances on both sides of the comparison.
SAME_HISTORY = 1e-6
VARIED = {
    "fiducial": {},
    "light": {"baryon_density_h2": 0.005, "matter_density_h2": 0.08},
    "heavy": {"baryon_density_h2": 0.06, "matter_density_h2": 0.4, "helium_mass_fraction": 0.1},
    "hot": {"cmb_temperature_k": 3.2, "effective_neutrinos": 5.0},
}


def compare(setup: Setup, table: Any, **options: Any) -> None:
    tight = dataclasses.replace(setup, accuracy={"relative": 1e-8})
    full = solve(tight)
    chosen = full.redshift[full.redshift <= 1600.0]
    fast = history_from_table(table, setup.cosmology, redshifts=chosen, **options)
    exact = full.free_electron_fraction[full.redshift <= 1600.0]
    assert np.max(np.abs(fast.free_electron_fraction / exact - 1.0)) <= SAME_HISTORY
    warm = full.matter_temperature_k[full.redshift <= 1600.0]
    np.testing.assert_allclose(fast.matter_temperature_k, warm, rtol=2e-6)


@pytest.mark.parametrize("universe", sorted(VARIED))
def test_small_atom_in_several_universes(universe: str) -> None:
    cosmology = dataclasses.replace(COSMOLOGY, **VARIED[universe])
    compare(small_setup(8, cosmology=cosmology), small_table())


def test_stimulated_decay_and_two_lyman_lines() -> None:
    lines = {"two_photon": "stimulated", "lyman_lines": 2}
    setup = small_setup(5, lines=lines)
    compare(setup, small_table(5, 2, True), lines=setup.lines)


def test_changed_constants() -> None:
    physics = {"fine_structure_change": 0.02, "electron_mass_change": -0.03}
    compare(small_setup(8, physics=physics), small_table(), **physics)


def test_milestones_are_those_of_the_full_history() -> None:
    full = solve(small_setup(8, accuracy={"relative": 1e-8}))
    fast = history_from_table(small_table(), COSMOLOGY, observables=True)
    assert fast.observables is not None
    # Both sum tau from z = 20; the full history by a spline on 1500 points per e-fold.
    assert fast.observables.last_scattering_redshift == pytest.approx(
        full.milestones.last_scattering_redshift, rel=1e-7
    )


def test_large_redshifts_are_in_equilibrium_with_the_lag() -> None:
    full = solve(small_setup(8, accuracy={"relative": 1e-8}))
    fast = history_from_table(small_table(), COSMOLOGY, redshifts=full.redshift)
    neutral = fast.neutral_hydrogen_fraction / full.neutral_hydrogen_fraction - 1.0
    assert np.max(np.abs(neutral)) <= 4.0 * SAME_HISTORY


@pytest.mark.slow
def test_thirty_shells() -> None:
    setup = small_setup(30)
    compare(setup, distill(setup, certify=False))


@pytest.mark.parametrize("warmth", [0.02, 0.3, 1.5, 3.0])
def test_heated_and_cooled_matter(warmth: float) -> None:
    # Matter held at a fixed multiple of T_r, as if heated or cooled from outside, integrated with
    # the rates of the table and with the exact dependence on T_m of the full reduction.
    setup = small_setup(8)
    ladder = build_ladder(setup)
    exact = tabulate(ladder, 50.0, 4500.0, 1e-10)
    logs = []
    # The table ends at T_m = 8000 K for matter hotter than the field.
    hottest = min(1500.0, 7900.0 / (warmth * COSMOLOGY.cmb_temperature_k) - 1.0)
    start, end = -math.log1p(hottest), -math.log1p(20.0)
    for reduced in (small_table(), exact):
        equations = slow_equations(setup, reduced)

        def rate(s: float, y: np.ndarray, equations: Any = equations) -> np.ndarray:
            return equations.rate(s, np.array([y[0], math.log(warmth)]))[:1]

        found = solve_ivp(
            rate, (start, end), [1.0], "LSODA", np.linspace(start, end, 30), rtol=1e-9, atol=1e-9
        )
        logs.append(found.y[0])
    electrons = [1.0 / (1.0 + np.exp(-u)) for u in logs]
    assert np.max(np.abs(electrons[0] / electrons[1] - 1.0)) <= 1e-5


def test_one_redshift_is_enough() -> None:
    alone = history_from_table(small_table(), COSMOLOGY, redshifts=200.0)
    among = history_from_table(small_table(), COSMOLOGY, redshifts=[1000.0, 200.0])
    assert alone.redshift.tolist() == [200.0]
    np.testing.assert_allclose(
        alone.free_electron_fraction, among.free_electron_fraction[1:], rtol=SAME_HISTORY
    )


@pytest.mark.slow
def test_truncation_at_a_hundred_shells() -> None:
    # Chluba, Vasil & Dursi 2010, MNRAS 407, 599 (abstract): at z ~ 200 the offset to their
    # reference falls from about 2.8 % with 100 shells to about 1.6 % with 350, so that
    # x_e(100)/x_e(350) - 1 is about 1.2 %, to the digits given.
    fractions = []
    for n_max in (100, 350):
        setup = small_setup(n_max)
        table = distill(setup, certify=False, tolerance=1e-7)
        fast = history_from_table(table, COSMOLOGY, redshifts=200.0)
        fractions.append(fast.free_electron_fraction[0])
    assert fractions[0] / fractions[1] - 1.0 == pytest.approx(0.012, abs=0.001)
