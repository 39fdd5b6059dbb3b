"""What the page of results says of its figures: their own numbers, in sentences that hold.

What is expected is the project's own contract: a caption states what its figure shows, a headline
does not contradict the answer below it, and every line of a figure can be told from the others.
"""

from __future__ import annotations

import itertools
import math
import re
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from levelnet.errors import Outcome
from levelnet.history.result import History
from levelnet.report import style
from levelnet.report.departures import _round_values, departure_curves_figure, departure_map_figure
from levelnet.report.figures import figure_makers
from levelnet.report.helium import helium_lines_figure
from levelnet.report.page.content import Origin, Table
from levelnet.report.page.escape_chapter import escape_chapter
from levelnet.report.page.fast_chapter import fast_chapter
from levelnet.report.page.history_said import history_said
from levelnet.report.page.levels_chapter import levels_chapter
from levelnet.report.page.sweep_chapter import _range
from levelnet.report.page.weighing_chapter import _ranking_said
from levelnet.report.page.wording import sentence
from levelnet.report.plots import history_figure
from levelnet.report.sweep import sweep_figure
from levelnet.studies.groups import top_transitions
from levelnet.studies.level_records import Question
from levelnet.studies.sweep_record import Sweep
from tests.invented_escape import with_differences
from tests.invented_history import history_with_field, invented_history
from tests.invented_sweep import invented as invented_sweep
from tests.invented_weighing import invented_weighing, with_helium
from tests.small_helium import helium_history
from tests.small_levels import small_study
from tests.unit.test_report_page import page_of, record_of

ORIGIN = Origin("result.h5", {})


def without_milestones(history: History) -> History:
    """The same where the outputs reach none of the events."""
    marks = history.milestones
    nothing = {name: math.nan for name in type(marks).__slots__}
    return replace(history, milestones=replace(marks, **nothing))


@pytest.mark.parametrize("reached", [True, False])
def test_caption_of_the_map_is_of_the_redshift_that_is_drawn(reached: bool) -> None:
    history = invented_history() if reached else without_milestones(invented_history())
    title = departure_map_figure(history).axes[0].get_title()
    drawn = re.search(r"\$z\$ = ([0-9.]+)", title)
    said = history_said(history)["departure-map"][1]
    assert drawn and f"z = {drawn[1]}," in said
    row = int(np.argmin(np.abs(history.redshift - float(drawn[1]))))
    excited = history.log_departures("H I")[row, 1:]
    assert f"from {excited.min():.3g} to {excited.max():.3g}" in said


def test_what_is_not_reached_is_a_sentence() -> None:
    said = history_said(without_milestones(invented_history()))["visibility"][1]
    assert "do not reach its peak" in said
    history = helium_history(1e-4)
    late = history.redshift < 1500.0
    assert history.helium is not None
    lines = history.helium.lines
    silent = np.full_like(lines.escape_error, np.nan)
    helium = replace(
        history.helium, lines=replace(lines, escape_error=silent, feedback_error=silent)
    )
    unjudged = replace(
        without_milestones(history),
        helium=helium,
        neutral_helium_fraction=np.where(late, 1.0, 0.9),
    )
    texts = history_said(unjudged)
    assert "do not reach the redshift at which half" in texts["helium"][1]
    assert "no panel shows it" in texts["helium-lines"][1]
    assert len(helium_lines_figure(unjudged).axes) == 3
    assert len(helium_lines_figure(history).axes) == 4
    for one in (texts, history_said(history)):
        assert not re.search(
            r"\bnan\b|not reached|None", " ".join(text for _, text in one.values())
        )


def test_cells_without_a_value_say_so() -> None:
    assert "nan" not in re.sub(r"<[^>]*>", " ", page_of("helium")).split()
    assert ">+nan<" not in page_of("helium")


@pytest.mark.parametrize("species", ["H I", "He I"])
def test_alternative_of_departure_curves_has_their_numbers(species: str) -> None:
    history: Any = helium_history(1e-4)
    name = "departure-curves" if species == "H I" else "helium-departures"
    said = history_said(history)[name][1]
    pieces = re.findall(r"z = ([0-9.]+) from (\S+) \((.+?)\) to (\S+) \((.+?)\)", said)
    panels = [one for one in figure_makers(history)[name]().axes if one.get_visible()]
    assert len(pieces) == len(panels) >= 2
    for z, low, _, high, _ in pieces:
        row = int(np.argmin(np.abs(history.redshift - float(z))))
        excited = history.log_departures(species)[row, history.levels(species).n > 1]
        assert float(low) == pytest.approx(np.nanmin(excited), rel=6e-3)
        assert float(high) == pytest.approx(np.nanmax(excited), rel=6e-3)


def test_alternative_of_a_ranking_has_its_numbers() -> None:
    weighing = invented_weighing()
    target = weighing.targets[0]
    first = top_transitions(weighing, target, 1)[0]
    said = _ranking_said(weighing, target)
    assert f"Largest transitions: {first.name} {first.weight:+.3g}" in said
    # Of processes those that the figure shows; "lyman_alpha" is a part of one of them.
    assert "two-photon 2s-1s" in said and "lyman_alpha" not in said
    for what in ("processes", "cross sections"):
        assert re.search(rf"Largest {what}: .+? [+-][0-9.e-]+", said)
    assert with_helium(weighing).helium is not None
    assert re.search(r"terms\. Largest rates: .+? [+-][0-9.e-]+", page_of("helium weighing"))


def test_headline_of_a_ladder_agrees_with_its_verdict() -> None:
    study = small_study()
    low, high = float(study.redshift[-1]), float(study.redshift[0])
    for within, ok in ((1e-7, None), (0.9, True)):
        chapter = levels_chapter(replace(study, question=Question(within, low, high)), ORIGIN, "r")
        assert chapter.ok is ok
        assert chapter.outcome.startswith(f"every history {Outcome.CONVERGED.value}")
        open_ = "not known from these rungs" in chapter.answers[0]
        assert open_ == (ok is None) == (chapter.word == "Question left open")
    failed = levels_chapter(replace(study, outcome=Outcome.STEP_LIMIT), ORIGIN, "r")
    assert failed.ok is False and failed.outcome == Outcome.STEP_LIMIT.value


def test_headline_of_an_escape_study_agrees_with_its_verdict() -> None:
    study = with_differences({}, own=1e-6)
    assert escape_chapter(study, ORIGIN, "r").ok is True
    study = with_differences({}, own=0.5)
    chapter = escape_chapter(study, ORIGIN, "r")
    assert "none of those compared" in chapter.answers[0]
    assert chapter.ok is None and "but none of the variants" in chapter.outcome


def nine_cases(n_keys: int) -> Sweep:
    """Nine cases over three keys or more, six of which have a history."""
    z = np.array([1500.0, 1000.0, 500.0])
    pairs = list(itertools.product((1e-12, 0.0224, 0.14), (0.1, 2.7, 100.0)))
    columns: tuple[tuple[Any, ...], ...] = (
        (4,) * 9,
        tuple(one for one, _ in pairs),
        tuple(one for _, one in pairs),
        *(tuple(f"some long text, number {k}" for k in range(9)) for _ in range(n_keys - 3)),
    )
    names = ("cosmology.baryon_density_h2", "cosmology.cmb_temperature_k")
    bad = [k % 3 == 2 for k in range(9)]
    rows = np.array([[math.nan] * 3 if one else [1.0, 0.1, 1e-3] for one in bad])
    base = invented_sweep()
    return replace(
        base,
        swept=("hydrogen.n_max", *names, *(f"lines.key_{k}" for k in range(n_keys - 3))),
        columns=columns,
        setups=base.setups[:1] * 9,
        outcome=tuple("FAILED" if one else "CONVERGED" for one in bad),
        reason=("",) * 9,
        redshift=z,
        arrays={name: rows for name in base.arrays},
        observable=np.full((9, 2), np.nan),
    )


@pytest.mark.parametrize("n_keys", [3, 9])
@pytest.mark.parametrize("narrow", [False, True])
def test_legend_of_a_sweep_lies_inside_its_figure(n_keys: int, narrow: bool) -> None:
    sweep = nine_cases(n_keys)
    if narrow:
        with style.stacked():
            figure: Any = sweep_figure(sweep)
    else:
        figure = sweep_figure(sweep)
    with style.house_style():
        figure.draw_without_rendering()
        (legend,) = figure.legends
        box = legend.get_window_extent()
    assert 0.0 <= box.x0 < box.x1 <= figure.bbox.x1 and box.y1 <= figure.bbox.y1
    assert not any(axes.get_window_extent().overlaps(box) for axes in figure.axes)
    names = [one.get_text() for one in legend.get_texts()]
    numbers = [int(re.findall(r"\d+", one)[0]) for one in names]
    assert numbers == [0, 1, 3, 4, 6, 7]
    assert (names[0] == "case 0") == (n_keys == 9)  # too long for one line
    if n_keys == 3:  # what tells the cases apart, and nothing that all have in common
        assert names[0] == "0: baryon_density_h2 1e-12, cmb_temperature_k 0.1"


def test_counts_and_symbols_are_written_as_a_person_would() -> None:
    assert _range((4, 4)) == "1 value: 4"
    assert _range(("open",)) == "1 value: open"
    assert _range((4, 6)) == "2 values, 4 to 6"
    assert _range((math.nan, math.nan)) == "left out by every case"
    assert sentence("x_e = 1 at z = 20") == "x_e = 1 at z = 20."
    assert sentence("hydrogen is half ionized") == "Hydrogen is half ionized."


def short_history() -> History:
    """Outputs over a sixth of the temperature."""
    history = invented_history(50)
    z = np.linspace(1800.0, 1500.0, 50)
    temperature = 2.7255 * (1.0 + z)
    return replace(
        history,
        redshift=z,
        matter_temperature_k=temperature,
        radiation_temperature_k=temperature,
    )


@pytest.mark.parametrize("history", [invented_history(), short_history()])
def test_figure_of_a_history_reads_at_any_range(history: History) -> None:
    figure: Any = history_figure(history)
    with style.house_style():
        figure.draw_without_rendering()
        box = figure.legends[0].get_window_extent()
        assert not any(axes.get_window_extent().overlaps(box) for axes in figure.axes)
        for axis in (figure.axes[1].xaxis, figure.axes[1].yaxis):
            low, high = sorted(axis.get_view_interval())
            named = [one for one in axis.get_majorticklocs() if low <= one <= high]
            assert len(named) >= 2
            if high < 2.0 * low:
                assert 3 <= len(named) <= 7


def test_colour_bar_has_ticks_at_any_range() -> None:
    ranges = ((-6.93e-4, -6.17e-4), (-4.91e-5, -3.61e-5), (0.11, 0.19), (-3.0, 40.0), (1e-5, 10.0))
    for low, high in ranges:
        ticks = _round_values(low, high)
        assert 3 <= len(ticks) <= 9 and all(low <= one <= high for one in ticks)


def test_stacked_figures_are_one_column_of_named_panels() -> None:
    history = invented_history()
    for make in (lambda: history_figure(history), lambda: departure_curves_figure(history)):
        wide: Any = make()
        with style.stacked():
            narrow: Any = make()
            style.label_stacked(narrow)
        assert narrow.get_figwidth() == style.ONE_COLUMN_IN < wide.get_figwidth()
        assert len(narrow.axes) == len(wide.axes)
        assert len({axes.get_position().x0 for axes in narrow.axes}) == 1
    # Outside of it nothing has changed.
    assert history_figure(history).get_figwidth() == style.TWO_COLUMNS_IN


def test_history_from_a_table_shows_its_field() -> None:
    fast, setup = record_of("fast")
    with_field = replace(fast, field=history_with_field().field)  # type: ignore[type-var]
    for record, count in ((fast, 1), (with_field, 2)):
        chapter = fast_chapter(record, setup, ORIGIN, "r")  # type: ignore[arg-type]
        figures = next(one for one in chapter.sections if one.title == "Figures")
        assert len(figures.blocks) == count


def test_tables_know_when_they_are_broader_than_a_phone() -> None:
    narrow = Table("caption", ("n_max", "error"), (("4", "1.2e-3"),))
    broad = Table("caption", tuple("abcdefgh"), (("1.234567e-03",) * 8,))
    assert broad.broad and not narrow.broad
    text = Table("caption", ("a", "b"), (("word " * 50, "word " * 50),), numeric=False)
    assert not text.broad  # its words wrap
