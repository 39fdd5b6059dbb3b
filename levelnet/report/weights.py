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
from .budget import band_figure
from .figures import check_place, save_drawn
from .importance import importance_figure

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_BARS = 10  # more would not be legible in half a page's height
_LETTERS = 32  # of a name beside a bar
_ROUNDING_POWER = -7  # what is smaller than this part of the largest may be rounding
_ROUNDING = 10.0**_ROUNDING_POWER
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
_PROCESSES = {
    "two_photon": "two-photon 2s-1s",
    "bound_bound": "bound-bound",
    "bound_free": "bound-free",
    "escape": "Lyman escape",
    "compton": "Compton",
}
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
        Any; each target gives a map and a ranking, a budget with x_e at two redshifts a band.
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
    check_place(folder, figure_paths(weighing.targets, _has_band(weighing), folder), force)
    return save_drawn(make_weighing_figures(weighing), folder, progress)


def make_weighing_figures(weighing: Weighing) -> dict[str, Figure]:
    """Every figure of a weighing by its name: a map and a ranking of each target, and the band."""
    return {name: make() for name, make in weighing_makers(weighing).items()}


def weighing_makers(weighing: Weighing) -> dict[str, Callable[[], Figure]]:
    """What makes each figure of :func:`make_weighing_figures`, by its name."""
    makers: dict[str, Callable[[], Figure]] = {}
    for target, name in zip(weighing.targets, file_names(weighing.targets), strict=True):
        makers[f"map-{name}"] = partial(importance_figure, weighing, target, target_label(target))
        makers[f"ranking-{name}"] = partial(ranking_figure, weighing, target)
    if weighing.budget is not None and _has_band(weighing):
        makers["error-band"] = partial(band_figure, weighing.budget)
    return makers


def figure_paths(targets: Sequence[str], band: bool, folder: str | Path) -> tuple[Path, ...]:
    """Files that :func:`save_weighing_figures` writes into `folder` for these targets."""
    names = [f"{kind}-{k}" for k in file_names(targets) for kind in ("map", "ranking")]
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
        transitions = top_transitions(weighing, target, _BARS)
        draw_bars(
            panels[1],
            [one.name for one in transitions],
            [one.weight for one in transitions],
            "all are 0" if len(weighing.upper) else "no transitions",
        )
        shares = by_level(weighing, target)
        order = np.argsort(-np.abs(shares.bound_free), kind="stable")[:_BARS]
        first = [k for k in order if shares.bound_free[k] != 0.0]
        draw_bars(panels[2], [shares.names[k] for k in first], list(shares.bound_free[first]))
        titles = ["processes, parameters", "dipole transitions", "cross sections of levels"]
        if budget is not None and target in budget.targets:
            ranked = [one for one in budget.ranked(target)[:_BARS] if one.contribution != 0.0]
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
        _sign_legend(figure)
    return figure


def _process_bars(axes: Axes, weighing: Weighing, at: int) -> None:
    processes = weighing.processes(weighing.targets[at])
    values = {text: processes[name] for name, text in _PROCESSES.items()}
    parameters = zip(weighing.parameters, weighing.parameter[at], strict=True)
    values |= {_SYMBOLS.get(name, name): float(value) for name, value in parameters}
    ranked = sorted(values, key=lambda name: -abs(values[name]))
    draw_bars(axes, ranked, [values[name] for name in ranked])


def draw_bars(
    axes: Axes, names: Sequence[str], values: Sequence[float], nothing: str = "all are 0"
) -> None:
    """Draw horizontal bars of sizes, the first on top.

    What is 0, NaN or at the level of rounding has words in place of a bar; without any bar the
    panel says `nothing`.
    """
    from matplotlib.ticker import NullFormatter

    sizes = np.nan_to_num(np.abs(np.array(values, dtype=float)))
    top = float(sizes.max(initial=0.0))
    if top == 0.0:
        axes.text(0.5, 0.5, nothing, transform=axes.transAxes, ha="center", va="center")
        axes.set_xticks([])
        axes.set_yticks([])
        return
    seen = sizes >= _ROUNDING * top
    # Two decades at least in all, or small differences look large.
    low = float(np.clip(0.3 * sizes[seen].min(), _ROUNDING * top, 0.025 * top))
    for place, value in enumerate(values):
        if seen[place]:
            _draw_bar(axes, place, value, low)
        text = _signed(value) if seen[place] else _in_words(value)
        axes.annotate(
            text,
            (max(float(sizes[place]), low), place),
            xytext=(2, 0),
            textcoords="offset points",
            va="center",
            fontsize=6.0,
        )
    axes.set_xscale("log")
    axes.xaxis.set_minor_formatter(NullFormatter())
    # Room for the numbers behind the bars.
    axes.set_xlim(low, top * (top / low) ** 0.45)
    axes.set_yticks(range(len(names)), names)
    axes.set_ylim(max(len(names), _BARS // 2) - 0.4, -0.6)
    axes.tick_params(axis="y", length=0)


def _draw_bar(axes: Axes, place: int, value: float, low: float) -> None:
    negative = value < 0.0
    axes.barh(
        place,
        abs(value) - low,
        left=low,
        height=0.7,
        color="white" if negative else style.BLUE,
        edgecolor=style.ORANGE if negative else style.BLUE,
        hatch="//////" if negative else None,
        linewidth=0.8,
    )


def _in_words(value: float) -> str:
    """Say why there is no bar."""
    if value == 0.0:
        return "0"
    return (
        rf"below $10^{{{_ROUNDING_POWER}}}$ of the largest" if np.isfinite(value) else "undefined"
    )


def _cut(text: str) -> str:
    """Bring a long name into one line."""
    return text if len(text) <= _LETTERS else f"{text[: _LETTERS - 3].rstrip()}..."


def _signed(value: float) -> str:
    """Two digits and the sign, in the notation of papers."""
    if 1e-3 <= abs(value) < 1e3:
        return f"{value:+.2g}".replace("-", "\N{MINUS SIGN}")
    digits, _, power = f"{value:+.1e}".partition("e")
    return rf"${digits}\times10^{{{int(power)}}}$"


def _sign_legend(figure: Figure) -> None:
    from matplotlib.patches import Patch

    signs = [
        Patch(facecolor=style.BLUE, edgecolor=style.BLUE, label="positive"),
        Patch(facecolor="white", edgecolor=style.ORANGE, hatch="//////", label="negative"),
    ]
    figure.legend(handles=signs, loc="outside upper center", ncols=2)
