"""Figures of a weighing: they show its numbers, fit the page, and give the same bytes each time."""

from __future__ import annotations

import dataclasses
import re
from pathlib import Path

import numpy as np
import pytest
from matplotlib.figure import Figure

from levelnet.errors import InputError
from levelnet.quantities import OBSERVABLES
from levelnet.report.bars import MOST_BARS, draw_bars
from levelnet.report.budget import band_figure
from levelnet.report.helium_weights import helium_figure
from levelnet.report.importance import importance_figure
from levelnet.report.style import house_style, render
from levelnet.report.weights import (
    OBSERVABLE_SYMBOLS,
    figure_paths,
    file_names,
    ranking_figure,
    save_weighing_figures,
    target_label,
)
from levelnet.studies.groups import level_map, shell_map, top_transitions
from levelnet.studies.helium_groups import top_helium_transitions
from levelnet.studies.weighing import Weighing
from tests.invented_weighing import (
    GROUPS,
    band_targets,
    invented_budget,
    invented_weighing,
    with_helium,
)

TARGET = "x_e(900)"
TARGETS = (TARGET, "z_*")
CASES = {
    "usual": {"n_max": 6},
    "one shell": {"n_max": 2},
    "whole shells": {"n_max": 9, "whole_from": 4},
    "all zero": {"n_max": 4, "scale": 0.0},
    "many shells": {"n_max": 14},
}


def complete(**options: float) -> Weighing:
    budget = invented_budget((*TARGETS, *band_targets(9)))
    return dataclasses.replace(invented_weighing(TARGETS, **options), budget=budget)


@pytest.mark.parametrize("case", ["usual", "whole shells"])
def test_map_draws_the_arrays(case: str) -> None:
    weighing = complete(**CASES[case])
    left, middle, right = importance_figure(weighing, TARGET, "J").axes[:3]
    drawn, (_, shells) = level_map(weighing, TARGET), shell_map(weighing, TARGET)
    resolved = drawn.l >= 0
    for axes, values in ((left, drawn.bound_free), (middle, drawn.out)):
        cells = np.ma.filled(axes.collections[0].get_array(), np.nan)
        np.testing.assert_array_equal(cells, values[:, resolved].T)
    if case == "whole shells":
        strip = np.ma.filled(left.collections[1].get_array(), np.nan)
        np.testing.assert_array_equal(strip, drawn.bound_free[:, ~resolved].T)
        assert left.get_yticklabels()[-1].get_text() == "all"
    cells = np.ma.filled(right.collections[0].get_array(), np.nan)
    np.testing.assert_array_equal(cells, shells.T)


def test_colours_tell_the_sign_and_one_scale_serves_all_panels() -> None:
    figure = importance_figure(complete(), TARGET, "J")
    norms = {id(axes.collections[0].norm) for axes in figure.axes[:3]}
    assert len(norms) == 1
    norm = figure.axes[0].collections[0].norm
    assert norm.vmin == -norm.vmax
    assert norm(0.0) == pytest.approx(0.5)
    assert norm(-1e-3 * norm.vmax) + norm(1e-3 * norm.vmax) == pytest.approx(1.0)


def test_bars_are_the_largest_numbers_in_order() -> None:
    weighing = complete(n_max=7)
    processes, transitions, _, budget = ranking_figure(weighing, TARGET).axes
    top = top_transitions(weighing, TARGET, 10)
    assert [text.get_text() for text in transitions.get_yticklabels()] == [one[0] for one in top]
    ends = [bar.get_x() + bar.get_width() for bar in transitions.patches]
    assert ends == pytest.approx([abs(one.weight) for one in top], rel=1e-12)
    hatched = [bool(bar.get_hatch()) for bar in transitions.patches]
    assert hatched == [one.weight < 0.0 for one in top]
    assert len(processes.get_yticks()) == 5 + len(weighing.parameters)
    assert {text.get_text() for text in budget.get_yticklabels()} <= set(GROUPS)
    assert "error budget" in budget.get_title(loc="right")


def test_ranking_without_budget_has_three_panels() -> None:
    figure = ranking_figure(invented_weighing(), TARGET)
    assert [axes.get_visible() for axes in figure.axes] == [True, True, True, False]


def test_band_is_that_of_the_budget() -> None:
    names = band_targets(9)
    budget = invented_budget(("z_*", *names))
    left, right = band_figure(budget).axes
    redshift, values = left.lines[2].get_data()
    assert list(redshift) == [float(name[4:-1]) for name in names]
    largest = int(np.argmax(np.max(np.abs(budget.contribution[1:]), axis=0)))
    assert left.lines[2].get_label() == GROUPS[largest]
    np.testing.assert_allclose(values, 100.0 * budget.contribution[1:, largest], rtol=1e-14)
    np.testing.assert_allclose(right.lines[0].get_ydata(), 100.0 * budget.sigma[1:], rtol=1e-14)
    assert left.get_ylabel() == r"$\Delta x_e/x_e$ (per cent)"


def test_groups_beyond_six_are_added_in_squares() -> None:
    small = invented_budget(band_targets(4))
    many = dataclasses.replace(
        small,
        groups=tuple(f"g{k}" for k in range(9)),
        sources=("",) * 9,
        contribution=np.outer(np.ones(4), 2.0 ** -np.arange(9)),
    )
    right = band_figure(many).axes[1]
    rest = next(line for line in right.lines if line.get_label() == "3 more")
    # Closed form: sqrt(4^-6 + 4^-7 + 4^-8).
    expected = 100.0 * np.sqrt(4.0**-6 + 4.0**-7 + 4.0**-8)
    assert rest.get_ydata() == pytest.approx(expected)


def test_budget_of_nothing_can_be_drawn() -> None:
    budget = invented_budget(band_targets(4))
    zero = dataclasses.replace(budget, sigma=np.zeros(4), contribution=np.zeros((4, len(GROUPS))))
    assert render(band_figure(zero), "svg")


@pytest.mark.parametrize("case", CASES)
def test_all_text_lies_inside_the_figure(case: str) -> None:
    weighing = complete(**CASES[case])
    figures = [importance_figure(weighing, TARGET, target_label(TARGET))]
    figures += [ranking_figure(weighing, TARGET), band_figure(weighing.budget)]
    for figure in figures:
        with house_style():
            figure.draw_without_rendering()
            width, height = figure.bbox.width, figure.bbox.height
            for axes in figure.axes:
                box = axes.get_tightbbox() if axes.get_visible() else None
                if box is not None:
                    assert -1.0 <= box.x0 <= box.x1 <= width + 1.0
                    assert -1.0 <= box.y0 <= box.y1 <= height + 1.0


def test_long_names_of_groups_take_one_line() -> None:
    weighing = complete()
    name = "every dipole transition between levels that nobody ever measured to a per cent, twice"
    budget = dataclasses.replace(weighing.budget, groups=(name, *GROUPS[1:]))
    axes = ranking_figure(dataclasses.replace(weighing, budget=budget), TARGET).axes[3]
    names = [text.get_text() for text in axes.get_yticklabels()]
    assert "every dipole transition betwe..." in names
    assert set(names) - set(GROUPS) == {"every dipole transition betwe..."}


@pytest.mark.parametrize("case", ["usual", "one shell", "whole shells"])
def test_numbers_behind_bars_stay_inside_the_frame(case: str) -> None:
    figure = ranking_figure(complete(**CASES[case]), TARGET)
    with house_style():
        figure.draw_without_rendering()
        for axes in figure.axes:
            for text in axes.texts:
                assert text.get_window_extent().x1 < axes.get_window_extent().x1


def test_what_may_be_rounding_is_said_in_words() -> None:
    axes = Figure().add_subplot()
    draw_bars(axes, list("abcde"), [13.0, -2e-6, 1.2e-6, 0.0, np.nan])
    assert len(axes.patches) == 2
    said = [text.get_text() for text in axes.texts]
    assert said[2:] == ["below $10^{-7}$ of the largest", "0", "undefined"]


@pytest.mark.parametrize(
    ("options", "said"),
    [({"n_max": 2}, "no transitions"), ({"n_max": 4, "scale": 0.0}, "all are 0")],
)
def test_panel_of_nothing_says_so_and_has_no_ticks(options: dict[str, float], said: str) -> None:
    axes = ranking_figure(invented_weighing(**options), TARGET).axes[1]
    assert [text.get_text() for text in axes.texts] == [said]
    assert len(axes.get_xticks()) == len(axes.get_yticks()) == 0
    assert axes.get_xscale() == "linear"
    panels = importance_figure(invented_weighing(n_max=2), TARGET, "J").axes[1:3]
    assert all(one.texts[0].get_text() == "no transitions" for one in panels)


def test_gap_below_whole_shells_has_the_colour_of_no_level() -> None:
    left = importance_figure(complete(**CASES["whole shells"]), TARGET, "J").axes[0]
    # Nothing but the cells is drawn over the background, which differs from the colour of 0.
    assert len(left.collections) == 2
    assert len(left.patches) == 0
    assert left.get_facecolor() != left.collections[0].to_rgba(0.0)


def test_files_are_whole_and_the_same_each_time(tmp_path: Path) -> None:
    weighing = complete(n_max=4).first(1)
    first = save_weighing_figures(weighing, tmp_path)
    assert first == figure_paths(weighing.targets, True, tmp_path)
    assert sorted(tmp_path.iterdir()) == sorted(first)
    again = {
        "map-x_e-900.svg": importance_figure(weighing, TARGET, target_label(TARGET)),
        "ranking-x_e-900.svg": ranking_figure(weighing, TARGET),
        "error-band.pdf": band_figure(weighing.budget),
    }
    for path in first:
        data = path.read_bytes()
        assert not re.search(rb"<dc:date>|CreationDate|/Type3", data)
        if path.name in again:
            assert data == render(again[path.name], path.suffix[1:])


def test_existing_figures_are_kept_unless_forced(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("levelnet.report.style.render", lambda figure, kind: b"drawn")
    weighing = complete(n_max=3)
    kept = tmp_path / "error-band.pdf"
    kept.write_text("mine")
    with pytest.raises(InputError, match=r"error-band\.pdf: exists already"):
        save_weighing_figures(weighing, tmp_path)
    assert list(tmp_path.iterdir()) == [kept]
    save_weighing_figures(weighing, tmp_path, force=True)
    assert kept.read_bytes() == b"drawn"


def test_large_maps_stay_small_on_disk() -> None:
    weighing = invented_weighing(n_max=45)
    assert len(render(importance_figure(weighing, TARGET, "J"), "svg")) < 500_000


def test_file_names_are_plain_and_different() -> None:
    names = ("x_e(900)", "line(3d-2p)", "z_*", "x_e(20.5)", "x_e(900)")
    plain = file_names(names)
    assert plain == ["x_e-900", "line-3d-2p", "z", "x_e-20.5", "x_e-900-4"]
    assert target_label("x_e(900)") == "$x_e$($z$ = 900)"
    assert target_label("optical_depth(1100.5)") == r"$\tau$($z$ = 1100.5)"
    assert target_label("line(3d-2p)") == "line(3d-2p)"


def test_every_observable_has_a_symbol() -> None:
    assert list(OBSERVABLE_SYMBOLS) == list(OBSERVABLES)
    assert len(set(OBSERVABLE_SYMBOLS.values())) == len(OBSERVABLES)
    assert target_label("k_D") == target_label("damping_per_mpc") == "$k_D$"


def test_unknown_target_is_one_line() -> None:
    for draw in (lambda w, t: importance_figure(w, t, t), ranking_figure):
        with pytest.raises(InputError, match='target "r_s": weighed were'):
            draw(complete(), "r_s")


def test_rates_of_helium_are_ranked() -> None:
    weighing = with_helium(complete())
    assert weighing.helium is not None
    figure = helium_figure(weighing, TARGET, "J")
    panels = figure.axes
    assert len(panels) == 4
    lines = [text.get_text() for text in panels[0].get_yticklabels()]
    assert len(lines) == MOST_BARS
    values = dict(zip(weighing.helium.lines, weighing.helium.strength[0], strict=True))
    largest = max(values, key=lambda name: abs(values[name]))
    assert f"A({largest})" in lines
    named = [text.get_text() for text in panels[2].get_yticklabels()]
    assert named == [one.name for one in top_helium_transitions(weighing.helium, 0, MOST_BARS)]
    assert render(figure, "svg") == render(helium_figure(weighing, TARGET, "J"), "svg")


def test_figures_of_helium_are_among_the_files(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("levelnet.report.style.render", lambda figure, kind: b"drawn")
    weighing = with_helium(invented_weighing((TARGET,)))
    written = save_weighing_figures(weighing, tmp_path)
    assert set(written) == set(figure_paths((TARGET,), False, tmp_path, helium=True))
    assert tmp_path / "helium-x_e-900.svg" in written
