"""Whole runs with the field resolved in frequency: balances, files, limits, scaling, grids."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.interpolate import CubicSpline, RectBivariateSpline

from levelnet import constants as const
from levelnet import read, solve, with_expansion, write
from levelnet.atomic.physics import Physics, scales
from levelnet.errors import Outcome, SolveError
from levelnet.history import march as march_module
from levelnet.history.result import History
from tests.same_records import assert_same
from tests.small_runs import COSMOLOGY, small_setup
from tests.transfer_runs import SWITCHES, electrons, field_setup, sobolev_electrons

FIELD = {"hydrogen": "transfer", "lyman_lines": 3, "transfer": {"frequency_step": 1e-3}}
# Lines alone on cells 1e-3 wide against Sobolev's closed form: second order in the step, measured
# as 2.8e-5 (tests/convergence/test_transfer.py fits the order).
LINES_ALONE = 4e-5


@lru_cache(maxsize=1)
def field_history() -> History:
    """All switches on, down to z = 20."""
    return solve(small_setup(5, lines=FIELD))


def changed(**parts: Any) -> History:
    """As `field_history` with other parts."""
    return solve(small_setup(**({"n_max": 5, "lines": FIELD} | parts)))


def worst(one: History, other: History) -> float:
    """Largest relative difference of x_e."""
    ratio = one.free_electron_fraction / other.free_electron_fraction
    return float(np.max(np.abs(ratio - 1.0)))


def test_photons_and_atoms_are_conserved() -> None:
    history = field_history()
    said = history.diagnostics
    assert history.outcome.ok
    assert 0.0 < said.photon_number_error < 1e-9
    assert 0.0 < said.atom_number_error < 1e-8
    assert said.conservation_error < 1e-12
    assert 0.9e-3 < said.frequency_step <= 1e-3
    # The grid twice as coarse is off by some 2.5e-3.
    assert 1e-4 < said.frequency_error < 1e-2


def test_populations_add_up_to_the_nuclei() -> None:
    history = field_history()
    total = history.populations("H I").sum(axis=1) + history.ionized_hydrogen_fraction
    np.testing.assert_allclose(total, 1.0, rtol=1e-12)
    assert np.all(np.isfinite(history.log_departures("H I")))


def test_everything_survives_the_file(tmp_path: Path) -> None:
    history = field_history()
    write(history, tmp_path / "field.h5")
    again = read(tmp_path / "field.h5")
    assert again.setup == history.setup
    assert again.field is not None
    assert history.field is not None
    assert_same(history.field, again.field)
    assert_same(history.diagnostics, again.diagnostics)
    for name in ("free_electron_fraction", "neutral_hydrogen_fraction", "matter_temperature_k"):
        np.testing.assert_array_equal(getattr(again, name), getattr(history, name))
    np.testing.assert_array_equal(again.populations("H I"), history.populations("H I"))


def test_spectrum_is_thermal_in_lyman_alpha() -> None:
    """A thick line fills its red side to its own source function (Sobolev 1960, from memory).

    So ln u = ln[x_2p g_1s/(x_1s g_2p)] + E/kT_r in the line. Spectra stand at the end of a step,
    the line was left in its middle.
    """
    history = field_history()
    field, levels = history.field, history.levels("H I")
    assert field is not None
    assert np.all(np.isfinite(field.log_distortion))
    two_p = int(np.flatnonzero((levels.n == 2) & (levels.l == 1))[0])
    energy_ev = float(levels.energy_ev[two_p] - levels.energy_ev[0])
    population = history.populations("H I")
    kt = const.BOLTZMANN_EV_K * history.radiation_temperature_k
    source = np.log(population[:, two_p] / population[:, 0] / 3.0) + energy_ev / kt
    growth = np.log1p(history.redshift)
    step = history.diagnostics.frequency_step
    expected = CubicSpline(growth[::-1], source[::-1])(np.log1p(field.redshift) + 0.5 * step)
    line = int(np.argmin(np.abs(field.photon_energy_ev - energy_ev)))
    inside = (field.redshift < 1650.0) & (field.redshift > 300.0)
    found = field.log_distortion[inside, line]
    assert expected[inside].max() > 1.0
    # What remains is the interpolation between outputs 9 per cent apart, worst at the start.
    np.testing.assert_allclose(found, expected[inside], rtol=1e-4, atol=2e-3)


def test_photons_that_left_lyman_alpha_are_still_there() -> None:
    """Expansion moves photon energies and k T_r alike, so that u travels unchanged.

    With nothing between the lines: u of the line at z = 1200 stands at z = 999.8 at 5/6 of its
    energy (closed form).
    """
    history = changed(lines=field_setup().lines, end=300.0)
    field = history.field
    assert field is not None
    places = np.log(field.photon_energy_ev)
    surface = RectBivariateSpline(
        np.log1p(field.redshift[::-1]), places, field.log_distortion[::-1], kx=3, ky=1
    )
    line = float(places[np.argmin(np.abs(field.photon_energy_ev - 10.1988))])  # Lyman-alpha
    # At the end of the step in whose middle the line was left.
    half = 0.5 * history.diagnostics.frequency_step
    emitted = float(surface(math.log(1201.0) - half, line)[0, 0])
    seen = float(surface(math.log(1201.0 * 5.0 / 6.0), line + math.log(5.0 / 6.0))[0, 0])
    assert emitted > 2.0
    assert seen == pytest.approx(emitted, abs=2e-3)


@pytest.mark.parametrize("two_photon", ["spontaneous", "stimulated"])
@pytest.mark.parametrize("lyman_lines", [1, 3])
def test_nothing_on_is_sobolev(two_photon: str, lyman_lines: int) -> None:
    """By the definition of the switches; "stimulated" is the same 2s decay in both."""
    found = electrons(two_photon=two_photon, lyman_lines=lyman_lines)
    expected = sobolev_electrons(5, lyman_lines, two_photon)
    np.testing.assert_allclose(found, expected, rtol=LINES_ALONE)


def test_every_switch_acts() -> None:
    """Each by more than the error of the step, none by more than 2 per cent (physics: see slow)."""
    none = electrons()
    for name in SWITCHES:
        change = np.abs(electrons(name) / none - 1.0).max()
        assert 1e-3 < change < 2e-2, name


def test_nonrelativistic_energies() -> None:
    """Energies that differ by 1e-5 change what transfer does to x_e by no more than its step."""
    grid = {"redshift_start": 1400.0, "redshift_end": 300.0, "n_redshifts": 20}
    change = []
    for energies in ("measured", "nonrelativistic"):
        hydrogen = {"n_max": 5, "energies": energies}
        run, plain = (
            solve(small_setup(hydrogen=hydrogen, lines=lines, grid=grid)) for lines in (FIELD, {})
        )
        assert run.diagnostics.photon_number_error < 1e-9
        change.append(run.free_electron_fraction / plain.free_electron_fraction)
    assert np.max(np.abs(change[0] - 1.0)) > 5e-3
    np.testing.assert_allclose(change[0], change[1], rtol=1e-5)


def scaled_run(mass_change: float, lines: dict[str, Any]) -> History:
    """A universe in which every rate, energy and density is that of another atom.

    With m the reduced mass, energies and all atomic rates go as m, lengths as 1/m: at temperatures
    times m, densities times m^3 and expansion times m nothing else can change (closed form, by
    dimensions). The mass of the nuclei, in recoil and diffusion only, stays.
    """
    m = scales(Physics(electron_mass_change=mass_change)).reduced_mass
    cosmology = replace(
        COSMOLOGY,
        hubble_km_s_mpc=m * COSMOLOGY.hubble_km_s_mpc,
        baryon_density_h2=m**3 * COSMOLOGY.baryon_density_h2,
        cmb_temperature_k=m * COSMOLOGY.cmb_temperature_k,
    )
    cosmology = with_expansion(cosmology, lambda z: m * COSMOLOGY.hubble_rate_per_s(z))
    return solve(
        small_setup(
            5,
            300.0,
            cosmology=cosmology,
            lines=lines,
            physics={"electron_mass_change": mass_change},
        )
    )


def test_scaling_with_the_mass_of_the_electron() -> None:
    still = FIELD | {"transfer": {"frequency_step": 1e-3, "scattering": False}}
    one, other = scaled_run(0.0, still), scaled_run(0.1, still)
    assert worst(one, other) < 1e-5
    # It can fail: scattering knows the mass of the nucleus, which is not scaled.
    assert worst(scaled_run(0.0, FIELD), scaled_run(0.1, FIELD)) > 1e-4


@pytest.mark.parametrize("change", [-0.05, 0.05])
def test_fine_structure_with_nothing_on_is_sobolev(change: float) -> None:
    physics = {"fine_structure_change": change}
    off = field_setup().lines
    plain = {"lyman_lines": 3}
    run, expected = (changed(lines=lines, physics=physics, end=30.0) for lines in (off, plain))
    assert worst(run, expected) < LINES_ALONE


def test_whole_shells_above_the_kept_levels() -> None:
    """What transfer does hangs on low levels: whole shells above n = 5 hardly change it."""
    found = []
    for hydrogen in ({"n_max": 8}, {"n_max": 8, "resolve_l_to": 5}):
        run, plain = (changed(hydrogen=hydrogen, lines=lines, end=300.0) for lines in (FIELD, {}))
        assert run.outcome.ok
        found.append(run.free_electron_fraction / plain.free_electron_fraction)
    np.testing.assert_allclose(found[0], found[1], rtol=2e-4)


def test_outputs_do_not_change_the_march() -> None:
    grid = {"redshift_start": 1800.0, "redshift_end": 20.0, "n_redshifts": 2}
    two, many = changed(grid=grid), field_history()
    for z in (0, -1):
        assert two.free_electron_fraction[z] == pytest.approx(
            many.free_electron_fraction[z], rel=1e-7
        )


@pytest.mark.parametrize("end", [1900.0, 1809.0])
def test_outputs_above_the_start(end: float) -> None:
    """There the atoms are in equilibrium, which knows nothing of lines."""
    grid = {"redshift_start": 5000.0, "redshift_end": end, "n_redshifts": 4}
    run, plain = changed(grid=grid), changed(grid=grid, lines={})
    assert run.outcome.ok
    assert run.diagnostics.photon_number_error < 1e-9
    # Below the start the march may be off by its step, relative to the neutral fraction.
    np.testing.assert_allclose(
        run.neutral_hydrogen_fraction, plain.neutral_hydrogen_fraction, rtol=5e-4
    )
    np.testing.assert_allclose(run.free_electron_fraction, plain.free_electron_fraction, rtol=1e-7)


def test_last_output_at_the_edge_of_a_table() -> None:
    """Tables end at 2^(k/4) K, here at 64 K, and a march looks a few steps further."""
    grid = {"redshift_start": 100.0, "redshift_end": 22.482, "n_redshifts": 2}
    assert 64.0 < COSMOLOGY.cmb_temperature_k * 23.482 < 64.01
    assert changed(grid=grid).outcome.ok


@pytest.mark.parametrize("on", [(), SWITCHES], ids=["none", "all"])
def test_down_to_the_coldest_field(on: tuple[str, ...]) -> None:
    """Factors of soft photons leave the doubles soon below; nothing may go wrong above."""
    two_photon = "distorted" if on else "spontaneous"
    lines = field_setup(*on, two_photon=two_photon).lines
    history = changed(lines=lines, end=19.2)
    assert history.outcome.ok
    assert history.diagnostics.photon_number_error < 1e-9
    assert history.field is not None
    assert np.all(np.isfinite(history.field.log_distortion))


def test_a_march_that_fails_at_once_says_so(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(march_module, "_MOST_ITERATIONS", 1)
    with pytest.raises(SolveError) as caught:
        changed()
    assert caught.value.outcome is Outcome.FIELD_NOT_SETTLED


def test_step_limit_holds_for_the_history_that_tells_the_matter_temperature() -> None:
    with pytest.raises(SolveError, match="step limit") as caught:
        changed(accuracy={"max_steps": 30})
    assert caught.value.outcome is Outcome.STEP_LIMIT
