"""How numbers and templates become source code."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable
from importlib.resources import files
from string import Template
from typing import Protocol

import numpy as np

from ..arrays import FloatArray

_WIDTH = 112


class _Blanks(Template):
    """A template whose blanks read @{name}; neither C nor Fortran has the sign."""

    delimiter = "@"


def fill(template: str, blanks: dict[str, str]) -> str:
    """Text of a template with its blanks filled in."""
    text = files(__package__).joinpath("templates").joinpath(template).read_text(encoding="ascii")
    return _Blanks(text).substitute(blanks)


def number(value: float) -> str:
    """Shortest text of a double that reads back the same."""
    return repr(float(value))


def fortran_number(value: float) -> str:
    """Write the same as a double precision constant of Fortran."""
    text = repr(float(value))
    return text.replace("e", "d") if "e" in text else f"{text}d0"


def coefficient_values(values: FloatArray) -> FloatArray:
    """Coefficients as exported: to 1e-17, so that small ones take few digits.

    The logarithms themselves, of order 10 to 30, carry a rounding of 4e-15. Cells beyond the range
    may hold no number; nothing reads them.
    """
    return np.asarray(np.round(np.nan_to_num(values, nan=0.0), 17) + 0.0, dtype=float)


def wrapped(items: Iterable[str], indent: str, tail: str = ",") -> str:
    """Items with commas between, in lines of at most 120 characters; `tail` ends all but one."""
    lines = textwrap.wrap(", ".join(items), _WIDTH, break_long_words=False)
    stripped = [line.rstrip(",") for line in lines]
    return f"{tail}\n".join(indent + line for line in stripped)


def in_braces(items: Iterable[str]) -> str:
    """Items of a short array of C: behind its brace, or on lines of their own if they are many."""
    texts = list(items)
    plain = ", ".join(texts)
    return plain if len(plain) < 70 else "\n" + wrapped(texts, "    ") + "\n"


def data_statement(target: str, values: FloatArray) -> str:
    """A data statement of Fortran."""
    numbers = wrapped(map(fortran_number, values), "    ", ", &")
    return f"  data {target} / &\n{numbers} /"


class Series(Protocol):
    """What holds power series of effective rates: a table, or one stage of helium."""

    @property
    def equilibrium(self) -> FloatArray:
        """Shape (n_x, n_kept, degree + 1)."""

    @property
    def exchange(self) -> FloatArray:
        """Shape (n_x, n_pairs, degree + 1)."""

    @property
    def departure(self) -> FloatArray:
        """Shape (n_x, n_y, n_kept, degree + 1, degree + 1)."""


def series_statements(table: Series, prefix: str) -> Iterable[str]:
    """One statement for each polynomial: a statement may not go on for more than 255 lines."""
    for cell in range(table.departure.shape[0]):
        for key in ("equilibrium", "exchange"):
            for i, values in enumerate(coefficient_values(getattr(table, key)[cell])):
                yield data_statement(f"{prefix}{key}(:, {i + 1}, {cell + 1})", values)
        for cell_y, levels in enumerate(coefficient_values(table.departure[cell])):
            for i, values in enumerate(levels):
                place = f":, :, {i + 1}, {cell_y + 1}, {cell + 1}"
                yield data_statement(f"{prefix}departure({place})", values.ravel())
