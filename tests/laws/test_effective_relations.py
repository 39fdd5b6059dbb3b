"""Exact relations between effective rates, and their published limits."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from levelnet import (
    EffectiveRates,
    distill,
    effective_rates,
    history_from_table,
    recombination_coefficient,
)
from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.atomic.levels import reduced_mass_ratio
from levelnet.history.setup import Setup
from levelnet.network.assembly import interior_photoionization, recombination_coefficients
from levelnet.network.ladder import hydrogen_ladder
from levelnet.tables import read_table
from tests.small_runs import small_setup
from tests.sparse_reference import effective_recombination, exchange, fates, sparse_network
from tests.tolerances import CONSERVATION, ELIMINATION, EQUILIBRIUM

TWO = ((2, 0), (2, 1))
LYMAN = ((2, 0), (2, 1), (3, 1), (4, 1))
THREE = ((2, 0), (2, 1), (3, 0), (3, 1), (3, 2))
SETS = pytest.mark.parametrize("kept", [TWO, LYMAN, THREE], ids=["two", "lyman", "three"])
KELVIN = pytest.mark.parametrize("kelvin", [30.0, 300.0, 3000.0, 8000.0])
SETUP = small_setup(20)


@SETS
@KELVIN
def test_closure(kept: tuple[tuple[int, int], ...], kelvin: float) -> None:
    # Closed form: what is captured anywhere ends in a kept level or is ionized again first, so the
    # captures less the A_i are what the interior loses to the continuum; chances by scipy's LU.
    network = sparse_network(hydrogen_ladder(20, "measured", kept), kelvin)
    alpha = recombination_coefficients(network.ladder, kelvin, 0.7 * kelvin)[1:]
    again = fates(network)[-1] @ alpha[network.inside]
    total = effective_rates(SETUP, kelvin, 0.7 * kelvin, kept).recombination.sum()
    assert total + again == pytest.approx(alpha.sum(), rel=ELIMINATION)


@SETS
@KELVIN
def test_detailed_balance(kept: tuple[tuple[int, int], ...], kelvin: float) -> None:
    # Closed form: at T_m = T_r, A_i n_e n_p = B_i n_i in Saha equilibrium.
    rates = effective_rates(SETUP, kelvin, kelvin, kept)
    levels = rates.kept_levels
    saha = log_saha_factor(levels.statistical_weight, levels.ionization_energy_ev, kelvin)
    lag = rates.log_recombination - rates.log_photoionization - saha
    assert np.abs(lag).max() < EQUILIBRIUM


@SETS
@pytest.mark.parametrize("kelvin", [1000.0, 3000.0, 8000.0])
def test_photoionization_by_its_own_path(kept: tuple[tuple[int, int], ...], kelvin: float) -> None:
    # Detailed balance is a theorem, not a definition: B_i is also the chance to be ionized first,
    # straight or on any way up, with chances by scipy's sparse LU.
    ladder = hydrogen_ladder(20, "measured", kept)
    network = sparse_network(ladder, kelvin)
    out = -network.matrix[network.inside][:, network.kept].toarray()
    direct = interior_photoionization(ladder, kelvin)[ladder.kept_position]
    expected = direct + fates(network)[-1] @ out
    found = effective_rates(SETUP, kelvin, kelvin, kept).photoionization
    assert found == pytest.approx(expected, rel=ELIMINATION)


@SETS
@pytest.mark.parametrize("kelvin", [1000.0, 3000.0, 8000.0])
def test_transfer_symmetry(kept: tuple[tuple[int, int], ...], kelvin: float) -> None:
    # Both directions by scipy's LU, each by itself; and w_i R_ij = w_j R_ji, w Boltzmann weights.
    network = sparse_network(hydrogen_ladder(20, "measured", kept), kelvin)
    rates = effective_rates(SETUP, kelvin, kelvin, kept)
    assert rates.exchange == pytest.approx(exchange(network), rel=ELIMINATION)
    levels, off = rates.kept_levels, ~np.eye(len(kept), dtype=bool)
    log_weight = np.log(levels.statistical_weight) - levels.energy_ev / (8.617333262e-5 * kelvin)
    flow = log_weight[:, None] + rates.log_exchange
    # The Boltzmann constant is CODATA's, to ten digits: 10 eV/kT times 1e-10 at 1000 K.
    assert np.abs(flow[off] - flow.T[off]).max() < 1e-8


@SETS
def test_recombination_by_scipy(kept: tuple[tuple[int, int], ...]) -> None:
    network = sparse_network(hydrogen_ladder(20, "measured", kept), 3000.0)
    for matter in (100.0, 3000.0, 7000.0):
        expected = effective_recombination(network, 3000.0, matter)
        found = effective_rates(SETUP, 3000.0, matter, kept).recombination
        assert found == pytest.approx(expected, rel=ELIMINATION)


@pytest.mark.parametrize("kelvin", [1000.0, 3000.0, 8000.0])
def test_elimination_in_two_steps(kelvin: float) -> None:
    # Keeping n <= 3 and eliminating n = 3 by hand gives what keeping n = 2 gives at once.
    wide = effective_rates(SETUP, kelvin, 0.5 * kelvin, THREE)
    narrow = effective_rates(SETUP, kelvin, 0.5 * kelvin, TWO)
    out = wide.exchange[2:].sum(axis=1) + wide.photoionization[2:]
    inner = np.diag(out) - wide.exchange[2:, 2:]
    chance = np.linalg.solve(inner, wide.exchange[2:, :2])
    capture = wide.recombination[:2] + wide.recombination[2:] @ chance
    assert narrow.recombination == pytest.approx(capture, rel=ELIMINATION)
    lifted = wide.exchange[:2, 2:] @ np.linalg.solve(inner, wide.photoionization[2:])
    assert narrow.photoionization == pytest.approx(
        wide.photoionization[:2] + lifted, rel=ELIMINATION
    )
    transfer = wide.exchange[:2, :2] + wide.exchange[:2, 2:] @ chance
    assert narrow.exchange[0, 1] == pytest.approx(transfer[0, 1], rel=ELIMINATION)
    assert narrow.exchange[1, 0] == pytest.approx(transfer[1, 0], rel=ELIMINATION)


@SETS
def test_without_radiation_the_case_b_sum(kept: tuple[tuple[int, int], ...]) -> None:
    # Closed form: at T_r -> 0 nothing is ionized again, and every capture to n >= 2 ends in a kept
    # level. At 1 K the photons that n <= 20 could notice are e^-394.
    n = np.repeat(np.arange(2, 21), np.arange(2, 21))
    l = np.concatenate([np.arange(k) for k in range(2, 21)])
    for matter in (300.0, 3000.0, 1e4):
        total = recombination_coefficient(n, l, matter).sum()
        found = effective_rates(SETUP, 1.0, matter, kept).recombination.sum()
        assert found == pytest.approx(total, rel=CONSERVATION)


def with_tail(n_max: int, matter: float) -> np.ndarray:
    """A of 2s and 2p at T_r = 1 K, and beyond n_max in proportion by a power law."""
    setup = small_setup(n_max, hydrogen={"energies": "nonrelativistic"})
    rates = effective_rates(setup, 1.0, matter).recombination
    shells = [
        recombination_coefficient(np.full(k, k), np.arange(k), matter).sum()
        for k in (n_max - 10, n_max)
    ]
    steepness = np.log(shells[0] / shells[1]) / np.log(n_max / (n_max - 10))
    tail = shells[1] * (n_max / (steepness - 1.0) - 0.5)
    return np.asarray(rates * (1.0 + tail / rates.sum()))


def test_total_against_hummer_1994() -> None:
    # Hummer 1994, MNRAS 268, 109, for infinite nuclear mass: lengths scale as 1/mu.
    mu = reduced_mass_ratio()
    numbers = read_table("hydrogen/case_b_recombination").numbers
    for log_kelvin, scaled in zip(
        numbers["log10_temperature"].tolist(), numbers["scaled_coefficient"].tolist(), strict=True
    ):
        kelvin = 10.0**log_kelvin
        total = with_tail(100, kelvin * mu).sum() * mu**2
        # Four digits, and the power-law tail beyond n = 100: 1e-3 of the whole at 1000 K.
        assert np.sqrt(kelvin) * total * 1e11 == pytest.approx(scaled, rel=1.5e-3)


def test_split_against_osterbrock() -> None:
    # Osterbrock & Ferland 2006, Astrophysics of Gaseous Nebulae, 1e4 K, low density: effective
    # into 2s 0.838e-13, into 2p 1.74e-13 cm^3/s (from memory; Storey & Hummer 1995 agree at low
    # density).
    to_2s, to_2p = with_tail(100, 1e4)
    assert to_2s / 0.838e-13 == pytest.approx(1.0, rel=5e-3)
    assert to_2p / 1.74e-13 == pytest.approx(1.0, rel=5e-3)


def test_more_levels_recombine_faster_and_converge() -> None:
    # Grin & Hirata 2010, Phys. Rev. D 81, 083005; Chluba, Vasil & Dursi 2010, MNRAS 407, 599: more
    # shells speed recombination, ever less so.
    totals = [
        effective_rates(small_setup(n), 2500.0, 2500.0).recombination.sum() for n in (5, 10, 20, 40)
    ]
    gains = np.diff(totals)
    assert np.all(gains > 0.0)
    assert np.all(gains[1:] < gains[:-1])
    assert gains[-1] < 0.5 * gains[-2]


def test_more_levels_leave_fewer_electrons() -> None:
    # The same papers: x_e falls as shells are added, most at low redshift, ever less so.
    left = []
    for n_max in (5, 10, 20, 40):
        setup = small_setup(n_max)
        table = distill(setup, tolerance=1e-6, certify=False)
        history = history_from_table(table, setup.cosmology, redshifts=[1100.0, 700.0, 200.0])
        left.append(history.free_electron_fraction)
    excess = np.array(left) / left[-1] - 1.0
    assert np.all(np.diff(excess, axis=0) < 0.0)
    assert np.all(np.diff(excess[:-1], axis=1) > 0.0)
    assert np.all(excess[2] < 0.5 * excess[1])


CHANGED = """
import json, sys
import levelnet.constants as const

a, electron = 1.0 + float(sys.argv[1]), 1.0 + float(sys.argv[2])
# CODATA's derived constants follow from alpha and m_e at fixed h, c, e and proton mass.
const.FINE_STRUCTURE *= a
const.ELECTRON_MASS_G *= electron
const.ELECTRON_PROTON_MASS_RATIO *= electron
const.RYDBERG_PER_CM *= a**2 * electron
const.RYDBERG_EV *= a**2 * electron
const.BOHR_RADIUS_CM /= a * electron
const.ATOMIC_TIME_S /= a**2 * electron
from levelnet import effective_rates
from tests.small_runs import small_setup

setup = small_setup(12, hydrogen={"energies": "nonrelativistic"})
rates = effective_rates(setup, [60.0, 900.0, 3500.0], [20.0, 900.0, 6000.0])
print(json.dumps([
    rates.log_recombination.tolist(), rates.log_photoionization.tolist(),
    rates.log_exchange[:, 0, 1].tolist(), rates.log_exchange[:, 1, 0].tolist(),
    rates.kept_levels.energy_ev.tolist(),
]))
"""


@pytest.mark.parametrize("change", [(0.0, 0.0), (0.05, 0.0), (0.0, -0.1), (-0.07, 0.12)])
def test_changed_constants_against_an_atom_built_from_them(change: tuple[float, float]) -> None:
    # The scaling laws against the whole computation made anew with other constants of nature, in a
    # process of its own: cross sections, Einstein coefficients, energies and thermal volumes each
    # pick up their own powers of alpha and m_e.
    root = Path(__file__).parents[2]
    done = subprocess.run(
        [sys.executable, "-c", CHANGED, *map(str, change)],
        capture_output=True,
        text=True,
        check=True,
        cwd=root,
        timeout=120,
    )
    capture, photo, up, down, energy = (np.array(part) for part in json.loads(done.stdout))
    physics = {"fine_structure_change": change[0], "electron_mass_change": change[1]}
    setup = small_setup(12, hydrogen={"energies": "nonrelativistic"}, physics=physics)
    found = effective_rates(setup, [60.0, 900.0, 3500.0], [20.0, 900.0, 6000.0])
    # The electron rule's own error; logarithms of exchange are up to 500.
    assert found.kept_levels.energy_ev == pytest.approx(energy, rel=1e-13)
    assert np.abs(found.log_recombination - capture).max() < 1e-10
    assert np.abs(found.log_photoionization - photo).max() < 1e-10
    assert np.abs(found.log_exchange[:, 0, 1] - up).max() < 1e-10
    assert np.abs(found.log_exchange[:, 1, 0] - down).max() < 1e-10


def physics_setup(**change: float) -> Setup:
    return small_setup(12, physics=change)


def test_scaling_identity_in_temperature() -> None:
    # Kaplinghat, Scherrer & Turner 1999, Phys. Rev. D 60, 023516: energies go as alpha^2 m, so an
    # atom whose alpha^2 m is unchanged keeps every Boltzmann factor, and only rates change, all
    # exchange by alpha^5 m and all captures by alpha^2 m^-2.
    ratio = 5.446170214889e-4  # electron over proton mass, CODATA 2022
    a = 1.04
    m = a**-2.0
    electron = m / (1.0 + ratio * (1.0 - m))  # m = electron (1 + ratio)/(1 + ratio electron)
    changed: EffectiveRates = effective_rates(
        physics_setup(fine_structure_change=a - 1.0, electron_mass_change=electron - 1.0),
        3000.0,
        2000.0,
    )
    plain = effective_rates(physics_setup(), 3000.0, 2000.0)
    assert changed.kept_levels.energy_ev == pytest.approx(plain.kept_levels.energy_ev, rel=1e-12)
    assert changed.recombination == pytest.approx(plain.recombination * a**6, rel=1e-10)
    assert changed.photoionization == pytest.approx(plain.photoionization * a**3, rel=1e-10)
    assert changed.exchange == pytest.approx(plain.exchange * a**3, rel=1e-10)
