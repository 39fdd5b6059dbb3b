"""What a weighing says, as tables for people."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from .output import aligned, row
from .weigh_values import weighing_values

if TYPE_CHECKING:
    from ..studies.weighing import Weighing

_COLUMNS = 4  # targets side by side
_GROUPS = 5  # shells and l listed
_BAND_ROWS = 9
_SMALLEST = 1e-3  # part of the whole error below which a group is not listed
_SOURCE_LETTERS = 72


def weighing_summary(weighing: Weighing, top: int) -> str:
    """Return the summary of a weighing as lines of plain text."""
    setup, values = weighing.setup, weighing_values(weighing, top)
    lines = [
        setup.title or "(no title)",
        row(
            "weighing",
            f"setup {setup.digest}: hydrogen n_max = {setup.hydrogen.n_max} "
            f"({values['n_levels']} levels, {values['n_transitions']} dipole transitions), "
            f"lines {setup.lines.hydrogen}{_helium_size(weighing)}",
        ),
        row("outcome", weighing.outcome.value),
        row("numbers", "d ln J / d ln R for each target J and rate R, the other rates held"),
    ]
    targets = values["targets"]
    for first in range(0, len(targets), _COLUMNS):
        lines += _target_tables(targets[first : first + _COLUMNS], top)
    lines += [*_source_lines(targets), *_band_lines(values["band"]), ""]
    return "\n".join([*lines, *(row("note", text) for text in weighing.notes)])


def _helium_size(weighing: Weighing) -> str:
    if weighing.helium is None:
        return ""
    setup = weighing.setup
    return (
        f"; helium n_max = {setup.helium.n_max} ({len(weighing.helium.levels)} terms of He I, "
        f"{len(weighing.helium.upper)} dipole transitions), lines {setup.lines.helium or 'sobolev'}"
    )


def _target_tables(targets: list[dict[str, Any]], top: int) -> list[str]:
    """Tables of a few targets side by side."""
    head = ["", *(one["target"] for one in targets)]
    body = [["value", *(_value_text(one) for one in targets)]]
    for part in ("processes", "parameters"):
        names = list(targets[0][part])
        body += [[name, *(_number(one[part][name]) for one in targets)] for name in names]
        if part == "processes":
            body += _helium_processes(targets)
    lines = ["", *aligned([head, *body])]
    for title, ranked in (
        (f"dipole transitions, largest {top}", [_named(one["top"]) for one in targets]),
        (
            f"cross sections of levels, largest {top}",
            [_named(one["top_levels"]) for one in targets],
        ),
        ("cross sections by shell", [_grouped(one["shells"], "bound_free") for one in targets]),
        (
            "dipole transitions by upper shell",
            [_grouped(one["shells"], "bound_bound_as_upper") for one in targets],
        ),
        (
            "dipole transitions by l of the upper level",
            [_grouped(one["l"], "bound_bound_as_upper") for one in targets],
        ),
    ):
        lines += _ranked_table(title, head, ranked)
    lines += _helium_tables(head, [one["helium"] for one in targets], top)
    if all(one["budget"] is not None for one in targets):
        lines += _budget_table(head, [one["budget"] for one in targets])
    return lines


def _helium_processes(targets: list[dict[str, Any]]) -> list[list[str]]:
    """Rows of the processes of He I and He II, where they were weighed."""
    rows = []
    for part, species in (("helium", "He I"), ("helium_ion", "He II")):
        if targets[0][part] is not None:
            found = [one[part]["processes"] for one in targets]
            rows += [
                [f"{species} {name}", *(_number(one[name]) for one in found)] for name in found[0]
            ]
    return rows


def _helium_tables(head: list[str], targets: list[dict[str, Any] | None], top: int) -> list[str]:
    """Lines to 1 1S, groups, transitions and cross sections of He I."""
    found = [one for one in targets if one is not None]
    if not found:
        return []
    lines: list[str] = []
    for title, part in (
        ("He I lines to 1 1S, by Einstein A", "strength"),
        ("He I lines to 1 1S, by escape", "escape"),
    ):
        rows = [
            [name, *(_number(one["lines"][name][part]) for one in found)]
            for name in found[0]["lines"]
        ]
        lines += ["", title, *aligned([head, *rows])]
    rows = [[name, *(_number(one["groups"][name]) for one in found)] for name in found[0]["groups"]]
    lines += ["", "He I groups", *aligned([head, *rows])]
    for title, part in (
        (f"He I dipole transitions, largest {top}", "top"),
        (f"He I cross sections of terms, largest {top}", "top_levels"),
    ):
        lines += _ranked_table(title, head, [_named(one[part]) for one in found])
    return lines


def _ranked_table(title: str, head: list[str], columns: Sequence[list[str]]) -> list[str]:
    """Names with numbers, the largest first, a column for each target."""
    rows = _ranked_rows(columns)
    return ["", title, *aligned([head, *rows])] if rows else []


def _ranked_rows(columns: Sequence[list[str]]) -> list[list[str]]:
    """Rows, counted from 1; short columns end with empty cells."""
    cells = itertools.zip_longest(*columns, fillvalue="")
    return [[str(k), *row] for k, row in enumerate(cells, start=1)]


def _budget_table(head: list[str], budgets: list[dict[str, Any]]) -> list[str]:
    columns = [
        [f"{part['group']} {_percent(part['contribution'])}" for part in _listed(budget)]
        for budget in budgets
    ]
    total = ["all", *(f"{100.0 * budget['sigma']:.3g} %" for budget in budgets)]
    title = (
        "error budget: relative change of J where the rates of a group are 1 sigma higher "
        f"(what is above {_SMALLEST:g} of all)"
    )
    return ["", title, *aligned([head, total, *_ranked_rows(columns)])]


def _listed(budget: dict[str, Any]) -> list[dict[str, Any]]:
    limit = _SMALLEST * budget["sigma"]
    return [part for part in budget["contributions"] if abs(part["contribution"]) > limit]


def _source_lines(targets: list[dict[str, Any]]) -> list[str]:
    """Where the uncertainties of the listed groups come from, each once."""
    budgets = [one["budget"] for one in targets if one["budget"] is not None]
    rows = {part["group"]: _short(part["source"]) for one in budgets for part in _listed(one)}
    return ["", *aligned([("group", "source of its uncertainty"), *rows.items()])] if rows else []


def _band_lines(band: dict[str, Any] | None) -> list[str]:
    if band is None:
        return []
    count = len(band["redshift"])
    shown = sorted({round(k * (count - 1) / (_BAND_ROWS - 1)) for k in range(_BAND_ROWS)})
    rows = [
        (
            f"{band['redshift'][k]:.1f}",
            f"{band['free_electron_fraction'][k]:.6e}",
            f"{100.0 * band['sigma'][k]:.3g} %",
            _largest({name: part[k] for name, part in band["contributions"].items()}),
        )
        for k in reversed(shown)
    ]
    return ["", *aligned([("z", "x_e", "1 sigma", "largest part"), *rows])]


def _largest(parts: dict[str, float]) -> str:
    name = max(parts, key=lambda one: abs(parts[one]))
    return f"{name} {_percent(parts[name])}"


def _value_text(one: dict[str, Any]) -> str:
    if not math.isfinite(one["value"]):
        return "not reached"
    unit = "" if one["unit"] == "1" else f" {one['unit']}"
    return f"{one['value']:.7g}{unit}"


def _named(ranked: list[dict[str, Any]]) -> list[str]:
    return [f"{one['name']} {_number(one['weight'])}" for one in ranked]


def _grouped(shares: dict[str, Any], part: str) -> list[str]:
    pairs = zip(shares["names"], shares[part], strict=True)
    ranked = sorted((pair for pair in pairs if pair[1] != 0.0), key=lambda pair: -abs(pair[1]))
    return [f"{name} {_number(value)}" for name, value in ranked[:_GROUPS]]


def _number(value: float) -> str:
    return f"{value:+.4g}"


def _percent(value: float) -> str:
    return f"{100.0 * value:+.3g} %"


def _short(text: str) -> str:
    return text if len(text) <= _SOURCE_LETTERS else f"{text[: _SOURCE_LETTERS - 3]}..."
