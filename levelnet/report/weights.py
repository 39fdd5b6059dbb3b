"""Figures of a weighing: maps of importance, ranked bars; those of its error budget are beside."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from ..quantities import AT_REDSHIFT
from ..studies.groups import by_level, top_transitions
from ..studies.targets import parse_target
from ..studies.weighing import Weighing
from . import style
from .bars import MOST_BARS, draw_bars, sign_legend
from .budget import band_figure
from .figures import check_place, save_drawn
from .helium_weights import helium_figure
from .importance import importance_figure

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_LETTERS = 32  # of a name beside a bar
_SYMBOLS = {
    "hubble_km_s_mpc": "$H_0$",
    "baryon_density_h2": r"$\omega_b$",
    "matter_density_h2": r"$\omega_m$",
    "cmb_temperature_k": "$T_0$",
    "helium_mass_fraction": "$Y_p$",
    "helium_nucleon_fraction": r"$4n_{He}/n_b$",
    "effective_neutrinos": r"$N_{\mathrm{eff}}$",
    "curvature_density": r"$\Omega_k$",
    "dark_energy_w0": "$w_0$",
    "dark_energy_wa": "$w_a$",
}
PROCESSES = {
    "two_photon": "two-photon 2s-1s",
    "bound_bound": "bound-bound",
    "bound_free": "bound-free",
    "escape": "Lyman escape",
    "compton": "Compton",
}
"""Processes that a ranking shows, in words."""
OBSERVABLE_SYMBOLS = {
    "last_scattering_redshift": "$z_*$",
    "visibility_peak_redshift": r"$z_{\mathrm{peak}}$",
    "visibility_width": r"$\Delta z_{\mathrm{FWHM}}$",
    "last_scattering_time_s": "$t(z_*)$",
    "sound_horizon_mpc": "$r_s$",
    "damping_per_mpc": "$k_D$",
    "drag_redshift": r"$z_{\mathrm{drag}}$",
    "drag_horizon_mpc": r"$r_{\mathrm{drag}}$",
}
"""Every observable as it stands in a paper."""


def save_weighing_figures(
    weighing: Weighing,
    folder: str | Path,
    force: bool = False,
    progress: Callable[[str, float], None] | None = None,
) -> tuple[Path, ...]:
    """Write the figures of `weighing` as SVG and PDF into `folder`, made where it is missing.

    Parameters
    ----------
    weighing : Weighing
        Any; each target gives a map and a ranking, with helium a ranking of its rates too, and a
        budget with x_e at two redshifts a band.
    folder : str or Path
        Where to.
    force : bool
        Replace figures that exist.
    progress : callable or None
        ``progress(stage, fraction)``.

    Returns
    -------
    tuple of Path
        The files. Equal weighings give equal bytes (with the same matplotlib).

    Raises
    ------
    InputError
        If a file exists and `force` is not set, or `folder` is a file.
    """
    helium = weighing.helium is not None
    places = figure_paths(weighing.targets, _has_band(weighing), folder, helium)
    check_place(folder, places, force)
    return save_drawn(make_weighing_figures(weighing), folder, progress)


def make_weighing_figures(weighing: Weighing) -> dict[str, Figure]:
    """Every figure of a weighing by its name: map and rankings of each target, and the band."""
    return {name: make() for name, make in weighing_makers(weighing).items()}


def weighing_makers(weighing: Weighing) -> dict[str, Callable[[], Figure]]:
    """What makes each figure of :func:`make_weighing_figures`, by its name."""
    makers: dict[str, Callable[[], Figure]] = {}
    for target, name in zip(weighing.targets, file_names(weighing.targets), strict=True):
        label = target_label(target)
        makers[f"map-{name}"] = partial(importance_figure, weighing, target, label)
        makers[f"ranking-{name}"] = partial(ranking_figure, weighing, target)
        if weighing.helium is not None:
            makers[f"helium-{name}"] = partial(helium_figure, weighing, target, label)
    if weighing.budget is not None and _has_band(weighing):
        makers["error-band"] = partial(band_figure, weighing.budget)
    return makers


def figure_paths(
    targets: Sequence[str], band: bool, folder: str | Path, helium: bool = False
) -> tuple[Path, ...]:
    """Files that :func:`save_weighing_figures` writes into `folder` for these targets."""
    kinds = ("map", "ranking", "helium") if helium else ("map", "ranking")
    names = [f"{kind}-{k}" for k in file_names(targets) for kind in kinds]
    names += ["error-band"] if band else []
    return tuple(Path(folder) / f"{name}.{end}" for name in names for end in style.FORMATS)


def _has_band(weighing: Weighing) -> bool:
    return weighing.budget is not None and len(weighing.budget.band().redshift) > 1


def file_names(targets: Sequence[str]) -> list[str]:
    """Targets as parts of file names, each once: "x_e(900)" becomes "x_e-900"."""
    names: list[str] = []
    for target in targets:
        plain = re.sub(r"[^A-Za-z0-9._]+", "-", target).strip("-_")
        names.append(plain if plain not in names else f"{plain}-{len(names)}")
    return names


def target_label(target: str) -> str:
    """Write a target as it stands in a paper."""
    one = parse_target(target)
    if one.kind in AT_REDSHIFT:
        symbol = r"\tau" if one.kind == "optical_depth" else one.kind
        return rf"${symbol}$($z$ = {one.redshift:.10g})"
    return OBSERVABLE_SYMBOLS.get(one.name, one.name)


def ranking_figure(weighing: Weighing, target: str) -> Figure:
    """Bars of the largest derivatives of one target.

    Parameters
    ----------
    weighing : Weighing
        Any.
    target : str
        One of its targets.

    Returns
    -------
    matplotlib Figure
        abs(d ln J/d ln R), dimensionless and logarithmic: processes and parameters, dipole
        transitions, cross sections of levels; and, where there is a budget, the contributions to
        the relative error. Negative ones are orange and hatched.

    Raises
    ------
    InputError
        If the target was not weighed.
    """
    at, label = weighing.index(target), target_label(target)
    budget = weighing.budget
    with style.house_style():
        figure = style.new_figure(style.TWO_COLUMNS_IN, 4.9)
        panels = figure.subplots(2, 2).ravel()
        _process_bars(panels[0], weighing, at)
        transitions = top_transitions(weighing, target, MOST_BARS)
        draw_bars(
            panels[1],
            [one.name for one in transitions],
            [one.weight for one in transitions],
            "all are 0" if len(weighing.upper) else "no transitions",
        )
        shares = by_level(weighing, target)
        order = np.argsort(-np.abs(shares.bound_free), kind="stable")[:MOST_BARS]
        first = [k for k in order if shares.bound_free[k] != 0.0]
        draw_bars(panels[2], [shares.names[k] for k in first], list(shares.bound_free[first]))
        titles = ["processes, parameters", "dipole transitions", "cross sections of levels"]
        if budget is not None and target in budget.targets:
            ranked = [one for one in budget.ranked(target)[:MOST_BARS] if one.contribution != 0.0]
            names = [_cut(one.group) for one in ranked]
            draw_bars(panels[3], names, [one.contribution for one in ranked])
            panels[3].tick_params(axis="y", labelsize=6.5)
            sigma = float(budget.sigma[budget.targets.index(target)])
            titles.append(rf"error budget, 1$\sigma$ = {100.0 * sigma:.2g} % in all")
        for axes, letter, title in zip(panels, "abcd", titles, strict=False):
            style.panel_letter(axes, letter)
            axes.set_title(title, fontsize=7.5, loc="right", pad=4.0)
            axes.set_xlabel(rf"|$\partial\,\ln J\,/\,\partial\,\ln R$|,  $J$ = {label}")
        if len(titles) < len(panels):
            panels[3].set_visible(False)
        else:
            panels[3].set_xlabel(rf"|contribution to $\Delta J/J$|,  $J$ = {label}")
        sign_legend(figure)
    return figure


def _process_bars(axes: Axes, weighing: Weighing, at: int) -> None:
    processes = weighing.processes(weighing.targets[at])
    values = {text: processes[name] for name, text in PROCESSES.items()}
    parameters = zip(weighing.parameters, weighing.parameter[at], strict=True)
    values |= {_SYMBOLS.get(name, name): float(value) for name, value in parameters}
    ranked = sorted(values, key=lambda name: -abs(values[name]))
    draw_bars(axes, ranked, [values[name] for name in ranked])


def _cut(text: str) -> str:
    """Bring a long name into one line."""
    return text if len(text) <= _LETTERS else f"{text[: _LETTERS - 3].rstrip()}..."
