"""Files that say what a sweep is: TOML with a setup and what varies, or CSV, one row a setup."""

from __future__ import annotations

import collections
import csv
import itertools
import math
import re
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from ..errors import InputError, cut_short
from ..records import MOST_COMPLAINTS
from ..texts import MOST_TOML, parse_toml, read_text
from .sweep_cases import (
    MOST_CASES,
    MOST_VALUES,
    RANGE,
    Cases,
    check_count,
    flat,
    make_cases,
    varied,
)

_MOST_BYTES = 256_000_000  # a million rows of CSV
_LONGEST_LINE = 100_000  # characters: a thousand of all keys that there are
_TABLES = ("setup", "combine", "together", "title")
_SPACINGS = ("even", "logarithmic")


def load_sweep(path: str | Path, setup: str | Path | None = None) -> Cases:
    """Read the cases of a sweep.

    Parameters
    ----------
    path : str or Path
        A CSV file, if its name ends in ``.csv``: a header of dotted keys of a setup, then one line
        for each case; an empty cell leaves its key to `setup`, or out. Else a TOML file: the table
        ``setup`` (or the name of a setup file, relative to the folder of this one), and
        ``combine`` or ``together`` with lists of values, or ranges ``{ from, to, count, spacing
        }``, by dotted keys.
    setup : str or Path, optional
        A setup file with what the rows of a CSV file have in common.

    Returns
    -------
    Cases
        The setups and what is special in each.

    Raises
    ------
    InputError
        If a file cannot be read or any case is no setup; the text lists every complaint with its
        key and row.
    """
    if Path(path).suffix.lower() == ".csv":
        text = read_text(path, _MOST_BYTES)
        return _from_csv(str(path), text, {} if setup is None else _tables(setup))
    given = _tables(path)
    if setup is not None:
        raise InputError(f"{path}: names its setup itself; --setup goes with CSV files only")
    return _from_toml(str(path), given)


def _tables(path: str | Path) -> dict[str, Any]:
    return parse_toml(read_text(path, MOST_TOML), str(path))


def _from_toml(where: str, given: dict[str, Any]) -> Cases:
    if unknown := [cut_short(key) for key in given if key not in _TABLES]:
        known, shown = ", ".join(_TABLES), ", ".join(unknown[:MOST_COMPLAINTS])
        raise InputError(f"{where}: {shown}: unknown key; allowed are {known}")
    base, title = given.get("setup"), given.get("title", "")
    if isinstance(base, str):
        base = _tables(Path(where).parent / base)
    if not isinstance(base, dict):
        raise InputError(f"{where}: setup: a table, or the name of a setup file, is needed")
    if not isinstance(title, str):
        raise InputError(f"{where}: title: text is needed")
    lists, wrong, count = {}, [], 0
    for name in ("combine", "together"):
        table = given.get(name, {})
        if not isinstance(table, dict):
            raise InputError(f"{where}: {name}: a table of lists is needed")
        lists[name] = dict[str, list[Any]]()
        for key, value in flat(table):
            try:
                lists[name][key] = _values(value)
            except ValueError as error:
                wrong.append(f"{name}.{cut_short(key)}: {error}")
                continue
            count += len(lists[name][key])
            if count > MOST_VALUES:  # many ranges of a million numbers each
                raise InputError(f"{where}: over {MOST_VALUES} values in all lists and ranges")
    if wrong:
        raise InputError(f"{where}: {_some(wrong)}")
    rows = varied(where, lists["combine"], lists["together"])
    return make_cases(where, base, rows, title)


def _values(given: Any) -> list[Any]:
    """Read a list, or the numbers of a range; ValueError for anything else."""
    if isinstance(given, list):
        return given
    if not isinstance(given, Mapping):
        raise ValueError("a list of values is needed, or { from = , to = , count = }")
    if unknown := sorted(set(given) - RANGE):
        raise ValueError(
            f"{cut_short(unknown[0])}: unknown key; allowed are from, to, count, spacing"
        )
    if missing := [key for key in ("from", "to") if key not in given]:
        raise ValueError(f"{missing[0]}: missing; a range is {{ from = , to = , count = }}")
    low, high, count = given["from"], given["to"], given.get("count")
    spacing = given.get("spacing", "even")
    if not all(isinstance(one, int | float) and math.isfinite(one) for one in (low, high)):
        raise ValueError("from and to: finite numbers are needed")
    if not isinstance(count, int) or isinstance(count, bool) or not 2 <= count <= MOST_CASES:
        raise ValueError(f"count: a whole number from 2 to {MOST_CASES} is needed")
    if spacing not in _SPACINGS:
        raise ValueError(
            f'spacing = "{cut_short(str(spacing))}": allowed are {", ".join(_SPACINGS)}'
        )
    if spacing == "logarithmic" and not 0.0 < low * high < math.inf:
        raise ValueError("from and to: logarithmic spacing needs both above 0, or both below")
    return _between(low, high, count, spacing)


def _between(low: float, high: float, count: int, spacing: str) -> list[Any]:
    """Numbers from `low` to `high`, both exact; whole numbers where all of them come out whole."""
    parts = [k / (count - 1) for k in range(1, count - 1)]
    if spacing == "logarithmic":
        inner = [low * (high / low) ** part for part in parts]
    elif isinstance(low, int) and isinstance(high, int) and (high - low) % (count - 1) == 0:
        return [low + (high - low) // (count - 1) * k for k in range(count)]
    else:
        inner = [low + (high - low) * part for part in parts]
    return [float(low), *inner, float(high)]


def _from_csv(where: str, text: str, base: Mapping[str, Any]) -> Cases:
    lines = _lines(where, text)
    header = _split(where, next(lines, ""))
    twice = [key for key, count in collections.Counter(header).items() if count > 1]
    if twice:
        key = cut_short(min(twice)) or "(no name)"
        raise InputError(f"{where}: column {key} stands there twice")
    # Counted before any is worked on.
    count = sum(1 for _ in itertools.islice(_lines(where, text), 1, MOST_CASES + 2))
    if not count:
        raise InputError(f"{where}: a header of keys such as hydrogen.n_max and rows are needed")
    check_count(where, count, len(header))
    rows = [_split(where, line) for line in lines]
    wrong = [
        f"row {k}: {len(row)} cells, the header has {len(header)}"
        for k, row in enumerate(rows, 1)
        if len(row) != len(header)
    ]
    if wrong:
        raise InputError(f"{where}: {_some(wrong)}")
    common = {key: _value_at(base, key) for key in header}
    given = (
        (
            f"row {k}",
            {
                key: _cell(cell) if cell else common[key]
                for key, cell in zip(header, row, strict=True)
            },
        )
        for k, row in enumerate(rows, 1)
    )
    return make_cases(where, base, given, str(base.get("title", "")))


def _value_at(table: Mapping[str, Any], key: str) -> Any:
    """What nested tables have under a dotted key; None where that is nothing, or a table."""
    found: Any = table
    for part in key.split("."):
        found = found.get(part) if isinstance(found, Mapping) else None
    return None if isinstance(found, Mapping) else found


def _some(wrong: list[str]) -> str:
    more = len(wrong) - MOST_COMPLAINTS
    return "; ".join(wrong[:MOST_COMPLAINTS]) + (f"; and {more} more" if more > 0 else "")


def _lines(where: str, text: str) -> Iterator[str]:
    """Lines that are neither empty nor comments."""
    for number, found in enumerate(re.finditer(r"[^\r\n]+", text), 1):
        if found.end() - found.start() > _LONGEST_LINE:
            raise InputError(f"{where}: line {number} has over {_LONGEST_LINE} characters")
        line = found[0].strip()
        if line and not line.startswith("#"):
            yield line


def _split(where: str, line: str) -> list[str]:
    # Line by line, so that an open quote does not draw the rest of the file into one cell.
    try:
        return [cell.strip() for cell in next(csv.reader([line], strict=True), [])]
    except csv.Error as error:
        raise InputError(f"{where}: not valid CSV: {error}: {cut_short(line)}") from None


def _cell(text: str) -> Any:
    """Read a cell: a value as TOML writes it, else the text itself."""
    try:
        found = parse_toml(f"x = {text}", "")
    except ValueError:  # no TOML, or more than a cell may hold
        return text
    return found["x"] if set(found) == {"x"} else text
