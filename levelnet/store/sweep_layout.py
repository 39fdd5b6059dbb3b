"""Everything in a file that holds a sweep. See :mod:`levelnet.store.layout`.

Unlike the others, this layout depends on what was swept: each swept key is a variable of its own,
so that it is a coordinate in xarray. Two attributes of the file name these keys, and say whether
all cases have the same outputs; the layout of a file follows from them.
"""

from __future__ import annotations

import dataclasses
import re
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import FileFormatError, cut_short
from . import layout
from .digest import content_digest
from .provenance import provenance
from .schema import Content, Group, Kind, Layout, Stored, Variable, describe, number_type

if TYPE_CHECKING:
    from ..studies.sweep_record import Sweep

_GROUP = "sweep"
_KEY = re.compile(r"[A-Za-z_]\w*(\.[A-Za-z_]\w*)*", re.ASCII)
_KINDS: tuple[Kind, ...] = ("float64", "int64", "text")
_MOST_KEYS = 1000
_SHARED, _APART = "shared", "by case"

_NOT_HERE = {"setup", "setup_digest", "outcome", "outcome_text"}
ROOT_ATTRIBUTES = {
    **{name: text for name, text in layout.ROOT_ATTRIBUTES.items() if name not in _NOT_HERE},
    "title": "what the sweep is about",
    "swept": "one line for each swept key: type of its values and dotted key",
    "outputs": f'"{_SHARED}": all cases have the same output redshifts; "{_APART}": each its own',
}


def _group(swept: tuple[tuple[Kind, str], ...], shared: bool) -> Group:
    """The one group of a file with these swept keys."""
    coordinates = " ".join(key for _, key in swept)
    rows = ("case", "redshift" if shared else "output")

    def by_case(name: str, long_name: str, kind: Kind = "text") -> Variable:
        return Variable(name, ("case",), "", long_name, name, kind, coordinates)

    descending = "redshift, descending"
    position = "position of the output, from 0; a case with fewer has NaN in the last"
    outputs = (
        (Variable("redshift", ("redshift",), "1", descending, "redshift"),)
        if shared
        else (
            Variable("output", ("output",), "1", position, "", "int64"),
            Variable("redshift", rows, "1", descending, "redshift", coordinates=coordinates),
        )
    )
    arrays = (one for one in layout.HISTORY.variables if one.name != "redshift")
    return Group(
        _GROUP,
        "histories and observables of many setups; NaN where a case failed",
        (
            Variable("case", ("case",), "1", "position of the case, from 0", "", "int64"),
            *(Variable(key, ("case",), "", f"{key} of the setup", "", kind) for kind, key in swept),
            by_case("setup", "whole setup as TOML"),
            by_case("outcome", "how the case ended: name of an Outcome, or FAILED"),
            by_case(
                "reason",
                "why there is no result to be used as it stands, or what it lacks; empty: nothing",
            ),
            *outputs,
            Variable("observable", ("observable",), "", "name", "observable_names", "text"),
            Variable(
                "observable_unit",
                ("observable",),
                "",
                "unit; 1: none",
                "observable_units",
                "text",
            ),
            Variable(
                "observable_value",
                ("case", "observable"),
                "",
                "observable, in the unit that observable_unit names",
                "observable",
                coordinates=coordinates,
            ),
            *(dataclasses.replace(one, dimensions=rows, coordinates=coordinates) for one in arrays),
        ),
    )


def _of_attributes(attributes: Mapping[str, Any]) -> Layout:
    """The layout that the attributes of a file name; ValueError where they name none."""
    lines = str(attributes["swept"]).splitlines()
    if len(lines) > _MOST_KEYS or len(set(lines)) < len(lines):
        raise ValueError("attribute swept: too many keys, or one twice")
    swept: list[tuple[Kind, str]] = []
    for line in lines:
        kind, _, key = line.partition(" ")
        known = next((one for one in _KINDS if one == kind), None)
        if known is None or not _KEY.fullmatch(key):
            raise ValueError(f"attribute swept: {cut_short(line)!r} names no key")
        swept.append((known, key))
    if attributes["outputs"] not in {_SHARED, _APART}:
        raise ValueError("attribute outputs: neither shared nor by case")
    group = _group(tuple(swept), attributes["outputs"] == _SHARED)
    names = [one.name for one in group.variables]
    if len(set(names)) < len(names):
        raise ValueError("attribute swept: a key has the name of another variable")
    return dataclasses.replace(SWEEP_LAYOUT, required=(group,))


SWEEP_LAYOUT = Layout(
    "levelnet sweep",
    1,
    "a sweep",
    ROOT_ATTRIBUTES,
    (_group((("float64", "cosmology.hubble_km_s_mpc"),), True),),
    by_attributes=_of_attributes,
)


def sweep_content(sweep: Sweep) -> Content:
    """Everything a file says about a sweep, without the digest over it."""
    kinds = [_kind(column) for column in sweep.columns]
    shared = sweep.redshift.ndim == 1
    attributes: dict[str, str | int] = {
        "layout": SWEEP_LAYOUT.name,
        "layout_version": SWEEP_LAYOUT.version,
        "title": sweep.title,
        "swept": "\n".join(f"{k} {key}" for k, key in zip(kinds, sweep.swept, strict=True)),
        "outputs": _SHARED if shared else _APART,
        **provenance(),
    }
    (group,) = _of_attributes(attributes).required
    columns = dict(zip(sweep.swept, sweep.columns, strict=True))
    content = Content(attributes=attributes, groups={_GROUP: group.attributes})
    for one in group.variables:
        content.variables[f"{_GROUP}/{one.name}"] = Stored(
            one.dimensions, one.attributes, _values(sweep, one, columns)
        )
    return content


def _kind(column: tuple[Any, ...]) -> Kind:
    if column and all(isinstance(one, int) for one in column):
        return "int64"
    return "float64" if column and all(isinstance(one, float) for one in column) else "text"


def _values(sweep: Sweep, one: Variable, columns: Mapping[str, tuple[Any, ...]]) -> Any:
    if one.name in columns:
        given: Any = columns[one.name]
    elif one.name == "setup":
        given = sweep.setups
    elif one.name in {"case", "output"}:
        given = np.arange(len(sweep) if one.name == "case" else sweep.redshift.shape[-1])
    elif one.name in sweep.arrays:
        given = sweep.arrays[one.name]
    else:
        given = getattr(sweep, one.field)
    return tuple(given) if one.kind == "text" else np.asarray(given, dtype=number_type(one.kind))


def sweep_of(content: Content) -> Sweep:
    """Make the sweep that :func:`sweep_content` took apart."""
    from ..history.result import HISTORY_ARRAYS
    from ..studies.sweep_record import Sweep

    lines = str(content.attributes["swept"]).splitlines()
    keys = tuple(line.partition(" ")[2] for line in lines)

    def values(name: str) -> Any:
        return content.variables[f"{_GROUP}/{name}"].values

    columns = [values(key) for key in keys]
    if not len(values("setup")):
        raise FileFormatError("a sweep without cases")
    return Sweep(
        title=str(content.attributes["title"]),
        swept=keys,
        columns=tuple(one if isinstance(one, tuple) else tuple(one.tolist()) for one in columns),
        setups=values("setup"),
        outcome=values("outcome"),
        reason=values("reason"),
        redshift=values("redshift"),
        arrays={name: values(name) for name in HISTORY_ARRAYS},
        observable_names=values("observable"),
        observable_units=values("observable_unit"),
        observable=values("observable_value"),
    )


def describe_sweep_layout() -> str:
    """Return the layout as text, with one swept key as an example."""
    return describe(SWEEP_LAYOUT, SWEEP_LAYOUT.required)


def sealed_content(sweep: Sweep) -> Content:
    """Everything a file says about a sweep, with the digest over all of it."""
    content = sweep_content(sweep)
    content.attributes["digest"] = content_digest(content)
    return content
