"""Figures of a study of levels: they show the study's numbers, and the same bytes each time."""

from __future__ import annotations

import dataclasses
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from levelnet.errors import InputError
from levelnet.report.level_checks import check_figure, resolve_figure
from levelnet.report.levels import level_figure, save_level_figures
from levelnet.studies.level_records import Estimate, LevelStudy
from tests.small_levels import RUNGS, small_study


def resolved_study() -> LevelStudy:
    """A study with invented rungs of resolve_l_to: those of n_max under another name."""
    study = small_study()
    resolved = dataclasses.replace(
        study.rungs,
        n_max=np.full(len(RUNGS), RUNGS[-1]),
        resolve_l_to=np.array(RUNGS) - 1,
    )
    return dataclasses.replace(study, resolved=resolved)


def test_dots_are_the_errors_of_the_rungs() -> None:
    study = small_study()
    by_level, near, by_redshift = level_figure(study).axes
    errors = study.rungs.free_electron_fraction / study.limit.free_electron_fraction.value - 1.0
    line = by_level.lines[0]
    assert line.get_xdata().tolist() == list(RUNGS)
    row = int(np.argmin(np.abs(errors - line.get_ydata()[:, None]).sum(axis=0)))
    assert line.get_ydata() == pytest.approx(errors[:, row], rel=1e-12)
    assert line.get_label() == f"$z$ = {study.redshift[row]:.0f}"
    # The law starts at the longest rung and goes down.
    law = by_level.lines[1].get_ydata()
    assert law[0] == pytest.approx(errors[-1, row])
    assert np.all(np.diff(law) < 0.0)
    assert len(by_redshift.lines) == len(RUNGS)
    # Towards all levels the law ends at zero, the bar of the limit around it.
    assert near.lines[1].get_ydata()[-1] == pytest.approx(0.0, abs=1e-12)


def test_one_redshift_has_one_colour() -> None:
    by_level, near, _ = level_figure(small_study()).axes

    def colours(axes: Any) -> dict[str, str]:
        named = [one for one in axes.lines if one.get_label().startswith("$z$")]
        return {one.get_label(): one.get_color() for one in named}

    first, second = colours(by_level), colours(near)
    assert second
    assert {name: first[name] for name in second} == second


def test_band_beyond_the_rungs_is_that_of_the_verdict() -> None:
    study = small_study()
    by_level = level_figure(study).axes[0]
    row = int(np.argmin(np.abs(study.redshift - 1100.0)))
    place = [one.get_label() for one in by_level.lines][::2].index(
        f"$z$ = {study.redshift[row]:.0f}"
    )
    edges = by_level.collections[place].get_paths()[0].vertices
    # At the longest rung: its error, and the bar of the limit around it.
    limit = study.limit.free_electron_fraction
    error = study.rungs.free_electron_fraction[-1, row] / limit.value[row] - 1.0
    at_longest = edges[edges[:, 0] == RUNGS[-1], 1]
    assert at_longest.max() == pytest.approx(error + limit.relative_error[row], rel=1e-9)
    assert at_longest.min() == pytest.approx(error - limit.relative_error[row], rel=1e-9)


def test_misses_are_in_units_of_the_bar() -> None:
    study = small_study()
    left, right = check_figure(study).axes
    assert np.all(np.abs(left.lines[0].get_ydata()) <= 1.0)
    exponent = study.limit.free_electron_fraction.exponent
    assert np.array_equal(right.lines[0].get_ydata(), exponent, equal_nan=True)


def test_resolved_rungs_are_held_against_the_longest() -> None:
    study = resolved_study()
    (axes,) = resolve_figure(study).axes
    drawn = axes.lines[0].get_ydata()
    assert study.resolved is not None
    first = study.resolved.free_electron_fraction[0]
    # With its sign: these rungs, shorter ones by another name, have more electrons.
    expected = first / study.rungs.free_electron_fraction[-1] - 1.0
    assert drawn == pytest.approx(expected)
    low, high = axes.get_ylim()
    assert low < 0.0 < drawn.max() < high


def test_study_without_any_law_is_drawn() -> None:
    # As far above recombination, where all rungs agree; a warning would fail the test.
    study = small_study()
    one = study.limit.free_electron_fraction
    nothing = Estimate(
        study.rungs.free_electron_fraction[-1],
        one.relative_error,
        np.full_like(one.exponent, np.nan),
        np.zeros_like(one.fitted),
    )
    limit = dataclasses.replace(study.limit, free_electron_fraction=nothing)
    bare = dataclasses.replace(study, limit=limit)
    by_level, near, _ = level_figure(bare).axes
    assert not by_level.lines
    assert by_level.get_legend() is None
    assert near.get_legend() is None
    check_figure(bare)


def test_files_are_whole_and_the_same_each_time(tmp_path: Path) -> None:
    paths = save_level_figures(resolved_study(), tmp_path / "a")
    stems = ("levels", "levels-check", "levels-resolve")
    assert [p.name for p in paths] == [f"{s}.{e}" for s in stems for e in ("svg", "pdf")]
    again = save_level_figures(resolved_study(), tmp_path / "b")
    for one, other in zip(paths, again, strict=True):
        assert one.read_bytes() == other.read_bytes()
    with pytest.raises(InputError, match="exists already"):
        save_level_figures(small_study(), tmp_path / "a")
    bare = dataclasses.replace(small_study(), held_out=None)
    short = dataclasses.replace(
        bare,
        rungs=dataclasses.replace(
            bare.rungs,
            **{
                field.name: getattr(bare.rungs, field.name)[:5]
                for field in dataclasses.fields(bare.rungs)
            },
        ),
    )
    paths = save_level_figures(short, tmp_path / "c")
    assert [p.name for p in paths] == ["levels.svg", "levels.pdf"]
