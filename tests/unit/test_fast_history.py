"""The compiled history: its kernels against the network in Python, its scheme, its limits."""

from __future__ import annotations

import dataclasses
import math
import pickle
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest

from levelnet.distilled.ensemble import ensemble
from levelnet.distilled.history import FastHistory, history_from_table
from levelnet.distilled.prepared import make_atom, rate_names
from levelnet.distilled.table import EffectiveTable
from levelnet.distilled.universe import make_universe
from levelnet.errors import InputError, RangeError
from levelnet.escape.family import treatment
from levelnet.escape.lines import Lines
from levelnet.history.atom import resonance_lines
from levelnet.history.equations import SlowEquations
from levelnet.history.start import equilibrium_state
from levelnet.kernels import effective
from levelnet.numerics import stepping
from tests.fast_tables import small_table
from tests.small_runs import COSMOLOGY

# Two ways through the same formulas: rounding of E/kT (up to 700), of the patches, and of ln H
# between nodes (1e-10).
SAME_FORMULAS = 1e-9
STATES = ((1700.0, 7.0, -1e-5), (1100.0, -1.7, -1e-4), (600.0, -7.0, -1e-3), (25.0, -8.4, -1.3))
NONE = np.zeros((2, 0))


def in_python(table: EffectiveTable, lines: Lines, count: int = 1) -> SlowEquations:
    return SlowEquations(
        COSMOLOGY,
        table,
        resonance_lines(table.kept, count),
        treatment(lines.hydrogen),
        8.2246,
        lines.two_photon,
    )


def compiled(table: EffectiveTable, lines: Lines | None = None):  # type: ignore[no-untyped-def]
    atom = make_atom(table, lines)
    low = math.log(COSMOLOGY.cmb_temperature_k) - table.log_high
    room = effective.make_room(len(table.kept), len(table.lower))
    return atom, make_universe(COSMOLOGY, low, -math.log(15.0)), room


@pytest.mark.parametrize("hydrogen", ["closed", "open", "sobolev"])
@pytest.mark.parametrize("two_photon", ["spontaneous", "stimulated"])
@pytest.mark.parametrize("kind", ["two", "five"])
def test_right_hand_side_is_that_of_the_full_history(
    hydrogen: str, two_photon: str, kind: str
) -> None:
    count = 1 if kind == "two" else 2
    lines = Lines(hydrogen=hydrogen, two_photon=two_photon, lyman_lines=count)  # type: ignore[arg-type]
    table = small_table() if kind == "two" else small_table(5, 2, True)
    equations = in_python(table, lines, count)
    atom, universe, room = compiled(table, lines)
    # In a cold field 2p has no exit where all lines are closed: the full network refuses.
    for z, u, v in STATES[:3] if hydrogen == "closed" else STATES:
        s, y = -math.log1p(z), np.array([u, v])
        rate, (matrix, drift) = equations.rate(s, y), equations.jacobian(s, y)
        found = effective.rate_of_slow(atom, universe, s, u, v, room)
        again = effective.linearize(atom, universe, s, u, v, room, NONE)
        np.testing.assert_allclose(found, rate, rtol=SAME_FORMULAS)
        np.testing.assert_allclose(again, rate, rtol=SAME_FORMULAS)
        np.testing.assert_allclose(
            room.linear[:, :2], matrix, rtol=SAME_FORMULAS, atol=SAME_FORMULAS * 1e-3
        )
        np.testing.assert_allclose(room.linear[:, 2], drift, rtol=SAME_FORMULAS)


def test_equilibrium_is_that_of_the_full_history() -> None:
    table = small_table()
    equations = in_python(table, Lines())
    atom, universe, room = compiled(table)
    for z in (2900.0, 2000.0, 1600.0):
        s, state = -math.log1p(z), np.zeros(2)
        lag = effective.equilibrium(atom, universe, s, room, state, NONE)
        expected, expected_lag = equilibrium_state(equations, s)
        # The full history takes du_Saha/ds by a difference, good to 1e-8.
        np.testing.assert_allclose(state, expected, rtol=1e-7)
        assert lag == pytest.approx(expected_lag, rel=1e-6)


def test_rosenbrock_scheme_is_the_same() -> None:
    for k in range(5):
        assert tuple(effective.STAGE_A[k, :k]) == stepping._A[k]
    for k in range(6):
        assert tuple(effective.STAGE_C[k, :k]) == stepping._C[k]
    assert tuple(effective.STAGE_NODE) == stepping._NODE
    assert tuple(effective.STAGE_TIME) == stepping._TIME
    assert effective.GAMMA == stepping._GAMMA


def test_radau_scheme_meets_its_order_conditions() -> None:
    # C(3): sum_j a_ij c_j^(k-1) = c_i^k/k, and B(5) for the last row (Hairer & Wanner 1996, sec.
    # IV.5): order 5, stiffly accurate.
    c, a = effective.RADAU_NODE, effective.RADAU_A
    for k in (1, 2, 3):
        np.testing.assert_allclose(a @ c ** (k - 1), c**k / k, rtol=1e-14)
    for k in (4, 5):
        assert a[2] @ c ** (k - 1) == pytest.approx(1.0 / k, rel=1e-14)


def test_compiled_and_plain_python_agree() -> None:
    table = small_table()
    atom, universe, room = compiled(table)
    other = effective.make_room(2, 1)
    s, u, v = -math.log1p(1100.0), -1.7, -1e-4
    args = (atom, universe, s, u, v)
    for name, more in (("rate_of_slow", ()), ("linearize", (NONE,))):
        kernel = getattr(effective, name)
        assert kernel.py_func(*args, other, *more) == pytest.approx(
            kernel(*args, room, *more), rel=1e-13
        )
    np.testing.assert_allclose(other.slope, room.slope, rtol=1e-12)
    flow = (atom, 3000.0, -1e-4, 264.0, 4.9e-14, 0.15, 0.15, 0.85)
    for slopes in (True, False):
        plain = effective.net_flow.py_func(*flow, other, slopes)  # type: ignore[attr-defined]
        assert plain == pytest.approx(effective.net_flow(*flow, room, slopes), rel=1e-13)


def test_whole_history_compiled_and_plain_agree() -> None:
    atom, universe, _ = compiled(small_table())
    s = -np.log1p(np.linspace(1750.0, 1500.0, 7))

    def run(function) -> np.ndarray:  # type: ignore[no-untyped-def]
        states, report = np.zeros((7, 2)), np.zeros(6)
        empty = np.zeros((7, 0)), np.zeros((0, 2)), np.zeros((0, 0))
        last = (states, *empty, report)
        assert function(atom, universe, s, np.zeros(0), 1e-4, 1e-5, 1e-3, 500, *last) == 0
        return states

    plain = run(effective.effective_history.py_func)  # type: ignore[attr-defined]
    np.testing.assert_allclose(run(effective.effective_history), plain, rtol=1e-12)


@pytest.mark.parametrize("relative", [1e-4, 1e-6, 1e-8])
def test_error_is_below_what_was_asked(relative: float) -> None:
    table = small_table()
    exact = history_from_table(table, COSMOLOGY, relative=1e-11)
    found = history_from_table(table, COSMOLOGY, relative=relative)
    for name in ("free_electron_fraction", "matter_temperature_k"):
        error = np.abs(getattr(found, name) / getattr(exact, name) - 1.0)
        assert error.max() <= relative
    assert len(found.redshift) == 2000
    # Outputs lie between steps; they do not make them.
    assert found.n_steps < (400 if relative >= 1e-6 else 1000)


def test_outputs_do_not_depend_on_each_other() -> None:
    table = small_table()
    many = history_from_table(table, COSMOLOGY, redshifts=np.linspace(1900.0, 20.0, 1881))
    few = history_from_table(table, COSMOLOGY, redshifts=[20.0, 1100.0, 1900.0, 600.0])
    assert few.redshift.tolist() == [1900.0, 1100.0, 600.0, 20.0]
    where = [np.flatnonzero(many.redshift == z)[0] for z in few.redshift]
    assert np.array_equal(many.free_electron_fraction[where], few.free_electron_fraction)


def test_history_is_continuous_across_the_start() -> None:
    found = history_from_table(small_table(), COSMOLOGY)
    z = found.start_redshift + np.array([1e-3, -1e-3])
    both = history_from_table(small_table(), COSMOLOGY, redshifts=[*z, 20.0])
    odds = np.log(both.ionized_hydrogen_fraction / both.neutral_hydrogen_fraction)
    # Equilibrium with its lag leaves out the square of it: 1e-7; u changes by 2e-5 itself here.
    saha = np.log1p(z[0]) - np.log1p(z[1])
    assert 0.0 < odds[0] - odds[1] < 60.0 * saha


def test_expansion_between_nodes() -> None:
    massive = dataclasses.replace(COSMOLOGY, neutrino_masses_ev=(0.06,))
    for cosmology in (COSMOLOGY, massive):
        universe = make_universe(cosmology, -8.2, -2.0)
        for s in np.random.default_rng(3).uniform(-8.2, -2.0, 200).tolist():
            value, slope = effective.hubble_at(universe, s)
            z = math.expm1(-s)
            assert value == pytest.approx(math.log(cosmology.hubble_rate_per_s(z)), abs=1e-10)
            assert slope == pytest.approx(-cosmology.hubble_log_slope(z), abs=1e-7)


def test_threads_and_pickles_change_no_bit() -> None:
    table = small_table()
    chosen = [dataclasses.replace(COSMOLOGY, matter_density_h2=0.12 + 0.001 * k) for k in range(20)]
    alone = ensemble(table, chosen)
    with ThreadPoolExecutor(2) as executor:
        together = ensemble(pickle.loads(pickle.dumps(table)), chosen, executor=executor)
    assert np.array_equal(alone.free_electron_fraction, together.free_electron_fraction)
    assert alone.free_electron_fraction.shape == (20, 2000)
    again: FastHistory = pickle.loads(pickle.dumps(alone.histories[0]))
    assert np.array_equal(again.matter_temperature_k, alone.histories[0].matter_temperature_k)


def test_numbered_complaint_of_an_ensemble() -> None:
    hot = dataclasses.replace(COSMOLOGY, cmb_temperature_k=9.0)
    with pytest.raises(RangeError, match=r"cosmology 1: redshifts: 1800: T_r"):
        ensemble(small_table(), [COSMOLOGY, hot])
    with pytest.raises(InputError, match="at least one"):
        ensemble(small_table(), [])


@pytest.mark.parametrize(
    ("options", "text"),
    [
        ({"relative": 1e-2}, "relative = 0.01"),
        ({"redshifts": []}, "one finite number"),
        ({"redshifts": [100.0, float("nan")]}, "finite"),
        ({"redshifts": [1000.0, 2.0]}, "outside the table"),
        ({"redshifts": [4000.0, 20.0]}, "outside the table"),
        ({"lines": Lines(lyman_lines=2)}, "needs 3p"),
        ({"lines": Lines(lyman_lines="all")}, "needs 3p"),
        ({"two_photon_rate_per_s": -1.0}, "two_photon_rate_per_s"),
        ({"rate_scales": {"recombination_9s": 1.0}}, "recombination_9s"),
        ({"rate_scales": {"two_photon": 0.0}}, "two_photon = 0"),
        ({"fine_structure_change": 0.5}, "fine_structure_change"),
        ({"lines": Lines(hydrogen="closed"), "two_photon_rate_per_s": 0.0}, "Saha equilibrium"),
    ],
)
def test_bad_input_is_one_clear_line(options: dict, text: str) -> None:
    with pytest.raises(InputError, match=text) as caught:
        history_from_table(small_table(), COSMOLOGY, **options)
    assert "\n" not in str(caught.value)


def test_names_of_rates() -> None:
    assert rate_names(small_table()) == (
        "recombination_2s",
        "recombination_2p",
        "exchange_2s_2p",
        "two_photon",
    )
