"""Exported code: compiled without a warning, run, and held against the table it was made from.

The right-hand side is held against the project's own equations on the same table
(levelnet/history/equations.py), which share no code with what is exported. The compilers' warnings
are the outside judge of the source.
"""

from __future__ import annotations

import ctypes
import math
import shutil
import subprocess
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.interpolate import RectBivariateSpline

from levelnet.atomic.physics import Physics, scales
from levelnet.background.matter import compton_rate_per_s
from levelnet.distilled.export import exported_texts
from levelnet.distilled.table import EffectiveTable
from levelnet.errors import InputError
from levelnet.escape.family import treatment
from levelnet.history.atom import open_lyman_lines, resonance_lines
from levelnet.history.equations import SlowEquations
from tests.small_runs import COSMOLOGY
from tests.small_tables import small_table

SPD = ((2, 0), (2, 1), (3, 0), (3, 1), (3, 2))
CASES: dict[str, dict[str, Any]] = {
    "one line": {},
    "two lines, stimulated": {"lyman": 2, "two_photon": "stimulated"},
    "open, n to 3 kept": {"lines": "open", "kept": SPD},
    "closed": {"lines": "closed"},
    "no exchange at all": {"n_max": 2},
}
# Issue of this check: the logarithms agree to 1e-12.
AGREEMENT = 1e-12
OUTSIDE = {"radiation": 1, "ratio": 2, "matter": 3, "conditions": 4}

C_FLAGS = ["-std=c99", "-pedantic", "-Wall", "-Wextra", "-Werror", "-O2", "-fPIC"]
FORTRAN_FLAGS = ["-std=f2018", "-Wall", "-Wextra", "-Werror", "-O2", "-fPIC"]

TIMER = """
#include "lantern.h"
#include <time.h>
double nanoseconds(int count, const double *radiation, const double *matter);
double nanoseconds(int count, const double *radiation, const double *matter)
{
    double sum = 0.0;
    const clock_t start = clock();
    for (int k = 0; k < count; ++k) {
        lantern_rates rates;
        if (!lantern_log_rates(radiation[k], matter[k], (void *)0, &rates))
            sum += rates.log_recombination[0] + rates.log_photoionization[1] + rates.log_up[0];
    }
    const double spent = (double)(clock() - start) / CLOCKS_PER_SEC;
    return sum < 1e300 ? 1e9 * spent / count : -1.0;
}
"""

WRAPPERS = """
module wrappers
  use lantern_module
  use, intrinsic :: iso_c_binding, only: c_int
  implicit none
contains
  subroutine wrapped_rates(radiation, matter, changes, rates, status) bind(c)
    real(dp), value :: radiation, matter
    type(constant_changes), intent(in) :: changes
    type(rate_logarithms), intent(out) :: rates
    integer(c_int), intent(out) :: status
    call log_rates(radiation, matter, rates, status, changes)
  end subroutine wrapped_rates
  subroutine wrapped_parts(radiation, matter, rates, status) bind(c)
    real(dp), value :: radiation, matter
    type(rate_logarithms), intent(out) :: rates
    integer(c_int), intent(out) :: status(3)
    call log_recombination(radiation, matter, rates%recombination, status(1))
    call log_photoionization(radiation, rates%photoionization, status(2))
    call log_exchange(radiation, rates%down, rates%up, status(3))
  end subroutine wrapped_parts
  subroutine wrapped_side(conditions, slopes, status) bind(c)
    type(local_conditions), intent(in) :: conditions
    type(local_slopes), intent(out) :: slopes
    integer(c_int), intent(out) :: status
    call right_hand_side(conditions, slopes, status)
  end subroutine wrapped_side
end module wrappers
"""


class Changes(ctypes.Structure):
    """Changes of the constants."""

    _fields_ = (("fine_structure", ctypes.c_double), ("electron_mass", ctypes.c_double))


class Conditions(ctypes.Structure):
    """Local conditions, in the order of the header."""

    _fields_ = (
        *((name, ctypes.c_double) for name in ("density", "electrons", "ionized", "neutral")),
        *((name, ctypes.c_double) for name in ("matter", "radiation", "expansion", "helium")),
        ("changes", Changes),
    )


class Slopes(ctypes.Structure):
    """What the right-hand side gives."""

    _fields_ = tuple((name, ctypes.c_double) for name in ("ionized", "matter", "compton"))


class Compiled:
    """One export as a shared library."""

    def __init__(self, language: str, table: EffectiveTable, folder: Path) -> None:
        self.language, self.table = language, table
        n, m = len(table.kept), len(table.lower)
        fields = (("recombination", n), ("photoionization", n), ("down", m), ("up", m))
        self.record = type(
            "Rates",
            (ctypes.Structure,),
            {"_fields_": [(name, ctypes.c_double * size) for name, size in fields]},
        )
        self.library = ctypes.CDLL(str(build(language, table, folder)))

    def rates(
        self, radiation: float, matter: float, changes: Changes | None = None
    ) -> tuple[int, np.ndarray]:
        given, out = changes or Changes(0.0, 0.0), self.record()
        pair = ctypes.c_double(radiation), ctypes.c_double(matter)
        if self.language == "c99":
            reference = ctypes.byref(given) if changes else None
            status = self.library.lantern_log_rates(*pair, reference, ctypes.byref(out))
        else:
            code = ctypes.c_int(-1)
            record = ctypes.byref(out)
            self.library.wrapped_rates(*pair, ctypes.byref(given), record, ctypes.byref(code))
            status = code.value
        return status, flat(out)

    def parts(self, radiation: float, matter: float) -> tuple[list[int], np.ndarray]:
        """The same by the three functions for single kinds of rates."""
        out, pair = self.record(), (ctypes.c_double(radiation), ctypes.c_double(matter))
        if self.language == "c99":
            lib = self.library
            return [
                lib.lantern_log_recombination(*pair, out.recombination),
                lib.lantern_log_photoionization(pair[0], out.photoionization),
                lib.lantern_log_exchange(pair[0], out.down, out.up),
            ], flat(out)
        codes = (ctypes.c_int * 3)()
        self.library.wrapped_parts(*pair, ctypes.byref(out), codes)
        return list(codes), flat(out)

    def side(self, conditions: Conditions) -> tuple[int, Slopes]:
        out, code = Slopes(), ctypes.c_int(-1)
        given = ctypes.byref(conditions)
        if self.language == "c99":
            return self.library.lantern_right_hand_side(given, ctypes.byref(out)), out
        self.library.wrapped_side(given, ctypes.byref(out), ctypes.byref(code))
        return code.value, out


def flat(record: ctypes.Structure) -> np.ndarray:
    return np.concatenate([np.array(getattr(record, name)) for name, _ in record._fields_])


def build(language: str, table: EffectiveTable, folder: Path, wrappers: str = WRAPPERS) -> Path:
    """Compile an export into a shared library; a warning is an error."""
    for name, text in exported_texts(table, language, "lantern").items():
        (folder / name).write_text(text, encoding="ascii")
    library = folder / "liblantern.so"
    if language == "c99":
        compiler = shutil.which("gcc") or shutil.which("cc")
        flags, sources = C_FLAGS, ["lantern.c", "timer.c"]
        (folder / "timer.c").write_text(TIMER)
    else:
        compiler = shutil.which("gfortran")
        flags, sources = FORTRAN_FLAGS, ["lantern.f90", "wrappers.f90"]
        (folder / "wrappers.f90").write_text(wrappers)
    if compiler is None:
        pytest.skip(f"no compiler for {language} (gcc or gfortran) on this machine")
    objects = [f"{Path(source).stem}.o" for source in sources]
    commands = [
        *(
            [compiler, *flags, "-c", one, "-o", out]
            for one, out in zip(sources, objects, strict=True)
        ),
        [compiler, "-shared", *objects, "-lm", "-o", str(library)],
    ]
    for command in commands:
        done = subprocess.run(command, cwd=folder, capture_output=True, text=True, check=False)
        assert done.returncode == 0, done.stderr
        assert done.stderr == ""
    return library


@pytest.fixture(scope="module")
def compiled(tmp_path_factory: pytest.TempPathFactory) -> Any:
    @lru_cache(maxsize=32)
    def make(language: str, case: str) -> Compiled:
        table = small_table(**CASES[case])
        return Compiled(language, table, tmp_path_factory.mktemp("export"))

    return make


LANGUAGES = ("c99", "fortran")
EACH = pytest.mark.parametrize("case", CASES)
BOTH = pytest.mark.parametrize("language", LANGUAGES)


def places(table: EffectiveTable, count: int = 400) -> tuple[np.ndarray, np.ndarray]:
    """Temperatures over the whole table: random ones, its corners, and the edges of its cells."""
    random = np.random.default_rng(3)
    x = random.uniform(table.log_low, table.log_high, count)
    y = random.uniform(table.ratio_low, table.ratio_high, count)
    edges = np.linspace(table.log_low, table.log_high, len(table.equilibrium) + 1)
    x = np.concatenate([x, edges, [table.log_low, table.log_low, table.log_high, table.log_high]])
    y = np.concatenate([y, 0.0 * edges, [table.ratio_low, table.ratio_high, table.ratio_low, 0.0]])
    radiation = np.exp(x)
    return radiation, np.minimum(radiation * np.exp(y), np.maximum(8000.0, radiation))


def expected(table: EffectiveTable, radiation: np.ndarray, matter: np.ndarray) -> np.ndarray:
    rates = table.effective_rates(radiation, matter)
    i, j = table.lower, table.upper
    return np.concatenate(
        [
            rates.log_recombination,
            rates.log_photoionization,
            rates.log_exchange[:, j, i],
            rates.log_exchange[:, i, j],
        ],
        axis=1,
    )


def assert_equal_logarithms(found: np.ndarray, truth: np.ndarray) -> None:
    never = np.isneginf(truth)
    # Fortran has no infinity to write; it says -huge.
    assert np.all(found[never] < -1e300)
    assert np.max(np.abs(found[~never] - truth[~never]), initial=0.0) <= AGREEMENT


@BOTH
@EACH
def test_logarithms_agree_over_the_whole_table(language: str, case: str, compiled: Any) -> None:
    code = compiled(language, case)
    radiation, matter = places(code.table)
    truth = expected(code.table, radiation, matter)
    assert np.min(truth[np.isfinite(truth)]) < math.log(5e-324)  # the rates leave the doubles
    for t_r, t_m, row in zip(radiation, matter, truth, strict=True):
        status, found = code.rates(float(t_r), float(t_m))
        assert status == 0
        assert_equal_logarithms(found, row)
        codes, parts = code.parts(float(t_r), float(t_m))
        assert codes == [0, 0, 0]
        assert np.array_equal(parts, found)


@BOTH
@pytest.mark.parametrize("case", ["one line", "two lines, stimulated"])
def test_changed_constants(language: str, case: str, compiled: Any) -> None:
    code = compiled(language, case)
    table = code.table.with_constants(0.02, -0.03)
    radiation = np.array([60.0, 700.0, 3300.0])
    truth = expected(table, radiation, 0.9 * radiation)
    for t_r, row in zip(radiation, truth, strict=True):
        status, found = code.rates(float(t_r), float(0.9 * t_r), Changes(0.02, -0.03))
        assert status == 0
        assert_equal_logarithms(found, row)


@BOTH
def test_outside_the_range_is_an_error_code(language: str, compiled: Any) -> None:
    code = compiled(language, "one line")
    bad = {
        (24.999, 25.0): "radiation",
        (9000.1, 9000.1): "radiation",
        (0.0, 100.0): "radiation",
        (math.nan, 100.0): "radiation",
        (1000.0, 9.99): "ratio",
        (1000.0, 4001.0): "ratio",
        (1000.0, -1.0): "ratio",
        (1000.0, math.nan): "ratio",
        (3000.0, 8001.0): "matter",
    }
    for (t_r, t_m), what in bad.items():
        assert code.rates(t_r, t_m)[0] == OUTSIDE[what], (t_r, t_m)
        assert code.parts(t_r, t_m)[0][0] == OUTSIDE[what]
    assert code.rates(8500.0, 8500.0)[0] == 0  # hotter than 8000 K with the radiation is allowed
    for changes in (Changes(0.3, 0.0), Changes(0.0, -0.3), Changes(math.nan, 0.0)):
        assert code.rates(3000.0, 3000.0, changes)[0] == OUTSIDE["conditions"]


def equations(table: EffectiveTable) -> SlowEquations:
    """The project's own equations on the same table."""
    setup, factor = table.setup, table.scales
    lines = resonance_lines(table.kept, open_lyman_lines(setup), factor)
    rate = setup.hydrogen.two_photon_rate_per_s * factor.two_photon_rate
    chosen = treatment(setup.lines.hydrogen)
    return SlowEquations(COSMOLOGY, table, lines, chosen, rate, setup.lines.two_photon)


@BOTH
@EACH
@pytest.mark.parametrize("changes", [(0.0, 0.0), (0.02, -0.03)])
def test_right_hand_side(
    language: str, case: str, changes: tuple[float, float], compiled: Any
) -> None:
    code = compiled(language, case)
    rule = equations(code.table.with_constants(*changes))
    factor = scales(Physics(*changes))
    for redshift, u, v in (
        (1500, 4.0, -1e-5),
        (1100, -1.8, -1e-4),
        (400, -7.0, -0.1),
        (30, -8, -1),
    ):
        here = rule.local(-math.log1p(redshift), np.array([u, v]))
        c = here.conditions
        given = Conditions(
            c.hydrogen_density_cm3,
            c.electron_fraction,
            c.ionized_fraction,
            c.ground_fraction,
            c.matter_temperature_k,
            c.radiation_temperature_k,
            c.hubble_rate_per_s,
            COSMOLOGY.helium_ratio(),
            Changes(*changes),
        )
        status, slopes = code.side(given)
        assert status == 0
        assert slopes.ionized == pytest.approx(-here.solution.net_flow, rel=1e-9, abs=0.0)
        compton = float(
            compton_rate_per_s(
                c.radiation_temperature_k, c.electron_fraction, COSMOLOGY.helium_ratio()
            )
        )
        assert slopes.compton == pytest.approx(compton * factor.compton_rate, rel=1e-12, abs=0.0)
        drift = slopes.compton * (c.radiation_temperature_k - c.matter_temperature_k)
        cooling = -2.0 * c.hubble_rate_per_s * c.matter_temperature_k
        assert slopes.matter == pytest.approx(cooling + drift, rel=1e-12, abs=0.0)


@BOTH
def test_right_hand_side_refuses_what_is_no_condition(language: str, compiled: Any) -> None:
    code = compiled(language, "one line")
    good = (200.0, 0.1, 0.1, 0.9, 2999.0, 3000.0, 5e-14, 0.08)
    assert code.side(Conditions(*good, Changes(0.0, 0.0)))[0] == 0
    for position in (0, 1, 2, 3, 6):
        for value in (0.0, -1.0, math.nan, math.inf):
            bad = list(good)
            bad[position] = value
            assert code.side(Conditions(*bad, Changes(0.0, 0.0)))[0] == OUTSIDE["conditions"]
    hot = (*good[:4], 2999.0, 1e5, *good[6:])
    assert code.side(Conditions(*hot, Changes(0.0, 0.0)))[0] == OUTSIDE["radiation"]


def test_four_rates_take_less_than_200_ns(compiled: Any) -> None:
    code = compiled("c99", "one line")
    radiation, matter = (np.ascontiguousarray(one) for one in places(code.table, 20_000))
    timer = code.library.nanoseconds
    timer.restype = ctypes.c_double
    pointer = ctypes.POINTER(ctypes.c_double)
    arguments = [one.ctypes.data_as(pointer) for one in (radiation, matter)]
    # CPU time, best of many, since other work may share the caches.
    best = min(timer(len(radiation), *arguments) for _ in range(20))
    assert 0.0 < best < 200.0


@pytest.mark.parametrize("language", ["c99", "fortran", "csv"])
def test_says_what_it_is(language: str) -> None:
    table = small_table()
    texts = exported_texts(table, language, "lantern")
    assert exported_texts(table, language, "lantern") == texts
    for name, text in texts.items():
        assert text.isascii()
        assert len(text) < 3_000_000
        head = " ".join(line.lstrip("!#/* ") for line in text.splitlines()[:30])
        for word in ("levelnet", table.setup.digest, "1e-07", "certificate", "BSD-3-Clause"):
            assert word in head, (name, word)
        if language == "c99":
            # The head is one comment, whatever the title holds.
            assert text.index("*/") == text.index("\n */") + 2
        if language != "csv":
            assert max(map(len, text.splitlines())) <= 132


def test_many_kept_levels_stay_small_and_short() -> None:
    table = small_table(kept=tuple((n, l) for n in range(2, 6) for l in range(n)))
    assert len(table.kept) == 14
    for language, most in (("c99", 3_000_000), ("fortran", 3_000_000), ("csv", 6_000_000)):
        for text in exported_texts(table, language, "lantern").values():
            assert len(text) < most
            if language != "csv":
                assert max(map(len, text.splitlines())) <= 132


@pytest.mark.parametrize(
    ("language", "name", "expected"),
    [
        ("c99", "2x", 'name = "2x"'),
        ("fortran", "a-b", 'name = "a-b"'),
        ("c99", "x" * 41, "at most 40"),
        ("cobol", "x", "allowed are c99, fortran, csv"),
    ],
)
def test_bad_names_are_refused(language: str, name: str, expected: str) -> None:
    with pytest.raises(InputError, match=expected):
        exported_texts(small_table(), language, name)


def read_grid(text: str) -> tuple[list[str], np.ndarray]:
    """Read the text as its head says, without levelnet."""
    lines = text.splitlines()
    names = [line for line in lines if line.startswith("#")][-1].removeprefix("# ").split(",")
    return names, np.loadtxt(lines, delimiter=",")


def test_grid_gives_the_rates_by_a_spline_of_scipy() -> None:
    table = small_table(lyman=2, two_photon="stimulated")
    text = exported_texts(table, "csv", "lantern")["lantern.csv"]
    names, data = read_grid(text)
    assert data.shape == (241, len(names))
    x = data[:, 0]
    stated = float(text.split("against the table: ")[1].split()[0])
    assert stated < 5e-8
    y = np.log([float(name.rsplit("_at_", 1)[1]) for name in names if "_2s_at_" in name])
    y = np.linspace(y[0], y[-1], len(y))  # the names round the ratios
    radiation, matter = places(table)
    rates = table.effective_rates(radiation, matter)
    for k, level in enumerate(("2s", "2p", "3p")):
        columns = [c for c, name in enumerate(names) if f"recombination_{level}_at_" in name]
        spline = RectBivariateSpline(x, y, data[:, columns])
        found = spline(np.log(radiation), np.log(matter / radiation), grid=False)
        assert np.max(np.abs(found - rates.log_recombination[:, k])) < 3.0 * stated


def test_grid_names_the_factors_kept_out() -> None:
    table = small_table(lyman=2, two_photon="stimulated")
    names, data = read_grid(exported_texts(table, "csv", "lantern")["lantern.csv"])
    kelvin = np.exp(data[:, 0])
    # Where a row stands on the border of two patches, either may have made it.
    sides = [table.effective_rates(kelvin * (1 + d), kelvin * (1 + d)) for d in (-1e-13, 1e-13)]
    depth = table.saha.ionization_k
    for k, level in enumerate(("2s", "2p", "3p")):
        column = data[:, names.index(f"ln_photoionization_{level}")] - depth[k] / kelvin
        away = [np.abs(column - one.log_photoionization[:, k]) for one in sides]
        assert np.minimum(*away).max() < 1e-9
    column = data[:, names.index("ln_exchange_3p_to_2p")]
    pair = [(i, j) for i, j in zip(table.lower, table.upper, strict=True)].index((1, 2))
    kept_out = table.barrier_k[pair] / kelvin
    away = [np.abs(column - one.log_exchange[:, 2, 1] - kept_out) for one in sides]
    assert np.minimum(*away).max() < 1e-9
