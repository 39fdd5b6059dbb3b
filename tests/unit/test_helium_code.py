"""Helium in exported code: compiled without a warning, run, and held against the table.

The right-hand side is held against the compiled history's (levelnet/kernels), which tests of their
own hold against the plain Python of levelnet/history; it shares no code with what is exported.
"""

from __future__ import annotations

import ctypes
import dataclasses
import math
from collections.abc import Callable
from functools import lru_cache
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from levelnet.distilled.export import exported_texts
from levelnet.distilled.history import history_from_table
from levelnet.distilled.plasma import packed, plasma_of
from levelnet.distilled.prepared import make_atom
from levelnet.distilled.series import local_series
from levelnet.distilled.stage import StageTable
from levelnet.distilled.table import EffectiveTable
from levelnet.kernels.effective import Atom, Universe, hubble_at, split_odds
from levelnet.kernels.effective_helium import gain, locate, make_line_room, remember
from levelnet.kernels.effective_plasma import evaluate, make_desk, make_memory
from levelnet.kernels.plasma_steps import saha_state
from tests.helium_tables import helium_table
from tests.small_runs import COSMOLOGY
from tests.unit.test_export import AGREEMENT, OUTSIDE, Changes, build

CASES = {
    "sobolev": ("sobolev", "network"),
    "feedback": ("sobolev_feedback", "network"),
    "continuum": ("continuum", "saha"),
    "free": ("free", "network"),
}
LANGUAGES = ("c99", "fortran")
BOTH = pytest.mark.parametrize("language", LANGUAGES)
EACH = pytest.mark.parametrize("case", CASES)
ESCAPE = 6
# Coefficients of ln(P/S) have ten decimals.
ESCAPE_DIGITS = 2e-10


# Gives the procedures of Fortran the names and arguments of C.
WRAPPERS = """
module wrappers
  use lantern_module
  use, intrinsic :: iso_c_binding, only: c_int
  implicit none
  integer(c_int), bind(c, name="lantern_he1_lit_by") :: lit_by(n_he1_lines) = int(he1_lit_by, c_int)
  real(dp), bind(c, name="lantern_he1_delay") :: delay(n_he1_lines) = he1_delay
contains
  integer(c_int) function first_rates(radiation, matter, changes, rates) &
    bind(c, name="lantern_he1_log_rates")
    real(dp), value :: radiation, matter
    type(constant_changes), intent(in), optional :: changes
    type(he1_logarithms), intent(inout) :: rates
    call he1_log_rates(radiation, matter, rates, first_rates, changes)
  end function first_rates
@ION
  integer(c_int) function wrapped_escape(column, hydrogen, radiation, escape) &
    bind(c, name="lantern_he1_escape")
    real(dp), value :: column, hydrogen, radiation
    real(dp), intent(inout) :: escape(n_he1_lines)
    call he1_escape(column, hydrogen, radiation, escape, wrapped_escape)
  end function wrapped_escape
  subroutine wrapped_blackbody(blue) bind(c, name="lantern_he1_blackbody")
    real(dp), intent(out) :: blue(n_he1_lines)
    call he1_blackbody(blue)
  end subroutine wrapped_blackbody
  integer(c_int) function wrapped_blue(line, sent, then, now, blue) &
    bind(c, name="lantern_he1_blue_side")
    integer(c_int), value :: line
    real(dp), value :: sent, then, now
    real(dp), intent(inout) :: blue
    call he1_blue_side(int(line), sent, then, now, blue, wrapped_blue)
  end function wrapped_blue
  integer(c_int) function wrapped_side(plasma, slopes) &
    bind(c, name="lantern_plasma_right_hand_side")
    type(plasma_conditions), intent(in) :: plasma
    type(plasma_slopes), intent(inout) :: slopes
    call plasma_right_hand_side(plasma, slopes, wrapped_side)
  end function wrapped_side
end module wrappers
"""
ION_WRAPPER = """
  integer(c_int) function second_rates(radiation, matter, changes, rates) &
    bind(c, name="lantern_he2_log_rates")
    real(dp), value :: radiation, matter
    type(constant_changes), intent(in), optional :: changes
    type(he2_logarithms), intent(inout) :: rates
    call he2_log_rates(radiation, matter, rates, second_rates, changes)
  end function second_rates
"""


def record(name: str, **sizes: int) -> type[ctypes.Structure]:
    """A structure of doubles: one where the size is 0, else an array."""
    fields = [
        (key, ctypes.c_double * size if size else ctypes.c_double) for key, size in sizes.items()
    ]
    return type(name, (ctypes.Structure,), {"_fields_": fields})


PLASMA = (
    "density", "helium", "ionized", "neutral", "neutral_helium", "single", "double",
    "matter", "radiation", "expansion",
)  # fmt: skip
SLOPES = (
    "u", "a", "b", "ionized", "neutral_helium", "single", "double", "matter", "compton",
    "electrons",
)  # fmt: skip


class Code:
    """One export as a shared library."""

    def __init__(self, language: str, table: EffectiveTable, folder: Path) -> None:
        self.table, self.count = table, len(table.helium_lines.names)
        self.first = 0 if language == "c99" else 1  # that the language counts from
        ion = "" if table.helium_ion is None else ION_WRAPPER
        wrappers = WRAPPERS.replace("@ION", ion)
        self.library = ctypes.CDLL(str(build(language, table, folder, wrappers)))
        self.plasma = record(
            "Plasma", **dict.fromkeys(PLASMA, 0), blue=self.count, structure=0, mass=0
        )
        self.slopes = record("Slopes", **dict.fromkeys(SLOPES, 0), red=self.count)

    def rates(
        self, ion: str, radiation: float, matter: float, changes: Changes | None = None
    ) -> tuple[int, np.ndarray]:
        stage = self.table.helium if ion == "he1" else self.table.helium_ion
        n, m = len(stage.n), len(stage.lower)
        out = (ctypes.c_double * (2 * n + 2 * m))(*[math.nan] * (2 * n + 2 * m))
        reference = None if changes is None else ctypes.byref(changes)
        function = getattr(self.library, f"lantern_{ion}_log_rates")
        status = function(ctypes.c_double(radiation), ctypes.c_double(matter), reference, out)
        return status, np.array(out)

    def escape(self, column: float, hydrogen: float, kelvin: float) -> tuple[int, np.ndarray]:
        out = (ctypes.c_double * self.count)(*[math.nan] * self.count)
        three = [ctypes.c_double(one) for one in (column, hydrogen, kelvin)]
        return self.library.lantern_he1_escape(*three, out), np.array(out)

    def blackbody(self) -> np.ndarray:
        out = (ctypes.c_double * self.count)(*[math.nan] * self.count)
        self.library.lantern_he1_blackbody(out)
        return np.array(out)

    def blue(self, line: int, sent: float, then: float, now: float) -> tuple[int, float]:
        out = ctypes.c_double(math.nan)
        three = [ctypes.c_double(one) for one in (sent, then, now)]
        function = self.library.lantern_he1_blue_side
        return function(ctypes.c_int(line), *three, ctypes.byref(out)), out.value

    def side(self, given: Any) -> tuple[int, Any]:
        out = self.slopes(*[math.nan] * len(SLOPES), (math.nan,) * self.count)
        function = self.library.lantern_plasma_right_hand_side
        return function(ctypes.byref(given), ctypes.byref(out)), out


@pytest.fixture(scope="module")
def compiled(tmp_path_factory: pytest.TempPathFactory) -> Callable[[str, str], Code]:
    @lru_cache(maxsize=8)
    def make(language: str, case: str) -> Code:
        return Code(language, helium_table(*CASES[case]), tmp_path_factory.mktemp("helium"))

    return make


def logarithms(
    stage: StageTable, atom: Atom, radiation: np.ndarray, matter: np.ndarray
) -> np.ndarray:
    y = np.log(matter / radiation)
    here = local_series(stage, np.log(radiation), y)
    alone, exchange = here.equilibrium, here.exchange
    captures = alone + y[:, None] * here.departure
    inverse = 1.0 / radiation[:, None]
    offset, reach = atom.level[2:]
    photo = alone - (offset - 1.5 * np.log(radiation)[:, None] + reach * inverse)
    down = np.where(exchange > -699.0, exchange - stage.barrier_k * inverse, -np.inf)
    up = down + stage.log_weight_ratio - stage.rise_k * inverse
    return np.concatenate([captures, photo, down, up], axis=1)


@BOTH
@pytest.mark.parametrize(("ion", "place"), [("he1", 0), ("he2", 1)])
def test_logarithms_agree_over_the_whole_table(
    language: str, ion: str, place: int, compiled: Callable[[str, str], Code]
) -> None:
    code = compiled(language, "sobolev")
    stage = code.table.helium if ion == "he1" else code.table.helium_ion
    random = np.random.default_rng(9)
    radiation = np.exp(random.uniform(stage.log_low, stage.log_high, 300))
    matter = radiation * np.exp(random.uniform(stage.ratio_low, stage.ratio_high, 300))
    matter = np.minimum(matter, np.maximum(8000.0, radiation))
    truth = logarithms(stage, packed(code.table)[place], radiation, matter)
    for t_r, t_m, row in zip(radiation, matter, truth, strict=True):
        status, found = code.rates(ion, float(t_r), float(t_m))
        assert status == 0
        never = np.isneginf(row)
        assert np.all(found[never] < -1e300)
        assert np.max(np.abs(found[~never] - row[~never])) <= AGREEMENT
    assert code.rates(ion, 5000.0, 5000.0, Changes(0.0, 0.0))[0] == 0
    assert code.rates(ion, 5000.0, 5000.0, Changes(1e-9, 0.0))[0] == OUTSIDE["conditions"]
    assert code.rates(ion, 1399.0, 1399.0)[0] == OUTSIDE["radiation"]
    assert code.rates(ion, math.nan, 1399.0)[0] == OUTSIDE["radiation"]
    assert code.rates(ion, 5000.0, 2400.0)[0] == OUTSIDE["ratio"]
    assert code.rates(ion, 6000.0, 8100.0)[0] == OUTSIDE["matter"]


@BOTH
def test_escape_of_the_lines(language: str, compiled: Callable[[str, str], Code]) -> None:
    code = compiled(language, "continuum")
    lines, room = code.table.helium_lines.packed(), make_line_room(1, 4)
    cells = np.array(lines.escape.shape[1:]) - 3
    random = np.random.default_rng(10)
    shares = random.uniform(0.0, 1.0, (100, 3))
    shares[:30, :2] -= 0.5  # below the columns P goes to S
    for share in shares:
        at = lines.axis[:, 0] + share * cells * lines.axis[:, 1]
        for axis in range(3):
            locate(lines, axis, float(at[axis]), room)
        depth = lines.line[1] * math.exp(at[0])
        more = np.array([gain(lines, k, room)[0] for k in range(4)])
        truth = -np.expm1(-depth) / depth * np.exp(more)
        status, found = code.escape(*np.exp(at).tolist())
        assert status == 0
        np.testing.assert_allclose(found, truth, rtol=ESCAPE_DIGITS)
    top = lines.axis[:, 0] + cells * lines.axis[:, 1]
    edge = np.exp(top - 1e-9).tolist()
    assert code.escape(*edge)[0] == 0
    assert code.escape(1.01 * edge[0], *edge[1:])[0] == ESCAPE
    assert code.escape(edge[0], 1.01 * edge[1], edge[2])[0] == ESCAPE
    assert code.escape(*edge[:2], 1.01 * edge[2])[0] == OUTSIDE["radiation"]
    for bad in (0.0, -1.0, math.nan, math.inf):
        assert code.escape(bad, *edge[1:])[0] == OUTSIDE["conditions"]
        assert code.escape(edge[0], bad, edge[2])[0] == OUTSIDE["conditions"]


@BOTH
def test_escape_without_absorption_is_that_of_sobolev(
    language: str, compiled: Callable[[str, str], Code]
) -> None:
    code = compiled(language, "sobolev")
    depth = code.table.helium_lines.packed().line[1]
    for column in (1e-4, 1e8, 1e14, 1e22):
        status, found = code.escape(column, 1e30, 4000.0)
        assert status == 0
        tau = depth * column
        truth = np.where(tau > 1e-8, -np.expm1(-tau) / tau, 1.0 - 0.5 * tau)
        np.testing.assert_allclose(found, truth, rtol=1e-14)


def conditions(code: Code, s: float, state: np.ndarray, place: Any, blue: np.ndarray) -> Any:
    ionized, neutral = split_odds(state[0])
    charged, ground = split_odds(state[2])
    double, single = split_odds(state[3])
    given = (
        place.density / COSMOLOGY.helium_ratio(), COSMOLOGY.helium_ratio(), ionized, neutral,
        ground, charged * single, charged * double, place.radiation_k * math.exp(state[1]),
        place.radiation_k, place.hubble,
    )  # fmt: skip
    return code.plasma(*given, (ctypes.c_double * code.count)(*blue), 0.0, 0.0)


@BOTH
@EACH
@pytest.mark.parametrize("redshift", [7900.0, 5400.0, 2600.0, 1900.0, 520.0, 505.0, 300.0])
def test_right_hand_side(
    language: str, case: str, redshift: float, compiled: Callable[[str, str], Code]
) -> None:
    code, s = compiled(language, case), -math.log1p(redshift)
    plasma = plasma_of(code.table, make_atom(code.table), COSMOLOGY, -9.3, -3.0)
    desk, memory, state = make_desk(plasma), make_memory(4, code.count), np.zeros(4)
    saha_state(plasma, s, state)
    # Off equilibrium, where no net flow is a small difference.
    state += np.array([0.3, -1e-5, 0.4, 0.2])
    state[2:] = np.maximum(state[2:], -300.0)
    place = evaluate(plasma, s, state, memory, desk, True)
    status, found = code.side(conditions(code, s, state, place, code.blackbody()))
    assert status == 0
    close = 1e-9
    rate = desk.rate * place.hubble
    assert found.u == pytest.approx(rate[0], rel=close, abs=0.0)
    assert found.a == pytest.approx(rate[2], rel=close, abs=0.0)
    assert found.b == pytest.approx(rate[3], rel=close, abs=0.0)
    matter = place.radiation_k * math.exp(state[1])
    assert found.matter == pytest.approx(matter * (rate[1] - place.hubble), rel=close, abs=0.0)
    # Slopes of the fractions from those of the odds.
    charged, ground = split_odds(state[2])
    double, single = split_odds(state[3])
    assert found.neutral_helium == pytest.approx(-charged * ground * found.a, rel=close, abs=0.0)
    mixed = charged * double * (ground * found.a + single * found.b)
    size = charged * double * (abs(ground * found.a) + abs(single * found.b))
    assert found.double == pytest.approx(mixed, abs=close * size)
    assert found.single == pytest.approx(-found.neutral_helium - found.double, rel=1e-12, abs=0.0)
    if redshift < 512.0:  # T_r below 1400 K: held
        assert found.a == found.b == found.neutral_helium == found.double == 0.0
    else:
        assert found.a != 0.0


@BOTH
@pytest.mark.parametrize("case", ["feedback", "continuum"])
def test_light_of_the_lines(language: str, case: str, compiled: Callable[[str, str], Code]) -> None:
    code = compiled(language, case)
    plasma = plasma_of(code.table, make_atom(code.table), COSMOLOGY, -9.3, -3.0)
    desk, memory, state = make_desk(plasma), make_memory(40, 4), np.zeros(4)
    lines = code.table.helium_lines
    lit_by = (ctypes.c_int * 4).in_dll(code.library, "lantern_he1_lit_by")
    delay = (ctypes.c_double * 4).in_dll(code.library, "lantern_he1_delay")
    first = code.first
    assert [k - first if k >= first else -1 for k in lit_by] == lines.lit_by.tolist()
    s, seen = -math.log1p(2300.0), 0
    for step in range(20):
        at = s + 0.005 * step
        saha_state(plasma, at, state)
        state += np.array([0.1, -1e-6, 0.5 + 0.03 * step, 0.0])
        place = evaluate(plasma, at, state, memory, desk, True)
        # What a program would do: remember red sides, look them up one delay earlier.
        blue = code.blackbody()
        for k, above in enumerate(lines.lit_by.tolist()):
            then = at - delay[k]
            if above < 0 or step < 4 or then <= memory.time[0]:
                continue
            nearest = cubic(memory.time[:step], memory.red[:step, above], then)
            column = cubic(memory.time[:step], memory.hydrogen[:step], then)
            status, blue[k] = code.blue(
                k + first, nearest, math.exp(column), math.exp(place.hydrogen)
            )
            assert status == 0
            seen += 1
        if step >= 4:
            np.testing.assert_allclose(blue, desk.lines.line[1], atol=1e-9)
        blue = desk.lines.line[1].copy()
        status, found = code.side(conditions(code, at, state, place, blue))
        assert status == 0
        assert found.a == pytest.approx(desk.rate[2] * place.hubble, rel=1e-8, abs=0.0)
        _, neutral = split_odds(state[2])
        remember(plasma.first, plasma.lines, place, neutral, memory, desk.first, desk.lines)
        np.testing.assert_allclose(np.array(found.red), memory.red[step], rtol=1e-8, atol=1e-10)
    assert seen >= 40
    # There is light to speak of, or what hydrogen leaves of it.
    assert np.abs(blue).max() > (1e-3 if case == "feedback" else 1e-5)
    assert code.blue(9, 0.0, 1.0, 1.0)[0] == OUTSIDE["conditions"]
    assert code.blue(first, math.nan, 1.0, 1.0)[0] == OUTSIDE["conditions"]
    assert code.blue(first, 0.0, 0.0, 1.0)[0] == OUTSIDE["conditions"]


@BOTH
@pytest.mark.parametrize("redshift", [2600.0, 1900.0])
def test_strong_light(language: str, redshift: float, compiled: Callable[[str, str], Code]) -> None:
    code, s = compiled(language, "feedback"), -math.log1p(redshift)
    plasma = plasma_of(code.table, make_atom(code.table), COSMOLOGY, -9.3, -3.0)
    desk, memory, state = make_desk(plasma), make_memory(10, 4), np.zeros(4)
    saha_state(plasma, s, state)
    state += np.array([0.1, -1e-5, 0.4, 0.2])
    # A past in which every line has always sent this.
    sent = np.array([0.3, -0.8, 1.5, 0.9])
    memory.time[:5], memory.red[:5], memory.taken[0] = s + np.linspace(-0.2, 0.0, 5), sent, 5
    memory.hydrogen[:5] = 1.0
    place = evaluate(plasma, s, state, memory, desk, True)
    blue = np.where(code.table.helium_lines.lit_by >= 0, sent[code.table.helium_lines.lit_by], 0.0)
    np.testing.assert_allclose(desk.lines.line[1], blue, atol=1e-12)
    status, found = code.side(conditions(code, s, state, place, blue))
    assert status == 0
    assert found.a == pytest.approx(desk.rate[2] * place.hubble, rel=1e-9, abs=0.0)
    dark = code.side(conditions(code, s, state, place, code.blackbody()))[1].a
    assert abs(found.a / dark - 1.0) > 1e-4
    _, neutral = split_odds(state[2])
    remember(plasma.first, plasma.lines, place, neutral, memory, desk.first, desk.lines)
    np.testing.assert_allclose(np.array(found.red), memory.red[5], rtol=1e-9)


@BOTH
def test_light_that_hydrogen_absorbs_evenly(
    language: str, compiled: Callable[[str, str], Code]
) -> None:
    # Closed form: with the same depth D all the way, u - 1 falls by exp(-D).
    code = compiled(language, "continuum")
    lines = code.table.helium_lines
    line = int(np.argmax(lines.lit_by >= 0))
    above, sent = int(lines.lit_by[line]), 1.2
    ratio = lines.cross_section_cm2[above] / lines.cross_section_cm2[line]
    for depth in (1e-6, 0.3, 8.0):
        column = depth / lines.delay[line] / (lines.cross_section_cm2[above] * 29979245800.0)
        for off in (0.0, 5e-9, 1e-7):  # relative, and of D as half of it
            status, found = code.blue(line + code.first, sent, column, column * ratio * (1.0 + off))
            truth = math.log1p(math.expm1(sent) * math.exp(-depth * (1.0 + 0.5 * off)))
            assert status == 0
            assert found == pytest.approx(truth, rel=1e-11 if off else 1e-12)
    top = int(np.argmax(lines.lit_by < 0))
    assert code.blue(top + code.first, sent, 1.0, 1.0) == (0, 0.0)


def cubic(x: np.ndarray, y: np.ndarray, at: float) -> float:
    """The cubic through the four nearest points, two of them on either side where there are."""
    above = int(np.searchsorted(x, at, side="right"))
    first = min(max(0, above - 2), len(x) - 4)
    part = slice(first, first + 4)
    return float(np.polynomial.Polynomial.fit(x[part], y[part], 3)(at))


GOOD: dict[str, Any] = {
    "density": 3000.0, "helium": 0.08, "ionized": 0.99, "neutral": 0.01, "neutral_helium": 0.5,
    "single": 0.5, "double": 1e-20, "matter": 5999.0, "radiation": 6000.0, "expansion": 2e-13,
}  # fmt: skip


@BOTH
def test_right_hand_side_refuses_what_is_no_condition(
    language: str, compiled: Callable[[str, str], Code]
) -> None:
    code = compiled(language, "continuum")

    def status(**changes: float) -> int:
        blue = (ctypes.c_double * code.count)(*[changes.pop("blue", 0.0)] * code.count)
        constants = [changes.pop(name, 0.0) for name in ("structure", "mass")]
        return code.side(code.plasma(*(GOOD | changes).values(), blue, *constants))[0]

    assert status() == 0
    for name in set(GOOD) - {"matter", "radiation"}:
        for value in (0.0, -1.0, math.nan, math.inf):
            assert status(**{name: value}) == OUTSIDE["conditions"], name
    for name in ("blue", "structure", "mass"):
        assert status(**{name: math.nan}) == OUTSIDE["conditions"]
    assert status(structure=1e-12) == status(mass=0.01) == OUTSIDE["conditions"]
    assert status(radiation=1e5, matter=1e5) == OUTSIDE["radiation"]
    assert status(matter=2500.0) == OUTSIDE["ratio"]
    assert status(matter=8100.0) == OUTSIDE["matter"]
    assert status(expansion=1e-20) == ESCAPE
    # Light so strong that rates leave the doubles, and what overflows without it.
    assert status(blue=600.0) == status(blue=-600.0) == 0
    for blue in (600.1, -600.1, 720.0):
        assert status(blue=blue) == OUTSIDE["conditions"]
    assert status(neutral_helium=1e-290, radiation=3000.0, matter=2999.0) == OUTSIDE["conditions"]
    first = code.first
    assert code.blue(first, 600.0, 1.0, 1.0)[0] == 0
    assert code.blue(first, -600.1, 1.0, 1.0)[0] == OUTSIDE["conditions"]


@BOTH
@EACH
def test_slopes_are_finite_or_refused(
    language: str, case: str, compiled: Callable[[str, str], Code]
) -> None:
    code, random = compiled(language, case), np.random.default_rng(11)
    seen = []
    for _ in range(300):
        tiny = random.choice(["ionized", "neutral", "neutral_helium", "single", "double"])
        given = GOOD | {tiny: 10.0 ** (-300.0 * (1.0 - random.uniform() ** 3))}
        given["radiation"] = given["matter"] = 1500.0 * 6.0 ** random.uniform()
        given["expansion"] = 10.0 ** random.uniform(-14.0, -12.0)
        blue = (ctypes.c_double * code.count)(*random.uniform(-600.0, 600.0, code.count))
        status, found = code.side(code.plasma(*given.values(), blue, 0.0, 0.0))
        values = np.frombuffer(found)
        # Untouched where refused.
        assert np.isfinite(values).all() if status == 0 else np.isnan(values).all()
        seen.append(status)
    assert 0 in seen
    assert OUTSIDE["conditions"] in seen


@BOTH
def test_nothing_is_written_on_error(language: str, compiled: Callable[[str, str], Code]) -> None:
    code = compiled(language, "continuum")
    for status, found in (
        code.rates("he1", 1000.0, 1000.0),
        code.rates("he1", 6000.0, 8100.0),
        code.rates("he1", 6000.0, 6000.0, Changes(0.01, 0.0)),
        code.escape(0.0, 1.0, 6000.0),
        code.escape(1e40, 1e10, 6000.0),
        code.escape(1e10, 1e10, 1000.0),
        code.blue(99, 0.0, 1.0, 1.0),
    ):
        assert status != 0
        assert np.isnan(found).all()


class Around(NamedTuple):
    """What of the surroundings the exported code is told."""

    density: float
    radiation_k: float
    hubble: float


def around(universe: Universe, s: float) -> Around:
    density = universe.today[1] * universe.today[2] * math.exp(-3.0 * s)
    hubble = math.exp(hubble_at(universe, s)[0])
    return Around(density, universe.today[5] * math.exp(-s), hubble)


class Program:
    """What a program does with the exported code: slopes of the odds, and a memory of light."""

    def __init__(self, code: Code) -> None:
        self.code, self.lines = code, code.table.helium_lines
        self.plasma = plasma_of(code.table, make_atom(code.table), COSMOLOGY, -9.3, -2.9)
        self.first = code.first
        self.time: list[float] = []
        self.red: list[np.ndarray] = []
        self.hydrogen: list[float] = []
        self.gone = np.zeros(4, dtype=bool)

    def slopes(self, at: float, state: np.ndarray) -> tuple[Around, Any]:
        # A trial of the integrator may be hotter than the radiation or leave the doubles, which
        # the code refuses.
        tried, place = np.clip(state, -690.0, 690.0), around(self.plasma.universe, at)
        tried[1] = min(tried[1], 0.0)
        given = conditions(self.code, at, tried, place, self.blue(at, tried, place))
        status, found = self.code.side(given)
        assert status == 0
        return place, found

    def blue(self, at: float, state: np.ndarray, place: Around) -> np.ndarray:
        blue = self.code.blackbody()
        now = split_odds(state[0])[1] * place.density / COSMOLOGY.helium_ratio() / place.hubble
        for k, above in enumerate(self.lines.lit_by.tolist()):
            then = at - self.lines.delay[k]
            if above < 0 or len(self.time) < 5 or then <= self.time[0]:
                continue
            last = slice(-60, None)
            time, red = np.array(self.time[last]), np.array(self.red[last])
            sent = cubic(time, red[:, above], then)
            column = math.exp(cubic(time, np.array(self.hydrogen[last]), then))
            status, blue[k] = self.code.blue(k + self.first, sent, column, now)
            assert status == 0
        return blue

    def rate(self, at: float, state: np.ndarray) -> np.ndarray:
        place, found = self.slopes(at, state)
        ratio = found.matter / (place.radiation_k * math.exp(min(state[1], 0.0)))
        rates = np.array([found.u, ratio + place.hubble, found.a, found.b])
        return np.where(self.gone, 0.0, rates / place.hubble)

    def remember(self, at: float, state: np.ndarray) -> None:
        place, found = self.slopes(at, state)
        column = split_odds(state[0])[1] * place.density / COSMOLOGY.helium_ratio() / place.hubble
        self.time.append(at)
        self.red.append(np.array(found.red))
        self.hydrogen.append(math.log(column))

    def march(self, start: float, state: np.ndarray, outputs: np.ndarray) -> np.ndarray:
        """States at outputs, in stretches shorter than any delay: light lies in the past."""
        at, states = start, []
        edges = np.union1d(outputs, np.arange(start + STRETCH, HELD_FROM, STRETCH))
        for edge in edges.tolist():
            if at < HELD_FROM:
                self.remember(at, state)
            run = solve_ivp(self.rate, (at, edge), state, "Radau", rtol=1e-7, atol=1e-7)
            assert run.success
            at, state = edge, run.y[:, -1]
            # As the headers advise: there is no such ion left.
            self.gone |= np.array([False, False, state[2] < -34.0, state[3] < -30.0])
            if at in outputs:
                states.append(state)
        return np.array(states)


# ln a, below the shortest delay; and ln a from which helium is held in this cosmology.
STRETCH, HELD_FROM = 0.009, -6.2


@BOTH
@EACH
@pytest.mark.slow
def test_history_by_radau_of_scipy(
    language: str, case: str, compiled: Callable[[str, str], Code]
) -> None:
    # scipy.integrate.solve_ivp, Radau, on the exported code alone.
    program = Program(compiled(language, case))
    table = program.code.table
    redshift = [6000.0, 5000.0, 3500.0, 2600.0, 2200.0, 1900.0, 1500.0, 1100.0, 700.0, 200.0, 25.0]
    truth = history_from_table(table, COSMOLOGY, redshifts=redshift, relative=1e-8)
    start, s = np.zeros(4), -math.log1p(7990.0)
    saha_state(program.plasma, s, start)
    outputs = -np.log1p(redshift)
    states = program.march(s, start, outputs)
    pairs = zip(outputs.tolist(), states, strict=True)
    electrons = [program.slopes(at, state)[1].electrons for at, state in pairs]
    np.testing.assert_allclose(electrons, truth.free_electron_fraction, rtol=1e-6)
    neutral = [split_odds(a)[1] for a in states[:, 2]]
    np.testing.assert_allclose(neutral, truth.helium.neutral_helium_fraction, rtol=1e-5)


@BOTH
def test_says_what_it_is_and_stays_short(language: str) -> None:
    table = helium_table("continuum", "saha")
    texts = exported_texts(table, language, "lantern")
    assert exported_texts(table, language, "lantern") == texts
    for text in texts.values():
        assert text.isascii()
        assert max(map(len, text.splitlines())) <= 132
        head = " ".join(line.lstrip("!/* ") for line in text.splitlines()[:30])
        for word in (
            "hydrogen and helium", "redistribution partial", "diffusion false", "He II in Saha",
            "pass these changes",
        ):  # fmt: skip
            assert word in head
        assert "@{" not in text


@BOTH
def test_helium_adds_to_the_code_of_hydrogen_and_changes_nothing(language: str) -> None:
    table = helium_table("continuum", "saha")
    without = dataclasses.replace(table, helium=None, helium_lines=None)
    whole = exported_texts(table, language, "lantern")
    for name, text in exported_texts(without, language, "lantern").items():
        assert "he1" not in text
        lines, more = (one.splitlines() for one in (text, whole[name]))
        # Behind the head, every line in its order.
        rest = iter(more[more.index(lines[-1 - lines[::-1].index(_head_end(lines))]) :])
        assert all(line in rest for line in lines[lines.index(_head_end(lines)) :])
        assert len(more) > len(lines) + 20


def _head_end(lines: list[str]) -> str:
    """The line of the head that holds the licence, which is the last."""
    return next(line for line in lines if "licence:" in line)


@BOTH
def test_lines_are_short_whatever_the_numbers(language: str) -> None:
    # A line of Fortran has 132 characters at most (ISO 1539-1:2018, 6.3.2.1); where lists of
    # numbers break hangs on how long they are. Sixteen short ones fill a line, a long one takes the
    # room of two: some count of long ones fills the last line.
    table = helium_table("free", "network")
    assert len(table.helium_lines.names) > 6
    cut = {key: getattr(table.helium, key)[:1] for key in ("equilibrium", "exchange", "departure")}
    for long in range(16):
        numbers = np.ones(len(table.helium.barrier_k))
        barrier = np.where(np.arange(len(numbers)) < long, 1.12345678, 1.0)
        changed = dataclasses.replace(
            table.helium, **cut, barrier_k=barrier, rise_k=numbers, log_weight_ratio=numbers
        )
        one = dataclasses.replace(table, helium=changed)
        for text in exported_texts(one, language, "lantern").values():
            assert max(map(len, text.splitlines())) <= 132
