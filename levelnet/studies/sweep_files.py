"""Files that say what a sweep is: TOML with a setup and what varies, or CSV, one row a setup."""

from __future__ import annotations

import csv
import io
import math
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from ..errors import InputError
from ..texts import read_text
from .sweep_cases import MOST_CASES, RANGE, Cases, flat, make_cases, varied

_MOST_BYTES = 256_000_000  # a million rows of CSV
_TABLES = ("setup", "combine", "together", "title")
_SPACINGS = ("even", "logarithmic")


def load_sweep(path: str | Path, setup: str | Path | None = None) -> Cases:
    """Read the cases of a sweep.

    Parameters
    ----------
    path : str or Path
        A CSV file, if its name ends in ``.csv``: a header of dotted keys of a setup, then one row
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
    text = read_text(path, _MOST_BYTES, "utf-8-sig")
    if Path(path).suffix.lower() == ".csv":
        return _from_csv(str(path), text, {} if setup is None else _tables(setup))
    if setup is not None:
        raise InputError(f"{path}: names its setup itself; --setup goes with CSV files only")
    return _from_toml(str(path), text)


def _tables(path: str | Path) -> dict[str, Any]:
    return _parsed(str(path), read_text(path, _MOST_BYTES))


def _parsed(where: str, text: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except (ValueError, RecursionError) as error:
        raise InputError(f"{where}: not valid TOML: {error}") from None


def _from_toml(where: str, text: str) -> Cases:
    given = _parsed(where, text)
    if unknown := [key for key in given if key not in _TABLES]:
        known = ", ".join(_TABLES)
        raise InputError(f"{where}: {', '.join(unknown)}: unknown key; allowed are {known}")
    base, title = given.get("setup"), given.get("title", "")
    if isinstance(base, str):
        base = _tables(Path(where).parent / base)
    if not isinstance(base, dict):
        raise InputError(f"{where}: setup: a table, or the name of a setup file, is needed")
    if not isinstance(title, str):
        raise InputError(f"{where}: title: text is needed")
    lists, wrong = {}, []
    for name in ("combine", "together"):
        table = given.get(name, {})
        if not isinstance(table, dict):
            raise InputError(f"{where}: {name}: a table of lists is needed")
        lists[name] = dict[str, list[Any]]()
        for key, value in flat(table):
            try:
                lists[name][key] = _values(value)
            except ValueError as error:
                wrong.append(f"{name}.{key}: {error}")
    if wrong:
        raise InputError(f"{where}: {'; '.join(wrong)}")
    rows = varied(where, lists["combine"], lists["together"])
    return make_cases(where, base, rows, title)


def _values(given: Any) -> list[Any]:
    """Read a list, or the numbers of a range; ValueError for anything else."""
    if isinstance(given, list):
        return given
    if not isinstance(given, Mapping):
        raise ValueError("a list of values is needed, or { from = , to = , count = }")
    if unknown := sorted(set(given) - RANGE):
        raise ValueError(f"{unknown[0]}: unknown key; allowed are from, to, count, spacing")
    if missing := [key for key in ("from", "to") if key not in given]:
        raise ValueError(f"{missing[0]}: missing; a range is {{ from = , to = , count = }}")
    low, high, count = given["from"], given["to"], given.get("count")
    spacing = given.get("spacing", "even")
    if not all(isinstance(one, int | float) and math.isfinite(one) for one in (low, high)):
        raise ValueError("from and to: finite numbers are needed")
    if not isinstance(count, int) or isinstance(count, bool) or not 2 <= count <= MOST_CASES:
        raise ValueError(f"count: a whole number from 2 to {MOST_CASES} is needed")
    if spacing not in _SPACINGS:
        raise ValueError(f'spacing = "{spacing}": allowed are {", ".join(_SPACINGS)}')
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
    lines = [line for line in io.StringIO(text, newline=None) if line.strip()]
    lines = [line for line in lines if not line.lstrip().startswith("#")]
    try:
        rows = [[cell.strip() for cell in row] for row in csv.reader(lines, strict=True)]
    except csv.Error as error:
        raise InputError(f"{where}: not valid CSV: {error}") from None
    if len(rows) < 2:
        raise InputError(f"{where}: a header of keys such as hydrogen.n_max and rows are needed")
    header, *body = rows
    if twice := sorted({key for key in header if header.count(key) > 1}):
        raise InputError(f"{where}: column {twice[0] or '(no name)'} stands there twice")
    wrong = [
        f"row {k}: {len(row)} cells, the header has {len(header)}"
        for k, row in enumerate(body, 1)
        if len(row) != len(header)
    ]
    if wrong:
        more = f"; and {len(wrong) - 20} more" if len(wrong) > 20 else ""
        raise InputError(f"{where}: {'; '.join(wrong[:20])}{more}")
    common = {key: _value_at(base, key) for key in header}
    given = [
        (
            f"row {k}",
            {
                key: _cell(cell) if cell else common[key]
                for key, cell in zip(header, row, strict=True)
            },
        )
        for k, row in enumerate(body, 1)
    ]
    return make_cases(where, base, given, str(base.get("title", "")))


def _value_at(table: Mapping[str, Any], key: str) -> Any:
    """What nested tables have under a dotted key; None where that is nothing, or a table."""
    found: Any = table
    for part in key.split("."):
        found = found.get(part) if isinstance(found, Mapping) else None
    return None if isinstance(found, Mapping) else found


def _cell(text: str) -> Any:
    """Read a cell: a value as TOML writes it, else the text itself."""
    try:
        found = tomllib.loads(f"x = {text}")
    except (ValueError, RecursionError):
        return text
    return found["x"] if set(found) == {"x"} else text
