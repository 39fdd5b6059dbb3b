"""``levelnet levels`` from outside: the verdict, the file, JSON, figures, one-line complaints.

What is expected is the project's own contract, as in test_command_line.py.
"""

from __future__ import annotations

import dataclasses
import json
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

import levelnet
from levelnet.cli.main import main
from levelnet.errors import InputError
from levelnet.studies.answers import level_answer
from levelnet.studies.level_records import LevelStudy, Question
from tests.small_levels import small_study
from tests.whole.test_command_line import GOOD, environment

LADDER = ("--rungs", "4,5,6,8,10,12", "--between", "400", "1600")


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Work in an empty folder that holds one good setup."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "good.toml").write_text(GOOD)
    return tmp_path


def test_study_from_setup_to_verdict(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    (folder / "asked.toml").write_text("[observables]\nz_drag = 0.01\n'tau(1000)' = 0.2\n")
    words = [
        "levels",
        "good.toml",
        *LADDER,
        "--within",
        "0.2",
        "--plot",
        "figures",
        "--workers",
        "1",
        "--requirement",
        "asked.toml",
    ]
    assert main([*words, "--quiet"]) == 0
    said = capsys.readouterr().out
    assert "for 20 % in x_e at 400 < z < 1600: n_max = " in said
    assert "foreseen from rungs up to 10" in said
    assert "for the requirement: n_max = " in said
    assert "optical_depth(1000)" in said
    assert re.search(r"\nk_D +0\.1\d+ +\d\.\de-\d\d +Mpc\^-1\n", said)
    assert "of the correction from the longest rung to all levels (at z = " in said
    assert "MORE THAN 20 %" in said  # rungs to 12 tell little
    study = levelnet.read("good-levels.h5")
    assert isinstance(study, LevelStudy)
    assert study.rungs.n_max.tolist() == [4, 5, 6, 8, 10, 12]
    assert main(["show", "good-levels.h5"]) == 0
    shown = capsys.readouterr().out
    verdicts = [line for line in said.splitlines() if line.startswith("verdict")]
    assert len(verdicts) == 2 and all(line in shown for line in verdicts)
    assert sorted(path.name for path in (folder / "figures").iterdir()) == [
        "levels-check.pdf",
        "levels-check.svg",
        "levels.pdf",
        "levels.svg",
    ]
    # The file is never replaced unasked, and this is said before any work.
    start = time.monotonic()
    assert main(words) == 2
    assert "already exists" in capsys.readouterr().err
    assert main([*words, "--output", "other.h5"]) == 2
    assert "exists already" in capsys.readouterr().err
    assert time.monotonic() - start < 5.0

    assert main(["show", "good-levels.h5", "--json"]) == 0
    shown = json.loads(capsys.readouterr().out)
    assert shown["rungs"]["n_max"] == [4, 5, 6, 8, 10, 12]
    assert shown["limit"]["free_electron_fraction"]["value"] == (
        study.limit.free_electron_fraction.value.tolist()
    )
    assert shown["verdict"]["within"] == 0.2
    assert shown["held_out"]["n_max"] == [12]
    assert shown["rungs"]["population"] == study.rungs.population.tolist()
    assert shown["population_redshift"] == study.population_redshift.tolist()
    assert shown["limit_check"]["bar_over_correction"] > 0.2
    # Drawn in earnest above.
    monkeypatch.setattr("levelnet.report.style.render", lambda figure, kind: kind.encode())
    assert main(["show", "good-levels.h5", "--plot", "again"]) == 0
    assert (folder / "again" / "levels.svg").read_bytes() == b"svg"
    capsys.readouterr()
    assert main(["show", "good-levels.h5", "--csv"]) == 2
    assert "not for a study of levels" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["--rungs", "20"], "a ladder with 1 rung allows no extrapolation; 4 or more"),
        (["--rungs", "4,5,5,6"], "each must be larger than the one before"),
        (["--rungs", "3,4,5,6"], "the lowest allowed is 4"),
        (["--rungs", "4,5,six"], '"six" is no whole number'),
        (["--rungs", "4,5,6,999999"], "rungs = 4, 5, 6, 999999: allowed are 4 to 1000"),
        (["--rungs", "4,5,6,8", "--resolve", "8"], "must be below the longest rung"),
        (["--rungs", "4,5,6,8", "--within", "0"], "within = 0"),
        (["--rungs", "4,5,6,8", "--between", "1", "2"], "they run from 200 to 1700"),
        (["--rungs", "4,5,6,8", "--between", "100", "1600"], "do not cover that"),
        (["--rungs", "4,5,6,8", "--workers", "0"], "--workers = 0"),
        (["--rungs", "4,5,6,8", "--output", "no/such/x.h5"], "does not exist"),
        (["--rungs", "4,5,6,8", "--plot", "good.toml"], "is a file, not a folder"),
        (["--requirement", "none.toml"], "none.toml: cannot be read"),
        (["--requirement", "good.toml"], "unknown key"),
        ([], "hydrogen.n_max = 4: too low for a ladder up to it; give one, such as --rungs 20"),
    ],
)
def test_complaints_are_one_line(
    folder: Path, capsys: pytest.CaptureFixture[str], words: list[str], message: str
) -> None:
    start = time.monotonic()
    assert main(["levels", "good.toml", *words]) == 2
    said = capsys.readouterr()
    assert said.out == ""
    assert len(said.err.splitlines()) == 1
    assert message in said.err
    assert [path.name for path in folder.iterdir()] == ["good.toml"]
    assert time.monotonic() - start < 5.0


def test_default_range_is_what_the_outputs_cover(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (folder / "late.toml").write_text(GOOD.replace("end = 200.0", "end = 900.0"))
    words = ["levels", "late.toml", "--rungs", "4,5,6,8", "--resolve", "6", "--quiet"]
    assert main([*words, "--workers", "1"]) == 0
    said = capsys.readouterr().out
    assert "for 0.1 % in x_e at 900 < z < 1600: " in said
    assert "against every l resolved: l resolved to n = 6 (of 6 tried, at n_max = 8)" in said
    assert "the outputs end at z = 900" in said


def test_whole_shells_of_a_setup_are_refused(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (folder / "shells.toml").write_text(GOOD.replace("n_max = 4", "n_max = 9\nresolve_l_to = 5"))
    assert main(["levels", "shells.toml", "--rungs", "4,5,6,8"]) == 2
    said = capsys.readouterr().err
    assert "hydrogen.resolve_l_to = 5: the study sets it itself" in said
    assert "--resolve 5" in said


def test_verdict_of_a_file_is_what_the_run_said() -> None:
    study = small_study()

    def ends(one: LevelStudy) -> tuple[float, float]:
        found, met = level_answer(one)
        assert met is None
        return found.low, found.high

    assert ends(study) == (200.0, 1600.0)
    asked = dataclasses.replace(study, question=Question(1e-2, 900.0, 1000.0))
    assert ends(asked) == (900.0, 1000.0)
    assert level_answer(asked)[0].within == 1e-2
    early = dataclasses.replace(study, redshift=np.linspace(3000.0, 2600.0, len(study.redshift)))
    assert ends(early) == (2600.0, 3000.0)


def test_requirement_of_a_file_opens_no_other_file(tmp_path: Path) -> None:
    rows = ("[response]", 'file = "/etc/hostname"', "limit_sigma = 0.1")
    study = dataclasses.replace(small_study(), question=Question(1e-3, 200.0, 1600.0, rows))
    with pytest.raises(InputError, match="response"):
        level_answer(study)
    rows = ("[observables]", '"x_e(900)" = 1e-3')
    study = dataclasses.replace(small_study(), question=Question(1e-3, 200.0, 1600.0, rows))
    levelnet.write(study, tmp_path / "study.h5")
    again = levelnet.read(tmp_path / "study.h5")
    assert again.question == study.question
    assert level_answer(again) == level_answer(study)


def test_interrupt_leaves_no_file(folder: Path) -> None:
    words = [sys.executable, "-m", "levelnet", "levels", "good.toml", "--rungs", "20,30,40,120"]
    cache = {"LEVELNET_CACHE": str(folder / "cache")}
    with subprocess.Popen(
        words, cwd=folder, env={**environment(), **cache}, stderr=subprocess.PIPE, text=True
    ) as running:
        # Rungs at work: a reduction has been kept.
        deadline = time.monotonic() + 60.0
        while not list((folder / "cache").glob("*.piece")) and time.monotonic() < deadline:
            time.sleep(0.05)
        os.kill(running.pid, signal.SIGINT)
        _, said = running.communicate(timeout=60)
    assert running.returncode == 130
    assert "no file was left half-written" in said
    assert {path.name for path in folder.iterdir()} == {"good.toml", "cache"}
