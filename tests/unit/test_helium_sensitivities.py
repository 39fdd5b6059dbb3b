"""Derivatives of a history with helium: differences along the same steps, and what they leave out.

Expected numbers are differences of whole histories, each with its own start and steps, far tighter,
or the analytic derivatives of hydrogen alone.
"""

from __future__ import annotations

import dataclasses
import math
from functools import lru_cache

import numpy as np
import pytest

from levelnet.background.parameters import COSMOLOGICAL
from levelnet.distilled import differences
from levelnet.distilled.differences import plasma_sensitivities
from levelnet.distilled.ensemble import ensemble
from levelnet.distilled.fast import FastHelium, FastHistory
from levelnet.distilled.history import history_from_table
from levelnet.distilled.observables import table_quadrature
from levelnet.distilled.plasma import run_plasma
from levelnet.distilled.prepared import make_atom, rate_names
from levelnet.errors import RangeError, SolveError
from levelnet.kernels.effective import DONE
from levelnet.kernels.plasma_steps import repeated_history
from tests.helium_tables import helium_table
from tests.small_runs import COSMOLOGY

REDSHIFTS = np.expm1(np.linspace(math.log(7901.0), math.log(21.0), 150))
PARTS = ("free_electron_fraction", "matter_temperature_k")
NUMBERS = ("last_scattering_redshift", "sound_horizon_mpc", "damping_per_mpc")
TABLES = (("sobolev", "network"), ("continuum", "saha"))
# Of the largest derivative of a quantity: what the docstring says, from stepping at the default
# accuracy. Fractions of helium are followed less closely.
CLOSE, CLOSE_HELIUM = 5e-6, 2e-5
# Without the continuum 8 per cent of helium is ionized at z = 1600 and hydrogen remembers its
# electrons: whole runs at 1e-10 with and without them differ by 9.8e-7 in d x_e/dY at z = 1000,
# 2e-5 of the largest. With it none is left, and the errors are those of stepping.
LATE = {"sobolev": 5e-5, "continuum": CLOSE}


def values(history: FastHistory) -> dict[str, np.ndarray]:
    assert history.observables is not None
    assert history.helium is not None
    found = {name: getattr(history, name) for name in PARTS}
    found |= {name: np.array(getattr(history.observables, name)) for name in NUMBERS}
    return found | {name: getattr(history.helium, name) for name in FastHelium.__slots__}


def shifted(kind: tuple[str, str], name: str, by: float) -> dict[str, np.ndarray]:
    options: dict = {"redshifts": REDSHIFTS, "relative": 1e-10, "observables": True}
    cosmology = COSMOLOGY
    if name in COSMOLOGICAL:
        cosmology = dataclasses.replace(cosmology, **{name: getattr(cosmology, name) * (1.0 + by)})
    else:
        options["rate_scales"] = {name.removeprefix("ln "): math.exp(by)}
    return values(history_from_table(helium_table(*kind), cosmology, **options))


@lru_cache(maxsize=4)
def derived(kind: tuple[str, str], relative: float = 1e-6) -> FastHistory:
    return history_from_table(
        helium_table(*kind), COSMOLOGY, redshifts=REDSHIFTS, relative=relative, sensitivities=True
    )


@pytest.mark.parametrize("kind", TABLES)
@pytest.mark.parametrize(
    "name", ["baryon_density_h2", "cmb_temperature_k", "helium_mass_fraction", "ln two_photon"]
)
def test_derivatives_are_those_of_whole_histories(kind: tuple[str, str], name: str) -> None:
    step = 5e-4 if name == "cmb_temperature_k" else 4e-3
    near, far = (
        {k: a - b for (k, a), b in zip(up.items(), down.values(), strict=True)}
        for up, down in (
            (shifted(kind, name, k * step), shifted(kind, name, -k * step)) for k in (1, 2)
        )
    )
    unit = getattr(COSMOLOGY, name) if name in COSMOLOGICAL else 1.0
    found = derived(kind).sensitivities
    assert found is not None
    at = found.parameters.index(name)
    for part in near:
        expected = (8.0 * near[part] - far[part]) / (12.0 * step * unit)
        error = np.max(np.abs(getattr(found, part)[..., at] - expected))
        of_helium = part in FastHelium.__slots__
        print(f"{kind} {name} {part}: {error / np.max(np.abs(expected)):.1e}")
        if of_helium and name.startswith("ln "):
            assert np.max(np.abs(expected)) < 1e-3
            assert error < 1e-8
        else:
            allowed = CLOSE_HELIUM if of_helium else CLOSE
            assert error <= allowed * np.max(np.abs(expected)), part


@pytest.mark.parametrize("kind", TABLES)
def test_halving_the_changes_moves_the_derivatives_by_less_than_said(
    kind: tuple[str, str], monkeypatch: pytest.MonkeyPatch
) -> None:
    whole = derived(kind).sensitivities
    monkeypatch.setattr(differences, "_STEP", 0.5 * differences._STEP)
    half = history_from_table(
        helium_table(*kind), COSMOLOGY, redshifts=REDSHIFTS, sensitivities=True
    ).sensitivities
    assert whole is not None
    assert half is not None
    for part in (*PARTS, *NUMBERS):
        one, other = getattr(whole, part), getattr(half, part)
        moved = np.max(np.abs(one - other).reshape(-1, one.shape[-1]), axis=0)
        largest = np.max(np.abs(other).reshape(-1, one.shape[-1]), axis=0)
        assert moved.any()
        assert np.all(moved <= 5e-7 * largest), part


@pytest.mark.parametrize("kind", TABLES)
def test_late_derivatives_are_the_analytic_ones_of_hydrogen_alone(kind: tuple[str, str]) -> None:
    table = helium_table(*kind)
    bare = dataclasses.replace(table, helium=None, helium_ion=None, helium_lines=None)
    lines = dataclasses.replace(table.setup.lines, helium=None, helium_continuum=None)
    z = REDSHIFTS[REDSHIFTS < 1000.0]
    alone = history_from_table(
        bare, COSMOLOGY, redshifts=z, lines=lines, relative=1e-8, sensitivities=True
    ).sensitivities
    both = history_from_table(table, COSMOLOGY, redshifts=z, sensitivities=True).sensitivities
    assert alone is not None
    assert both is not None
    assert set(alone.parameters) - set(both.parameters) == {
        "fine_structure_change", "electron_mass_change",
    }  # fmt: skip
    where = [alone.parameters.index(name) for name in both.parameters]
    for part in PARTS:
        exact, found = getattr(alone, part)[:, where], getattr(both, part)
        error = np.max(np.abs(found - exact), axis=0) / np.max(np.abs(exact), axis=0)
        print(kind, part, " ".join(f"{one:.1e}" for one in error))
        assert np.all(error <= LATE[kind[0]]), part


def test_same_steps_give_the_same_history_and_others_are_not_rejected() -> None:
    table = helium_table("continuum", "saha")
    outputs, atom = -np.log1p(REDSHIFTS), make_atom(table)
    grid = table_quadrature(atom, COSMOLOGY, float(outputs[-1]))
    run = run_plasma(table, atom, COSMOLOGY, outputs, grid, 1e-6)
    assert len(run.steps.time) == run.report[2] + 1
    state, grid_state = np.empty_like(run.state), np.empty_like(run.grid_state)
    status = repeated_history(run.plasma, outputs, grid.points, run.steps, state, grid_state)
    assert status == DONE
    np.testing.assert_allclose(state, run.state, rtol=1e-9, atol=1e-11)
    np.testing.assert_allclose(grid_state, run.grid_state, rtol=1e-9, atol=1e-11)


def test_fractions_of_helium_stay_whole_and_carry_the_electrons() -> None:
    history = derived(("sobolev", "network"))
    found = history.sensitivities
    assert found is not None
    assert found.parameters == (
        *COSMOLOGICAL,
        *(f"ln {name}" for name in rate_names(helium_table("sobolev", "network"))),
    )
    parts = [getattr(found, name) for name in FastHelium.__slots__]
    size = np.max(np.abs(parts), axis=(0, 1))
    assert np.all(np.abs(sum(parts)) <= 1e-14 * size)
    # Above z = 4000 hydrogen gives one electron each, whatever the parameters.
    helium, ratio = history.helium, COSMOLOGY.helium_ratio()
    assert helium is not None
    charge = helium.singly_ionized_helium_fraction + 2.0 * helium.doubly_ionized_helium_fraction
    by_ratio = np.zeros(len(found.parameters))
    left = 1.0 - COSMOLOGY.helium_mass_fraction
    by_ratio[COSMOLOGICAL.index("helium_mass_fraction")] = ratio / (
        COSMOLOGY.helium_mass_fraction * left
    )
    expected = ratio * (parts[1] + 2.0 * parts[2]) + charge[:, None] * by_ratio
    early = REDSHIFTS > 4000.0
    np.testing.assert_allclose(found.free_electron_fraction[early], expected[early], atol=1e-8)


@pytest.mark.parametrize(
    "change",
    [
        {"helium_mass_fraction": 0.4},
        {"effective_neutrinos": 0.0},
        {"helium_mass_fraction": 0.1},
    ],
)
def test_limits_of_the_parameters_are_no_limits_of_derivatives(change: dict[str, float]) -> None:
    # One-sided differences of second order, into the range.
    table = helium_table("sobolev", "network")
    cosmology, z = dataclasses.replace(COSMOLOGY, **change), REDSHIFTS[::10]
    (name, value), inside = *change.items(), 2e-3
    step = -inside if value == 0.4 else inside

    def at(by: float) -> FastHistory:
        there = dataclasses.replace(cosmology, **{name: value + by})
        return history_from_table(table, there, redshifts=z, relative=1e-9, observables=True)

    found = history_from_table(table, cosmology, redshifts=z, sensitivities=True).sensitivities
    assert found is not None
    column = found.parameters.index(name)
    for part in PARTS:
        here, near, far = (getattr(at(k * step), part) for k in range(3))
        expected = (4.0 * near - 3.0 * here - far) / (2.0 * step)
        error = np.max(np.abs(getattr(found, part)[:, column] - expected))
        assert error <= 5e-4 * np.max(np.abs(expected)), part


def test_a_universe_without_helium_has_the_exact_derivatives() -> None:
    none = dataclasses.replace(COSMOLOGY, helium_mass_fraction=0.0)
    found = history_from_table(helium_table(), none, redshifts=[900.0], sensitivities=True)
    assert found.sensitivities is not None
    assert "fine_structure_change" in found.sensitivities.parameters
    assert found.sensitivities.neutral_helium_fraction is None


def test_a_tabulated_expansion_does_not_move() -> None:
    z = np.expm1(np.linspace(0.0, math.log(2e4), 3001))
    tabulated = dataclasses.replace(
        COSMOLOGY,
        expansion_redshift=tuple(z.tolist()),
        expansion_hubble_rate_per_s=tuple(COSMOLOGY.hubble_rate_per_s(z).tolist()),
    )
    found = history_from_table(
        helium_table("sobolev", "network"), tabulated, redshifts=REDSHIFTS, sensitivities=True
    ).sensitivities
    assert found is not None
    for part in PARTS:
        assert not getattr(found, part)[:, [0, COSMOLOGICAL.index("effective_neutrinos")]].any()
        assert getattr(found, part)[:, COSMOLOGICAL.index("baryon_density_h2")].any()


def test_ensembles_have_them_to_the_same_bits() -> None:
    table, z = helium_table("sobolev", "network"), [2000.0, 900.0]
    other = dataclasses.replace(COSMOLOGY, baryon_density_h2=0.023)
    found = ensemble(table, [COSMOLOGY, other], redshifts=z, sensitivities=True)
    alone = history_from_table(table, other, redshifts=z, sensitivities=True)
    one, same = found.histories[1].sensitivities, alone.sensitivities
    assert one is not None
    assert same is not None
    assert one.free_electron_fraction.tobytes() == same.free_electron_fraction.tobytes()


def test_a_neighbour_that_cannot_follow_is_one_line() -> None:
    table = helium_table("sobolev", "network")
    outputs, atom = -np.log1p(REDSHIFTS), make_atom(table)
    grid = table_quadrature(atom, COSMOLOGY, float(outputs[-1]))

    def refused(change: float, error: type[Exception], said: str) -> None:
        run = run_plasma(table, atom, COSMOLOGY, outputs, grid, 1e-6)
        hydrogen = run.plasma.hydrogen
        span, constants = hydrogen.span.copy(), hydrogen.constants.copy()
        span[2] = max(span[2], change)
        constants[4] = math.nan if math.isnan(change) else constants[4]
        run.plasma = run.plasma._replace(hydrogen=hydrogen._replace(span=span, constants=constants))
        with pytest.raises(error, match=said) as caught:
            plasma_sensitivities(table, COSMOLOGY, REDSHIFTS, run, grid, 1.0)
        assert "\n" not in str(caught.value)

    refused(-0.1, RangeError, "by hubble_km_s_mpc: histories a little off leave the table")
    refused(math.nan, SolveError, "by hubble_km_s_mpc: histories a little off cannot take")
