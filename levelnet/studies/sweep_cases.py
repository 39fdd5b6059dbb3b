"""The cases of a sweep: setups that differ in some of their keys."""

from __future__ import annotations

import copy
import itertools
import json
import math
import tomllib
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from ..errors import InputError, cut_short
from ..history.setup import Setup
from ..records import MOST_COMPLAINTS, Complaints, attempt
from ..texts import MOST_PARTS

MOST_CASES = 1_000_000
MOST_VALUES = 10_000_000
"""Most cases times keys: a value takes about a hundred bytes until all setups are made."""
_MOST_WRONG = 1000  # complaints, after which further cases are not looked at
RANGE = frozenset({"from", "to", "count", "spacing"})
"""Keys of a range of numbers."""
_LONGEST = 40  # characters of a value that a label repeats


@dataclass(frozen=True, slots=True)
class Cases:
    """Setups that differ in some of their keys.

    Attributes
    ----------
    title : str
        What the sweep is about.
    setups : tuple of Setup, length n_cases
        What is to be computed, in order.
    swept : tuple of str
        Dotted keys in which they differ, such as "hydrogen.n_max".
    columns : tuple of tuples
        For each of these its value in every case: whole numbers, numbers (NaN where the key is left
        out) or texts (values of any other kind as JSON, "" where the key is left out).
    """

    title: str
    setups: tuple[Setup, ...]
    swept: tuple[str, ...] = ()
    columns: tuple[tuple[Any, ...], ...] = ()

    def __len__(self) -> int:
        """How many there are."""
        return len(self.setups)

    def label(self, k: int) -> str:
        """Case as a person knows it: its position and what is special in it."""
        values = zip(self.swept, self.columns, strict=True)
        return case_label(k, ((key, column[k]) for key, column in values))


def case_label(k: int, values: Iterable[tuple[str, Any]]) -> str:
    """Position of a case with its swept values: "case 3 (hydrogen.n_max = 20)"."""
    named = [f"{cut_short(key)} = {_short(value)}" for key, value in itertools.islice(values, 21)]
    shown = ", ".join([*named[:20], "..."] if len(named) > 20 else named)
    return f"case {k} ({shown})" if shown else f"case {k}"


def _short(value: object) -> str:
    text = f"{value:.6g}" if isinstance(value, float) else str(value)
    return cut_short(text, _LONGEST)


def vary(
    setup: Setup,
    combine: Mapping[str, Sequence[Any]] | None = None,
    together: Mapping[str, Sequence[Any]] | None = None,
) -> Cases:
    """Make the cases of a sweep from one setup.

    Parameters
    ----------
    setup : Setup
        What all have in common.
    combine : mapping of str to sequence, optional
        Values of dotted keys, such as ``{"hydrogen.n_max": [20, 30]}``; every combination is a
        case, the last key changing fastest.
    together : mapping of str to sequence, optional
        Values of dotted keys, all sequences of one length: the first values make one case, the
        second ones the next. With `combine`, every combination with each of these.

    Returns
    -------
    Cases
        The setups and what is special in each.

    Raises
    ------
    InputError
        For lists that do not fit together, and for any case that is no setup: all complaints at
        once.
    """
    base = tomllib.loads(setup.to_toml())
    return make_cases("setup", base, varied("setup", combine or {}, together or {}), setup.title)


def varied(
    where: str, combine: Mapping[str, Sequence[Any]], together: Mapping[str, Sequence[Any]]
) -> list[tuple[str, dict[str, Any]]]:
    """Label and values of every case of a grid; InputError where it is none."""
    if twice := sorted(set(combine) & set(together)):
        key = cut_short(twice[0])
        raise InputError(f"{where}: {key}: in combine and in together; give it once")
    if not combine and not together:
        raise InputError(f"{where}: nothing is varied; give combine or together")
    lengths = {key: len(values) for key, values in (*combine.items(), *together.items())}
    if empty := [key for key, length in lengths.items() if not length]:
        raise InputError(f"{where}: {cut_short(empty[0])}: no values")
    side = {lengths[key] for key in together}
    if len(side) > 1:
        some = itertools.islice(together, MOST_COMPLAINTS)
        shown = ", ".join(f"{cut_short(key)} has {lengths[key]}" for key in some)
        raise InputError(f"{where}: together needs lists of one length: {shown}")
    count = math.prod(lengths[key] for key in combine) * max(side, default=1)
    check_count(where, count, len(lengths))
    rows = [dict(zip(together, row, strict=True)) for row in zip(*together.values(), strict=True)]
    found: list[tuple[str, dict[str, Any]]] = []
    for values in itertools.product(*combine.values()):
        for row in rows or [{}]:
            given = dict(zip(combine, values, strict=True)) | row
            found.append((case_label(len(found), given.items()), given))
    return found


def check_count(where: str, count: int, n_keys: int) -> None:
    """Refuse more cases, or more values in all of them, than there is memory for."""
    if count > MOST_CASES:
        # A product of lists may have more digits than Python writes.
        shown = f"{count} cases" if count < 10**18 else "too many cases"
        raise InputError(f"{where}: {shown}; allowed are up to {MOST_CASES}")
    if count * n_keys > MOST_VALUES:
        raise InputError(
            f"{where}: {count} cases of {n_keys} keys; allowed are up to {MOST_VALUES} values"
        )


def make_cases(
    where: str, base: Mapping[str, Any], rows: Iterable[tuple[str, Mapping[str, Any]]], title: str
) -> Cases:
    """Make every setup; one InputError lists what is wrong, with the rows it is wrong in.

    After a thousand complaints the cases that follow are not looked at.

    Parameters
    ----------
    where : str
        File, for the complaints.
    base : mapping
        Nested values of a setup, which need not be complete.
    rows : iterable of (label, mapping)
        For each case what a person calls it, and its values by dotted keys; None takes the key out.
    title : str
        What the sweep is about.
    """
    setups: list[Setup] = []
    kept: list[Mapping[str, Any]] = []
    wrong: dict[str, list[str]] = {}
    count = said = 0
    for label, values in rows:
        count += 1
        made = _setup(base, values)
        if isinstance(made, Setup):
            setups.append(made)
            kept.append(values)
            continue
        for complaint in made:
            wrong.setdefault(complaint, []).append(label)
        said += len(made)
        if said >= _MOST_WRONG:
            break
    if wrong:
        until = f"; nothing was looked at after {label}" if said >= _MOST_WRONG else ""
        raise InputError(f"{where}: {_listed(wrong, count)}{until}")
    keys = tuple(dict.fromkeys(key for values in kept for key in values))
    columns = tuple(_column([values.get(key) for values in kept]) for key in keys)
    return Cases(title, tuple(setups), keys, columns)


def _setup(base: Mapping[str, Any], values: Mapping[str, Any]) -> Setup | Complaints:
    nested: dict[str, Any] = copy.deepcopy(dict(base))
    for key, value in values.items():
        *outer, last = key.split(".", MOST_PARTS)
        if len(outer) == MOST_PARTS:
            return Complaints([f"{cut_short(key)}: unknown key"])
        place = nested
        for part in outer:
            # What is left out does not make the table that it would stand in.
            inner = place.get(part, {}) if value is None else place.setdefault(part, {})
            if not isinstance(inner, dict):
                return Complaints([f"{cut_short(key)}: {cut_short(part)} is no table"])
            place = inner
        if value is None:
            place.pop(last, None)
        else:
            place[last] = value
    return attempt(Setup, nested)


def _listed(wrong: Mapping[str, list[str]], count: int) -> str:
    """Every different complaint once, with where it arises; the longest lists are cut."""
    texts = []
    for complaint, labels in itertools.islice(wrong.items(), MOST_COMPLAINTS):
        if len(labels) == count > 1:
            texts.append(f"every case: {complaint}")
        else:
            more = f" and {len(labels) - 1} more" if len(labels) > 1 else ""
            texts.append(f"{labels[0]}{more}: {complaint}")
    if len(wrong) > MOST_COMPLAINTS:
        texts.append(f"and {len(wrong) - MOST_COMPLAINTS} further complaints")
    return "; ".join(texts)


def _column(values: Sequence[Any]) -> tuple[Any, ...]:
    """Values of one key as numbers if they are, else as texts."""
    given = [one for one in values if one is not None]
    plain = [one for one in given if isinstance(one, int | float) and not isinstance(one, bool)]
    if given and len(plain) == len(given):
        if len(given) == len(values) and all(isinstance(one, int) for one in given):
            return tuple(values)
        return tuple(math.nan if one is None else float(one) for one in values)
    return tuple(_text(one) for one in values)


def _text(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bool | int | float | list | tuple | Mapping):
        return json.dumps(value, default=str)
    return str(value)  # text, or a date, which TOML knows


def flat(table: Mapping[str, Any], start: str = "") -> Iterator[tuple[str, Any]]:
    """Dotted keys of nested tables with their values; ranges, which are tables too, are values."""
    for key, value in table.items():
        if isinstance(value, Mapping) and not _is_range(value):
            yield from flat(value, f"{start}{key}.")
        else:
            yield f"{start}{key}", value


def _is_range(table: Mapping[str, Any]) -> bool:
    """Whether a table is meant as a range, whole or not: a nested one has only lists and tables."""
    return any(key in RANGE and not isinstance(table[key], list | Mapping) for key in table)
