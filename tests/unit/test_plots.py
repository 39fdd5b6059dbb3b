"""Figures: what they draw is what the history holds; files are whole, equal and never overwritten.

The history here is made up (a smooth curve with the look of a recombination history), so that
the expected positions on paper are known in closed form.
"""

import re
from dataclasses import replace
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import matplotlib.pyplot as plt
import numpy as np
import pytest
from scipy.special import logsumexp

from levelnet.atomic.levels import hydrogenic_levels
from levelnet.errors import InputError, Outcome
from levelnet.history.line_figures import LineFigures
from levelnet.history.result import (
    Channels,
    Diagnostics,
    History,
    Milestones,
    SpeciesPopulations,
)
from levelnet.history.setup import Setup
from levelnet.records import build
from levelnet.report.departures import (
    departure_curves_figure,
    departure_map_figure,
    mean_over_l,
    output_row,
)
from levelnet.report.figures import FIGURE_NAMES, figure_paths, make_figures, save_figures
from levelnet.report.plots import channel_figure, history_figure, visibility_figure
from levelnet.report.style import house_style, render

# Drawn twice and compared; the others go the same way.
REPEATED = (("departure-map", "svg"), ("visibility", "pdf"))
PEAK, SIGMA = 1090.0, 83.0
GAUSS_FWHM = 2.0 * np.sqrt(2.0 * np.log(2.0))  # closed form


def made_up_history(n_max: int = 10, n_redshifts: int = 60, n_lines: int = 1) -> History:
    """Return a history with a Gaussian visibility and departures that fall as n^-3."""
    redshift = np.geomspace(1801.0, 21.0, n_redshifts) - 1.0
    ones = np.ones(n_redshifts)
    ionized = 3e-4 + 1.0 / (1.0 + np.exp(-(redshift - 1273.0) / 45.0))
    levels = hydrogenic_levels(n_max)
    departure = np.outer(900.0 / (1.0 + redshift), 8.0 / levels.n**3.0)
    departure = departure - 0.5 * np.outer((redshift < 700.0) * ones, levels.l / (levels.n**2.0))
    departure[:, 0] += 30.0
    names = ("2s-1s", *(f"{n}p-1s" for n in range(2, 2 + n_lines)))
    parts = np.stack([0.7 * ones + 0.2 * np.tanh((1200.0 - redshift) / 300.0), 0.2 * ones])
    rest = (1.0 - parts.sum(axis=0)) / max(1, n_lines - 1)
    shares = np.stack([parts[0], *([parts[1]] if n_lines > 1 else []), *[rest] * (n_lines - 1)])
    shares = np.stack([parts[0], 1.0 - parts[0]]) if n_lines == 1 else shares
    lines = np.ones((n_redshifts, n_lines))
    return History(
        setup=build(
            Setup,
            {
                "cosmology": {
                    "hubble_km_s_mpc": 68.0,
                    "baryon_density_h2": 0.022,
                    "matter_density_h2": 0.142,
                },
                "hydrogen": {"n_max": max(n_max, 2)},
            },
        ),
        outcome=Outcome.CONVERGED,
        redshift=redshift,
        free_electron_fraction=ionized,
        ionized_hydrogen_fraction=ionized,
        neutral_hydrogen_fraction=1.0 / (1.0 + np.exp((redshift - 1273.0) / 45.0)),
        neutral_helium_fraction=ones,
        singly_ionized_helium_fraction=0.0 * ones,
        doubly_ionized_helium_fraction=0.0 * ones,
        matter_temperature_k=2.7255 * (1.0 + redshift) / (1.0 + (60.0 / (1.0 + redshift)) ** 2),
        radiation_temperature_k=2.7255 * (1.0 + redshift),
        hydrogen_density_cm3=1.9e-7 * (1.0 + redshift) ** 3,
        hubble_rate_per_s=1e-18 * (1.0 + redshift) ** 1.5,
        cosmic_time_s=6e17 / (1.0 + redshift) ** 1.5,
        optical_depth=np.exp((redshift - PEAK) / 70.0),
        visibility=4e-3 * np.exp(-0.5 * ((redshift - PEAK) / SIGMA) ** 2),
        species=(SpeciesPopulations("H I", levels, np.exp(-departure) * 1e-9, departure),),
        channels=Channels(names, 1e-13 * shares.T, shares.T, shares.T),
        lines=LineFigures(names[1:], *(lines,) * 15),
        milestones=Milestones(PEAK, PEAK, GAUSS_FWHM * SIGMA, 1273.0, 1.2e13, 5e12),
        diagnostics=Diagnostics(1600.0, 1e-5, 200, 3, 900, 40, 1e-9, 1e-15, 1e6),
        notes=("no reionization",),
    )


def lines_of(axes: Any) -> dict[str, np.ndarray]:
    """Drawn curves with a label of their own, as arrays of shape (2, n)."""
    return {
        line.get_label(): np.array(line.get_data())
        for line in axes.get_lines()
        if not line.get_label().startswith("_")
    }


def test_history_figure_draws_the_arrays() -> None:
    history = made_up_history()
    left, right = history_figure(history).axes
    drawn = {label.split(",")[0]: values for label, values in lines_of(left).items()}
    np.testing.assert_array_equal(drawn["free electrons"][0], history.redshift)
    np.testing.assert_array_equal(drawn["free electrons"][1], history.free_electron_fraction)
    np.testing.assert_array_equal(drawn["neutral hydrogen"][1], history.neutral_hydrogen_fraction)
    temperatures = list(lines_of(right).values())
    np.testing.assert_array_equal(temperatures[0][1], history.radiation_temperature_k)
    np.testing.assert_array_equal(temperatures[1][1], history.matter_temperature_k)
    assert right.get_ylabel() == "temperature (K)"


def test_departure_map_holds_every_excited_level() -> None:
    history = made_up_history(n_max=7)
    row = output_row(history, 500.0)
    (mesh,) = departure_map_figure(history, 500.0).axes[0].collections
    cells = np.ma.masked_invalid(mesh.get_array())
    levels, values = history.levels("H I"), history.log_departures("H I")[row]
    assert cells.count() == len(levels) - 1
    for n, l, value in zip(levels.n[1:], levels.l[1:], values[1:], strict=True):
        assert cells[l, n - 2] == value


def test_departure_map_takes_the_peak_unless_told() -> None:
    history = made_up_history()
    assert output_row(history, None) == np.argmin(np.abs(history.redshift - PEAK))
    nowhere = replace(history.milestones, visibility_peak_redshift=np.nan)
    assert output_row(replace(history, milestones=nowhere), None) == len(history.redshift) - 1


@pytest.mark.parametrize("redshift", [19.0, 1801.0, float("nan")])
def test_redshift_outside_the_outputs_is_refused(redshift: float) -> None:
    with pytest.raises(InputError, match="the outputs run from 20 to 1800"):
        departure_map_figure(made_up_history(), redshift)


def with_shells() -> History:
    """Return a made-up history of 9 shells, those above n = 4 whole."""
    levels = hydrogenic_levels(9, resolve_l_to=4)
    history = made_up_history()
    values = np.outer(np.ones(len(history.redshift)), -1.0 / (levels.n + 0.1 * levels.l))
    return replace(history, species=(SpeciesPopulations("H I", levels, np.exp(values), values),))


def test_map_draws_a_whole_shell_over_all_its_l() -> None:
    history = with_shells()
    levels, values = history.levels("H I"), history.log_departures("H I")[0]
    grid: Any = departure_map_figure(history).axes[0].collections[0].get_array()
    for n in range(2, 10):
        for l in range(n):
            at = levels.index(n, l if n <= 4 else -1)
            assert grid[l, n - 2] == values[at]
        assert np.all(grid.mask[n:, n - 2])


def test_map_marks_where_whole_shells_begin() -> None:
    axes = departure_map_figure(with_shells()).axes[0]
    assert axes.lines[0].get_xdata() == [4.5, 4.5]
    assert "whole shells" in axes.texts[0].get_text()
    plain = departure_map_figure(made_up_history()).axes[0]
    assert not plain.lines and not plain.texts


def test_whole_shells_are_a_series_of_their_own() -> None:
    history = with_shells()
    drawn = lines_of(departure_curves_figure(history, (900.0,)).axes[0])
    levels, values = history.levels("H I"), history.log_departures("H I")[0]
    for l, name in enumerate("spd"):
        n, curve = drawn[f"$n${name}"]
        # An l ends where levels have one.
        assert n.tolist() == list(range(max(2, l + 1), 5))
        assert curve.tolist() == values[(levels.l == l) & (levels.n > 1)].tolist()
    assert drawn["mean over $l$"][0].tolist() == [2.0, 3.0, 4.0]
    n, curve = drawn["whole shells"]
    assert n.tolist() == [5, 6, 7, 8, 9]
    assert curve.tolist() == values[levels.shell].tolist()
    assert "whole shells" not in lines_of(departure_curves_figure(made_up_history()).axes[0])


@pytest.mark.parametrize("redshifts", [(), (100.0,) * 5])
def test_number_of_panels_is_checked(redshifts: tuple[float, ...]) -> None:
    with pytest.raises(InputError, match="1 to 4"):
        departure_curves_figure(made_up_history(), redshifts)


def test_mean_over_l_is_scipys_weighted_log_sum() -> None:
    # Independent: scipy.special.logsumexp, with b far outside the doubles.
    levels = hydrogenic_levels(6)
    values = np.random.default_rng(3).uniform(-2000.0, 5000.0, len(levels))
    shells, mean = mean_over_l(levels, values)
    for n, found in zip(shells, mean, strict=True):
        chosen = levels.n == n
        expected = logsumexp(values[chosen], b=(2.0 * levels.l[chosen] + 1.0) / n**2)
        assert found == pytest.approx(expected, rel=1e-14)


def test_departure_curves_draw_levels_and_mean() -> None:
    history = made_up_history(n_max=9)
    figure = departure_curves_figure(history, (300.0, 900.0))
    row = output_row(history, 900.0)
    drawn = lines_of(figure.axes[0])
    levels, values = history.levels("H I"), history.log_departures("H I")[row]
    np.testing.assert_array_equal(drawn["$n$p"][1], values[levels.l == 1])
    np.testing.assert_array_equal(drawn["mean over $l$"][1], mean_over_l(levels, values)[1][1:])


@pytest.mark.parametrize("n_lines", [1, 5, 12])
def test_channel_curves_add_up_to_one(n_lines: int) -> None:
    for axes in channel_figure(made_up_history(n_max=20, n_lines=n_lines)).axes:
        drawn = lines_of(axes)
        assert len(drawn) <= 6
        total = sum(values[1] for values in drawn.values())
        np.testing.assert_allclose(total, 1.0, atol=1e-14)
        low, high = axes.get_ylim()
        for values in drawn.values():
            assert low < values[1].min()
            assert values[1].max() < high


def test_visibility_marks_sit_where_a_gaussian_has_them() -> None:
    # Closed form: half of the peak lies at +- sqrt(2 ln 2) sigma.
    (axes,) = visibility_figure(made_up_history()).axes
    arrow = next(one for one in axes.texts if getattr(one, "arrow_patch", None) is not None)
    ends = sorted([arrow.xy[0], arrow.get_position()[0]])
    half = 0.5 * GAUSS_FWHM * SIGMA
    np.testing.assert_allclose(ends, [PEAK - half, PEAK + half], atol=0.01)
    assert arrow.xy[1] == pytest.approx(2e-3, rel=1e-3)
    assert any(f"{GAUSS_FWHM * SIGMA:.1f}" in one.get_text() for one in axes.texts)


def test_visibility_without_marks_or_peak() -> None:
    history = made_up_history()
    nothing = Milestones(*(np.nan,) * 6)
    (axes,) = visibility_figure(replace(history, milestones=nothing)).axes
    assert not any(one.get_text() for one in axes.texts)
    dark = replace(history, visibility=np.zeros(len(history.redshift)), milestones=nothing)
    render(visibility_figure(dark), "svg")


@pytest.mark.parametrize(("n_max", "n_redshifts", "n_lines"), [(2, 2, 1), (70, 9, 12)])
def test_all_text_lies_inside_the_figure(n_max: int, n_redshifts: int, n_lines: int) -> None:
    figures = make_figures(made_up_history(n_max, n_redshifts, n_lines))
    assert tuple(figures) == FIGURE_NAMES
    for name, figure in figures.items():
        with house_style():
            figure.draw_without_rendering()
            width, height = figure.bbox.width, figure.bbox.height
            for axes in figure.axes:
                if not axes.get_visible():
                    continue
                box = axes.get_tightbbox()
                assert box is not None
                assert -1.0 <= box.x0 <= box.x1 <= width + 1.0, name
                assert -1.0 <= box.y0 <= box.y1 <= height + 1.0, name


def test_saved_figures_are_equal_valid_and_undated(tmp_path: Path) -> None:
    history = made_up_history(n_max=5)
    first = save_figures(history, tmp_path / "one")
    with plt.rc_context({"axes.facecolor": "red", "font.size": 20.0, "svg.hashsalt": None}):
        again = make_figures(history)
        second = {name: render(again[name], kind) for name, kind in REPEATED}
    assert first == figure_paths(tmp_path / "one")
    assert sorted(tmp_path.joinpath("one").iterdir()) == sorted(first)  # nothing else is left
    for one in first:
        data = one.read_bytes()
        if (one.stem, one.suffix[1:]) in REPEATED:
            assert data == second[one.stem]
        if one.suffix == ".svg":
            assert ElementTree.fromstring(data).tag == "{http://www.w3.org/2000/svg}svg"
            assert b"<dc:date>" not in data
        else:
            assert data.startswith(b"%PDF-")
            assert b"CreationDate" not in data
            assert b"/FontFile2" in data  # TrueType, embedded
            assert not re.search(rb"/Type3", data)
    assert plt.get_fignums() == []  # no global state


def test_large_maps_stay_small_on_disk(tmp_path: Path) -> None:
    history = made_up_history(n_max=150, n_redshifts=4)
    assert len(render(departure_map_figure(history), "svg")) < 500_000


def test_existing_figures_are_kept_unless_forced(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(
        "levelnet.report.style.render", lambda figure, kind: b"drawn " + kind.encode()
    )
    kept = tmp_path / "visibility.pdf"
    kept.write_text("mine")
    with pytest.raises(InputError, match=r"visibility\.pdf: exists already"):
        save_figures(made_up_history(n_max=3), tmp_path)
    assert list(tmp_path.iterdir()) == [kept]
    save_figures(made_up_history(n_max=3), tmp_path, force=True)
    assert kept.read_bytes() == b"drawn pdf"
    assert sorted(tmp_path.iterdir()) == sorted(figure_paths(tmp_path))


def test_folder_that_is_a_file_is_refused(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("x")
    with pytest.raises(InputError, match="is a file, not a folder"):
        save_figures(made_up_history(n_max=3), tmp_path / "file")


def test_failed_drawing_leaves_nothing(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="redshift = 5"):
        save_figures(made_up_history(n_max=3), tmp_path / "new", redshift=5.0)
    assert not (tmp_path / "new").exists()
