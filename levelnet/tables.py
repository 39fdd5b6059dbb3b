"""Reads the published tables of ``atomic_tables`` into records, checking each against its entry."""

from __future__ import annotations

import csv
import hashlib
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import numpy as np

import atomic_tables

from .arrays import FloatArray
from .errors import InputError, TableError

_CATALOGUE = "sources.toml"
_TEXT_FIELDS = (
    "quantity",
    "axis",
    "authors",
    "journal",
    "doi",
    "place",
    "obtained",
    "digits",
    "valid",
    "disagreements",
    "sha256",
)


@dataclass(frozen=True, slots=True)
class Column:
    """One column of a table: its name, unit ("1" for a pure number), kind "number" or "text"."""

    name: str
    unit: str
    kind: str


@dataclass(frozen=True, slots=True)
class TableSource:
    """What a table holds and where it comes from; the fields are those of ``sources.toml``.

    Attributes
    ----------
    name : str
        Folder and file without its ending, "hydrogen/energy_levels".
    quantity : str
        What the table holds.
    axis : str
        The column along which the rows ascend.
    columns : tuple of Column
        Names, units and kinds.
    authors, journal, doi, place : str
        The publication and where in it; empty where unknown.
    year : int or None
        Year of the publication (the latest one, where there are several); None where unknown.
    obtained, digits, valid, disagreements : str
        How the numbers came here, how exact they are, where they hold, who differs.
    sha256 : str
        Checksum of the file.
    """

    name: str
    quantity: str
    axis: str
    columns: tuple[Column, ...]
    authors: str
    year: int | None
    journal: str
    doi: str
    place: str
    obtained: str
    digits: str
    valid: str
    disagreements: str
    sha256: str

    @property
    def authors_and_year(self) -> str:
        """Authors, and the year where it is known."""
        return self.authors if self.year is None else f"{self.authors} {self.year}"


@dataclass(frozen=True, slots=True, eq=False)
class Table:
    """One table, checked.

    Attributes
    ----------
    source : TableSource
        Units and origin.
    numbers : mapping of str to ndarray, shape (n_rows,)
        The number columns, read-only, in the units of `source`; NaN where the cell is empty.
    texts : mapping of str to tuple of str, length n_rows
        The text columns; "" where the cell is empty.
    """

    source: TableSource
    numbers: Mapping[str, FloatArray]
    texts: Mapping[str, tuple[str, ...]]


def list_tables() -> tuple[TableSource, ...]:
    """List every table with its units and origin, ordered by name.

    Raises
    ------
    TableError
        If the catalogue is missing or damaged.
    """
    try:
        entries = tomllib.loads(_bytes(_CATALOGUE).decode("utf-8"))
    except ValueError as error:
        raise TableError(f"table catalogue {_CATALOGUE}: not valid TOML: {error}") from None
    return tuple(_source(name, entries[name]) for name in sorted(entries))


def read_table(name: str) -> Table:
    """Read one table.

    Parameters
    ----------
    name : str
        Folder and file without its ending, "hydrogen/energy_levels"; see :func:`list_tables`.

    Returns
    -------
    Table
        Columns as arrays, with units and source.

    Raises
    ------
    InputError
        If there is no table of that name.
    TableError
        If checksum, columns, a number or the order along the axis is not as the catalogue says.
    """
    sources = {source.name: source for source in list_tables()}
    if name not in sources:
        raise InputError(f'table "{name}": not known; known are {", ".join(sources)}')
    source = sources[name]
    content = _bytes(f"{name}.csv")
    if hashlib.sha256(content).hexdigest() != source.sha256:
        raise TableError(f"table {name}: checksum differs from {_CATALOGUE}; reinstall the package")
    try:
        return _parse(source, content.decode("utf-8"))
    except (UnicodeDecodeError, csv.Error) as error:
        raise TableError(f"table {name}: not a CSV file in UTF-8: {error}") from None


def _bytes(name: str) -> bytes:
    try:
        return atomic_tables.path(name).read_bytes()
    except OSError as error:
        raise TableError(f"table file {name}: cannot be read: {error.strerror}") from None


def _source(name: str, entry: Any) -> TableSource:
    """Turn one entry of the catalogue into a record; a missing or strange field is a TableError."""
    try:
        columns = tuple(Column(**column) for column in entry["columns"])
        source = TableSource(name, **{"year": None, **entry, "columns": columns})
    except (KeyError, TypeError) as error:
        raise TableError(f"table {name}: bad entry in {_CATALOGUE}: {error}") from None
    texts = [getattr(source, field) for field in _TEXT_FIELDS]
    texts += [text for column in columns for text in (column.name, column.unit, column.kind)]
    if not all(isinstance(text, str) for text in texts) or not isinstance(source.year, int | None):
        raise TableError(f"table {name}: bad entry in {_CATALOGUE}: a field of the wrong type")
    if source.axis not in {column.name for column in columns if column.kind == "number"}:
        raise TableError(f"table {name}: axis {source.axis} is not a number column")
    return source


def _parse(source: TableSource, text: str) -> Table:
    """Split the text into columns and check them against `source`."""
    lines = [line for line in text.splitlines() if not line.startswith("#")]
    header, *rows = csv.reader(lines, strict=True) if lines else [[]]
    expected = [column.name for column in source.columns]
    if header != expected:
        raise TableError(f"table {source.name}: columns {header}, expected {expected}")
    if not rows:
        raise TableError(f"table {source.name}: no rows")
    for count, row in enumerate(rows, start=1):
        if len(row) != len(expected):
            raise TableError(
                f"table {source.name}: row {count} has {len(row)} cells, expected {len(expected)}"
            )
    cells = dict(zip(expected, zip(*rows, strict=True), strict=True))
    numbers = {
        column.name: _numbers(source.name, column.name, cells[column.name])
        for column in source.columns
        if column.kind == "number"
    }
    if not np.all(np.diff(numbers[source.axis]) > 0.0):
        raise TableError(f"table {source.name}: column {source.axis} does not ascend")
    texts = {name: values for name, values in cells.items() if name not in numbers}
    return Table(source, MappingProxyType(numbers), MappingProxyType(texts))


def _numbers(table: str, column: str, cells: tuple[str, ...]) -> FloatArray:
    """Read one column as finite numbers; an empty cell gives NaN."""
    values = np.empty(len(cells))
    for row, cell in enumerate(cells):
        try:
            values[row] = float(cell) if cell else np.nan
        except ValueError:
            values[row] = np.inf
        if np.isinf(values[row]) or (cell and np.isnan(values[row])):
            raise TableError(
                f"table {table}: column {column}, row {row + 1}: {cell!r} is no number"
            )
    values.flags.writeable = False
    return values
