"""The distilled history against the full network of the same atom."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pytest

from levelnet.distilled.build import distill
from levelnet.distilled.history import history_from_table
from levelnet.history.run import solve
from levelnet.history.setup import Setup
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
