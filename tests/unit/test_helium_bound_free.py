"""Photoionization of He I and recombination to it: published totals, laws, the hydrogenic limit."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from scipy.integrate import quad

from levelnet import constants as const
from levelnet.atomic.bound_free import bound_free, recombination_coefficient
from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.atomic.helium_bound_free import (
    ION_WEIGHT,
    ground_state_cross_section,
    helium_bound_free,
    helium_photoionization_per_s,
    helium_recombination_cm3_per_s,
)
from levelnet.atomic.helium_levels import helium_levels
from levelnet.atomic.radiation import planck_occupation
from levelnet.errors import RangeError
from levelnet.tables import read_table
from tests.tolerances import ROUND_OFF

N_MAX = 60
ATOM = helium_bound_free(helium_levels(N_MAX))
LIMIT = helium_bound_free(helium_levels(35, hydrogenic=True))


def threshold_mb(n: int, l: int, spin: int) -> float:
    return float(1e18 * ATOM.cross_section_cm2[ATOM.levels.index(n, l, spin), 0])


def shells_beyond(temperature_k: float) -> float:
    """Recombination to all shells n > N_MAX of hydrogen: to 150, then by the law of the last two.

    By weight, singlets and triplets of He I together are (2l+1), as hydrogen's levels are.
    """
    n = np.arange(N_MAX + 1, 151)
    totals = [recombination_coefficient(k, np.arange(k), temperature_k).sum() for k in n]
    power = -np.log(totals[-1] / totals[-2]) / np.log(n[-1] / n[-2])
    # Euler and Maclaurin: the sum from 151 on is the integral from 150, less half of the last.
    return float(sum(totals) + totals[-1] * (n[-1] / (power - 1) - 0.5))


def test_case_b_totals_of_hummer_and_storey() -> None:
    # Hummer & Storey 1998, MNRAS 297, 1073: sum over every level but the ground state, no field.
    numbers = read_table("helium/case_b_recombination").numbers
    for log_temperature, published in zip(
        numbers["log10_temperature"], numbers["scaled_coefficient"], strict=True
    ):
        temperature = 10.0**log_temperature
        direct = helium_recombination_cm3_per_s(ATOM, temperature)[1:].sum()
        total = (direct + shells_beyond(temperature)) * np.sqrt(temperature) * 1e11
        assert total == pytest.approx(published, rel=0.01), temperature


def test_recombination_to_the_ground_state() -> None:
    # 1.59e-13 at 1e4 K and 2.23e-13 at 5e3 K (Osterbrock 1989, Astrophysics of Gaseous Nebulae;
    # from memory), with an older cross section.
    for temperature, expected in ((1e4, 1.59e-13), (5e3, 2.23e-13)):
        alpha = helium_recombination_cm3_per_s(ATOM, temperature)[0]
        assert alpha / expected == pytest.approx(1.0, abs=0.025)


def test_ground_state_cross_section() -> None:
    # Samson et al. 1994, J. Phys. B 27, 887, measured (from memory): 7.40 Mb at the threshold.
    assert ground_state_cross_section(24.5874) / 7.40e-18 == pytest.approx(1.0, abs=0.01)
    # Thomas-Reiche-Kuhn: two electrons; 0.425 of it in the lines to n 1P. The fit is good to a few
    # per cent.
    integral = quad(
        lambda u: ground_state_cross_section(np.exp(u)) * np.exp(u), np.log(24.5874), np.log(5e4)
    )[0]
    unit = 2 * np.pi**2 * const.FINE_STRUCTURE * const.BOHR_RADIUS_CM**2 * 2 * const.RYDBERG_EV
    assert integral / unit + 0.425 == pytest.approx(2.0, rel=0.025)
    assert ATOM.cross_section_cm2[0, 0] == ground_state_cross_section(
        ATOM.levels.ionization_energy_ev[0] + ATOM.levels.chi_ev * ATOM.grid.energy[0]
    )


def test_thresholds_of_excited_levels() -> None:
    # Mb, within 3 per cent: calculations as Jacobs 1974, Phys. Rev. A 9, 1938, and Fernley, Taylor
    # & Seaton 1987, J. Phys. B 20, 6457 (from memory, some with two digits).
    for level, expected in {
        (2, 0, 1): 5.48,
        (2, 0, 0): 9.2,
        (2, 1, 1): 16.0,
        (2, 1, 0): 13.5,
    }.items():
        assert threshold_mb(*level) == pytest.approx(expected, rel=0.03), level


@pytest.mark.parametrize(("n", "l", "spin"), [(3, 0, 1), (3, 1, 0)])
def test_cross_section_of_fast_electrons_against_mpmath(n: int, l: int, spin: int) -> None:
    # At 0.45 chi: Whittaker's function of the bound level (Hartree 1928) times Coulomb functions of
    # unit energy density, with the phase of Drake's defect of the channel continued to this energy
    # (quantum-defect method: Burgess & Seaton 1960, MNRAS 120, 121). Kept at the threshold, the
    # defects would give 1.5 per cent less and 1.6 more. The integral begins at the core radius of
    # the higher l, further in only the regular part means something: that part, and twice the
    # radius, are 0.1 per cent each. Ratios, because pytest.approx lets 1e-12 pass by default.
    node = int(np.searchsorted(ATOM.grid.energy, 0.4))
    energy = float(ATOM.grid.energy[node])
    assert 0.4 < energy < 0.55
    position = ATOM.levels.index(n, l, spin)
    nu = float(ATOM.levels.effective_n[position])
    total = 0.0
    for l_free in (l - 1, l + 1)[l == 0 :]:
        inner = 0.22 if max(l, l_free) == 2 else 0.05
        radial = dipole_integral(nu, l, energy, l_free, drake_defect(l_free, spin, energy), inner)
        total += max(l, l_free) / (2 * l + 1) * radial**2
    length = const.BOHR_RADIUS_CM * (1.0 + 1.0 / const.ALPHA_ELECTRON_MASS_RATIO)
    expected = 4 * np.pi**2 * const.FINE_STRUCTURE / 3 * length**2 * 0.5 * (nu**-2 + energy) * total
    assert ATOM.cross_section_cm2[position, node] / expected == pytest.approx(1.0, abs=2e-3)


def drake_defect(l: int, spin: int, energy: float) -> float:
    """Quantum defect straight from the table."""
    numbers = read_table("helium/quantum_defects").numbers
    row = int(np.flatnonzero((numbers["l"] == l) & (numbers["spin"] == spin))[0])
    d0, d2, d4 = (float(np.nan_to_num(numbers[name][row])) for name in ("d0", "d2", "d4"))
    return d0 - d2 * energy + d4 * energy**2


def dipole_integral(
    nu: float, l: int, energy: float, l_free: int, defect: float, inner: float
) -> float:
    """Integrate u_nul r u_kl' from `inner` to 60 Bohr radii, by Gauss and Legendre in sqrt(r)."""
    k, total = mpmath.sqrt(energy), 0.0
    norm = mpmath.sqrt(nu**2 * mpmath.gamma(nu + l + 1) * mpmath.gamma(nu - l))
    nodes, weights = np.polynomial.legendre.leggauss(40)
    half = 0.5 * (np.sqrt(60.0) - np.sqrt(inner))
    for root, weight in zip(np.sqrt(inner) + half * (nodes + 1), half * weights, strict=True):
        r = mpmath.mpf(float(root)) ** 2
        bound = mpmath.whitw(nu, l + 0.5, 2 * r / nu) / norm
        free = mpmath.coulombf(l_free, -1 / k, k * r) * mpmath.cospi(defect)
        free += mpmath.coulombg(l_free, -1 / k, k * r) * mpmath.sinpi(defect)
        total += (
            2 * root * weight * float((r * bound * free * mpmath.sqrt(2 / (mpmath.pi * k))).real)
        )
    return total


@pytest.mark.parametrize("spin", [0, 1])
@pytest.mark.parametrize("l", [0, 1, 2, 3])
def test_hydrogenic_limit_is_hydrogen(l: int, spin: int) -> None:
    hydrogen = bound_free(35)
    below = LIMIT.grid.energy < 1.0
    for position in LIMIT.levels.series(l, spin):
        expected = hydrogen.cross_section_cm2[LIMIT.levels.n[position] - 1][l]
        got = LIMIT.cross_section_cm2[position]
        # Above chi what is left cancels from large parts, up to 25 chi.
        np.testing.assert_allclose(got[below], expected[below], rtol=1e-10)
        np.testing.assert_allclose(got, expected, rtol=1e-7)


def test_hydrogenic_limit_of_recombination() -> None:
    # Singlets take a quarter and triplets three quarters of what hydrogen's level takes.
    alpha = helium_recombination_cm3_per_s(LIMIT, 5000.0, 3000.0)
    levels = LIMIT.levels
    expected = recombination_coefficient(levels.n, levels.l, 5000.0, 3000.0)
    # The ion has weight 2 in the limit too.
    expected = expected * (2 * levels.spin + 1) / 4
    np.testing.assert_allclose(alpha, expected, rtol=1e-10)


def test_high_levels_become_hydrogenic_with_l() -> None:
    # d goes to p too, whose defect is 0.07 in the triplets.
    hydrogen = bound_free(N_MAX).cross_section_cm2
    for spin in (0, 1):
        for l, error in ((2, 0.06), (3, 1e-3)):
            for position in ATOM.levels.series(l, spin)[2:20]:
                ratio = ATOM.cross_section_cm2[position, :60]
                ratio = ratio / hydrogen[ATOM.levels.n[position] - 1][l][:60]
                np.testing.assert_allclose(ratio, 1.0, atol=error)


@pytest.mark.parametrize("temperature_k", [300.0, 4000.0, 2.5e4])
def test_detailed_balance(temperature_k: float) -> None:
    levels = ATOM.levels
    alpha = helium_recombination_cm3_per_s(ATOM, temperature_k, temperature_k)
    beta = helium_photoionization_per_s(ATOM, temperature_k)
    saha = log_saha_factor(
        levels.statistical_weight / ION_WEIGHT, levels.ionization_energy_ev, temperature_k, 2
    )
    possible = beta > 1e-290
    np.testing.assert_allclose(
        np.log(alpha[possible] / beta[possible]), saha[possible], rtol=0, atol=1e-12
    )
    # Saha (1920): n(1 1S)/(n_e n_ion) = (1/4) (h^2 / 2 pi m k T)^(3/2) e^(I/kT).
    volume = 4.1424e-16 * temperature_k**-1.5
    boltzmann = levels.ionization_energy_ev[0] / (const.BOLTZMANN_EV_K * temperature_k)
    assert saha[0] == pytest.approx(np.log(volume / 4) + boltzmann, abs=5e-4)


@pytest.mark.parametrize("level", [(1, 0, 0), (2, 0, 1), (2, 1, 0), (7, 3, 1), (30, 2, 0)])
def test_photoionization_is_the_integral_over_the_field(level: tuple[int, int, int]) -> None:
    # int (8 pi nu^2/c^2) sigma f d(nu), without the Milne relation, on the nodes of the rule.
    position, temperature = ATOM.levels.index(*level), 8000.0
    energy = ATOM.levels.ionization_energy_ev[position] + ATOM.levels.chi_ev * ATOM.grid.energy
    photons = 8 * np.pi * (energy / (const.PLANCK_EV_S * const.SPEED_OF_LIGHT_CM_S)) ** 2
    width = ATOM.levels.chi_ev * ATOM.grid.weight / const.PLANCK_EV_S
    field = planck_occupation(energy, temperature)
    expected = (photons * ATOM.cross_section_cm2[position] * field) @ width
    got = helium_photoionization_per_s(ATOM, temperature)[position]
    assert got / expected == pytest.approx(1.0, abs=1e-10)


def test_stimulated_part_only_adds() -> None:
    without = helium_recombination_cm3_per_s(ATOM, 5000.0)
    with_field = helium_recombination_cm3_per_s(ATOM, 5000.0, 5000.0)
    assert np.all(with_field >= without)
    assert with_field[0] / without[0] == pytest.approx(1.0, abs=1e-12)  # e^(-57) photons
    cold = helium_recombination_cm3_per_s(ATOM, 5000.0, 0.0)
    np.testing.assert_allclose(cold, without, rtol=ROUND_OFF)


def test_cross_sections_are_positive_and_join_where_the_method_changes() -> None:
    assert np.all(ATOM.cross_section_cm2 > 0)
    # Over that of hydrogen, but for the density of levels, it changes from n to n + 1 by little,
    # also where n is no longer computed directly (n = 30 for this electron, 1e-3 chi).
    hydrogen = bound_free(N_MAX).cross_section_cm2
    node = int(np.searchsorted(ATOM.grid.energy, 1e-3))
    for spin in (0, 1):
        for l in (0, 1, 2):
            series = ATOM.levels.series(l, spin)
            n, nu = ATOM.levels.n[series], ATOM.levels.effective_n[series]
            ratio = ATOM.cross_section_cm2[series, node] * (nu / n) ** 3
            ratio /= [hydrogen[k - 1][l][node] for k in n]
            assert np.all(np.abs(np.diff(np.log(ratio)))[10:] < 0.01), (l, spin)


def test_bad_temperatures_and_energies() -> None:
    with pytest.raises(RangeError, match=r"matter temperature 0\.01 K: allowed are 0\.02 to 1"):
        helium_recombination_cm3_per_s(ATOM, 0.01)
    with pytest.raises(RangeError, match="matter temperature nan"):
        helium_photoionization_per_s(ATOM, np.nan)
    with pytest.raises(RangeError, match=r"photon_energy_ev = 20: allowed are 24\.587 to 50000 eV"):
        ground_state_cross_section([30.0, 20.0])
    assert not ATOM.cross_section_cm2.flags.writeable
