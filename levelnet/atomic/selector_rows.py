"""Rows of a CSV whose first columns select rates: overrides, uncertainties."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from ..errors import InputError, cut_short
from ..texts import read_text
from .selection import Selector, parse_selector

SELECTOR_COLUMNS = ("process", "upper", "lower")
MOST_ROWS = 2000
_MOST_BYTES = 1_000_000
_LONGEST_CELL = 500


@dataclass(frozen=True, slots=True)
class SelectorRow:
    """One row: where it stands ("my.csv, row 3"), its number from 1, its selector, other cells."""

    where: str
    number: int
    selector: Selector
    cells: dict[str, str]


def read_rows(path: str | Path, columns: Sequence[str]) -> tuple[str, ...]:
    """Read a file with a header of `columns` and give its rows as CSV text.

    Parameters
    ----------
    path : str or Path
        UTF-8 text; lines that start with ``#`` and empty lines are left out. A relative path is
        relative to the current directory.
    columns : sequence of str
        The header that is needed, in this order.

    Returns
    -------
    tuple of str
        Rows below the header, one each.

    Raises
    ------
    InputError
        If the file cannot be read, is too large, is no text, or has another header or no rows.
    """
    text = read_text(path, _MOST_BYTES)
    lines = [line.strip() for line in io.StringIO(text, newline=None)]
    lines = [line for line in lines if line and not line.startswith("#")]
    if not lines:
        raise InputError(f"{path}: empty; a header {','.join(columns)} and rows are needed")
    _check_header(str(path), [cell.strip() for cell in lines[0].split(",")], columns)
    if len(lines) == 1:
        raise InputError(f"{path}: no rows below the header")
    return tuple(lines[1:])


def _check_header(where: str, found: list[str], columns: Sequence[str]) -> None:
    unknown = [name for name in found if name not in columns]
    if unknown:
        name = unknown[0] if unknown[0].isprintable() else repr(unknown[0])
        raise InputError(
            f'{where}: column "{cut_short(name)}" is unknown; allowed: {",".join(columns)}'
        )
    if found != list(columns):
        raise InputError(f"{where}: the header must be {','.join(columns)}")


def parse_rows(rows: Sequence[str], columns: Sequence[str], where: str) -> tuple[SelectorRow, ...]:
    """Split rows of CSV text and parse their selectors.

    Raises
    ------
    InputError
        One line that names `where` and the row, counted from 1.
    """
    if len(rows) > MOST_ROWS:
        raise InputError(f"{where}: {len(rows)} rows, at most {MOST_ROWS} are allowed")
    return tuple(
        _row(text, columns, f"{where}, row {number}", number)
        for number, text in enumerate(rows, start=1)
    )


def _row(text: str, columns: Sequence[str], where: str, number: int) -> SelectorRow:
    if not text.isprintable():
        raise InputError(f"{where}: holds a character that cannot be printed")
    try:
        cells = [cell.strip() for cell in next(csv.reader([text], strict=True), [])]
    except csv.Error as error:
        raise InputError(f"{where}: not a row of CSV: {error}") from None
    if len(cells) != len(columns):
        raise InputError(
            f"{where}: {len(cells)} cells, {len(columns)} are needed ({','.join(columns)}); text "
            "with a comma stands in double quotes"
        )
    if max(map(len, cells)) > _LONGEST_CELL:
        raise InputError(f"{where}: a cell has over {_LONGEST_CELL} characters")
    by_name = dict(zip(columns, cells, strict=True))
    try:
        selector = parse_selector(*(by_name.pop(name) for name in SELECTOR_COLUMNS))
    except InputError as error:
        raise InputError(f"{where}: {error}") from None
    return SelectorRow(where, number, selector, by_name)


def number_in(row: SelectorRow, column: str) -> float:
    """Cell of a row as a number; InputError where it is none, or not finite."""
    try:
        value = float(row.cells[column])
    except ValueError:
        value = float("nan")
    if not abs(value) < float("inf"):
        given = cut_short(row.cells[column])
        raise InputError(f'{row.where}: {column} = "{given}" is no finite number')
    return value
