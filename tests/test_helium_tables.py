"""Laws of the published tables of He I: rules of whole tables rather than sample rows."""

from __future__ import annotations

import numpy as np
import pytest

from levelnet.atomic.helium_levels import term_name, term_numbers
from levelnet.tables import read_table


def test_energy_levels_are_the_terms_they_are_named_for() -> None:
    table = read_table("helium/energy_levels")
    rows = {name: table.numbers[name][:-1] for name in ("n", "l", "spin", "statistical_weight")}
    n, l, spin = (rows[name].astype(int) for name in ("n", "l", "spin"))
    names = [term_name(*one) for one in zip(n.tolist(), l.tolist(), spin.tolist(), strict=True)]
    assert tuple(names) == table.texts["level"][:-1]
    assert len(set(names)) == len(names)
    assert np.all((l >= 0) & (l < n) & (spin >= 0) & (spin <= 1))
    assert np.array_equal(rows["statistical_weight"], (2 * spin + 1) * (2 * l + 1))
    assert table.texts["level"][-1] == "limit"
    # Every term with l up to 3 of n = 1 to 10, but 1 3S, which Pauli forbids.
    expected = {(k, j, s) for k in range(1, 11) for j in range(min(k, 4)) for s in (0, 1)}
    low = {(a, b, c) for a, b, c in zip(n, l, spin, strict=True) if b <= 3}
    assert low == expected - {(1, 0, 1)}


def test_energy_levels_obey_hund_and_the_core() -> None:
    # A triplet lies below its singlet or on it, to the rounding of the table (Hund's first rule);
    # energy rises with l within n and spin, but for n 1P, pushed up over n 1D; all below the limit.
    table = read_table("helium/energy_levels")
    energies = table.numbers["energy_per_cm"]
    at = dict(zip((term_numbers(x) for x in table.texts["level"][:-1]), energies, strict=False))
    for (n, l, spin), energy in at.items():
        assert energy < energies[-1]
        if spin == 0 and (n, l, 1) in at:
            assert at[n, l, 1] <= energy + 1e-9
        if (n, l + 1, spin) in at and (l, spin) != (1, 0):
            assert energy <= at[n, l + 1, spin] + 1e-9
        if (n + 1, l, spin) in at:
            assert energy < at[n + 1, l, spin]


def test_fine_structure_averages_to_the_term() -> None:
    fine = read_table("helium/fine_structure")
    j, weight = fine.numbers["j"], fine.numbers["statistical_weight"]
    assert np.array_equal(weight, 2 * j + 1)
    assert sorted(j) == [0, 1, 2]
    levels = read_table("helium/energy_levels")
    term = levels.numbers["energy_per_cm"][levels.texts["level"].index("2 3P")]
    centroid = np.average(fine.numbers["energy_per_cm"], weights=weight)
    assert centroid == pytest.approx(term, abs=1e-3)  # both are given to 0.001 cm^-1


def test_quantum_defects_give_the_published_terms() -> None:
    # Two published sources: Drake's defects against the terms of NIST, as far as the entry says.
    # nu = n - delta(nu) is found by iteration.
    numbers = read_table("helium/quantum_defects").numbers
    levels = read_table("helium/energy_levels")
    limit = levels.numbers["energy_per_cm"][-1]
    for row in range(len(numbers["row"])):
        l, spin = int(numbers["l"][row]), int(numbers["spin"][row])
        d0, d2, d4 = (float(np.nan_to_num(numbers[name][row])) for name in ("d0", "d2", "d4"))
        for n in range(max(2, l + 1), 11):
            energy = levels.numbers["energy_per_cm"][
                levels.texts["level"].index(term_name(n, l, spin))
            ]
            nu = float(n)
            for _ in range(60):
                nu = n - (d0 + d2 / nu**2 + d4 / nu**4)
            missed_per_cm = limit - 109722.273 / nu**2 - energy
            assert abs(missed_per_cm) < {2: 7.9, 3: 0.18}.get(n, 0.03), (n, l, spin)


def test_transition_rates_obey_the_selection_rules() -> None:
    table = read_table("helium/transition_rates")
    levels = read_table("helium/energy_levels")
    at = dict(
        zip(
            (term_numbers(x) for x in levels.texts["level"][:-1]),
            levels.numbers["energy_per_cm"],
            strict=False,
        )
    )
    seen = set()
    for up, low, kind in zip(*(table.texts[x] for x in ("upper", "lower", "kind")), strict=True):
        upper, lower = term_numbers(up), term_numbers(low)
        assert at[upper] > at[lower]
        assert (up, low) not in seen
        seen.add((up, low))
        changes = abs(upper[1] - lower[1]), upper[2] - lower[2]
        allowed = {"E1": (1, 0), "two-photon": (0, 0), "M1": (0, 1)}
        assert changes == allowed.get(kind, (1, 1)), (up, low)
    assert all(table.texts["obtained"])


def test_two_photon_distribution_rises_to_its_middle() -> None:
    numbers = read_table("helium/two_photon_distribution").numbers
    assert np.all(np.diff(numbers["distribution"]) > 0)
    assert np.all((numbers["y"] > 0) & (numbers["y"] < 0.5))


def test_case_b_totals_of_helium_lie_above_those_of_hydrogen() -> None:
    helium, hydrogen = (
        read_table(f"{species}/case_b_recombination").numbers for species in ("helium", "hydrogen")
    )
    ratio = helium["scaled_coefficient"] / hydrogen["scaled_coefficient"]
    # More and more at high temperature, where the low s levels count, which are deeper in He I.
    assert np.all(np.diff(ratio) > 0)
    assert np.all((ratio > 1.0) & (ratio < 1.15))
