"""Write a history as a plain text table for programs that read text."""

from __future__ import annotations

import json
from operator import attrgetter
from pathlib import Path
from typing import TYPE_CHECKING, TextIO

import numpy as np

from ..arrays import FloatArray
from ..constants import CODATA_EDITION
from ..history.result import History
from ..history.setup import Setup
from .helium_table_layout import HELIUM_HISTORY
from .layout import HISTORY
from .provenance import levelnet_version
from .schema import Variable
from .table_layout import DISTILLED
from .whole_file import whole_file

if TYPE_CHECKING:
    from ..distilled.fast import FastHistory

# A cubic spline needs four points; every second of seven rows are four.
_FEWEST_ROWS = 7


def write_csv(
    history: History,
    path_or_stream: str | Path | TextIO,
    ascending: bool = False,
    force: bool = False,
) -> None:
    """Write the arrays over redshift as a table: comment lines, then one line per redshift.

    Parameters
    ----------
    history : History
        What to write.
    path_or_stream : str, Path or text stream
        A file, which appears whole or not at all, or an open stream such as ``sys.stdout``.
    ascending : bool
        True: lowest redshift first. False: highest redshift first.
    force : bool
        True allows an existing file to be replaced.

    Raises
    ------
    InputError
        If the file exists and `force` is False, or cannot be written.

    Notes
    -----
    Comment lines start with ``#``: versions, setup digest, outcome, notes, name, unit and
    description of each column, the interpolation rule with its measured error, and last the column
    names. The numbers follow, separated by commas, with 17 significant digits, so that reading
    gives the same doubles: ``numpy.loadtxt(path, delimiter=",")``. All characters are ASCII.
    """
    _put(table_text(history, ascending), path_or_stream, force)


def write_distilled_csv(
    history: FastHistory, setup: Setup, path_or_stream: str | Path | TextIO, force: bool = False
) -> None:
    """Write a history made from a table of effective rates; as :func:`write_csv`.

    Parameters
    ----------
    history : FastHistory
        What to write.
    setup : Setup
        The setup of the table, with the cosmology, lines and constants of this history.
    path_or_stream : str, Path or text stream
        A file or an open stream.
    force : bool
        True allows an existing file to be replaced.
    """
    about = [
        f"ionization history from effective rates by levelnet {levelnet_version()}, constants of "
        f"{CODATA_EDITION}",
        f"title: {json.dumps(setup.title)}",
        f"setup digest: {setup.digest}",
        f"outcome: {history.outcome.name}: {history.outcome.value}",
        f"{len(history.redshift)} rows, redshift descending; numbers with 17 significant digits",
    ]
    variables = DISTILLED.variables
    if history.helium is not None:
        variables += tuple(one for one in HELIUM_HISTORY.variables if one.field != "redshift")
    _put(_table(about, history, variables, False), path_or_stream, force)


def _put(text: str, path_or_stream: str | Path | TextIO, force: bool) -> None:
    if isinstance(path_or_stream, str | Path):
        with whole_file(path_or_stream, force) as raw:
            raw.write(text.encode("ascii"))
    else:
        path_or_stream.write(text)


def table_text(history: History, ascending: bool = False) -> str:
    """Return the table of :func:`write_csv` as one string."""
    return _table(_what_it_is(history, ascending), history, HISTORY.variables, ascending)


def _table(
    about: list[str],
    history: History | FastHistory,
    variables: tuple[Variable, ...],
    ascending: bool,
) -> str:
    columns = {one.name: attrgetter(one.field)(history) for one in variables}
    comments = [
        *about,
        *_column_lines(variables),
        *_interpolation_lines(columns),
        ",".join(columns),
    ]
    rows = np.column_stack(list(columns.values()))
    if ascending:
        rows = rows[::-1]
    lines = [f"# {line}" for line in comments]
    lines += [",".join(f"{value:.16e}" for value in row) for row in rows]
    return "\n".join(lines) + "\n"


def _what_it_is(history: History, ascending: bool) -> list[str]:
    direction = "ascending" if ascending else "descending"
    return [
        f"ionization history by levelnet {levelnet_version()}, constants of {CODATA_EDITION}",
        # As JSON text, because a title may hold line breaks and any characters.
        f"title: {json.dumps(history.setup.title)}",
        f"setup digest: {history.setup.digest}",
        f"outcome: {history.outcome.name}: {history.outcome.value}",
        *(f"note: {json.dumps(note)}" for note in history.notes),
        f"{len(history.redshift)} rows, redshift {direction}; numbers with 17 significant digits",
    ]


def _column_lines(variables: tuple[Variable, ...]) -> list[str]:
    return [
        f"column {number}: {one.name} [{one.units}]: {one.long_name.removesuffix(', descending')}"
        for number, one in enumerate(variables, 1)
    ]


def _interpolation_lines(columns: dict[str, FloatArray]) -> list[str]:
    lines = [
        "interpolation rule: cubic spline (not-a-knot ends) through all rows, in ln(1+redshift),",
        "  of ln(value), or of the value itself in columns marked plain; nothing outside the rows",
    ]
    redshift = columns["redshift"]
    if len(redshift) < _FEWEST_ROWS:
        return [*lines, f"interpolation error: not measured, fewer than {_FEWEST_ROWS} rows"]
    lines += [
        "interpolation error, as measured: the same spline through every second row, against",
        "  rows left out: largest relative difference, in plain columns over the largest value.",
        "  It is the error of a table twice as coarse as this one, which was not measured itself:",
    ]
    for name, values in columns.items():
        if name != "redshift":
            error, where, plain = left_out_error(redshift, values)
            mark = " (plain)" if plain else ""
            lines.append(f"  {name}{mark}: {error:.1e} at redshift {where:g}")
    return lines


def left_out_error(redshift: FloatArray, values: FloatArray) -> tuple[float, float, bool]:
    """Error of the interpolation rule on half of the rows, measured on the other half.

    Parameters
    ----------
    redshift : ndarray, shape (n_redshift,), dimensionless
        Descending; at least 7.
    values : ndarray, shape (n_redshift,), any unit
        The column.

    Returns
    -------
    error : float, dimensionless
        Largest relative difference at the rows left out.
    redshift : float
        Where it occurs.
    plain : bool
        True where a value is not positive, so that the value itself is interpolated and the error
        is relative to the largest absolute value (0 where all values are 0).
    """
    from scipy.interpolate import CubicSpline

    z, y = redshift[::-1], values[::-1]
    kept = np.zeros(len(z), dtype=bool)
    kept[::2] = kept[-1] = True  # the last one too, or the spline would be carried beyond its ends
    plain = not bool(np.all(y > 0.0))
    ordinate = y if plain else np.log(y)
    spline = CubicSpline(np.log1p(z[kept]), ordinate[kept])
    guess = spline(np.log1p(z[~kept]))
    if plain:
        difference = np.abs(guess - y[~kept]) / (np.max(np.abs(y)) or 1.0)
    else:
        difference = np.abs(np.expm1(guess - ordinate[~kept]))
    worst = int(np.argmax(difference))
    return float(difference[worst]), float(z[~kept][worst]), plain
