"""What the chapters say of helium, where it has levels."""

from __future__ import annotations

import math

import numpy as np

from ...distilled.table import EffectiveTable
from ...history.result import History
from ...history.samples import helium_rows
from ...studies.helium_groups import helium_shares, top_helium_transitions, top_terms
from ...studies.weighing import Weighing
from .content import Table
from .wording import number, short_name

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


def helium_said(history: History) -> dict[str, tuple[str, str]]:
    """Title and text alternative of each figure that is about helium."""
    z, twice = history.redshift, history.doubly_ionized_helium_fraction
    neutral, once = history.neutral_helium_fraction, history.singly_ionized_helium_fraction
    half = number(half_neutral(history), ".0f")
    return {
        "helium": (
            "Ionization of helium",
            f"Fractions of the helium nuclei against redshift: at z = {z[0]:g} {twice[0]:.3g} are "
            f"He III, {once[0]:.3g} He II; at z = {z[-1]:g} {neutral[-1]:.4g} are He I. Half of "
            f"it is neutral at z = {half}.",
        ),
        "helium-departures": (
            "Departure coefficients of He I",
            "Natural logarithm of the departure coefficients of singlet and triplet S, P and D "
            "terms against n, a panel for each of a few redshifts.",
        ),
        "helium-lines": (
            "Lines of He I to its ground state",
            "Share of the net flow, escape probability, absorption by hydrogen and what the "
            f"treatment leaves out, against redshift. {_strongest_text(history)}",
        ),
    }


def _strongest_text(history: History) -> str:
    rows, figures = helium_rows(history.redshift), history.helium
    if figures is None or not rows:
        return ""
    lines = figures.lines
    best = _strongest(lines.share[rows])[0]
    row = rows[int(np.argmax(np.abs(lines.share[rows, best])))]
    return (
        f"The strongest is {lines.names[best]}, with {100.0 * lines.share[row, best]:.3g} % at "
        f"z = {history.redshift[row]:.0f}."
    )


def _strongest(share: np.ndarray) -> list[int]:
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
                    *(f"{getattr(lines, name)[k, line]:{form}}" for name, _, form in _FIGURES),
                )
                for k in rows
            ),
        )
        for line in _strongest(lines.share[rows])[:_LINES]
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
    helium, ion, targets = weighing.helium, weighing.helium_ion, weighing.targets
    if helium is None:
        return ()
    places = [weighing.index(one) for one in targets]
    heads = [short_name(one) for one in targets]
    columns = []
    for at in places:
        pairs = zip(helium.lines, helium.strength[at].tolist(), strict=True)
        column = {f"A of {name}": one for name, one in pairs}
        escape = zip(helium.lines, helium.escape[at].tolist(), strict=True)
        column |= {f"escape of {name}": one for name, one in escape}
        column["two-photon decay of 2 1S"] = float(helium.two_photon[at])
        column["absorption by the continuum of H I"] = float(helium.absorption[at])
        if ion is not None:
            own = ion.processes(at)
            column |= {f"He II {name.replace('_', '-')}": one for name, one in own.items()}
        columns.append(column)
    groups = [helium_shares(helium, at) for at in places]
    return (
        _side_by_side("By rates of helium", "rate", heads, columns),
        _side_by_side("By groups of rates of He I", "group", heads, groups),
        *(_ranked(weighing, one) for one in targets),
    )


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
