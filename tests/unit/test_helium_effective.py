"""Effective rates of He I and He II: exact and from tables."""

from __future__ import annotations

import dataclasses
import itertools
import math
from collections.abc import Iterable
from functools import lru_cache

import numpy as np
import pytest
from scipy import sparse
from scipy.sparse.linalg import splu

from levelnet import EffectiveRates, EffectiveTable, effective_rates
from levelnet import constants as const
from levelnet.atomic.bound_free import recombination_coefficient
from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.atomic.helium_bound_free import (
    HeliumBoundFree,
    helium_bound_free,
    helium_photoionization_per_s,
    helium_recombination_cm3_per_s,
)
from levelnet.atomic.helium_levels import HeliumLevels, helium_levels
from levelnet.atomic.helium_lines import helium_lines
from levelnet.atomic.levels import ionization_scale_ev, reduced_mass_ratio
from levelnet.atomic.physics import Physics, scales
from levelnet.cli.table_output import table_summary, table_values
from levelnet.distilled import species
from levelnet.errors import InputError, RangeError
from levelnet.history.setup import Setup
from levelnet.network.helium import helium_ladders
from levelnet.tables import read_table
from tests.helium_tables import helium_table
from tests.small_runs import small_setup
from tests.small_tables import small_table
from tests.tolerances import ELIMINATION

FOUR = {(2, 0, 0), (2, 1, 0), (2, 0, 1), (2, 1, 1)}


def setup_of(n_max: int, higher: str = "closed", **parts: object) -> Setup:
    lines = {"helium_higher_lines": higher}
    return small_setup(n_max, **({"helium": {"n_max": n_max}, "lines": lines} | parts))


def terms(rates: EffectiveRates) -> list[tuple[int, int, int]]:
    kept = rates.kept_levels
    assert kept.spin is not None
    return list(zip(kept.n.tolist(), kept.l.tolist(), kept.spin.tolist(), strict=True))


# ---- the whole rate matrix


@lru_cache(maxsize=4)
def atom_of(n_max: int) -> tuple[HeliumLevels, HeliumBoundFree, np.ndarray]:
    """Levels, continuum, and Einstein A from row to column, line by line."""
    levels = helium_levels(n_max)
    lines, size = helium_lines(levels), len(levels)
    a = np.zeros((size, size))
    for upper, lower in itertools.permutations(range(1, size), 2):
        a[upper, lower] = lines.einstein_a(upper, lower)
    return levels, helium_bound_free(levels), a


class Whole:
    """Every excited level of He I at one T_r, kept ones split off; solved by scipy's sparse LU.

    Rates by Einstein's relations (1917, Phys. Z. 18, 121), term by term.
    """

    def __init__(self, n_max: int, kept: Iterable[tuple[int, int, int]], kelvin: float) -> None:
        levels, continuum, a = atom_of(n_max)
        energy, weight = levels.energy_ev, levels.statistical_weight
        gap = np.abs(energy[:, None] - energy) / (const.BOLTZMANN_EV_K * kelvin)
        occupation = np.divide(1.0, np.expm1(np.where(a + a.T > 0.0, gap, 1.0)))
        rate = a * (1.0 + occupation) + (a * occupation).T * (weight / weight[:, None])
        photo = helium_photoionization_per_s(continuum, kelvin)
        self.kelvin, self.continuum = kelvin, continuum
        self.kept = np.array([levels.index(*one) for one in kept])
        self.inside = np.setdiff1d(np.arange(1, len(levels)), self.kept)
        inner = rate[np.ix_(self.inside, self.inside)]
        to_kept = rate[np.ix_(self.inside, self.kept)]
        loss = inner.sum(axis=1) + to_kept.sum(axis=1) + photo[self.inside]
        solver = splu(sparse.csc_array(np.diag(loss) - inner))
        # Chance to end in each kept level, shape (n_inside, n_kept), and in the continuum.
        self.fate = solver.solve(to_kept)
        self.lost = solver.solve(photo[self.inside])
        self.out = rate[np.ix_(self.kept, self.inside)]
        self.direct, self.photo = rate[np.ix_(self.kept, self.kept)], photo[self.kept]

    @property
    def exchange(self) -> np.ndarray:
        total = self.direct + self.out @ self.fate
        np.fill_diagonal(total, 0.0)
        return total

    @property
    def photoionization(self) -> np.ndarray:
        return self.photo + self.out @ self.lost

    def recombination(self, matter_k: float) -> np.ndarray:
        alpha = helium_recombination_cm3_per_s(self.continuum, matter_k, self.kelvin)
        return alpha[self.kept] + alpha[self.inside] @ self.fate


@pytest.mark.parametrize(
    ("n_max", "higher", "more"),
    [
        (6, "closed", ()),
        (6, "free", ()),
        (6, "closed", ((4, 3, 0), (3, 2, 1), (5, 0, 1))),
        (12, "feedback", ()),
    ],
)
def test_against_the_whole_rate_matrix(
    n_max: int, higher: str, more: tuple[tuple[int, int, int], ...]
) -> None:
    """Computed here: every level in one sparse matrix, lines and continuum one by one."""
    setup = setup_of(n_max, higher)
    kept = (*terms(effective_rates(setup, 4e3, 4e3, atom="He I")), *more)
    for kelvin in (1500.0, 6000.0, 20_000.0):
        found = effective_rates(setup, kelvin, 0.8 * kelvin, kept, "He I")
        assert set(terms(found)) == set(kept)
        whole = Whole(n_max, terms(found), kelvin)
        np.testing.assert_allclose(
            found.recombination, whole.recombination(0.8 * kelvin), rtol=ELIMINATION
        )
        np.testing.assert_allclose(found.photoionization, whole.photoionization, rtol=ELIMINATION)
        np.testing.assert_allclose(found.exchange, whole.exchange, rtol=ELIMINATION)


def test_terms_that_are_kept_are_those_with_open_lines() -> None:
    expected = {"closed": set(), "free": {(3, 1, 0), (4, 1, 0), (5, 1, 0)}}
    for higher, more in expected.items():
        found = effective_rates(setup_of(5, higher), 5e3, 4e3, atom="He I")
        assert set(terms(found)) == FOUR | more
        assert (np.diff(found.kept_levels.energy_ev) > 0.0).all()
        assert found.kept_levels.ground_weight == 1.0
    spin = effective_rates(setup_of(5), 5e3, 4e3, atom="He I").kept_levels.spin
    assert spin is not None and spin.tolist() == [1, 0, 1, 0]


def test_shapes_and_what_does_not_talk() -> None:
    radiation = np.array([[60.0], [3000.0]])
    found = effective_rates(setup_of(5), radiation, [50.0, 900.0, 1e5], atom="He I")
    assert found.recombination.shape == (2, 3, 4)
    one = effective_rates(setup_of(5), 3000.0, 900.0, atom="He I")
    np.testing.assert_allclose(found.log_recombination[1, 1], one.log_recombination, rtol=1e-14)
    spin = np.array([s for _, _, s in terms(one)])
    talks = spin[:, None] == spin
    np.fill_diagonal(talks, False)
    assert np.isneginf(found.log_exchange[..., ~talks]).all()
    assert np.isfinite(found.log_exchange[..., talks]).all()
    assert np.isfinite(found.log_photoionization).all()


# ---- limits and laws


@pytest.mark.parametrize(("radiation_k", "matter_k"), [(60.0, 40.0), (3000.0, 2500.0), (2e4, 2e4)])
def test_hydrogenic_limit_is_hydrogen(
    radiation_k: float, matter_k: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Closed form: without defects each spin is hydrogen; a quarter of recombination is singlet."""
    monkeypatch.setattr(
        species, "helium_ladders", lambda *a, **k: helium_ladders(*a, hydrogenic=True, **k)
    )
    setup = setup_of(7, hydrogen={"energies": "nonrelativistic"})
    found = effective_rates(setup, radiation_k, matter_k, atom="He I")
    wanted = effective_rates(setup, radiation_k, matter_k)
    place = {one: k for k, one in enumerate(terms(found))}
    for spin, share in ((0, 0.25), (1, 0.75)):
        s, p = place[2, 0, spin], place[2, 1, spin]
        for row, at in ((0, s), (1, p)):
            shift = found.log_recombination[at] - wanted.log_recombination[row]
            assert shift == pytest.approx(math.log(share), abs=1e-9)
            shift = found.log_photoionization[at] - wanted.log_photoionization[row]
            assert shift == pytest.approx(0.0, abs=1e-9)
        if radiation_k > 1000.0:
            assert found.exchange[s, p] == pytest.approx(wanted.exchange[0, 1], rel=1e-9)
            assert found.exchange[p, s] == pytest.approx(wanted.exchange[1, 0], rel=1e-9)


@pytest.mark.parametrize("radiation_k", [0.1, 12.0, 100.0, 1000.0, 6000.0, 1e5])
def test_helium_ion_is_hydrogen_scaled(radiation_k: float) -> None:
    """Closed form: energies as Z^2 mu, rates as Z^4 mu, recombination as Z mu^-2 at T/(Z^2 mu)."""
    mass = reduced_mass_ratio(2) / reduced_mass_ratio(1)
    unit = ionization_scale_ev(2) / ionization_scale_ev(1)
    assert unit == pytest.approx(4.0 * mass, rel=1e-14)
    setup = setup_of(8, hydrogen={"energies": "nonrelativistic"})
    kept = ((2, 0), (2, 1), (4, 3))
    for matter_k in (0.9 * radiation_k, 300.0):
        ion = effective_rates(setup, radiation_k, matter_k, kept, "He II")
        atom = effective_rates(setup, radiation_k / unit, matter_k / unit, kept)
        assert ion.kept_levels.spin is None
        shift = ion.log_recombination - atom.log_recombination
        np.testing.assert_allclose(shift, math.log(2.0 / mass**2), atol=1e-10)
        for name in ("log_photoionization", "log_exchange"):
            mine, other = getattr(ion, name), getattr(atom, name)
            known = np.isfinite(other)
            assert (np.isfinite(mine) == known).all()
            scale = np.abs(other[known]).max()
            np.testing.assert_allclose(
                mine[known] - other[known], math.log(16.0 * mass), atol=1e-10 + 1e-13 * scale
            )


@pytest.mark.parametrize("atom", ["He I", "He II"])
@pytest.mark.parametrize("kelvin", [200.0, 1500.0, 9000.0, 50_000.0])
def test_detailed_balance(atom: str, kelvin: float) -> None:
    """Law: at T_m = T_r Saha-Boltzmann populations make every net flow vanish."""
    found = effective_rates(setup_of(6, "free"), kelvin, kelvin, atom=atom)
    kept, thermal_ev = found.kept_levels, const.BOLTZMANN_EV_K * kelvin
    ion_weight = 2.0 if atom == "He I" else 1.0
    log_saha = log_saha_factor(
        kept.statistical_weight / ion_weight, kept.ionization_energy_ev, kelvin, 2
    )
    departure = found.log_recombination - found.log_photoionization - log_saha
    scale = np.abs(found.log_photoionization).max()
    assert np.abs(departure).max() < 1e-13 + 1e-15 * scale
    log_population = np.log(kept.statistical_weight) - kept.energy_ev / thermal_ev
    flow = log_population[:, None] + found.log_exchange
    talks = np.isfinite(flow)
    assert talks.any()
    assert (talks == talks.T).all()
    assert np.abs(flow[talks] - flow.T[talks]).max() < 1e-13 * scale


def test_photoionization_needs_no_balance_to_be_right() -> None:
    """Law: kept levels of a blackbody are emptied as fast as they are fed, by separate sums."""
    whole = Whole(6, sorted(FOUR), 5000.0)
    found = effective_rates(setup_of(6), 5000.0, 5000.0, sorted(FOUR), "He I")
    order = [sorted(FOUR).index(one) for one in terms(found)]
    np.testing.assert_allclose(
        found.photoionization, whole.photoionization[order], rtol=ELIMINATION
    )


def beyond(n_max: int, kelvin: float) -> float:
    """Recombination to all shells n > `n_max` of hydrogen: to 150, then by the law of the last two.

    By weight, singlets and triplets of He I together are (2l+1), as hydrogen's levels are.
    """
    n = np.arange(n_max + 1, 151)
    totals = [recombination_coefficient(k, np.arange(k), kelvin).sum() for k in n]
    power = -np.log(totals[-1] / totals[-2]) / np.log(n[-1] / n[-2])
    return float(sum(totals) + totals[-1] * (n[-1] / (power - 1) - 0.5))


def test_case_b_totals_of_hummer_and_storey() -> None:
    """Published: Hummer & Storey 1998, MNRAS 297, 1073, sum over all excited levels, no field.

    In a cold field every atom that is caught comes down to a kept level, so that the sum of A_i is
    that of all excited levels of the atom; what is caught above n_max is added.
    """
    n_max = 20
    numbers = read_table("helium/case_b_recombination").numbers
    kelvin = 10.0 ** numbers["log10_temperature"]
    found = effective_rates(setup_of(n_max), 50.0, kelvin, atom="He I")
    total = found.recombination.sum(axis=-1) + [beyond(n_max, one) for one in kelvin]
    published = numbers["scaled_coefficient"] * 1e-11 / np.sqrt(kelvin)
    np.testing.assert_allclose(total, published, rtol=0.01)


@pytest.mark.parametrize("atom", ["He I", "He II"])
def test_changed_constants_are_leading_powers(atom: str) -> None:
    """Closed form: at T times a^2 m, rates go as a^5 m and recombination as a^2 m^-2."""
    physics = {"fine_structure_change": 0.02, "electron_mass_change": -0.01}
    factor = scales(Physics(**physics), charge=2)
    plain = effective_rates(setup_of(5), 5000.0, 4000.0, atom=atom)
    t = 5000.0 * factor.energy, 4000.0 * factor.energy
    found = effective_rates(setup_of(5, physics=physics), *t, atom=atom)
    m = factor.reduced_mass
    np.testing.assert_allclose(
        found.recombination, plain.recombination * 1.02**2 / m**2, rtol=1e-12
    )
    np.testing.assert_allclose(found.exchange, plain.exchange * 1.02**5 * m, rtol=1e-12)
    np.testing.assert_allclose(
        found.kept_levels.energy_ev, plain.kept_levels.energy_ev * 1.02**2 * m, rtol=1e-13
    )


def test_overrides_of_each_atom_reach_its_rates_alone() -> None:
    """Closed form: with all levels kept at n_max = 2 a factor on 2 3P passes straight through."""
    rows = (
        "bound_free,He I 2 3P,,1.5,,invented",
        "bound_bound,He I 2 1P,2 1S,3.0,,invented",
        "bound_free,He II 2p,,0.5,,invented",
    )
    changed, plain = setup_of(2, rates={"rows": rows}), setup_of(2)
    pairs = {
        atom: [effective_rates(one, 4e3, 4e3, atom=atom) for one in (changed, plain)]
        for atom in ("H I", "He I", "He II")
    }
    ratios = {
        name: mine.recombination / other.recombination for name, (mine, other) in pairs.items()
    }
    np.testing.assert_allclose(ratios["H I"], 1.0, rtol=1e-14)
    np.testing.assert_allclose(ratios["He II"], [1.0, 0.5], rtol=1e-13)
    order = [terms(pairs["He I"][0]).index(one) for one in sorted(FOUR)]
    np.testing.assert_allclose(ratios["He I"][order], [1.0, 1.0, 1.0, 1.5], rtol=1e-13)
    mine, other = pairs["He I"]
    s, p = (terms(mine).index(one) for one in ((2, 0, 0), (2, 1, 0)))
    assert mine.exchange[p, s] == pytest.approx(3.0 * other.exchange[p, s], rel=1e-13)


# ---- tables


@pytest.mark.parametrize("atom", ["H I", "He I", "He II"])
def test_table_against_exact(atom: str) -> None:
    """Computed here: the exact elimination at random temperatures, to the table's tolerance."""
    table = helium_table()
    random = np.random.default_rng(7)
    radiation = np.exp(random.uniform(math.log(1400.0), math.log(27_500.0), 12))
    matter = radiation * np.exp(random.uniform(math.log(0.5), 0.0, 12))
    found = table.effective_rates(radiation, matter, atom)
    exact = effective_rates(table.setup, radiation, matter, atom=atom)
    for name in ("log_recombination", "log_photoionization"):
        error = np.abs(getattr(found, name) - getattr(exact, name)).max()
        assert 0.0 < error < table.tolerance, name
    talks = np.isfinite(exact.log_exchange)
    assert (np.isfinite(found.log_exchange) == talks).all()
    error = np.abs(found.log_exchange[talks] - exact.log_exchange[talks]).max()
    assert 0.0 < error < table.tolerance
    for name in ("n", "l", "statistical_weight", "energy_ev", "ionization_energy_ev"):
        mine, other = (getattr(one.kept_levels, name) for one in (found, exact))
        np.testing.assert_array_equal(mine, other)
    assert found.kept_levels.ground_weight == exact.kept_levels.ground_weight
    if atom == "He I":
        assert terms(found) == terms(exact)
    else:
        assert found.kept_levels.spin is None


@pytest.mark.parametrize("atom", ["He I", "He II"])
def test_table_with_changed_constants(atom: str) -> None:
    table = helium_table().with_constants(0.01, -0.02)
    exact = effective_rates(table.setup, 6000.0, 5500.0, atom=atom)
    found = table.effective_rates(6000.0, 5500.0, atom)
    for name in ("log_recombination", "log_photoionization"):
        np.testing.assert_allclose(getattr(found, name), getattr(exact, name), atol=table.tolerance)
    np.testing.assert_allclose(found.kept_levels.energy_ev, exact.kept_levels.energy_ev, rtol=1e-14)


def test_table_shapes_broadcast() -> None:
    found = helium_table().effective_rates(np.array([[3e3], [6e3]]), 4000.0, "He I")
    assert found.exchange.shape == (2, 1, 4, 4)
    assert helium_table().effective_rates(3e3, 3e3, "He II").recombination.shape == (2,)


@pytest.mark.parametrize("atom", ["He I", "He II"])
def test_table_is_not_left(atom: str) -> None:
    table = helium_table()
    for radiation_k in (1390.0, 27_700.0, math.nan, 0.0, -5.0):
        with pytest.raises(RangeError, match=rf"outside the table of {atom}; allowed: 1400 to 2"):
            table.effective_rates(radiation_k, radiation_k, atom)
    for ratio in (0.49, 1.51, math.nan):
        with pytest.raises(RangeError, match=r"T_m/T_r = .*allowed: 0.5 to 1.5"):
            table.effective_rates(4000.0, 4000.0 * ratio, atom)
    table.effective_rates(1400.000001, 2100.0, atom)
    # As of hydrogen, and in exported code: collisional ionization is left out.
    with pytest.raises(RangeError, match=r"T_m = 8100 K: outside .* up to 8000 K or T_r") as told:
        table.effective_rates(6000.0, 8100.0, atom)
    assert "\n" not in str(told.value)
    table.effective_rates(np.array([6000.0, 9000.0]), np.array([8000.0, 9000.0]), atom)
    changed = table.with_constants(0.01, 0.0)  # temperatures go with alpha^2
    changed.effective_rates(6000.0, 8100.0, atom)
    with pytest.raises(RangeError, match="T_m = 8200 K"):
        changed.effective_rates(6000.0, 8200.0, atom)


@pytest.mark.parametrize(
    ("table", "atom", "said"),
    [
        (small_table, "He I", r'"He I": this table holds no rates of it; .* helium.n_max = 2'),
        (small_table, "He II", "helium.n_max = 2 or above"),
        (lambda: helium_table("sobolev_feedback", "saha"), "He II", r'helium_ion = "network"'),
        (small_table, "He III", r'atom = "He III": known are "H I", "He I", "He II"'),
    ],
)
def test_atoms_that_a_table_does_not_hold(table: object, atom: str, said: str) -> None:
    own = table()  # type: ignore[operator]
    assert isinstance(own, EffectiveTable)
    with pytest.raises(InputError, match=said) as caught:
        own.effective_rates(3000.0, 3000.0, atom)
    assert "\n" not in str(caught.value)


def test_summary_and_values_hold_every_atom() -> None:
    table = helium_table()
    values, text = table_values(table)["rates"], table_summary(table)
    assert list(values) == ["H I", "He I", "He II"]
    assert values["He I"]["levels"] == ["2 3S", "2 1S", "2 3P", "2 1P"]
    for name, one in values.items():
        kelvin = one["temperature_k"]
        exact = effective_rates(table.setup, kelvin, kelvin, atom=name)
        for key, logs in (
            ("log10_recombination_cm3_per_s", exact.log_recombination),
            ("log10_photoionization_per_s", exact.log_photoionization),
        ):
            np.testing.assert_allclose(one[key], logs / math.log(10.0), atol=table.tolerance)
        assert f"{name}: T_r = T_m (K)" in text
        assert f"{one['log10_photoionization_per_s'][0, 0]:.4f}" in text
    plain = small_table()
    assert list(table_values(plain)["rates"]) == ["H I"]
    assert "H I: T_r" not in table_summary(plain)


# ---- refusals


@pytest.mark.parametrize("atom", ["He I", "He II"])
def test_setup_without_levels_of_helium(atom: str) -> None:
    with pytest.raises(InputError, match=rf'atom = "{atom}": helium has no levels') as caught:
        effective_rates(small_setup(5), 3000.0, 3000.0, atom=atom)
    assert "\n" not in str(caught.value)


def test_rates_do_not_ask_whether_the_universe_holds_helium() -> None:
    none = dataclasses.replace(setup_of(5).cosmology, helium_mass_fraction=0.0)
    bare = dataclasses.replace(setup_of(5), cosmology=none)
    found = effective_rates(bare, 3000.0, 3000.0, atom="He I")
    wanted = effective_rates(setup_of(5), 3000.0, 3000.0, atom="He I")
    assert np.array_equal(found.log_recombination, wanted.log_recombination)


@pytest.mark.parametrize("name", ["He", "he i", "He III", ""])
def test_unknown_atom(name: str) -> None:
    with pytest.raises(InputError, match=f'atom = "{name}": known are'):
        effective_rates(setup_of(5), 3000.0, 3000.0, atom=name)


@pytest.mark.parametrize(
    ("atom", "kept", "said"),
    [
        ("He I", [(2, 0), (2, 1)], r"give triples of whole numbers \(n, l, spin\)"),
        ("He I", ["2 1S"], "give triples"),
        ("He I", [*FOUR, (6, 0, 0)], r"kept = \(6, 0, 0\): allowed are .* 2 <= n <= 5"),
        ("He I", [*FOUR, (3, 3, 0)], r"kept = \(3, 3, 0\)"),
        ("He I", [*FOUR, (3, 1, 2)], r"kept = \(3, 1, 2\): .* spin 0 or 1"),
        ("He I", [*FOUR, (1, 0, 0)], r"kept = \(1, 0, 0\)"),
        ("He I", [(2, 0, 0), (2, 1, 0), (2, 0, 1)], r"\(n, l, spin\) = \(2, 1, 1\) is missing"),
        ("He II", [(2, 0, 0), (2, 1, 0)], r"give pairs of whole numbers \(n, l\)"),
        ("He II", [(2, 0), (2, 1), (6, 1)], r"kept = \(6, 1\): allowed are .* 2 <= n <= 5"),
        ("He II", [(2, 0)], r"\(n, l\) = \(2, 1\) is missing; 2s and 2p must be kept"),
    ],
)
def test_bad_choice_of_levels_is_one_line(
    atom: str, kept: list[tuple[int, ...]], said: str
) -> None:
    with pytest.raises(InputError, match=said) as caught:
        effective_rates(setup_of(5), 3000.0, 3000.0, kept, atom)
    assert "\n" not in str(caught.value)


def test_open_lines_must_be_kept() -> None:
    with pytest.raises(InputError, match=r"\(3, 1, 0\) is missing; .* with an open line"):
        effective_rates(setup_of(5, "free"), 3000.0, 3000.0, FOUR, "He I")


@pytest.mark.parametrize(
    ("atom", "coldest", "hottest"), [("He I", 50.0, 1e5), ("He II", 0.08, 4e5)]
)
def test_temperatures_out_of_range(atom: str, coldest: float, hottest: float) -> None:
    said = f"radiation_temperature_k = .*allowed are {coldest:g} to {hottest:g} K"
    for bad in (0.99 * coldest, 1.01 * hottest, 0.0, -1.0, math.nan, math.inf):
        with pytest.raises(RangeError, match=said):
            effective_rates(setup_of(5), bad, 3000.0, atom=atom)
    low = 0.02 if atom == "He I" else 0.08
    for bad in (0.99 * low, 1.01 * hottest):
        with pytest.raises(RangeError, match=f"matter_temperature_k.*allowed are {low:g} to"):
            effective_rates(setup_of(5), 3000.0, bad, atom=atom)
    ends = effective_rates(setup_of(5), [coldest, hottest], [[low], [hottest]], atom=atom)
    assert np.isfinite(ends.log_recombination).all()
    assert np.isfinite(ends.log_photoionization).all()
