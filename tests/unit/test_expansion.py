"""Tabulated expansion rates: files, callables, astropy objects."""

from __future__ import annotations

import hashlib
import math
import pickle
import subprocess
import sys
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
from astropy import cosmology as ac
from astropy import units as u
from scipy.interpolate import CubicSpline

from levelnet.atomic.species import Hydrogen
from levelnet.background import (
    Cosmology,
    ExpansionTable,
    expansion,
    from_astropy,
    read_expansion_table,
    tabulate_expansion,
    with_expansion,
    write_expansion_table,
)
from levelnet.errors import AccuracyWarning, InputError, RangeError
from levelnet.history.setup import Setup, parse_setup
from tests.tolerances import ORDER, ROUND_OFF

PLAIN = Cosmology(68.0, 0.0224, 0.142)
REDSHIFT = np.array([0.0, 0.31, 2.2, 17.0, 350.0, 1090.0, 7e4, 9.9e5])
# ln H through 769 rows over 0 <= z <= 1e6: step 0.018, error step^4/384 times a fourth derivative
# of some units, and more at the ends.
SPLINE = 2e-9


def rows(count: int = 40, last: float = 1e4) -> tuple[Any, Any]:
    redshift = np.expm1(np.linspace(0.0, math.log1p(last), count))
    redshift[-1] = last
    return redshift, PLAIN.hubble_rate_per_s(redshift)


def test_table_interpolates_ln_h_as_scipy_does() -> None:
    redshift, rate = rows()
    table = ExpansionTable(redshift, rate)
    curve = CubicSpline(np.log1p(redshift), np.log(rate))
    z = np.linspace(0.0, 9999.0, 777)
    assert table.rate_per_s(1.0 + z) == pytest.approx(np.exp(curve(np.log1p(z))), rel=ROUND_OFF)
    assert table.log_slope(1.0 + z) == pytest.approx(curve(np.log1p(z), 1), rel=1e-12)
    assert [table.rate_per_s(1.0 + x) for x in z.tolist()] == pytest.approx(
        table.rate_per_s(1.0 + z), rel=1e-13
    )
    assert [table.log_slope(1.0 + x) for x in z.tolist()] == pytest.approx(
        table.log_slope(1.0 + z), rel=1e-11
    )
    # Exact at the rows, both ends included.
    assert table.rate_per_s(1.0 + redshift) == pytest.approx(rate, rel=1e-13)


def test_stored_error_bounds_the_true_one_and_falls_with_the_fourth_power() -> None:
    z = np.linspace(0.0, 1e4, 5000)
    stored, true = [], []
    for count in (101, 201, 401):
        table = ExpansionTable(*rows(count))
        stored.append(table.interpolation_error)
        true.append(np.abs(np.log(table.rate_per_s(1.0 + z) / PLAIN.hubble_rate_per_s(z))).max())
    assert np.all(np.array(true) < np.array(stored))
    # Inside, a cubic spline is of fourth order (de Boor 1978, A Practical Guide to Splines).
    assert math.log2(stored[1] / stored[2]) == pytest.approx(4.0, abs=3.0 * ORDER)


@pytest.mark.parametrize("count", [16, 17])
def test_error_is_found_for_odd_and_even_row_counts(count: int) -> None:
    redshift, rate = rows(count)
    kept = np.union1d(np.arange(0, count, 2), [count - 1])
    out = np.setdiff1d(np.arange(count), kept)
    curve = CubicSpline(np.log1p(redshift[kept]), np.log(rate[kept]))
    expected = np.abs(curve(np.log1p(redshift[out])) - np.log(rate[out])).max()
    assert ExpansionTable(redshift, rate).interpolation_error == pytest.approx(expected, rel=1e-9)


def test_table_is_never_extrapolated() -> None:
    table = ExpansionTable(*rows(last=5000.0))
    cosmology = with_expansion(PLAIN, ExpansionTable(*rows(400, last=5000.0)))
    for bad in (5000.1, np.array([3.0, 5001.0])):
        for function in (
            lambda z: table.rate_per_s(1.0 + z),
            lambda z: table.log_slope(1.0 + z),
            cosmology.hubble_rate_per_s,
            cosmology.hubble_log_slope,
            cosmology.cosmic_time_s,
            cosmology.conformal_time_mpc,
        ):
            with pytest.raises(RangeError, match="the expansion table holds 0 to 5000"):
                function(bad)
    with pytest.raises(RangeError, match=r"redshift = -0\.5"):
        table.rate_per_s(0.5)


def edited(index: int | slice, column: int, value: float) -> tuple[Any, Any]:
    columns = [np.array(column) for column in rows()]
    columns[column][index] = value
    return columns[0], columns[1]


BAD_ROWS = [
    (rows(15), "15 rows, at least 16 are needed"),
    ((rows()[0], rows()[1][:-1]), "one rate per redshift is needed"),
    ((rows()[0].reshape(4, 10), rows()[1].reshape(4, 10)), "one rate per redshift is needed"),
    (edited(3, 0, math.nan), "redshift = nan in row 4 must be finite"),
    (edited(5, 1, 0.0), "hubble_rate_per_s = 0 in row 6 must be positive and finite"),
    (edited(39, 1, math.inf), "hubble_rate_per_s = inf in row 40"),
    (edited(0, 0, 0.1), "starts at redshift = 0.1, must start at 0"),
    (edited(7, 0, 0.0), "redshift must ascend, but 0 in row 8 follows"),
    (rows(last=2999.0), "ends at redshift = 2999, must reach 3000"),
]


@pytest.mark.parametrize(("columns", "text"), BAD_ROWS, ids=[text for _, text in BAD_ROWS])
def test_bad_rows_are_named(columns: tuple[Any, Any], text: str) -> None:
    with pytest.raises(InputError) as caught:
        ExpansionTable(*columns)
    assert text in str(caught.value)


def test_table_is_frozen() -> None:
    redshift, rate = rows()
    table = ExpansionTable(redshift, rate)
    redshift[1] = -1.0  # the caller's array is not the table's
    assert table.redshift[1] > 0.0
    with pytest.raises(ValueError, match="read-only"):
        table.redshift[0] = 1.0
    again = pickle.loads(pickle.dumps(table))
    assert again.rate_per_s(12.3) == table.rate_per_s(12.3)


def test_file_gives_the_table_back_to_the_bit(tmp_path: Path) -> None:
    table = ExpansionTable(*rows())
    path = tmp_path / "rates.csv"
    sha256 = write_expansion_table(table, path)
    assert sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    for checksum in (None, sha256, sha256.upper()):
        again = read_expansion_table(path, checksum)
        assert np.array_equal(again.redshift, table.redshift)
        assert np.array_equal(again.hubble_rate_per_s, table.hubble_rate_per_s)
        assert again.interpolation_error == table.interpolation_error
    assert [one.name for one in tmp_path.iterdir()] == ["rates.csv"]
    write_expansion_table(ExpansionTable(*rows(50)), path)
    assert len(read_expansion_table(path).redshift) == 50


def test_unwritable_place_is_one_line_and_leaves_nothing(tmp_path: Path) -> None:
    table = ExpansionTable(*rows())
    with pytest.raises(InputError, match=r"cannot be written: No such file"):
        write_expansion_table(table, tmp_path / "missing" / "rates.csv")
    (tmp_path / "folder").mkdir()
    with pytest.raises(InputError, match="cannot be written"):
        write_expansion_table(table, tmp_path / "folder")
    assert [one.name for one in tmp_path.iterdir()] == ["folder"]


def test_wrong_checksum_shows_the_actual_one(tmp_path: Path) -> None:
    path = tmp_path / "rates.csv"
    actual = write_expansion_table(ExpansionTable(*rows()), path)
    with pytest.raises(InputError, match=f"SHA-256 is {actual}, but 00 was asked for"):
        read_expansion_table(path, "00")


GOOD_TEXT = "# levelnet expansion table\n\n# a comment\nredshift,hubble_rate_per_s\n"
BAD_FILES = [
    (b"", "the first line must be"),
    (b"z,H\n0,1\n", "the first line must be"),
    (b"\x89HDF\r\n\x1a\n", "not plain text"),
    (b"# levelnet expansion table\nz,H\n0,1\n", "line 2: the header must be"),
    (GOOD_TEXT.encode() + b"0,2e-18\n1\n", "line 6: two numbers with a comma between"),
    (GOOD_TEXT.encode() + b"0,2e-18,3\n", "line 5: two numbers with a comma between"),
    (GOOD_TEXT.encode() + b"0,x\n", "line 5: two numbers with a comma between"),
    (GOOD_TEXT.encode() + b"0,2e-18\n", "1 rows, at least 16"),
    (GOOD_TEXT.encode(), "0 rows, at least 16"),
    (b"# levelnet expansion table\n", "0 rows, at least 16"),
]


@pytest.mark.parametrize(("content", "text"), BAD_FILES, ids=[text for _, text in BAD_FILES])
def test_foreign_and_damaged_files_are_one_line(tmp_path: Path, content: bytes, text: str) -> None:
    path = tmp_path / "rates.csv"
    path.write_bytes(content)
    with pytest.raises(InputError) as caught:
        read_expansion_table(path)
    assert text in str(caught.value)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_unreadable_files_are_one_line(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with pytest.raises(InputError, match="cannot be read: No such file"):
        read_expansion_table(tmp_path / "none.csv")
    with pytest.raises(InputError, match="cannot be read: Is a directory"):
        read_expansion_table(tmp_path)
    with pytest.raises(InputError, match="cannot be read: embedded null"):
        read_expansion_table("a\0b")
    path = tmp_path / "rates.csv"
    write_expansion_table(ExpansionTable(*rows()), path)
    monkeypatch.setattr(expansion, "_MAX_BYTES", 1000)
    with pytest.raises(InputError, match=r"rates\.csv: over 1 kB"):
        read_expansion_table(path)


def test_callable_is_followed() -> None:
    table = tabulate_expansion(PLAIN.hubble_rate_per_s)
    assert len(table.redshift) == 769
    assert table.last_redshift == 1e6
    assert table.rate_per_s(1.0 + REDSHIFT) == pytest.approx(
        PLAIN.hubble_rate_per_s(REDSHIFT), rel=SPLINE
    )
    short = tabulate_expansion(PLAIN.hubble_rate_per_s, redshift_max=3000.0, n_redshifts=512)
    assert short.last_redshift == 3000.0
    quantity = tabulate_expansion(lambda z: 68.0 * (1.0 + z) ** 1.5 * u.km / u.s / u.Mpc)
    assert quantity.rate_per_s(1.0) == pytest.approx(2.20373e-18, rel=1e-5)


@pytest.mark.parametrize(
    ("arguments", "text"),
    [
        ((PLAIN.hubble_rate_per_s, 2999.0), "redshift_max = 2999.0: allowed are 3000 to 1e9"),
        ((PLAIN.hubble_rate_per_s, 2e9), "redshift_max"),
        ((PLAIN.hubble_rate_per_s, math.nan), "redshift_max"),
        ((PLAIN.hubble_rate_per_s, 1e4, 511), "n_redshifts = 511: at least 512 are needed"),
        ((lambda z: -1.0,), "hubble_rate_per_s = -1 in row 1"),
        ((lambda z: "fast",), "gives 'fast' at redshift 0, not a number"),
        ((7.0,), "a float is neither callable nor has a method H"),
    ],
)
def test_bad_callables_are_refused(arguments: tuple[Any, ...], text: str) -> None:
    with pytest.raises(InputError) as caught:
        tabulate_expansion(*arguments)
    assert text in str(caught.value)


def test_cosmology_with_a_table_keeps_its_densities() -> None:
    faster = with_expansion(PLAIN, lambda z: 1.1 * PLAIN.hubble_rate_per_s(z))
    assert faster.hubble_rate_per_s(REDSHIFT) == pytest.approx(
        1.1 * PLAIN.hubble_rate_per_s(REDSHIFT), rel=SPLINE
    )
    assert faster.hubble_rate_per_s(1090.0) == pytest.approx(
        1.1 * PLAIN.hubble_rate_per_s(1090.0), rel=SPLINE
    )
    assert faster.hydrogen_density_cm3(9.0) == PLAIN.hydrogen_density_cm3(9.0)
    # The slope loses an order of the step, most at the ends: step^3 times the fourth derivative.
    assert faster.hubble_log_slope(REDSHIFT) == pytest.approx(
        PLAIN.hubble_log_slope(REDSHIFT), abs=2e-5
    )
    # Above z = 1e6, which is 1e-5 of the time to z = 1e4 and less, the parameters rule.
    assert faster.cosmic_time_s(10.0) == pytest.approx(PLAIN.cosmic_time_s(10.0) / 1.1, rel=1e-8)
    pickled = pickle.loads(pickle.dumps(faster))
    assert pickled == faster


def test_times_of_a_table_join_the_parameters_above_it() -> None:
    table = with_expansion(PLAIN, PLAIN.hubble_rate_per_s, redshift_max=3000.0)
    z = np.array([0.0, 8.0, 1090.0, 2999.0, 3000.0])
    assert table.cosmic_time_s(z) == pytest.approx(PLAIN.cosmic_time_s(z), rel=1e-9)
    assert table.conformal_time_mpc(z) == pytest.approx(PLAIN.conformal_time_mpc(z), rel=1e-9)


def test_rate_without_limit_follows_the_table_and_then_the_parameters() -> None:
    def faster_rate(z: Any) -> Any:
        return 1.1 * PLAIN.hubble_rate_per_s(z)

    faster = with_expansion(PLAIN, faster_rate, redshift_max=3000.0)
    growth = np.array([[1.0, 9.0, 3001.0], [3001.5, 1e9, 1e12]])
    law = PLAIN.unbounded_hubble_rate_per_s(growth)
    assert law[:, :2] == pytest.approx(PLAIN.hubble_rate_per_s(growth[:, :2] - 1.0), rel=ROUND_OFF)
    # Radiation alone, (1 + z)^2: matter adds 1.7e-6 at 1e9, omega_m/(2 omega_r) over 1 + z.
    assert law[1, 2] / law[1, 1] == pytest.approx(1e6, rel=2e-6)
    ratio = faster.unbounded_hubble_rate_per_s(growth) / law
    assert ratio == pytest.approx(np.array([[1.1] * 3, [1.0] * 3]), rel=SPLINE)


def test_inline_table_survives_the_setup_text() -> None:
    cosmology = with_expansion(PLAIN, PLAIN.hubble_rate_per_s)
    setup = Setup(cosmology=cosmology, hydrogen=Hydrogen(n_max=5))
    again = parse_setup(setup.to_toml())
    assert again == setup
    assert again.digest == setup.digest
    assert np.array_equal(
        again.cosmology.hubble_rate_per_s(REDSHIFT), cosmology.hubble_rate_per_s(REDSHIFT)
    )


def setup_text(**keys: str) -> str:
    lines = [f'{key} = "{value}"' for key, value in keys.items()]
    return (
        "[hydrogen]\nn_max = 5\n[cosmology]\nhubble_km_s_mpc = 68.0\nbaryon_density_h2 = 0.0224\n"
        "matter_density_h2 = 0.142\n" + "\n".join(lines)
    )


def test_setup_file_names_a_table_in_the_current_directory(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    table = tabulate_expansion(PLAIN.hubble_rate_per_s)
    sha256 = write_expansion_table(table, "rates.csv")
    setup = parse_setup(setup_text(expansion_table="rates.csv", expansion_table_sha256=sha256))
    assert setup.cosmology == with_expansion(PLAIN, table)
    # The setup carries the table with it: nothing is read again.
    Path("rates.csv").unlink()
    assert parse_setup(setup.to_toml()) == setup


def test_bad_table_keys_are_one_line(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    table = ExpansionTable(*rows(400))
    actual = write_expansion_table(table, "rates.csv")
    inline = {
        "expansion_redshift": tuple(table.redshift.tolist()),
        "expansion_hubble_rate_per_s": tuple(table.hubble_rate_per_s.tolist()),
    }
    named = {"expansion_table": "rates.csv", "expansion_table_sha256": actual}
    cases: list[tuple[dict[str, Any], str]] = [
        ({"expansion_table": "rates.csv"}, "must be given together"),
        ({"expansion_table_sha256": actual}, "must be given together"),
        (named | {"expansion_table_sha256": "0" * 64}, f"SHA-256 is {actual}"),
        (named | {"expansion_table": "none.csv"}, "none.csv: cannot be read"),
        ({"expansion_redshift": inline["expansion_redshift"]}, "must be given together"),
        (named | inline, "give one of them, not both"),
        (inline | {"expansion_redshift": (0.0, 1.0)}, "one rate per redshift is needed"),
    ]
    for keys, text in cases:
        with pytest.raises(InputError) as caught:
            Cosmology(68.0, 0.0224, 0.142, **keys)
        assert text in str(caught.value)
        assert "\n" not in str(caught.value)
    with pytest.raises(InputError, match=r"cosmology: .*rates\.csv: SHA-256 is"):
        parse_setup(setup_text(expansion_table="rates.csv", expansion_table_sha256="00"))


def test_table_in_other_units_is_refused() -> None:
    with pytest.raises(InputError, match=r"is the table in s\^-1\?"):
        with_expansion(PLAIN, lambda z: 68.0 * (1.0 + z) ** 1.5)  # km/s/Mpc


def test_coarse_table_warns_with_its_figure() -> None:
    with pytest.warns(AccuracyWarning, match=r"changes H by .*, above 0.0001; add rows"):
        with_expansion(PLAIN, ExpansionTable(*rows(16)))


FLAT = ac.FlatLambdaCDM(68.0, 0.307, Tcmb0=2.7255, Neff=3.046, Ob0=0.048)
CLOSED = ac.LambdaCDM(68.0, 0.307, 0.8, Tcmb0=2.7255, Ob0=0.048)
MOVING = ac.w0waCDM(68.0, 0.307, 0.7, w0=-0.8, wa=0.3, Tcmb0=2.7255, Ob0=0.048)
HEAVY = ac.FlatLambdaCDM(
    68.0, 0.307, Tcmb0=2.7255, Neff=3.046, Ob0=0.048, m_nu=[0.0, 0.01, 0.06] * u.eV
)
PIVOT = ac.wpwaCDM(68.0, 0.307, 0.7, wp=-0.9, wa=0.2, zp=0.4, Tcmb0=2.7255, Ob0=0.048)


@pytest.mark.parametrize(
    ("theirs", "tabulated"),
    [(FLAT, False), (CLOSED, False), (MOVING, False), (HEAVY, True), (PIVOT, True)],
    ids=["flat", "closed", "w0wa", "massive", "pivot"],
)
def test_astropy_objects_are_taken_over(theirs: Any, tabulated: bool) -> None:
    cosmology = from_astropy(theirs, helium_mass_fraction=0.25)
    assert (cosmology.expansion_redshift is not None) == tabulated
    expected = theirs.H(REDSHIFT).to_value("1/s")
    assert cosmology.hubble_rate_per_s(REDSHIFT) == pytest.approx(expected, rel=SPLINE)
    assert cosmology.cmb_temperature_k == 2.7255
    assert cosmology.helium_mass_fraction == 0.25
    assert cosmology.baryon_density_h2 == pytest.approx(0.048 * 0.68**2, rel=ROUND_OFF)
    # astropy's own quadrature is good to 1e-9 of a Hubble time, see test_cosmology.
    assert cosmology.cosmic_time_s(0.0) == pytest.approx(theirs.age(0.0).to_value("s"), rel=1e-8)


def test_astropy_masses_and_helium_are_passed_on() -> None:
    cosmology = from_astropy(HEAVY, helium_nucleon_fraction=0.2454, redshift_max=1e4)
    assert cosmology.neutrino_masses_ev == (0.01, 0.06)
    assert cosmology.helium_nucleon_fraction == 0.2454
    assert cosmology.expansion_redshift is not None
    assert cosmology.expansion_redshift[-1] == 1e4
    four = ac.FlatLambdaCDM(
        68.0, 0.307, Tcmb0=2.7255, Neff=4.0, Ob0=0.048, m_nu=[0.0, 0.0, 0.0, 0.1] * u.eV
    )
    assert from_astropy(four).neutrino_masses_ev == (0.0, 0.0, 0.0, 0.1)


@pytest.mark.parametrize(
    ("theirs", "text"),
    [
        (ac.FlatLambdaCDM(68.0, 0.307, Tcmb0=2.7255), "Ob0 = 0 must be set and positive"),
        (ac.FlatLambdaCDM(68.0, 0.307, Ob0=0.048), "Tcmb0 = 0 must be set and positive"),
        (object(), "a object has no method H"),
        (SimpleNamespace(H=lambda z: z), "H0 is not set"),
        (SimpleNamespace(H=lambda z: z, H0="fast"), "H0 = 'fast' is not a number"),
        (SimpleNamespace(H=lambda z: z, H0=70.0, Ob0=None), "Ob0 is not set"),
    ],
    ids=["baryons", "temperature", "foreign", "no H0", "text", "None"],
)
def test_astropy_objects_that_lack_something_are_refused(theirs: Any, text: str) -> None:
    with pytest.raises(InputError) as caught:
        from_astropy(theirs)
    assert text in str(caught.value)


def test_missing_neutrinos_are_massless() -> None:
    bare = SimpleNamespace(
        H=PLAIN.hubble_rate_per_s,
        H0=68.0, Ob0=0.0224 / 0.68**2, Om0=0.142 / 0.68**2, Tcmb0=2.7255, Neff=3.046, Ok0=0.0,
    )  # fmt: skip
    cosmology = from_astropy(bare)
    assert cosmology.neutrino_masses_ev == ()
    assert cosmology.expansion_redshift is None


def test_background_imports_no_astropy() -> None:
    code = (
        "import sys, levelnet.background as b; c = b.Cosmology(68.0, 0.0224, 0.142); "
        "c.cosmic_time_s(9.0); print('astropy' in sys.modules, 'scipy.interpolate' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    # scipy's splines are imported where a table or massive neutrinos need them.
    assert done.stdout.split() == ["False", "False"]
