"""Figures of a study of the escape: they show the study's numbers, and the same bytes each time."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from levelnet.errors import InputError
from levelnet.history.result import RadiationField
from levelnet.report.escape import save_escape_figures, switch_figure, treatment_figure
from levelnet.studies.escape_records import EscapeStudy
from levelnet.studies.escape_verdict import differences, switch_effects
from tests.invented_escape import cheap_study

STEMS = ("escape", "escape-switches", "escape-channels", "escape-spectrum")


def study_with_field() -> EscapeStudy:
    """The cheap study with an invented field."""
    study = cheap_study()
    energy = np.linspace(5.1, 13.59, 400)
    log_u = np.outer(np.arange(len(study.redshift)), np.exp(-10.0 * np.abs(energy - 10.2)))
    return dataclasses.replace(study, field=RadiationField(study.redshift, energy, log_u))


def test_curves_are_differences_in_per_cent() -> None:
    study = cheap_study()
    left, right = treatment_figure(study).axes
    for k in study.treatments.tolist():
        assert np.array_equal(left.lines[k].get_ydata(), 100.0 * differences(study)[k])
        assert left.lines[k].get_label() == study.variants.name[k]
    # The closed treatment is no more than a bound; the others are seen from near, looking the same.
    near = [one for one in right.lines if one.get_label() in study.variants.name]
    assert [one.get_label() for one in near] == list(study.variants.name[1:4])
    looks = [(one.get_color(), one.get_linestyle()) for one in left.lines[1:4]]
    assert [(one.get_color(), one.get_linestyle()) for one in near] == looks
    low, high = right.get_ylim()
    assert low < 100.0 * differences(study)[1:4].min()
    assert 100.0 * differences(study)[1:4].max() < high < 10.0


def test_switches_stand_side_by_side() -> None:
    study = cheap_study()
    effects = switch_effects(study)
    panels = switch_figure(study).axes
    for axes, values in zip(panels, (effects.first, effects.last, effects.in_order), strict=True):
        for k in range(2):
            assert np.array_equal(axes.lines[k].get_ydata(), 100.0 * values[k])
        assert axes.get_ylim() == panels[0].get_ylim()


def test_files_are_whole_and_the_same_each_time(tmp_path: Path) -> None:
    study = study_with_field()
    paths = save_escape_figures(study, tmp_path / "a")
    assert [p.name for p in paths] == [f"{s}.{e}" for s in STEMS for e in ("svg", "pdf")]
    again = save_escape_figures(study, tmp_path / "b")
    for one, other in zip(paths, again, strict=True):
        assert one.read_bytes() == other.read_bytes()
    with pytest.raises(InputError, match="exists already"):
        save_escape_figures(cheap_study(), tmp_path / "a")
    paths = save_escape_figures(cheap_study(), tmp_path / "c")
    assert len(paths) == 6
