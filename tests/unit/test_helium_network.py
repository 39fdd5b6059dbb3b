"""He I and He II reduced, in equilibrium, and among the slow variables."""

from __future__ import annotations

import dataclasses
import math
from functools import lru_cache

import mpmath
import numpy as np
import pytest

from levelnet import constants as const
from levelnet.atomic.levels import (
    binding_energy_ev,
    hydrogenic_levels,
    ionization_scale_ev,
    reduced_mass_ratio,
)
from levelnet.background.conditions import Conditions
from levelnet.errors import InputError
from levelnet.escape.helium_lines import (
    HeliumGroundLines,
    HigherLines,
    helium_ground_lines,
    kept_terms,
)
from levelnet.escape.helium_treatment import HeliumSobolev, HeliumTreatment, Seen
from levelnet.history.helium import COLDEST_K, HeliumEquations
from levelnet.history.ion_network import Around, HeliumIon, IonNetwork
from levelnet.history.start import equilibrium_state, ion_lags, saha_state
from levelnet.network.assembly import Workspace, factor_interior
from levelnet.network.helium import (
    HeliumLadders,
    helium_ladders,
    helium_rate_constants,
    reduce_helium,
)
from levelnet.network.helium_populations import helium_populations
from levelnet.network.ladder import Ladder, hydrogen_ladder
from levelnet.network.populations import populations
from levelnet.network.rates import assemble_rates
from levelnet.network.solve import solve_kept
from levelnet.network.tabulation import live_reduction
from tests.small_helium import helium_equations

_KEPT = ((2, 0, 0), (2, 1, 0), (2, 0, 1), (2, 1, 1))


def s_of(redshift: float) -> float:
    return -math.log1p(redshift)


# ---- limits


@lru_cache(maxsize=2)
def limit(n_max: int) -> HeliumLadders:
    return helium_ladders(n_max, _KEPT, hydrogenic=True)


@pytest.mark.parametrize("n_max", [30, pytest.param(100, marks=pytest.mark.slow)])
@pytest.mark.parametrize("radiation_k", [1000.0, 3000.0, 8000.0, 20_000.0])
def test_hydrogenic_limit_is_hydrogen(radiation_k: float, n_max: int) -> None:
    """Closed form: without defects each spin is hydrogen; a quarter of recombination is singlet."""
    ladders, matter_k = limit(n_max), 0.8 * radiation_k
    place = {one: k for k, one in enumerate(_terms(ladders.kept))}
    value, constants = reduce_helium(ladders, radiation_k), helium_rate_constants(ladders)
    found = assemble_rates(constants, value, np.zeros_like(value), radiation_k, matter_k)
    hydrogen = live_reduction(hydrogen_ladder(n_max, "nonrelativistic", ((2, 0), (2, 1))))
    wanted = hydrogen.rates(radiation_k, matter_k)
    for spin, share in ((0, 0.25), (1, 0.75)):
        s, p = place[2, 0, spin], place[2, 1, spin]
        np.testing.assert_allclose(
            found.recombination[[s, p]], share * wanted.recombination, rtol=1e-12
        )
        np.testing.assert_allclose(
            found.log_photoionization[[s, p]], wanted.log_photoionization, rtol=0, atol=1e-12
        )
        assert found.exchange[s, p] == pytest.approx(wanted.exchange[0, 1], rel=1e-12)
        assert found.exchange[p, s] == pytest.approx(wanted.exchange[1, 0], rel=1e-12)
    across = [found.exchange[place[a], place[b]] for a in _KEPT[:2] for b in _KEPT[2:]]
    assert max(across) < 1e-250


def _terms(kept: object) -> list[tuple[int, int, int]]:
    return list(zip(kept.n.tolist(), kept.l.tolist(), kept.spin.tolist(), strict=True))  # type: ignore[attr-defined]


@pytest.mark.parametrize("n_max", [30, pytest.param(100, marks=pytest.mark.slow)])
@pytest.mark.parametrize("temperature_k", [4000.0, 12_000.0, 25_000.0])
def test_helium_ion_is_hydrogen_scaled(temperature_k: float, n_max: int) -> None:
    """Closed form: energies as Z^2 mu, A as Z^4 mu, recombination as Z mu^-2 at T/(Z^2 mu)."""
    kept = ((2, 0), (2, 1))
    mass = reduced_mass_ratio(2) / reduced_mass_ratio(1)
    unit = ionization_scale_ev(2) / ionization_scale_ev(1)
    assert unit == pytest.approx(4.0 * mass, rel=1e-14)
    ion = live_reduction(hydrogen_ladder(n_max, "nonrelativistic", kept, charge=2))
    atom = live_reduction(hydrogen_ladder(n_max, "nonrelativistic", kept))
    found = ion.rates(temperature_k, 0.9 * temperature_k)
    wanted = atom.rates(temperature_k / unit, 0.9 * temperature_k / unit)
    np.testing.assert_allclose(
        found.recombination, wanted.recombination * 2.0 / mass**2, rtol=1e-12
    )
    np.testing.assert_allclose(found.exchange, wanted.exchange * 16.0 * mass, rtol=1e-12)
    shift = found.log_photoionization - wanted.log_photoionization
    np.testing.assert_allclose(shift, math.log(16.0 * mass), rtol=0, atol=1e-12)


def test_levels_of_the_helium_ion() -> None:
    """Published: NIST Atomic Spectra Database (from memory), cm^-1 above the ground state."""
    levels = hydrogenic_levels(4, "measured", charge=2)
    got = levels.energy_ev / (const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S)
    assert levels.ionization_energy_ev[0] == pytest.approx(54.417765, abs=2e-6)
    assert got[levels.index(2, 0)] == pytest.approx(329179.76, abs=0.03)
    # 2p1/2 and 2p3/2 by their weights.
    centroid = (329179.29 + 2.0 * 329185.15) / 3.0
    assert got[levels.index(2, 1)] == pytest.approx(centroid, abs=0.03)


@pytest.mark.parametrize(("n", "l"), [(2, 1), (3, 1), (3, 2), (4, 3)])
def test_fine_structure_of_the_helium_ion(n: int, l: int) -> None:
    """Closed form: Dirac's energies (1928, Proc. R. Soc. A 117, 610), averaged over j by weight."""
    charge_alpha = mpmath.mpf(2 * const.FINE_STRUCTURE)
    energies = []
    for j in (l - 0.5, l + 0.5):
        k = j + 0.5
        inner = n - k + mpmath.sqrt(k * k - charge_alpha**2)
        energies.append(1 - 1 / mpmath.sqrt(1 + (charge_alpha / inner) ** 2))
    mean = (2 * l * energies[0] + (2 * l + 2) * energies[1]) / (4 * l + 2)
    scale = 2.0 * const.RYDBERG_EV / const.FINE_STRUCTURE**2 * reduced_mass_ratio(2)
    levels = hydrogenic_levels(4, "measured", charge=2)
    got = levels.ionization_energy_ev[levels.index(n, l)]
    # Next order: (Z alpha)^4 = 5e-8.
    assert got == pytest.approx(float(mean) * scale, rel=1e-7)
    plain = binding_energy_ev(np.array([n]), np.array([l]), "nonrelativistic", 2)[0]
    assert 1e-6 < got / plain - 1.0 < 4e-5


def test_energies_of_other_ions_are_not_known() -> None:
    with pytest.raises(InputError, match="known for hydrogen and the helium ion only"):
        hydrogenic_levels(3, "measured", charge=3)


# ---- equilibrium


def saha_conditions(stage: int, temperature_k: float) -> Conditions:
    """Both stages in Saha equilibrium, at a density and x_e as when that stage recombines."""
    equations, _ = helium_equations()
    assert equations.helium is not None
    around = Around(temperature_k, temperature_k, 250.0, 1e-12, 13.0, -2.0)
    ratio = equations.helium.saha_log_ratio(stage, around)
    ion = 1.0 / (1.0 + math.exp(-ratio))
    return IonNetwork.conditions(around, ion, ion * math.exp(-ratio))


@pytest.mark.parametrize("temperature_k", [5000.0, 7000.0, 9000.0])
def test_departures_of_neutral_helium_in_equilibrium(temperature_k: float) -> None:
    """Law: in a blackbody at T_m = T_r every level is in Saha-Boltzmann equilibrium."""
    _, atoms = helium_equations()
    conditions = saha_conditions(0, temperature_k)
    local = atoms.equations.first.solve(conditions, Seen(0.0))
    levels = helium_populations(atoms.first, local.solution.log_population, conditions)
    # The table interpolates exchange and capture, and takes their inverses from equilibrium.
    assert np.abs(levels.log_departure).max() < 1e-12
    assert levels.conservation_error < 1e-12


@lru_cache(maxsize=3)
def ladders_of(n_max: int, higher: HigherLines) -> HeliumLadders:
    return helium_ladders(n_max, kept_terms(n_max, higher))


@pytest.mark.parametrize("n_max", [30, pytest.param(100, marks=pytest.mark.slow)])
@pytest.mark.parametrize("higher", ["closed", "free", "feedback"])
@pytest.mark.parametrize("temperature_k", [1500.0, 3000.0, 6000.0, 12_000.0, 25_000.0])
def test_departures_with_many_levels(temperature_k: float, higher: HigherLines, n_max: int) -> None:
    """Law: the same with many levels, reduced at this T_r itself, whichever lines are open."""
    ladders = ladders_of(n_max, higher)
    value, constants = reduce_helium(ladders, temperature_k), helium_rate_constants(ladders)
    rates = assemble_rates(constants, value, np.zeros_like(value), temperature_k, temperature_k)
    conditions = saha_conditions(0, temperature_k)
    lines = helium_ground_lines(ladders, False, higher)
    coupling = HeliumSobolev().couple(lines, ladders.kept, conditions, Seen(0.0))
    solution = solve_kept(ladders.kept, rates, coupling, conditions)
    levels = helium_populations(ladders, solution.log_population, conditions)
    assert len(levels.log_departure) == n_max * (n_max + 1) - 1
    assert np.abs(levels.log_departure).max() < 1e-12
    assert levels.conservation_error < 1e-12


@pytest.mark.parametrize("temperature_k", [60.0, 3000.0])
def test_levels_of_one_energy_have_no_line(temperature_k: float) -> None:
    # From n = 60 up, neighbours in l of high l have the same energy in doubles.
    ladders = ladders_of(62, "closed")
    for (strength, gap_ev), inside in zip(ladders.between, ladders.interior, strict=True):
        assert len(strength) == inside.shape.n_couplings
        assert np.all(gap_ev > 0.0)
    value = reduce_helium(ladders, temperature_k)
    assert np.isfinite(value).all()
    rates = assemble_rates(
        helium_rate_constants(ladders), value, np.zeros_like(value), temperature_k, temperature_k
    )
    fewer = ladders_of(30, "closed")
    there = reduce_helium(fewer, temperature_k)
    known = assemble_rates(
        helium_rate_constants(fewer), there, np.zeros_like(there), temperature_k, temperature_k
    )
    # More shells recombine faster (Grin & Hirata 2010, for hydrogen), 3 to 25 per cent here.
    gain = rates.recombination / known.recombination
    assert np.all((gain > 1.0) & (gain < 1.4))


def ion_with(n_max: int) -> tuple[Ladder, HeliumIon]:
    """He II with this many levels, reduced where it is asked; its lines are those of small runs."""
    _, atoms = helium_equations()
    assert atoms.equations.second is not None
    ladder = hydrogen_ladder(n_max, "measured", ((2, 0), (2, 1)), charge=2)
    return ladder, dataclasses.replace(atoms.equations.second, reduced=live_reduction(ladder))


@pytest.mark.parametrize("n_max", [30, pytest.param(100, marks=pytest.mark.slow)])
@pytest.mark.parametrize("temperature_k", [6000.0, 12_000.0, 16_000.0, 25_000.0])
def test_departures_of_the_helium_ion_in_equilibrium(temperature_k: float, n_max: int) -> None:
    """Law: as for He I."""
    ladder, ion = ion_with(n_max)
    conditions = saha_conditions(1, temperature_k)
    factored = factor_interior(ladder, temperature_k, Workspace.of(ladder))
    local = ion.solve(conditions)
    levels = populations(factored, local.solution.log_population, conditions)
    assert len(levels.log_departure) == n_max * (n_max + 1) // 2
    assert np.abs(levels.log_departure).max() < 1e-12
    assert levels.conservation_error < 1e-12


@pytest.mark.parametrize("temperature_k", [12_000.0, 16_000.0, 20_000.0])
def test_departures_of_the_tabulated_helium_ion(temperature_k: float) -> None:
    """Law: as for He I, with the table of a run."""
    _, atoms = helium_equations()
    assert atoms.equations.second is not None
    assert atoms.second is not None
    conditions = saha_conditions(1, temperature_k)
    local = atoms.equations.second.solve(conditions)
    factored = factor_interior(atoms.second, temperature_k, Workspace.of(atoms.second))
    levels = populations(factored, local.solution.log_population, conditions)
    assert np.abs(levels.log_departure).max() < 1e-12


def test_start_is_charge_neutral_saha_equilibrium() -> None:
    """Closed form: three Saha equations and charge neutrality, solved by scipy elsewhere here."""
    equations, _ = helium_equations()
    for redshift in (8000.0, 6000.0, 2800.0):
        state = saha_state(equations, s_of(redshift))
        assert equations.helium is not None
        around = equations.helium_around(s_of(redshift), state)
        first, second = (equations.helium.saha_log_ratio(stage, around) for stage in (0, 1))
        x = HeliumEquations.fractions(state[2:])
        assert math.log(x.single / x.neutral) == pytest.approx(first, abs=1e-12)
        assert math.log(x.double / x.single) == pytest.approx(second, abs=1e-12)


def test_lag_at_the_start_follows_the_expansion() -> None:
    """Law: on the lagging state every rate equals the drift of equilibrium, to second order."""
    equations, _ = helium_equations()
    s, step = s_of(6800.0), 1e-3
    state, _ = equilibrium_state(equations, s)
    later, before = (equilibrium_state(equations, s + d)[0] for d in (step, -step))
    drift = (later - before) / (2.0 * step)
    rate = equations.rate(s, state)
    lag = ion_lags(equations, s)[2]
    assert 1e-5 < abs(lag) < 1e-3
    assert rate[3] == pytest.approx(drift[3], rel=10.0 * abs(lag))


# ---- derivatives


@pytest.mark.parametrize(
    ("ion", "redshift", "shift"),
    [
        ("network", 6000.0, (0.01, -1e-4, 0.02, 0.03)),
        ("network", 2400.0, (0.01, -1e-4, 0.02, 0.03)),
        ("network", 2800.0, (0.01, -1e-4, 0.02, 0.0)),  # b = -42: fading into Saha equilibrium
        ("saha", 1900.0, (0.01, -1e-4, 0.02, 0.03)),
        ("saha", 518.0, (0.0, -1e-3, 0.0, 0.0)),  # rates fade above T_r = 1400 K
    ],
)
def test_jacobian_against_differences(ion: str, redshift: float, shift: tuple[float, ...]) -> None:
    equations, _ = helium_equations(ion)
    s = s_of(redshift)
    state = saha_state(equations, s) + np.array(shift)
    if redshift < 1000.0:
        state = np.array([-7.0, -0.01, -30.0, -400.0])
    matrix, drift = equations.jacobian(s, state)
    step, wanted = 1e-5, np.zeros((4, 4))
    for k in range(4):
        move = step * np.eye(4)[k]
        wanted[:, k] = equations.rate(s, state + move) - equations.rate(s, state - move)
    wanted /= 2.0 * step
    by_time = (equations.rate(s + 1e-6, state) - equations.rate(s - 1e-6, state)) / 2e-6
    scale = np.abs(wanted).max(axis=1, keepdims=True)
    np.testing.assert_allclose(matrix / scale, wanted / scale, atol=2e-8)
    np.testing.assert_allclose(drift, by_time, rtol=1e-6)


def test_helium_stands_still_in_the_cold() -> None:
    equations, _ = helium_equations()
    redshift = 0.99 * COLDEST_K / 2.7255 - 1.0
    rate = equations.rate(s_of(redshift), np.array([-7.0, -0.02, -40.0, -300.0]))
    assert rate[0] != 0.0
    assert (rate[2:] == 0.0).all()


@pytest.mark.parametrize("place", range(4))
@pytest.mark.parametrize("value", [1e3, -1e3, 1e300])
def test_trial_far_off_is_no_error(place: int, value: float) -> None:
    equations, _ = helium_equations()
    state = saha_state(equations, s_of(2500.0))
    state[place] = value
    assert np.isnan(equations.rate(s_of(2500.0), state)).all()


def test_lines_that_share_a_level_add_up() -> None:
    """2 3P1 and 2 3P2 leave from one term; each must count."""
    _, atoms = helium_equations()
    network, conditions = atoms.equations.first, saha_conditions(0, 6500.0)
    treatment, lines = network.treatment, network.lines
    assert isinstance(treatment, HeliumTreatment) and isinstance(lines, HeliumGroundLines)
    coupling = treatment.couple(lines, network.reduced.kept, conditions, Seen(0.0))
    upper = network.lines.upper.tolist()
    shared = upper[network.lines.names.index("2 3P1-1 1S")]
    assert upper.count(shared) == 2
    chance = coupling.validity["escape_probability"]
    # Closed form: A P each; the photon occupation is exp(-38).
    each = network.lines.einstein_a_per_s * chance
    total = sum(each[k] for k in range(len(upper)) if upper[k] == shared)
    assert coupling.loss[shared, shared] == pytest.approx(total, rel=1e-12)
    # A third and five ninths of the term radiate: 177.6 s^-1 and 0.324 s^-1 (published).
    rates = dict(zip(network.lines.names, network.lines.einstein_a_per_s, strict=True))
    assert rates["2 3P1-1 1S"] == pytest.approx(177.6 / 3.0)
    assert rates["2 3P2-1 1S"] == pytest.approx(0.324 * 5.0 / 9.0)
