"""A study of the lines of He I within one of hydrogen: file, words, figures, where what is safe.

Its curves are invented, so that answers can be read off; real ones cost minutes.
"""

from __future__ import annotations

import json
from pathlib import Path

import pytest

import levelnet
from levelnet.cli.escape import study_text, study_values
from levelnet.cli.output import _plain
from levelnet.report.escape import check_escape_figures, escape_channel_figure, treatment_figure
from levelnet.studies.escape_helium_plan import HELIUM_SWITCHES
from levelnet.studies.escape_records import EscapeStudy
from levelnet.studies.escape_verdict import safe_ranges
from levelnet.studies.level_records import Question
from tests.invented_escape import both, helium_study
from tests.same_records import assert_same


@pytest.mark.parametrize("question", [None, Question(1e-3, 900.0, 1500.0)])
def test_comes_back_to_the_bit(question: Question | None, tmp_path: Path) -> None:
    study = both(question)
    levelnet.write(study, tmp_path / "both.h5")
    again = levelnet.read(tmp_path / "both.h5")
    assert isinstance(again, EscapeStudy)
    assert_same(again, study)
    assert again.helium is not None
    assert again.helium.setup == helium_study().setup
    assert (again.species, again.helium.species) == ("H I", "He I")
    # Alone it is a file of its own.
    levelnet.write(helium_study(), tmp_path / "alone.h5")
    assert_same(levelnet.read(tmp_path / "alone.h5"), helium_study())


def test_says_both_verdicts() -> None:
    study = both(Question(1e-3, 900.0, 1500.0))
    text = study_text(study)
    assert "lines of He I, helium n_max = 3, hydrogen by Sobolev" in text
    assert all(f"\n{name} " in text for name in HELIUM_SWITCHES)
    assert "Continuum, complete redistribution errs by at most" in text
    values = json.loads(json.dumps(_plain(study_values(study))))
    assert values["helium"]["switches"]["name"] == list(HELIUM_SWITCHES)
    assert values["helium"]["helium"] is None
    assert values["helium"]["verdict"]["low"] == 900.0


def test_where_a_variant_is_safe() -> None:
    study = helium_study()
    count = len(study.variants.name)
    five = (study.reference + 5) % count
    z = study.redshift[(study.redshift <= 1500.0) & (study.redshift >= 300.0)]
    below = z[z <= 1000.0]
    assert safe_ranges(study, five, 4e-4, 300.0, 1500.0) == ((below[0], below[-1]),)
    assert safe_ranges(study, five, 1e-3, 300.0, 1500.0) == ((z[0], z[-1]),)
    assert safe_ranges(study, five, 1e-7, 300.0, 1500.0) == ()
    notes = " ".join(study.notes)
    assert "safe to 0.1 % in x_e: Sobolev at" in notes
    assert "raise grid.redshift_start" in notes


def test_figures(tmp_path: Path) -> None:
    names = check_escape_figures(tmp_path, ("H I", "He I"), False, False)
    assert names[3:] == ("helium-escape", "helium-escape-switches", "helium-escape-channels")
    panels = treatment_figure(helium_study()).axes
    assert len(panels[0].get_lines()) == len(helium_study().treatments) + 1
    assert "1\\,^1S" in escape_channel_figure(helium_study()).axes[0].get_ylabel()
