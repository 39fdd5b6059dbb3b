"""The atoms of helium against sources outside: tables of the README.

    python -m benchmarks.helium_atom

The Coulomb approximation of He I line by line: rates as published
(`atomic_tables/helium/transition_rates.csv`), rates of the approximation alone with measured
energies, their ratio; then absorption oscillator strengths that follow. After that one line a check
of He I and He II, as `benchmarks.accuracy` has it for hydrogen. Half a minute.
"""

from __future__ import annotations

from benchmarks.accuracy import line  # pins threads

# isort: split
from collections.abc import Iterator

import numpy as np

from levelnet import constants as const
from levelnet.arrays import FloatArray, IntArray
from levelnet.atomic import helium_lines
from levelnet.atomic.bound_bound import dipole_blocks
from levelnet.atomic.bound_free import recombination_coefficient
from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.atomic.helium_bound_free import (
    ION_WEIGHT,
    helium_bound_free,
    helium_recombination_cm3_per_s,
)
from levelnet.atomic.helium_ground import GROUND, published_rates_per_s
from levelnet.atomic.helium_levels import PER_CM_EV, helium_levels, quantum_defect, term_numbers
from levelnet.atomic.helium_two_photon import helium_two_photon_profile
from levelnet.atomic.levels import ionization_scale_ev, reduced_mass_ratio
from levelnet.background.conditions import Conditions
from levelnet.escape.helium_lines import HigherLines, helium_ground_lines, kept_terms
from levelnet.escape.helium_treatment import HeliumSobolev, Seen
from levelnet.network.assembly import Workspace, factor_interior
from levelnet.network.helium import helium_ladders, helium_rate_constants, reduce_helium
from levelnet.network.helium_populations import helium_populations
from levelnet.network.ladder import hydrogen_ladder
from levelnet.network.populations import populations
from levelnet.network.rates import assemble_rates
from levelnet.network.reduced import ReducedRates
from levelnet.network.solve import solve_kept
from levelnet.network.tabulation import live_reduction
from levelnet.tables import read_table

N_MAX = 5
SIZES = (30, 100)
NEUTRAL_K = (1500.0, 3000.0, 6000.0, 12_000.0, 25_000.0)
ION_K = (6000.0, 12_000.0, 16_000.0, 25_000.0)
HIGHER: tuple[HigherLines, ...] = ("closed", "free", "feedback")
KEPT = ((2, 0), (2, 1))


def coulomb_approximation() -> None:
    """Print the table of lines."""
    levels, hydrogen = helium_levels(N_MAX), dipole_blocks(N_MAX)
    # The one place that leaves published rates out.
    plain = tuple(helium_lines._computed(levels, spin, hydrogen) for spin in (0, 1))
    computed = helium_lines.HeliumLines(levels, (plain[0], plain[1]))
    print("line           published s^-1   computed s^-1   ratio   f (published)")
    for (upper, lower), rate in published_rates_per_s().items():
        if not upper[-1].isalpha() or lower == GROUND:
            continue
        ends = levels.index(*term_numbers(upper)), levels.index(*term_numbers(lower))
        found = computed.einstein_a(*ends)
        omega = (levels.energy_ev[ends[0]] - levels.energy_ev[ends[1]]) / (2.0 * const.RYDBERG_EV)
        strength = rate * const.ATOMIC_TIME_S / (2.0 * const.FINE_STRUCTURE**3 * omega**2)
        strength *= levels.statistical_weight[ends[0]] / levels.statistical_weight[ends[1]]
        print(
            f"{upper + ' - ' + lower:14} {rate:14.4e} {found:15.4e} {found / rate:9.4f}"
            f" {strength:11.5f}"
        )


def series_of_drake(lowest: int, highest: int) -> float:
    """Largest miss of the published terms with l up to 3 by the series of defects, cm^-1."""
    levels, worst = helium_levels(10), 0.0
    for position in np.flatnonzero((levels.l <= 3) & (levels.n >= lowest) & (levels.n <= highest)):
        n, l, spin = (int(one[position]) for one in (levels.n, levels.l, levels.spin))
        nu = float(n)
        for _ in range(60):
            nu = n - float(quantum_defect(l, spin, -(nu**-2)))
        missed = levels.ionization_energy_ev[position] - levels.chi_ev / nu**2
        worst = max(worst, abs(float(missed)) / PER_CM_EV)
    return worst


def polarization() -> float:
    """Largest miss of the published terms with l above 3, cm^-1."""
    table, levels = read_table("helium/energy_levels"), helium_levels(10)
    named = zip(table.texts["level"][:-1], table.numbers["energy_per_cm"][:-1], strict=True)
    return max(
        abs(float(levels.energy_ev[levels.index(*term_numbers(name))]) / PER_CM_EV - float(energy))
        for name, energy in named
        if term_numbers(name)[1] > 3
    )


def shells_beyond(n_max: int, temperature_k: float) -> float:
    """Recombination to all shells of hydrogen above n_max, cm^3/s; above 200 by a power of n."""
    n = np.arange(n_max + 1, 201)
    totals = [recombination_coefficient(k, np.arange(k), temperature_k).sum() for k in n]
    power = -np.log(totals[-1] / totals[-11]) / np.log(n[-1] / n[-11])
    # Euler and Maclaurin: the sum from 201 on is the integral from 200, less half of the last.
    return float(sum(totals) + totals[-1] * (n[-1] / (power - 1.0) - 0.5))


def case_b(n_max: int, beyond: bool) -> FloatArray:
    """Case-B totals over those of Hummer & Storey 1998, less 1, at each of their temperatures."""
    table = read_table("helium/case_b_recombination").numbers
    atom = helium_bound_free(helium_levels(n_max))
    found = []
    for temperature_k in 10.0 ** table["log10_temperature"]:
        total = helium_recombination_cm3_per_s(atom, temperature_k)[1:].sum()
        if beyond:
            total += shells_beyond(n_max, temperature_k)
        found.append(total * np.sqrt(temperature_k) / 1e-11)
    relative: FloatArray = np.array(found) / table["scaled_coefficient"] - 1.0
    return relative


def neutral_departures(n_max: int) -> float:
    """Largest |ln b| of He I with its Sobolev lines, in a blackbody and Saha equilibrium."""
    worst = 0.0
    for higher in HIGHER:
        ladders = helium_ladders(n_max, kept_terms(n_max, higher))
        lines, constants = (
            helium_ground_lines(ladders, False, higher),
            helium_rate_constants(ladders),
        )
        weight, binding_ev = ladders.levels.statistical_weight, ladders.levels.ionization_energy_ev
        for t in NEUTRAL_K:
            value = reduce_helium(ladders, t)
            rates = assemble_rates(constants, value, np.zeros_like(value), t, t)
            # Per electron in 1 cm^3: n(1 1S) over n(He+), as x_e = 1 and n_He = 1 below.
            log_ratio = float(log_saha_factor(weight[:1] / ION_WEIGHT, binding_ev[:1], t, 2)[0])
            ion = 1.0 / (1.0 + np.exp(log_ratio))
            here = Conditions(t, t, 1.0, 1e-12, 1.0, ion, ion * np.exp(log_ratio))
            coupling = HeliumSobolev().couple(lines, ladders.kept, here, Seen(0.0))
            solution = solve_kept(ladders.kept, rates, coupling, here)
            found = helium_populations(ladders, solution.log_population, here)
            worst = max(worst, float(np.abs(found.log_departure).max()))
    return worst


def ion_departures(n_max: int) -> float:
    """Largest |ln b| of He II above n = 2 in a blackbody, n = 2 in Saha equilibrium."""
    ladder, worst = hydrogen_ladder(n_max, "measured", KEPT, charge=2), 0.0
    kept, work = ladder.kept, Workspace.of(ladder)
    for t in ION_K:
        log_kept = log_saha_factor(kept.statistical_weight, kept.ionization_energy_ev, t, 2)
        here = Conditions(t, t, 1.0, 1.0, 1.0, 1.0, 1.0)
        found = populations(factor_interior(ladder, t, work), log_kept, here)
        worst = max(worst, float(np.abs(found.log_departure[1:]).max()))
    return worst


def hydrogenic_limit(n_max: int) -> float:
    """Largest relative difference of rates between n = 2 and the continuum from hydrogen's."""
    terms = tuple((n, l, spin) for spin in (0, 1) for n, l in KEPT)
    ladders, worst = helium_ladders(n_max, terms, hydrogenic=True), 0.0
    kept, constants = ladders.kept, helium_rate_constants(ladders)
    assert kept.spin is not None
    hydrogen = live_reduction(hydrogen_ladder(n_max, "nonrelativistic", KEPT))
    for t in (1000.0, 3000.0, 8000.0, 20_000.0):
        value = reduce_helium(ladders, t)
        found = assemble_rates(constants, value, np.zeros_like(value), t, 0.8 * t)
        wanted = hydrogen.rates(t, 0.8 * t)
        for spin, share in ((0, 0.25), (1, 0.75)):
            mine = np.flatnonzero(kept.spin == spin)
            mine = mine[np.argsort(kept.l[mine])]
            worst = max(worst, *differences(found, mine, wanted, share))
    return worst


def scaled_ion(n_max: int) -> float:
    """Largest relative difference of the rates of He II from hydrogen's scaled by Z and mass."""
    mass = reduced_mass_ratio(2) / reduced_mass_ratio(1)
    unit, worst = ionization_scale_ev(2) / ionization_scale_ev(1), 0.0
    ion, atom = (
        live_reduction(hydrogen_ladder(n_max, "nonrelativistic", KEPT, charge=z)) for z in (2, 1)
    )
    for t in (4000.0, 12_000.0, 25_000.0):
        found, wanted = ion.rates(t, 0.9 * t), atom.rates(t / unit, 0.9 * t / unit)
        both = np.arange(2)
        worst = max(worst, *differences(found, both, wanted, 2.0 / mass**2, 16.0 * mass))
    return worst


def differences(
    found: ReducedRates, mine: IntArray, wanted: ReducedRates, capture: float, rate: float = 1.0
) -> Iterator[float]:
    """Relative differences of 2s and 2p, at `mine` in `found`, from `wanted` times two factors."""
    recombination = found.recombination[mine] / (capture * wanted.recombination)
    yield float(np.abs(recombination - 1.0).max())
    shift = found.log_photoionization[mine] - wanted.log_photoionization - np.log(rate)
    yield float(np.abs(shift).max())
    exchange = found.exchange[np.ix_(mine, mine)][[0, 1], [1, 0]]
    yield float(np.abs(exchange / (rate * wanted.exchange[[0, 1], [1, 0]]) - 1.0).max())


def two_photon_distribution() -> float:
    """Largest difference from the values of Derevianko & Johnson 1997, whose largest is 2.3."""
    table = read_table("helium/two_photon_distribution").numbers
    return float(np.abs(helium_two_photon_profile(table["y"]) - table["distribution"]).max())


def main() -> None:
    """Print the table, then the checks."""
    coulomb_approximation()
    print()
    line("He I, l <= 3, n = 3: Drake's series from NIST's terms, cm^-1", series_of_drake(3, 3))
    line("He I, l <= 3, n = 4 to 10: the same, cm^-1", series_of_drake(4, 10))
    line("He I, l > 3: polarization from NIST's terms, cm^-1", polarization())
    line("He I, 2 1S two-photon, from Derevianko & Johnson 1997", two_photon_distribution())
    for n_max in SIZES:
        line(f"He I, n_max = {n_max}, 1500 to 25000 K, largest |ln b|", neutral_departures(n_max))
        line(f"He II, n_max = {n_max}, 6000 to 25000 K, largest |ln b|", ion_departures(n_max))
        line(f"He I without defects from hydrogen, n_max = {n_max}", hydrogenic_limit(n_max))
        line(f"He II from scaled hydrogen, n_max = {n_max}", scaled_ion(n_max))
    print("case-B totals of He I over Hummer & Storey 1998, less 1, per cent, 1e3 to 10^4.4 K")
    for n_max, beyond in ((100, True), (30, True), (30, False)):
        what = "with" if beyond else "without"
        figures = " ".join(f"{100.0 * one:+.2f}" for one in case_b(n_max, beyond))
        print(f"  n_max = {n_max:3d}, {what:7s} hydrogen's shells beyond: {figures}", flush=True)


if __name__ == "__main__":
    main()
