"""What the chapters say of helium, where it has levels."""

from __future__ import annotations

import math

import numpy as np

from ...arrays import FloatArray
from ...distilled.table import EffectiveTable
from ...history.result import History
from ...history.samples import helium_rows
from ...studies.helium_groups import helium_shares, top_helium_transitions, top_terms
from ...studies.weighing import Weighing
from .content import Table
from .wording import SPOKEN, largest_said, number, short_name

_LINES = 2  # whose figures are listed; the file holds those of all
_FIGURES = (
    ("share", "share of the net flow", ".2e"),
    ("optical_depth", "optical depth", ".2e"),
    ("escape_probability", "escape", ".2e"),
    ("incoherent_fraction", "incoherent", ".1e"),
    ("thick_width_absorption", "absorption over the thick width", ".1e"),
    ("continuum_in_line", "continuum of H I in it", ".1e"),
    ("escape_change", "escape change by better treatment", "+.1e"),
    ("escape_error", "change of x_e by that", "+.1e"),
)
_TOP = 10


def half_neutral(history: History) -> float:
    """Redshift at which half of the helium is neutral; NaN where no output is close to it."""
    ends = {"left": math.nan, "right": math.nan}
    return float(np.interp(0.5, history.neutral_helium_fraction, history.redshift, **ends))


def strongest_lines(share: FloatArray) -> list[int]:
    """Lines by their largest share at some outputs, shape (n_rows, n_lines), largest first."""
    order: list[int] = np.argsort(-np.abs(share).max(axis=0), kind="stable").tolist()
    return order


def helium_line_tables(history: History) -> tuple[Table, ...]:
    """Validity figures of the strongest lines of He I where it recombines."""
    rows, figures = helium_rows(history.redshift), history.helium
    if figures is None or not rows:
        return ()
    lines = figures.lines
    return tuple(
        Table(
            f"Validity figures of {lines.names[line]} of He I",
            ("z", *(said for _, said, _ in _FIGURES)),
            tuple(
                (
                    f"{history.redshift[k]:.2f}",
                    *(
                        number(getattr(lines, name)[k, line], form, absent="not known")
                        for name, _, form in _FIGURES
                    ),
                )
                for k in rows
            ),
        )
        for line in strongest_lines(lines.share[rows])[:_LINES]
    )


def table_facts(table: EffectiveTable) -> tuple[tuple[str, str], ...]:
    """What a table holds of helium."""
    stage, lines = table.helium, table.helium_lines
    if stage is None or lines is None:
        return ()
    low, high = math.exp(stage.log_low), math.exp(stage.log_high)
    facts = [
        ("helium: terms of He I kept", str(len(stage.n))),
        ("helium: radiation temperature", f"{low:.0f} to {high:.0f} K"),
        ("helium: lines to the ground state", ", ".join(lines.names)),
        (
            "helium: He II",
            "Saha equilibrium"
            if table.helium_ion is None
            else f"{len(table.helium_ion.n)} levels kept",
        ),
    ]
    if lines.absorbs:
        error = f"{lines.escape_error.max():.1e} at random points"
        facts.append(("helium: largest error of ln of an escape", error))
    return tuple(facts)


def weighing_tables(weighing: Weighing) -> tuple[Table, ...]:
    """Derivatives by rates of helium: lines and processes, groups, and the largest of each target.

    Nothing where helium is inert.
    """
    helium, targets = weighing.helium, weighing.targets
    if helium is None:
        return ()
    places = [weighing.index(one) for one in targets]
    heads = [short_name(one) for one in targets]
    columns = [_rates(weighing, at) for at in places]
    groups = [helium_shares(helium, at) for at in places]
    return (
        _side_by_side("By rates of helium", "rate", heads, columns),
        _side_by_side("By groups of rates of He I", "group", heads, groups),
        *(_ranked(weighing, one) for one in targets),
    )


def _rates(weighing: Weighing, at: int) -> dict[str, float]:
    """Derivatives of one target by lines to the ground state, their escape, and the rest."""
    helium, ion = weighing.helium, weighing.helium_ion
    assert helium is not None
    pairs = zip(helium.lines, helium.strength[at].tolist(), strict=True)
    rates = {f"A of {name}": one for name, one in pairs}
    escape = zip(helium.lines, helium.escape[at].tolist(), strict=True)
    rates |= {f"escape of {name}": one for name, one in escape}
    rates["two-photon decay of 2 1S"] = float(helium.two_photon[at])
    rates["absorption by the continuum of H I"] = float(helium.absorption[at])
    if ion is not None:
        own = ion.processes(at)
        rates |= {f"He II {name.replace('_', '-')}": one for name, one in own.items()}
    return rates


def helium_ranking_said(weighing: Weighing, target: str) -> str:
    """The largest of each panel of the figure of helium, in numbers."""
    helium, at = weighing.helium, weighing.index(target)
    assert helium is not None
    parts = [
        largest_said("rates", _rates(weighing, at).items()),
        largest_said("groups", helium_shares(helium, at).items()),
    ]
    for what, ranked in (
        ("transitions", top_helium_transitions(helium, at, SPOKEN)),
        ("cross sections", top_terms(helium, at, SPOKEN)),
    ):
        parts.append(largest_said(what, ((one.name, one.weight) for one in ranked)))
    return " ".join(one for one in parts if one)


def _side_by_side(
    caption: str, what: str, heads: list[str], columns: list[dict[str, float]]
) -> Table:
    rows = tuple((name, *(f"{one[name]:+.4g}" for one in columns)) for name in columns[0])
    return Table(caption, (what, *heads), rows)


def _ranked(weighing: Weighing, target: str) -> Table:
    helium, at = weighing.helium, weighing.index(target)
    assert helium is not None
    lines = top_helium_transitions(helium, at, _TOP)
    terms = top_terms(helium, at, _TOP)
    rows = []
    for k in range(max(len(lines), len(terms))):
        row = [str(k + 1)]
        for ranked in (lines, terms):
            row += [ranked[k].name, f"{ranked[k].weight:+.4g}"] if k < len(ranked) else ["", ""]
        rows.append(tuple(row))
    head = ("rank", "transition", "weight", "cross section of", "weight of it")
    return Table(f"The largest of He I for {target}", head, tuple(rows))
