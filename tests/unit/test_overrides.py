"""Overridden rates: the file, the rows in a setup, and what they change and leave alone."""

from __future__ import annotations

import dataclasses
import re
from functools import lru_cache
from pathlib import Path

import numpy as np
import pytest

from levelnet.atomic.bound_bound import einstein_a
from levelnet.atomic.overridden import transition_factors, with_overrides
from levelnet.atomic.overrides import Override, Rates
from levelnet.atomic.selection import parse_selector
from levelnet.distilled.build import distill
from levelnet.distilled.effective import effective_rates
from levelnet.distilled.history import history_from_table
from levelnet.errors import InputError
from levelnet.escape.family import TREATMENTS
from levelnet.history.atom import build_ladder, resonance_lines
from levelnet.history.cost import estimate
from levelnet.history.integrate import setup_handover, slow_equations
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.history.setup import Setup, parse_setup
from levelnet.network.assembly import interior_photoionization, rate_matrix
from levelnet.network.ladder import Ladder, hydrogen_ladder
from levelnet.network.tabulation import live_reduction
from levelnet.pieces import FolderPieces
from tests.small_runs import RECOMBINING, small_history, small_setup
from tests.tolerances import ROUND_OFF

HEADER = "process,upper,lower,factor,value_per_s,source"
TWO = ((2, 0), (2, 1))


def setup_with(*rows: str, n_max: int = 8, **parts: object) -> Setup:
    return small_setup(n_max, rates={"rows": rows}, **parts)


@lru_cache(maxsize=16)
def history_with(*rows: str) -> History:
    return solve(setup_with(*rows))


def ladder_with(*rows: str, n_max: int = 8) -> Ladder:
    return hydrogen_ladder(n_max, "measured", TWO, overrides=Rates(rows=rows).network)


# The file and the rows.


def test_a_file_becomes_rows(tmp_path: Path) -> None:
    file = tmp_path / "my.csv"
    file.write_text(
        f"\ufeff# INVENTED rates of the Tarnholt Array\n\n{HEADER}\n"
        ' bound_bound,3d,2p,1.01,,"M\u00fcller, run 4"\r\n# more\ntwo_photon,2s,,,8.229,x\n',
        encoding="utf-8",
    )
    rates = Rates(overrides=str(file))
    assert rates.overrides is None
    assert rates.rows == (
        'bound_bound,3d,2p,1.01,,"M\u00fcller, run 4"',
        "two_photon,2s,,,8.229,x",
    )
    first, second = rates.table
    assert (first.factor, first.value_per_s, first.source) == (1.01, None, "M\u00fcller, run 4")
    assert second.value_per_s == 8.229
    assert first.where == f"{file}, row 1"
    assert [one.text for one in rates.table] == [
        "bound_bound 3d 2p x 1.01",
        "two_photon 2s = 8.229 per s",
    ]


def test_a_setup_carries_the_rows_through_toml(tmp_path: Path) -> None:
    file = tmp_path / "my.csv"
    file.write_text(f'{HEADER}\nescape,2p,,1.05,,"M\u00fcller, ""x"""\n', encoding="utf-8")
    setup = small_setup(rates={"overrides": str(file)})
    file.unlink()
    again = parse_setup(setup.to_toml())
    assert again == setup
    assert again.digest == setup.digest != small_setup().digest
    assert again.rates.table[0].source == 'M\u00fcller, "x"'
    assert dataclasses.replace(setup, title="x").rates == setup.rates


def test_a_setup_without_overrides_does_not_mention_them() -> None:
    assert "rates" not in small_setup().to_toml()
    assert small_setup().rates.table == ()


def complaint_of_file(tmp_path: Path, content: bytes) -> str:
    file = tmp_path / "my.csv"
    file.write_bytes(content)
    with pytest.raises(InputError) as caught:
        Rates(overrides=str(file))
    text = str(caught.value)
    assert text.startswith(str(file))
    assert "\n" not in text
    return text


@pytest.mark.parametrize(
    ("content", "complaint"),
    [
        (b"", "empty; a header process,upper"),
        (b"# only a comment\n", "empty"),
        (HEADER.encode(), "no rows below the header"),
        (b"process,upper,lower,sigma,group,source\n", 'column "sigma" is unknown'),
        (b"process,upper\n", f"the header must be {HEADER}"),
        (b"\xff\xfe", "not UTF-8"),
        (b"x" * 1_000_001, "over 1 MB"),
        (b"\x00,\n", "is unknown"),
    ],
)
def test_files_refused(tmp_path: Path, content: bytes, complaint: str) -> None:
    assert complaint in complaint_of_file(tmp_path, content)


def test_a_missing_file_is_refused(tmp_path: Path) -> None:
    for path in (str(tmp_path / "none.csv"), "null\0byte", str(tmp_path)):
        with pytest.raises(InputError, match="cannot be read"):
            Rates(overrides=path)


@pytest.mark.parametrize(
    ("row", "complaint"),
    [
        ("bound_bound,3d,2p,1.1,", "5 cells, 6 are needed"),
        ("bound_free,2s,,1.1,,a,b", "7 cells"),
        ("", "0 cells"),
        ('bound_free,2s,,1.1,,"a', "not a row of CSV"),
        ("bound_free,2s,,1.1,,a\tb", "cannot be printed"),
        ("bound_free,2s,,1.1,,a\nb", "cannot be printed"),
        (f"bound_free,2s,,1.1,,{'a' * 501}", "over 500 characters"),
        ("bound_free,2s,,1.1,,", "source is empty"),
        ("bound_free,2s,,,,x", "give either factor or value_per_s"),
        ("bound_bound,3d,2p,1.1,1e7,x", "give either factor or value_per_s"),
        ("bound_free,2s,,zero,,x", 'factor = "zero" is no finite number'),
        ("bound_free,2s,,nan,,x", 'factor = "nan" is no finite number'),
        ("bound_free,2s,,inf,,x", 'factor = "inf" is no finite number'),
        ("bound_free,2s,,0,,x", "factor = 0: allowed are factors from 1e-30 to 1e+06"),
        ("bound_free,2s,,-1,,x", "factor = -1: allowed"),
        ("bound_free,2s,,1.1e6,,x", "factor = 1.1e+06: allowed"),
        ("bound_bound,3d,2p,,0,x", "value_per_s = 0: must be above 0"),
        ("bound_bound,3d,2p,,x,x", 'value_per_s = "x" is no finite number'),
        ("bound_bound,3d,2p,,1e20,x", "times the computed rate"),
        ("bound_bound,2000d,2p,,1e4,x", "allowed are 1 <= n <= 1000"),
        ("bound_bound,3,2p,,1e7,x", "value_per_s needs a selector of one transition"),
        ("bound_free,2s,,,1e7,x", "value_per_s needs a selector of one transition"),
        ("escape,2p,,,1,x", "value_per_s needs a selector of one transition"),
        ("compton,,,,1,x", "value_per_s needs a selector of one transition"),
        ("two_photon,,,,1e7,x", "value_per_s = 1e+07: allowed are values to 1e+06"),
        ("bound_bound,3d,1s,1.1,,x", "use process escape"),
    ],
)
def test_rows_refused(row: str, complaint: str) -> None:
    with pytest.raises(InputError, match=re.escape(complaint)) as caught:
        Rates(rows=("compton,,,1.1,,x", row))
    assert str(caught.value).startswith("rates.rows, row 2: ")
    assert "\n" not in str(caught.value)


def test_too_many_rows_are_refused() -> None:
    with pytest.raises(InputError, match="2001 rows, at most 2000"):
        Rates(rows=("compton,,,1.1,,x",) * 2001)


def test_file_and_rows_together_are_refused() -> None:
    with pytest.raises(InputError, match="one of them, not both"):
        Rates(overrides="my.csv", rows=("compton,,,1.1,,x",))


@pytest.mark.parametrize(
    ("first", "second"),
    [
        ("bound_bound,3d,2p", "bound_bound,3d,2p"),
        ("bound_bound,*,*", "bound_bound,3d,2p"),
        ("bound_bound,3d,2p", "bound_bound,*d,2"),
        ("bound_free,3-5,", "bound_free,*p,"),
        ("two_photon,2s,", "two_photon,,"),
        ("escape,*,", "escape,2p,"),
        ("compton,,", "compton,,"),
    ],
)
def test_two_rows_for_one_rate_are_refused(first: str, second: str) -> None:
    with pytest.raises(InputError, match=r"row 3: .* selects rates that row 1 already sets"):
        Rates(rows=(f"{first},1.1,,x", "bound_free,9h,,1.1,,x", f"{second},1.1,,x"))


@pytest.mark.parametrize("row", ["bound_bound,9-*d,2p", "bound_free,*[l=8],", "escape,3p,"])
def test_a_selector_that_matches_nothing_in_the_atom_is_refused(row: str, tmp_path: Path) -> None:
    file = tmp_path / "my.csv"
    file.write_text(f"{HEADER}\ncompton,,,1.1,,x\n{row},1.1,,x\n")
    text = " ".join(row.replace(",", " ").split())
    with pytest.raises(InputError, match=re.escape(f'{file}, row 2: selector "{text}" matches')):
        small_setup(8, rates={"overrides": str(file)})


# What an override changes, and what it leaves alone.


def test_nothing_is_copied_without_overrides() -> None:
    plain, again = ladder_with(), hydrogen_ladder(8, "measured", TWO)
    assert plain.dipole is again.dipole
    assert plain.bound_free is again.bound_free
    lines_only = ladder_with("bound_bound,3d,2p,1.1,,x")
    assert lines_only.bound_free is plain.bound_free
    level_only = ladder_with("bound_free,3d,,1.1,,x")
    assert level_only.dipole is plain.dipole
    sigma, before = level_only.bound_free.cross_section_cm2, plain.bound_free.cross_section_cm2
    assert [a is b for a, b in zip(sigma, before, strict=True)] == [n != 3 for n in range(1, 9)]


@pytest.mark.parametrize("kelvin", [300.0, 3000.0])
def test_a_line_changes_its_two_entries_of_the_rate_matrix_and_no_other(kelvin: float) -> None:
    plain, changed = ladder_with(), ladder_with("bound_bound,5p,3d,1.25,,x")
    before, after = (rate_matrix(one, kelvin).toarray() for one in (plain, changed))
    i, j = (plain.levels.index(n, l) - 1 for n, l in ((5, 1), (3, 2)))
    expected = before.copy()
    for a, b in ((i, j), (j, i)):
        expected[a, b] *= 1.25
        expected[b, b] += 0.25 * -before[a, b]  # the outflow of the level it leaves
    np.testing.assert_allclose(after, expected, rtol=ROUND_OFF, atol=0.0)
    off = ~np.eye(len(before), dtype=bool)
    assert set(zip(*np.nonzero((after != before) & off), strict=True)) == {(i, j), (j, i)}


def test_a_cross_section_changes_one_level_both_ways() -> None:
    plain, changed = ladder_with(), ladder_with("bound_free,4f,,0.5,,x")
    photo = [interior_photoionization(one, 3000.0) for one in (plain, changed)]
    k = plain.levels.index(4, 3)
    ratio = np.divide(photo[1], photo[0], out=np.ones_like(photo[0]), where=photo[0] > 0.0)
    expected = np.ones(len(ratio))
    expected[k] = 0.5
    np.testing.assert_allclose(ratio, expected, rtol=ROUND_OFF)


def test_a_value_sets_the_einstein_coefficient() -> None:
    changed = ladder_with("bound_bound,3d,2p,,7e7,x")
    # A sqrt(g_u/g_l): (2l+1) = 5 over 3.
    strength = changed.dipole.block(1)[0, 0]
    assert strength == pytest.approx(7e7 * np.sqrt(5.0 / 3.0), rel=ROUND_OFF)
    assert changed.dipole.block(1)[1, 0] == ladder_with().dipole.block(1)[1, 0]


def test_ranges_and_letters_reach_the_strengths() -> None:
    rows = ("bound_bound,4-6p,2-3,1.5,,x", "bound_bound,*f,3d,0.25,,x")
    plain, changed = ladder_with(), ladder_with(*rows)
    for n, l, m, k in [(4, 1, 2, 0), (6, 1, 3, 2), (6, 1, 3, 0), (7, 1, 2, 0), (8, 3, 3, 2)]:
        low, high = (m, n) if k < l else (n, m)
        ratio = (
            changed.dipole.block(min(l, k))[low - min(l, k) - 1, high - min(l, k) - 2]
            / plain.dipole.block(min(l, k))[low - min(l, k) - 1, high - min(l, k) - 2]
        )
        expected = {4: 1.5, 6: 1.5, 7: 1.0, 8: 0.25}[n]
        assert ratio == pytest.approx(expected, rel=ROUND_OFF), (n, l, m, k)
    # Lyman lines, in the same block, are none of theirs.
    assert np.array_equal(changed.dipole.block(0)[0], plain.dipole.block(0)[0])


def test_whole_shells_answer_to_patterns_without_l_only() -> None:
    plain = ladder_with()
    letter = Rates(rows=("bound_bound,*p,*,2,,x", "bound_free,*p,,2,,x")).network
    lines, continuum = with_overrides(plain.dipole, plain.bound_free, letter, resolve_l_to=5)
    s_to_p = lines.block(0) / np.where(plain.dipole.block(0) > 0, plain.dipole.block(0), 1.0)
    # Upper np, n from 3 to 5, down to ms, m from 2: doubled; np above 5 is part of a shell.
    assert s_to_p[1, 1] == 2.0
    assert s_to_p[1, 3] == 2.0
    assert s_to_p[1, 4] == 1.0
    ratio = [
        new[1, 0] / old[1, 0]
        for new, old in zip(
            continuum.cross_section_cm2[1:], plain.bound_free.cross_section_cm2[1:], strict=True
        )
    ]
    assert ratio == [2.0] * 4 + [1.0] * 3
    plainly = Rates(rows=("bound_free,6-*,,3,,x",)).network
    _, continuum = with_overrides(plain.dipole, plain.bound_free, plainly, resolve_l_to=5)
    np.testing.assert_array_equal(
        continuum.cross_section_cm2[6], 3.0 * plain.bound_free.cross_section_cm2[6]
    )


def test_overridden_arrays_are_read_only() -> None:
    changed = ladder_with("bound_bound,*,*,1.1,,x", "bound_free,*,,1.1,,x")
    assert not changed.dipole.strength_per_s.flags.writeable
    assert not changed.bound_free.cross_section_cm2[3].flags.writeable


def test_the_natural_width_follows() -> None:
    kept = build_ladder(small_setup(5, lines={"lyman_lines": 3})).kept
    rows = Rates(rows=("bound_bound,3p,2s,2,,x",)).network
    plain, changed = resonance_lines(kept), resonance_lines(kept, overrides=rows)
    extra = changed.decay_rate_per_s - plain.decay_rate_per_s
    np.testing.assert_allclose(extra, [0.0, einstein_a(3, 1, 2, 0), 0.0], rtol=1e-12)


def test_factors_of_no_override_are_one() -> None:
    level = (np.array([3, 4]), np.array([2, 2]), np.array([2, 2]), np.array([1, 1]))
    assert transition_factors((), *level).tolist() == [1.0, 1.0]
    bound_free = Override("", parse_selector("bound_free", "*", ""), 2.0, None, "x")
    assert transition_factors((bound_free,), *level).tolist() == [1.0, 1.0]


# Runs.


@pytest.mark.parametrize("row", ["two_photon,2s,,1.01,,x", f"two_photon,,,,{8.2246 * 1.01!r},x"])
def test_two_photon_is_the_key_of_the_setup(row: str) -> None:
    """An independent way to the same number: the key that stands for the rate itself."""
    expected = solve(small_setup(8, hydrogen={"two_photon_rate_per_s": 8.2246 * 1.01}))
    found = history_with(row)
    for name in ("free_electron_fraction", "matter_temperature_k"):
        np.testing.assert_allclose(getattr(found, name), getattr(expected, name), rtol=1e-12)


def test_escape_and_compton_act_on_the_equations() -> None:
    lines = {"lyman_lines": 3}
    plain = setup_with(lines=lines)
    reduced = live_reduction(build_ladder(plain))
    here = slow_equations(plain, reduced)
    there = slow_equations(
        setup_with("escape,3-4p,,1.5,,x", "compton,,,2,,x", lines=lines), reduced
    )
    before, after = (one.line_coupling(RECOMBINING) for one in (here, there))
    factor = np.ones(len(reduced.kept))
    factor[np.isin(reduced.kept.n, [3, 4]) & (reduced.kept.l == 1)] = 1.5
    assert factor.tolist() == [1.0, 1.0, 1.5, 1.5]
    for name in ("loss", "slope_column", "slope_temperature"):
        rows = getattr(before, name) * factor[:, None]
        np.testing.assert_allclose(getattr(after, name), rows, rtol=ROUND_OFF)
    for name in ("source", "excess_source"):
        np.testing.assert_allclose(getattr(after, name), getattr(before, name) * factor)
    assert there.scales.compton_rate == 2.0 * here.scales.compton_rate
    assert there.scales.thomson == here.scales.thomson


@pytest.mark.parametrize("treatment", TREATMENTS, ids=lambda one: one.name)
def test_the_jacobian_stays_exact(treatment: object) -> None:
    """Central differences of the overridden right-hand side."""
    setup = setup_with("escape,2p,,1.7,,x", "compton,,,3,,x", "two_photon,,,0.5,,x")
    equations = slow_equations(setup, live_reduction(build_ladder(setup)), treatment)
    when, state = -np.log(1101.0), np.array([-1.5, -1e-4])
    matrix, drift = equations.jacobian(when, state)
    step = 1e-5
    for k in range(2):
        shift = np.eye(2)[k] * step
        ahead, back = (equations.rate(when, state + s * shift) for s in (1, -1))
        difference = (ahead - back) / (2 * step)
        scale = np.abs(matrix).max(axis=1)
        np.testing.assert_allclose(difference / scale, matrix[:, k] / scale, atol=1e-7)
    ahead, back = (equations.rate(when + s * step, state) for s in (1, -1))
    np.testing.assert_allclose((ahead - back) / (2 * step), drift, rtol=1e-4)


ROWS = (
    "bound_bound,*,*,1.02,,one",
    'bound_free,2-4,,0.9,,"two, with a comma"',
    "two_photon,2s,,,8.2206,three",
    "escape,2p,,1.05,,four",
    "compton,,,1.1,,five",
)


def test_a_run_with_all_kinds_is_whole_and_says_what_was_changed() -> None:
    history = history_with(*ROWS)
    assert history.outcome.ok
    assert history.diagnostics.conservation_error < 1e-13
    notes = [text for text in history.notes if text.startswith("rate overridden: ")]
    assert notes[1] == "rate overridden: bound_free 2-4 x 0.9 (two, with a comma)"
    assert notes[2] == "rate overridden: two_photon 2s = 8.2206 per s (three)"
    assert len(notes) == 5
    change = history.free_electron_fraction / small_history(8).free_electron_fraction - 1.0
    assert np.abs(change).max() > 1e-3


def test_many_overrides_are_counted_in_the_notes() -> None:
    rows = tuple(f"bound_free,{n}{l},,1.01,,x" for n in range(3, 9) for l in "spdf"[: min(n, 4)])
    notes = history_with(*rows).notes
    assert sum(text.startswith("rate overridden") for text in notes) == 20
    assert f"rates overridden: {len(rows) - 20} more, listed in the setup" in notes


def test_interpolation_and_pieces_know_the_overrides(tmp_path: Path) -> None:
    pieces = FolderPieces(tmp_path)
    plain = solve(small_setup(8), pieces=pieces)
    changed = solve(setup_with(*ROWS), pieces=pieces)
    again = solve(setup_with(*ROWS), pieces=pieces)
    np.testing.assert_array_equal(
        plain.free_electron_fraction, small_history(8).free_electron_fraction
    )
    expected = history_with(*ROWS).free_electron_fraction
    np.testing.assert_array_equal(changed.free_electron_fraction, expected)
    np.testing.assert_array_equal(again.free_electron_fraction, expected)


def test_the_handover_is_found_with_the_same_rates() -> None:
    # With a faster channel hydrogen holds to equilibrium longer.
    late = setup_handover(setup_with("escape,2p,,1e6,,x"))
    assert late.redshift < setup_handover(small_setup(8)).redshift
    # Rows that say nothing about the small atom which looks for it are no error.
    high = setup_handover(setup_with("bound_free,8,,2,,x"))
    assert high == setup_handover(small_setup(8))


def test_an_almost_forbidden_transition_is_no_trouble() -> None:
    history = history_with("bound_bound,4-*p,2s,1e-30,,x", "bound_free,3,,1e-30,,x")
    assert history.outcome.ok
    assert np.all(np.isfinite(history.log_departures("H I")))


def test_memory_counts_the_copy() -> None:
    plain, changed = estimate(small_setup(100)), estimate(setup_with(ROWS[0], n_max=100))
    assert changed.memory_bytes - plain.memory_bytes == pytest.approx(8.0 * 100**3 / 3.0)


# Tables of effective rates.


def test_a_table_carries_overrides() -> None:
    rows = (*ROWS[:2], "two_photon,2s,,1.01,,x")
    setup = setup_with(*rows, n_max=5)
    table = distill(setup, tolerance=1e-8, certify=False)
    redshift = small_history(8).redshift
    fast = history_from_table(table, setup.cosmology, redshifts=redshift, relative=1e-8)
    full = solve(dataclasses.replace(setup, accuracy={"relative": 1e-8}))
    np.testing.assert_allclose(fast.free_electron_fraction, full.free_electron_fraction, rtol=1e-6)
    rates = effective_rates(setup, 3000.0, 3000.0)
    plain = effective_rates(small_setup(5), 3000.0, 3000.0)
    assert np.all(rates.recombination != plain.recombination)


@pytest.mark.parametrize("row", ["escape,2p,,1.1,,x", "compton,,,1.1,,x"])
def test_a_table_cannot_carry_escape_or_compton(row: str) -> None:
    with pytest.raises(InputError, match="a table of effective rates holds no"):
        distill(setup_with(row), certify=False)
