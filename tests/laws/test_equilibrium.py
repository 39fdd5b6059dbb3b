"""Matter and field at one temperature, no expansion: every level is in equilibrium."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.background.conditions import Conditions
from levelnet.escape.family import TREATMENTS
from levelnet.escape.two_photon import with_two_photon
from levelnet.history.atom import lyman_lines
from levelnet.network import assembly
from levelnet.network.assembly import factor_interior
from levelnet.network.ladder import Ladder, hydrogen_ladder
from levelnet.network.populations import populations
from levelnet.network.solve import solve_kept
from levelnet.network.tabulation import live_reduction, tabulate
from tests.tolerances import EQUILIBRIUM

TEMPERATURES = (30.0, 100.0, 300.0, 1000.0, 2500.0, 3000.0, 6000.0)
TWO = ((2, 0), (2, 1))
LYMAN = ((2, 0), (2, 1), (3, 1), (4, 1))
GAP = ((2, 0), (2, 1), (4, 1), (5, 3))


def largest_departure(n_max: int, energies: str, kelvin: float, kept: Any = TWO) -> float:
    """Fill the kept levels as Saha says; give the largest |ln b| of all excited levels."""
    ladder = hydrogen_ladder(n_max, energies, kept)
    at = Conditions(kelvin, kelvin, 1.0, 1e-14, 1e-3, 1e-3, 1.0)
    log_kept = np.log(1e-6) + log_saha_factor(
        ladder.kept.statistical_weight, ladder.kept.ionization_energy_ev, kelvin
    )
    found = populations(factor_interior(ladder, kelvin), log_kept, at)
    # The ground state is given, not solved for; its Saha population is no double below 220 K.
    return float(np.max(np.abs(found.log_departure[1:])))


@pytest.mark.parametrize("energies", ["measured", "nonrelativistic"])
@pytest.mark.parametrize("n_max", [2, 3, 10, 30, 100])
def test_every_level(n_max: int, energies: str) -> None:
    for kelvin in TEMPERATURES:
        assert largest_departure(n_max, energies, kelvin) < EQUILIBRIUM, kelvin


@pytest.mark.slow
@pytest.mark.parametrize("energies", ["measured", "nonrelativistic"])
def test_every_level_of_a_large_atom(energies: str) -> None:
    for kelvin in TEMPERATURES:
        assert largest_departure(300, energies, kelvin) < EQUILIBRIUM, kelvin


@pytest.mark.parametrize("kept", [LYMAN, GAP], ids=str)
def test_every_level_whatever_is_kept(kept: Any) -> None:
    for kelvin in TEMPERATURES:
        assert largest_departure(12, "measured", kelvin, kept) < EQUILIBRIUM, kelvin


@given(st.floats(28.0, 6000.0))
@settings(max_examples=40)
def test_every_level_at_any_temperature(kelvin: float) -> None:
    assert largest_departure(10, "measured", kelvin) < EQUILIBRIUM


@pytest.mark.parametrize("n_max", [3, 30])
def test_every_level_by_the_unsymmetric_path(n_max: int, monkeypatch: pytest.MonkeyPatch) -> None:
    # Forced where the symmetric path serves; colder, populations are apart by more than the
    # doubles.
    monkeypatch.setattr(assembly, "COLD_K", 1e9)
    for kelvin in (60.0, 300.0, 2500.0, 6000.0):
        assert largest_departure(n_max, "measured", kelvin) < EQUILIBRIUM, kelvin


def in_equilibrium(ladder: Ladder, kelvin: float) -> Conditions:
    """As many electrons and ions as balance 1e-3 of all nuclei in the ground state."""
    log_ground = float(
        log_saha_factor(
            ladder.levels.statistical_weight[0], ladder.levels.ionization_energy_ev[0], kelvin
        )
    )
    ionized = float(np.exp(0.5 * (np.log(1e-3) - log_ground)))
    ground = float(np.exp(log_ground + 2.0 * np.log(ionized)))
    return Conditions(kelvin, kelvin, 1.0, 1e-14, ionized, ionized, ground)


@pytest.mark.parametrize("treatment", TREATMENTS, ids=lambda t: t.name)
@pytest.mark.parametrize("mode", ["spontaneous", "stimulated"])
@pytest.mark.parametrize("kept", [TWO, LYMAN], ids=str)
def test_kept_levels_and_the_ground_state(kept: Any, mode: str, treatment: Any) -> None:
    # Every treatment fed by the blackbody leaves equilibrium alone, and nothing flows.
    for n_max in (4, 30):
        ladder = hydrogen_ladder(n_max, "measured", kept)
        reduced = live_reduction(ladder)
        for kelvin in (250.0, 1000.0, 2500.0, 6000.0):
            at = in_equilibrium(ladder, kelvin)
            lines = treatment.couple(lyman_lines(ladder), ladder.kept, at)
            coupling = with_two_photon(lines, ladder.kept, at, 8.2246, mode)
            solution = solve_kept(ladder.kept, reduced.rates(kelvin, kelvin), coupling, at)
            # ln of x_1s and of the Saha factor are rounded at 13.6 eV / kT.
            rounding = 10 * 1.1e-16 * 13.6 * 11604.5 / kelvin
            gross = np.abs(coupling.loss @ np.exp(solution.log_boltzmann)).sum()
            assert abs(solution.net_flow) <= (EQUILIBRIUM + rounding) * gross
            found = populations(factor_interior(ladder, kelvin), solution.log_population, at)
            assert np.max(np.abs(found.log_departure)) < EQUILIBRIUM + rounding


def test_a_rough_table_keeps_equilibrium() -> None:
    # Interpolation errs by 1e-3 here: the inverse rates follow from the same numbers, so nothing
    # moves.
    ladder = hydrogen_ladder(8, "measured", LYMAN)
    table = tabulate(ladder, 300.0, 6000.0, 1e-2)
    assert table.interpolation_error > 1e-5
    for kelvin in (400.0, 1234.0, 5000.0):
        at = in_equilibrium(ladder, kelvin)
        lines = TREATMENTS[-1].couple(lyman_lines(ladder), ladder.kept, at)
        coupling = with_two_photon(lines, ladder.kept, at, 8.2246, "spontaneous")
        solution = solve_kept(ladder.kept, table.rates(kelvin, kelvin), coupling, at)
        np.testing.assert_allclose(
            solution.log_population, solution.log_boltzmann, rtol=0, atol=EQUILIBRIUM
        )
