"""The plain table: read back by numpy and pandas, with an interpolation error that is true."""

from __future__ import annotations

import dataclasses
import io
import re
from pathlib import Path

import numpy as np
import pytest
from scipy.interpolate import make_interp_spline

from levelnet.errors import InputError, Outcome
from levelnet.history.result import History
from levelnet.store import layout, write_csv
from levelnet.store.text import left_out_error
from tests.invented_history import invented_history

COLUMNS = [one.name for one in layout.HISTORY.variables]


@pytest.fixture(scope="module")
def history() -> History:
    return invented_history(41)


def table(history: History, ascending: bool = False) -> str:
    stream = io.StringIO()
    write_csv(history, stream, ascending)
    return stream.getvalue()


def comments(text: str) -> list[str]:
    return [line for line in text.splitlines() if line.startswith("#")]


@pytest.mark.parametrize("ascending", [False, True])
def test_numbers_come_back_to_the_bit(history: History, ascending: bool) -> None:
    numbers = np.loadtxt(io.StringIO(table(history, ascending)), delimiter=",")
    assert numbers.shape == (41, len(COLUMNS))
    if ascending:
        numbers = numbers[::-1]
    for index, name in enumerate(COLUMNS):
        assert numbers[:, index].tobytes() == getattr(history, name).tobytes(), name


def test_order_of_redshift(history: History) -> None:
    for ascending, word in ((False, "descending"), (True, "ascending")):
        text = table(history, ascending)
        redshift = np.loadtxt(io.StringIO(text), delimiter=",")[:, 0]
        assert np.all(np.diff(redshift if ascending else -redshift) > 0.0)
        assert f"# 41 rows, redshift {word}; numbers with 17 significant digits" in text


def test_header_says_what_the_columns_are(history: History) -> None:
    lines = comments(table(history))
    assert lines[-1] == "# " + ",".join(COLUMNS)
    for number, one in enumerate(layout.HISTORY.variables, 1):
        start = f"# column {number}: {one.name} [{one.units}]: "
        assert [line for line in lines if line.startswith(start)], start
    assert f"# setup digest: {history.setup.digest}" in lines
    assert "# outcome: CONVERGED: converged to the tolerance asked" in lines
    assert "constants of CODATA 2022" in lines[0]


def test_comments_stay_comments(history: History) -> None:
    # The invented title and notes hold line breaks and characters beyond ASCII.
    text = table(history)
    assert text.isascii()
    assert len(text.splitlines()) == len(comments(text)) + 41
    assert (
        '# title: "invented: \\"Lantern\\" array, \\u03b1-test\\nsecond line, # no comment"' in text
    )
    assert sum(line.startswith("# note: ") for line in comments(text)) == len(history.notes)


def test_failed_outcome_is_said(history: History) -> None:
    failed = dataclasses.replace(history, outcome=Outcome.STEP_LIMIT)
    assert "# outcome: STEP_LIMIT: the step limit was reached" in table(failed)


def test_file_equals_stream(history: History, tmp_path: Path) -> None:
    path = tmp_path / "history.csv"
    write_csv(history, path)
    assert path.read_text() == table(history)
    with pytest.raises(InputError, match="--force"):
        write_csv(history, path)
    write_csv(history, str(path), ascending=True, force=True)
    assert path.read_text() == table(history, ascending=True)
    assert [entry.name for entry in tmp_path.iterdir()] == ["history.csv"]


def said_errors(text: str) -> dict[str, tuple[float, float]]:
    pattern = re.compile(r"#   (\w+)(?: \(plain\))?: (\S+) at redshift (\S+)")
    found = (pattern.fullmatch(line) for line in comments(text))
    return {match[1]: (float(match[2]), float(match[3])) for match in found if match}


def test_stated_error_is_what_a_reader_would_find(history: History) -> None:
    """A reader leaves out every second row of the file and fits with another routine of scipy."""
    text = table(history)
    numbers = np.loadtxt(io.StringIO(text), delimiter=",")[::-1]
    stated = said_errors(text)
    assert set(stated) == set(COLUMNS[1:])
    u = np.log(1.0 + numbers[:, 0])
    for name in ("free_electron_fraction", "neutral_hydrogen_fraction", "matter_temperature_k"):
        y = np.log(numbers[:, COLUMNS.index(name)])
        spline = make_interp_spline(u[::2], y[::2], k=3)  # not-a-knot ends unless told otherwise
        wrong = np.abs(np.exp(spline(u[1::2]) - y[1::2]) - 1.0)
        worst = int(np.argmax(wrong))
        error, redshift = stated[name]
        assert error == pytest.approx(wrong[worst], rel=0.051)  # two digits are printed
        assert redshift == pytest.approx(numbers[1::2, 0][worst], rel=1e-5)


def test_full_table_errs_less_than_stated() -> None:
    """The invented ionized fraction is a formula, so the true error of the rule can be had."""
    history = invented_history(101)
    numbers = np.loadtxt(io.StringIO(table(history)), delimiter=",")[::-1]
    z, x = numbers[:, 0], numbers[:, COLUMNS.index("free_electron_fraction")]
    spline = make_interp_spline(np.log(1.0 + z), np.log(x), k=3)
    fine = invented_history(2001)
    guess = np.exp(spline(np.log(1.0 + fine.redshift)))
    true = np.max(np.abs(guess / fine.free_electron_fraction - 1.0))
    stated = said_errors(table(history))["free_electron_fraction"][0]
    assert 0.0 < true < stated


def test_columns_with_zeros_are_marked(history: History) -> None:
    # The optical depth starts at 0, and inert helium is never ionized.
    text = table(history)
    plain = re.findall(r"#   (\w+) \(plain\):", text)
    assert plain == [
        "singly_ionized_helium_fraction",
        "doubly_ionized_helium_fraction",
        "optical_depth",
    ]
    assert said_errors(text)["singly_ionized_helium_fraction"][0] == 0.0


def test_cubic_in_the_logarithms_is_exact() -> None:
    # A cubic spline gives back a cubic polynomial; 1e-13: ln y up to 40 times a few roundings.
    z = np.geomspace(2000.0, 1.0, 30)
    u = np.log1p(z)
    values = np.exp(0.1 * u**3 - 0.7 * u**2 + u - 2.0)
    error, _, plain = left_out_error(z, values)
    assert not plain
    assert error < 1e-13


@pytest.mark.parametrize("rows", [7, 8])
def test_last_row_is_never_beyond_the_spline(rows: int) -> None:
    # The spline through rows 0, 2, 4, ... of an even number would end before the last one.
    z = np.geomspace(1000.0, 10.0, rows)
    error, where, _ = left_out_error(z, 1.0 / (1.0 + np.exp((200.0 - z) / 40.0)))
    assert z[-1] < where < z[0]
    assert error > 0.0


def test_short_table_states_no_error() -> None:
    text = table(invented_history(6))
    assert "# interpolation error: not measured, fewer than 7 rows" in text
    assert said_errors(text) == {}
