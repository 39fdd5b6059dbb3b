"""Helium in a table of effective rates: against the network it was made from, and its refusals.

Expected numbers are computed in the repository by the plain Python of levelnet/history, which knows
neither patches nor kernels, or by scipy.
"""

from __future__ import annotations

import dataclasses
import math
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from scipy.interpolate import make_interp_spline

import levelnet
from levelnet.atomic.overrides import Rates
from levelnet.background.cosmology import Cosmology
from levelnet.cli.table_output import distilled_summary, distilled_values
from levelnet.distilled import helium_escape
from levelnet.distilled.helium_errors import fresh_equations, helium_errors
from levelnet.distilled.history import history_from_table
from levelnet.distilled.local import rate_of_change
from levelnet.distilled.notes import table_notes
from levelnet.distilled.plasma import plasma_of
from levelnet.distilled.prepared import make_atom
from levelnet.errors import FileFormatError, InputError, RangeError
from levelnet.escape.family import treatment
from levelnet.escape.helium_continuum import helium_treatment
from levelnet.escape.lines import Lines
from levelnet.history.equations import SlowEquations
from levelnet.history.helium_atom import build_helium
from levelnet.history.integrate import slow_equations
from levelnet.history.notes import notes_of
from levelnet.kernels.effective_helium import gain, locate, make_line_room, remember
from levelnet.kernels.effective_plasma import (
    HELD,
    NETWORK,
    OF_FIRST,
    OF_SECOND,
    SAHA,
    choose_modes,
    evaluate,
    make_desk,
    make_memory,
)
from levelnet.kernels.plasma_steps import saha_state
from levelnet.store import TABLE_LAYOUT, read_table, write_distilled, write_distilled_csv
from tests.helium_tables import PIECES, helium_setup, helium_table
from tests.same_records import assert_same
from tests.small_runs import COSMOLOGY
from tests.small_tables import small_table

# Table against the series behind it: 1e-8 in every logarithm; sums of them cancel a little.
SAME_RATES = 1e-6
HELIUM = (
    "neutral_helium_fraction",
    "singly_ionized_helium_fraction",
    "doubly_ionized_helium_fraction",
)
JUDGED = (
    "lines: limits are not judged along a history from a table; levelnet solve warns where one is "
    "crossed"
)


def equations_of(lines: str, ion: str) -> SlowEquations:
    setup, table = helium_setup(lines, ion), helium_table(lines, ion)
    atoms = build_helium(setup, 27_500.0, lambda stage, part: None, PIECES, 1e-9)
    return slow_equations(setup, table, helium=fresh_equations(atoms))


@pytest.mark.parametrize(("lines", "ion"), [("sobolev", "network"), ("sobolev", "saha")])
@pytest.mark.parametrize("redshift", [7000.0, 5400.0, 2600.0, 1900.0, 520.0])
def test_rates_and_jacobian_are_those_of_the_full_equations(
    lines: str, ion: str, redshift: float
) -> None:
    full, s = equations_of(lines, ion), -math.log1p(redshift)
    table = helium_table(lines, ion)
    plasma = plasma_of(table, make_atom(table), COSMOLOGY, -9.3, -3.0)
    desk, memory = make_desk(plasma), make_memory(4, 4)
    state = np.zeros(4)
    saha_state(plasma, s, state)
    # Off equilibrium, where no net flow is a small difference.
    state += np.array([0.3, -1e-5, 0.4, 0.2])
    evaluate(plasma, s, state, memory, desk, True)
    exact = full.linearized(s, state)
    np.testing.assert_allclose(desk.rate, exact.rate, rtol=SAME_RATES)
    scale = np.abs(exact.matrix).max(axis=1)
    np.testing.assert_allclose(desk.matrix / scale[:, None], exact.matrix / scale[:, None],
                               atol=SAME_RATES)  # fmt: skip
    np.testing.assert_allclose(desk.drift, exact.drift, rtol=1e-5, atol=1e-8 * scale.max())


def test_an_ion_whose_levels_outpace_the_pull_is_pulled_to_saha_equilibrium() -> None:
    table = helium_table("sobolev", "network")
    plasma = plasma_of(table, make_atom(table), COSMOLOGY, -9.3, -3.0)
    desk, memory, state = make_desk(plasma), make_memory(4, 4), np.zeros(4)
    for redshift, modes in (
        (6000.0, [SAHA, SAHA, NETWORK]),
        (3000.0, [SAHA, NETWORK, SAHA]),
        (1900.0, [NETWORK, NETWORK, SAHA]),
    ):
        desk.mode[:] = NETWORK
        saha_state(plasma, -math.log1p(redshift), state)
        place = evaluate(plasma, -math.log1p(redshift), state, memory, desk, True)
        assert choose_modes(plasma, place, state, desk)
        assert desk.mode.tolist() == modes
    state[2] = -36.0
    assert choose_modes(plasma, place, state, desk)
    assert desk.mode[OF_FIRST] == HELD
    evaluate(plasma, -math.log1p(1900.0), state, memory, desk, True)
    assert not desk.rate[2:].any() and not desk.matrix[2:].any()


def test_pulled_ions_come_to_rest_in_equilibrium_with_the_slopes_of_their_rates() -> None:
    table, s = helium_table("sobolev", "network"), -math.log1p(4500.0)
    plasma = plasma_of(table, make_atom(table), COSMOLOGY, -9.3, -3.0)
    desk, memory, state = make_desk(plasma), make_memory(4, 4), np.zeros(4)
    desk.mode[:] = SAHA
    saha_state(plasma, s, state)
    evaluate(plasma, s, state, memory, desk, True)
    # The pull is 1e9: a thousandth of the accuracy asked is left.
    assert np.abs(desk.rate[[0, 2, 3]]).max() < 1.0
    matrix, drift = desk.matrix.copy(), desk.drift.copy()
    step = 1e-4

    def rate(at: float, there: np.ndarray) -> np.ndarray:
        evaluate(plasma, at, there, memory, desk, False)
        return desk.rate.copy()

    for k, move in enumerate(step * np.eye(4)):
        slope = (rate(s, state + move) - rate(s, state - move)) / (2.0 * step)
        np.testing.assert_allclose(matrix[:, k], slope, rtol=1e-5, atol=10.0)
    slope = (rate(s + step, state) - rate(s - step, state)) / (2.0 * step)
    np.testing.assert_allclose(drift, slope, rtol=1e-5, atol=10.0)
    assert desk.mode[OF_SECOND] == SAHA


@pytest.mark.parametrize("lines", ["sobolev_feedback", "continuum"])
def test_lines_that_light_each_other_remember_as_the_full_equations_do(lines: str) -> None:
    full, table = equations_of(lines, "saha"), helium_table(lines, "saha")
    plasma = plasma_of(table, make_atom(table), COSMOLOGY, -9.3, -3.0)
    desk, memory = make_desk(plasma), make_memory(40, 4)
    state, s = np.zeros(4), -math.log1p(2300.0)
    for step in range(20):
        at = s + 0.005 * step
        saha_state(plasma, at, state)
        state += np.array([0.1, -1e-6, 0.5 + 0.03 * step, 0.0])
        full.remember(at, state)
        place = evaluate(plasma, at, state, memory, desk, True)
        neutral = full.helium.fractions(state[2:]).neutral
        remember(plasma.first, plasma.lines, place, neutral, memory, desk.first, desk.lines)
    # The escape on coarse nodes errs most; feedback alone is exact.
    close = 1e-6 if lines == "sobolev_feedback" else 2e-3
    past = np.array(full.helium.past.red.red)
    np.testing.assert_allclose(memory.red[:20], past, rtol=close, atol=close)
    exact = full.linearized(at + 0.002, state)
    evaluate(plasma, at + 0.002, state, memory, desk, True)
    np.testing.assert_allclose(desk.rate, exact.rate, rtol=3.0 * close)
    scale = np.abs(exact.matrix).max(axis=1)
    np.testing.assert_allclose(desk.matrix / scale[:, None], exact.matrix / scale[:, None],
                               atol=10.0 * close)  # fmt: skip
    assert desk.drift[2] == pytest.approx(exact.drift[2], rel=10.0 * close, abs=close)


def test_splines_are_those_of_scipy() -> None:
    # scipy.interpolate.make_interp_spline: not-a-knot ends too.
    random = np.random.default_rng(5)
    values = random.normal(size=(1, 9, 8, 7))
    axis = np.array([[1.0, 0.5], [-2.0, 0.25], [7.0, 0.2]])
    table = dataclasses.replace(
        helium_table("sobolev", "saha").helium_lines, escape=np.zeros((4, 1, 1, 1))
    )
    lines = table.packed()._replace(escape=helium_escape.coefficients(values), axis=axis)
    room = make_line_room(1, 4)
    for share in random.uniform(0.0, 1.0, (20, 3)):
        place = axis[:, 0] + share * axis[:, 1] * (np.array(values.shape[1:]) - 1)
        expected: Any = values[0]
        for k in range(3):
            nodes = axis[k, 0] + axis[k, 1] * np.arange(values.shape[k + 1])
            expected = make_interp_spline(nodes, expected, 3)(place[k])
            locate(lines, k, place[k], room)
        assert gain(lines, 0, room)[0] == pytest.approx(float(expected), abs=1e-12)
        assert not room.outside[0]
    locate(lines, 1, 3.0, room)
    assert room.outside[0]


def test_below_the_axes_escape_goes_to_that_of_sobolev() -> None:
    lines = helium_table("continuum", "saha").helium_lines.packed()
    room = make_line_room(1, 4)
    for axis in (0, 1):
        for k in range(3):
            middle = lines.axis[k, 0] + 0.5 * lines.axis[k, 1] * (lines.escape.shape[k + 1] - 3)
            locate(lines, k, middle if k != axis else lines.axis[k, 0], room)
        edge = gain(lines, 3, room)
        locate(lines, axis, lines.axis[axis, 0] - 2.0, room)
        below = gain(lines, 3, room)
        assert not room.outside[0]
        assert below[0] == pytest.approx(math.exp(-2.0) * edge[0], rel=1e-12)
        assert below[1 + axis] == pytest.approx(below[0], rel=1e-12)  # linear


def test_errors_against_exact_reductions_are_what_was_asked() -> None:
    table = helium_table("sobolev", "network")
    setup = helium_setup("sobolev", "network")
    atoms = build_helium(setup, 27_500.0, lambda stage, part: None, PIECES, 1e-9)
    errors = helium_errors(table, atoms)
    assert errors.largest.max() <= table.tolerance
    assert "He I recombination 2 1P" in errors.names
    assert "He II recombination 2p" in errors.names


def test_fractions_add_up_and_small_ones_are_no_differences() -> None:
    history = history_from_table(helium_table(), COSMOLOGY, observables=True)
    helium = history.helium
    parts = [getattr(helium, name) for name in helium.__slots__]
    np.testing.assert_allclose(sum(parts), 1.0, rtol=1e-14)
    charge = parts[1] + 2.0 * parts[2]
    electrons = history.ionized_hydrogen_fraction + COSMOLOGY.helium_ratio() * charge
    np.testing.assert_allclose(history.free_electron_fraction, electrons, rtol=1e-14)
    assert 0.0 < parts[0].min() < 1e-12
    assert 0.0 < parts[1].min() < 1e-12
    assert 0.0 < parts[2].min() < 1e-60
    assert history.observables is not None


def test_table_comes_back_to_the_bit(tmp_path: Path) -> None:
    for lines, ion in (("continuum", "saha"), ("sobolev", "network")):
        table, path = helium_table(lines, ion), tmp_path / f"{lines}.h5"
        levelnet.write(table, path)
        again = read_table(path)
        assert_same(table, again)
        with h5py.File(path) as file:
            groups = [one for one in TABLE_LAYOUT.optional if one.name in file]
            assert [one.name for one in groups] == ["helium", "helium_ion", "helium_lines"][
                :: 2 if ion == "saha" else 1
            ]
            for group in groups:
                assert set(file[group.name]) == {one.name for one in group.variables}
        one, other = (
            history_from_table(t, COSMOLOGY, redshifts=[3000, 20]) for t in (table, again)
        )
        assert one.free_electron_fraction.tobytes() == other.free_electron_fraction.tobytes()


def test_history_comes_back_and_is_a_text_of_columns(tmp_path: Path) -> None:
    table = helium_table()
    history = history_from_table(table, COSMOLOGY, redshifts=np.geomspace(7000.0, 20.0, 20))
    write_distilled(history, table.setup, tmp_path / "h.h5")
    again = levelnet.read(tmp_path / "h.h5")
    assert_same(dataclasses.replace(history, observables=None), again)
    with h5py.File(tmp_path / "h.h5") as file:
        stored = file["helium/singly_ionized_helium_fraction"][()]
    np.testing.assert_array_equal(stored, history.helium.singly_ionized_helium_fraction)
    write_distilled_csv(history, table.setup, tmp_path / "h.csv")
    columns = np.loadtxt(tmp_path / "h.csv", delimiter=",", skiprows=0, comments="#")
    np.testing.assert_array_equal(columns[:, -1], history.helium.doubly_ionized_helium_fraction)


def test_a_table_with_half_its_helium_is_refused(tmp_path: Path) -> None:
    table = helium_table()
    with pytest.raises(ValueError, match="no use without the other"):
        dataclasses.replace(table, helium_lines=None)
    with pytest.raises(ValueError, match="escape_error"):
        dataclasses.replace(table.helium_lines, escape_error=np.zeros(2))
    levelnet.write(table, tmp_path / "t.h5")
    data = bytearray((tmp_path / "t.h5").read_bytes())
    data[len(data) // 2] ^= 1
    (tmp_path / "t.h5").write_bytes(data)
    with pytest.raises(FileFormatError, match="damaged"):
        levelnet.read(tmp_path / "t.h5")


def test_pieces_are_used_and_foreign_ones_are_not(monkeypatch: pytest.MonkeyPatch) -> None:
    table, setup = helium_table("continuum", "saha"), helium_setup("continuum", "saha")
    lines = table.helium_lines
    calls = []
    real = helium_escape.log_gain

    def counted(*arguments: Any) -> Any:
        calls.append(1)
        return real(*arguments)

    monkeypatch.setattr(helium_escape, "log_gain", counted)
    helium_table.cache_clear()
    again = helium_table("continuum", "saha").helium_lines
    checked = len(calls)
    assert again.escape.tobytes() == lines.escape.tobytes()
    assert checked < 1000  # the random points of its error alone
    # A piece of another shape is computed anew.
    for key, arrays in list(PIECES._kept.items()):
        if set(arrays) == {"gain"}:
            PIECES.put(key, {"gain": np.zeros((2, 2))})
            break
    helium_table.cache_clear()
    assert helium_table("continuum", "saha").helium_lines.escape.tobytes() == lines.escape.tobytes()
    assert len(calls) > 2 * checked
    assert setup.lines.helium == "continuum"


@pytest.mark.parametrize(
    ("change", "options", "said"),
    [
        ({"helium_mass_fraction": 0.7}, {}, "helium_mass_fraction = 0.7: .* from 0.02 to 0.6"),
        ({}, {"fine_structure_change": 0.01}, "fine_structure_change"),
        ({}, {"redshifts": [12000.0]}, "outside the table"),
    ],
)
def test_what_a_table_with_helium_cannot_do(
    change: dict[str, float], options: dict[str, Any], said: str
) -> None:
    cosmology = dataclasses.replace(COSMOLOGY, **change)
    with pytest.raises((InputError, RangeError), match=said) as caught:
        history_from_table(helium_table(), cosmology, **options)
    assert "\n" not in str(caught.value)


def test_lines_must_be_those_distilled() -> None:
    table = helium_table()
    with pytest.raises(InputError, match=r"lines.helium: the table was distilled"):
        history_from_table(table, COSMOLOGY, lines=helium_setup("sobolev").lines)
    field = dataclasses.replace(table.setup.lines, hydrogen="transfer")
    with pytest.raises(InputError, match="transfer"):
        history_from_table(table, COSMOLOGY, lines=field)
    with pytest.raises(InputError, match="holds no levels of helium"):
        history_from_table(small_table(), COSMOLOGY, lines=table.setup.lines)
    with pytest.raises(InputError, match="transfer"):
        levelnet.distill(dataclasses.replace(table.setup, lines=field), certify=False)


def test_stimulated_decay_and_changed_constants_need_the_whole_network() -> None:
    table = helium_table()
    stimulated = dataclasses.replace(table.setup.lines, two_photon="stimulated")
    with pytest.raises(InputError, match=r"lines.two_photon = .stimulated.: with levels"):
        history_from_table(table, COSMOLOGY, lines=stimulated)
    with pytest.raises(InputError, match=r"lines.two_photon = .stimulated.: with levels"):
        levelnet.distill(dataclasses.replace(table.setup, lines=stimulated), certify=False)
    physics = {"electron_mass_change": 1e-3}
    with pytest.raises(InputError, match=r"\[physics\]: with levels of helium a table"):
        levelnet.distill(helium_setup("continuum", physics=physics), certify=False)


def test_without_helium_in_the_universe_hydrogen_is_alone() -> None:
    none = dataclasses.replace(COSMOLOGY, helium_mass_fraction=0.0)
    bare = dataclasses.replace(helium_table(), helium=None, helium_ion=None, helium_lines=None)
    history = history_from_table(helium_table(), none)
    assert history.helium is None
    lines = dataclasses.replace(bare.setup.lines, helium=None)
    alone = history_from_table(bare, none, lines=lines)
    assert history.free_electron_fraction.tobytes() == alone.free_electron_fraction.tobytes()


def test_a_history_from_a_table_has_the_names_of_a_whole_one() -> None:
    with_helium = history_from_table(helium_table(), COSMOLOGY, redshifts=[3000.0, 1000.0, 200.0])
    inert = history_from_table(small_table(), COSMOLOGY, redshifts=[1000.0, 200.0])
    for history, what in ((with_helium, "H and He"), (inert, "hydrogen")):
        n = len(history.redshift)
        shown = f"<FastHistory z = {history.redshift[0]:g} to 200, {n} redshifts, {what}: "
        assert repr(history) == f"{shown}{history.outcome.value}>"
        fractions = np.array([getattr(history, name) for name in HELIUM])
        np.testing.assert_allclose(fractions.sum(axis=0), 1.0, rtol=1e-14)
    assert with_helium.helium is not None
    for name in HELIUM:
        assert getattr(with_helium, name) is getattr(with_helium.helium, name)
    assert np.all(inert.neutral_helium_fraction == 1.0)  # as in a History with inert helium
    assert np.all(inert.singly_ionized_helium_fraction == 0.0)


@pytest.mark.parametrize("lines", ["sobolev_feedback", "continuum"])
def test_notes_are_those_of_the_whole_history_but_for_limits(tmp_path: Path, lines: str) -> None:
    """Sizes: Hirata 2008 and Chluba & Sunyaev 2009 (Lyman-alpha); Switzer & Hirata 2008."""
    table = helium_table(lines, "saha")
    history = history_from_table(table, COSMOLOGY, redshifts=[3000.0, 1000.0])
    asked = (*notes_of(table.setup, treatment("sobolev")), JUDGED)
    assert set(history.notes) == set(asked) and len(history.notes) == len(asked)
    said = " ".join(history.notes)
    assert "change x_e by 1 to 2 per cent" in said  # of Lyman-alpha
    size = {"sobolev_feedback": "2 per cent too high", "continuum": "up to 0.28 per cent"}[lines]
    assert (
        size in said and f"helium lines: {helium_treatment(table.setup.lines).leaves_out}" in said
    )
    write_distilled(history, table.setup, tmp_path / "h.h5")
    assert levelnet.read(tmp_path / "h.h5").notes == history.notes
    assert distilled_values(history, None)["notes"] == list(history.notes)
    assert all(one in " ".join(distilled_summary(history).split()) for one in history.notes)


def test_notes_follow_the_choice_at_hand_and_not_that_of_the_table() -> None:
    none = dataclasses.replace(COSMOLOGY, helium_mass_fraction=0.0)
    assert "there is no helium: [helium] and its lines change nothing" in table_notes(
        helium_table(), none, helium_table().setup.lines
    )
    inert = table_notes(small_table(), COSMOLOGY, Lines(hydrogen="closed"))
    assert any("neutral and inert" in one for one in inert)
    assert 'lines: "closed"' in inert
    rates = Rates(rows=("two_photon,2s,,,8.5,INVENTED: of this test",))
    changed = dataclasses.replace(
        small_table(), setup=dataclasses.replace(small_table().setup, rates=rates)
    )
    for rate, count in ((None, 1), (8.5, 1), (8.2, 0)):
        notes = table_notes(changed, COSMOLOGY, Lines(), rate)
        assert sum("INVENTED" in one for one in notes) == count


def test_the_bare_right_hand_side_knows_hydrogen_alone() -> None:
    with pytest.raises(InputError, match="rate_of_change: knows hydrogen alone"):
        rate_of_change(helium_table(), hydrogen_density_cm3=1.0, electron_fraction=0.5,
                       matter_temperature_k=3000.0, radiation_temperature_k=3000.0,
                       hubble_rate_per_s=1e-13, helium_ratio=0.1)  # fmt: skip


def test_a_table_that_ends_too_cold_says_so() -> None:
    table = helium_table()
    short = levelnet.distill(
        table.setup, radiation_range_k=(25.0, 6500.0), pieces=PIECES, certify=False
    )
    with pytest.raises(InputError, match="not in Saha equilibrium; distill it up to 27500 K"):
        history_from_table(short, COSMOLOGY, redshifts=[2000.0, 20.0])


def test_a_universe_with_deeper_lines_than_the_table_holds() -> None:
    table = helium_table("continuum", "saha")
    axis = table.helium_lines.axis.copy()
    axis[0, 0] -= 12.0
    lines = dataclasses.replace(table.helium_lines, axis=axis)
    shifted = dataclasses.replace(table, helium_lines=lines)
    with pytest.raises(RangeError, match="leave the table of escape probabilities"):
        history_from_table(shifted, COSMOLOGY, redshifts=[1800.0])


def test_nucleon_fraction_is_held_to_the_same_range() -> None:
    cosmology = Cosmology(68.0, 0.0224, 0.142, helium_nucleon_fraction=0.7)
    with pytest.raises(InputError, match=r"helium_mass_fraction = 0\.69"):
        history_from_table(helium_table(), cosmology)
