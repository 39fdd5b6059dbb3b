"""The figure of a weighing that is about helium: its rates ranked."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ..studies.helium_groups import helium_shares, top_helium_transitions, top_terms
from ..studies.weighing import Weighing
from . import style
from .bars import MOST_BARS, draw_bars, sign_legend

if TYPE_CHECKING:
    from matplotlib.figure import Figure


def helium_figure(weighing: Weighing, target: str, label: str) -> Figure:
    """Bars of the largest derivatives of one target by rates of helium.

    Parameters
    ----------
    weighing : Weighing
        With helium.
    target, label : str
        One of its targets, and how it stands in a paper.

    Returns
    -------
    matplotlib Figure
        abs(d ln J/d ln R), dimensionless and logarithmic: lines to 1 1S, two photons and the
        continuum of hydrogen; groups of rates; dipole transitions; cross sections of terms.
        Negative ones are orange and hatched.
    """
    at, helium = weighing.index(target), weighing.helium
    assert helium is not None
    lines = dict(zip(helium.lines, helium.strength[at].tolist(), strict=True))
    values = {f"A({name})": one for name, one in lines.items()}
    escape = zip(helium.lines, helium.escape[at].tolist(), strict=True)
    values |= {f"escape {name}": one for name, one in escape}
    values["two-photon 2 1S"] = float(helium.two_photon[at])
    values["H I continuum"] = float(helium.absorption[at])
    if weighing.helium_ion is not None:
        own = weighing.helium_ion.processes(at)
        values |= {f"He II {name.replace('_', '-')}": one for name, one in own.items()}
    first = sorted(values, key=lambda name: -abs(values[name]))[:MOST_BARS]
    groups = helium_shares(helium, at)
    order = sorted(groups, key=lambda name: -abs(groups[name]))
    panels_of = [
        ("lines to 1 1S, continuum, He II", first, [values[name] for name in first]),
        ("groups of He I", order, [groups[name] for name in order]),
    ]
    for title, ranked in (
        ("dipole transitions", top_helium_transitions(helium, at, MOST_BARS)),
        ("cross sections of terms", top_terms(helium, at, MOST_BARS)),
    ):
        panels_of.append((title, [one.name for one in ranked], [one.weight for one in ranked]))
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 4.9)
        panels = figure.subplots(2, 2).ravel()
        for axes, letter, (title, names, sizes) in zip(panels, "abcd", panels_of, strict=True):
            draw_bars(axes, names, sizes)
            style.panel_letter(axes, letter)
            axes.set_title(title, fontsize=7.5, loc="right", pad=4.0)
            axes.set_xlabel(rf"|$\partial\,\ln J\,/\,\partial\,\ln R$|,  $J$ = {label}")
        sign_legend(figure)
    return figure
