"""What a study of levels says about the ladder it was given."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from tests.small_levels import small_study


@pytest.mark.parametrize(
    ("rungs", "said"),
    [
        ((4, 5, 6, 8, 10, 13), "largest step a factor 1.33, longest rung 13"),
        ((20, 41, 60, 80, 100, 120), "largest step a factor 2.05, longest rung 120"),
        ((12, 24, 30, 36, 42, 49), "longest rung 49"),
        ((12, 24, 30, 36, 42, 50), ""),
    ],
)
def test_notes_say_where_bars_are_untested(rungs: tuple[int, ...], said: str) -> None:
    study = small_study()
    ladder = dataclasses.replace(study.rungs, n_max=np.array(rungs))
    notes = " ".join(dataclasses.replace(study, rungs=ladder).notes)
    assert ("error bars are untested for this ladder" in notes) == bool(said)
    assert said in notes
