"""Ladders of helium: how many of its levels matter, and which lines let a ladder converge."""

from __future__ import annotations

import json
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import levelnet
from levelnet.cli.main import main
from levelnet.errors import InputError
from levelnet.history.setup import Setup
from levelnet.pieces import MemoryPieces
from levelnet.studies import levels as module
from levelnet.studies.convergence import carry
from levelnet.studies.level_records import LevelStudy
from levelnet.studies.levels import check_ladder, level_study
from levelnet.studies.rung import rung_setup
from tests.small_runs import COSMOLOGY

_PIECES = MemoryPieces()
_REDSHIFTS = (3500.0, 2300.0, 2100.0, 1900.0, 1700.0)
RUNGS = (4, 5, 6, 8, 10, 12, 20)


def setup_of(helium: dict[str, Any] | None = None, **lines: Any) -> Setup:
    """H to n = 4 and He, He III in Saha equilibrium; the n_max of helium is not used."""
    chosen = {"n_max": 9, "helium_ion": "saha"} | (helium or {})
    grid = {"redshift_start": 3500.0, "redshift_end": 1600.0, "redshifts": (3500.0, 1900.0, 1600.0)}
    return Setup(COSMOLOGY, {"n_max": 4}, chosen, lines=lines, grid=grid)


# ---- what is refused


@pytest.mark.parametrize(
    ("setup", "rungs", "resolve", "text"),
    [
        (
            setup_of(helium_higher_lines="free"),
            (4, 5, 6, 8),
            (),
            'helium_higher_lines = "free": every rung would open further lines',
        ),
        (
            setup_of(helium_higher_lines="feedback"),
            (6, 8, 10, 12),
            (),
            "rungs = 6, 8, 10, 12: allowed for helium are 7 to 100",
        ),
        (setup_of(), (2, 4, 6, 8), (), "allowed for helium are 3 to 100"),
        (setup_of(), (4, 6, 8, 120), (), "allowed for helium are 3 to 100"),
        (setup_of(), (4, 6, 6, 8), (), "each must be larger than the one before"),
        (setup_of(), (4, 6, 8), (), "3 rungs"),
        (setup_of(), (4, 5, 6, 8), (5,), "whole shells are for hydrogen"),
        (setup_of(hydrogen="transfer"), (4, 5, 6, 8), (), "the study holds errors to 1e-8"),
    ],
)
def test_ladders_that_tell_nothing(
    setup: Setup, rungs: tuple[int, ...], resolve: tuple[int, ...], text: str
) -> None:
    with pytest.raises(InputError, match=text) as caught:
        check_ladder(setup, rungs, resolve, "helium")
    assert "\n" not in str(caught.value)


def test_a_ladder_of_helium_needs_helium() -> None:
    grid = {"redshift_start": 3500.0, "redshift_end": 1600.0}
    with pytest.raises(InputError, match=r"helium.n_max = 0: no helium recombines"):
        check_ladder(Setup(COSMOLOGY, {"n_max": 5}, grid=grid), (4, 5, 6, 8), (), "helium")
    small = Setup(COSMOLOGY, {"n_max": 3}, {"n_max": 4}, grid=grid)
    with pytest.raises(InputError, match=r"hydrogen.n_max = 3: the lowest allowed is 4"):
        check_ladder(small, (4, 5, 6, 8), (), "helium")


def test_one_rung_changes_helium_alone() -> None:
    one = rung_setup(setup_of(), 17, None, 1e-8, "helium")
    assert (one.helium.n_max, one.hydrogen.n_max, one.accuracy.relative) == (17, 4, 1e-8)
    assert one.helium.helium_ion == "saha"


@pytest.mark.parametrize(
    ("text", "words", "said"),
    [
        ("[helium]\nn_max = 0", (), "no helium recombines in this setup"),
        ("[helium]\nn_max = 4", (), "helium.n_max = 4: too low for a ladder"),
        ("[helium]\nn_max = 4", ("--rungs", "4,5,6,200"), "allowed for helium are 3 to 100"),
        ("[helium]\nn_max = 4", ("--rungs", "4,5,6,7", "--resolve", "4"), "whole shells are for"),
    ],
)
def test_wrong_command_is_one_line(
    text: str,
    words: tuple[str, ...],
    said: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    start = setup_of().to_toml().split("[helium]")[0]
    Path("he.toml").write_text(f"{start}\n{text}\n")
    assert main(["levels", "he.toml", "--atom", "helium", *words]) == 2
    lines = capsys.readouterr().err.strip().splitlines()
    assert len(lines) == 1
    assert said in lines[0]
    assert not list(tmp_path.glob("*.h5"))


# ---- what a ladder says


@lru_cache(maxsize=1)
def helium_study() -> LevelStudy:
    return level_study(setup_of(), RUNGS, atom="helium", pieces=_PIECES)


@pytest.fixture
def coarser(monkeypatch: pytest.MonkeyPatch) -> None:
    # A tenth of the time; errors of the rungs cancel in their ratios, and are measured.
    monkeypatch.setattr(module, "_RELATIVE", 1e-6)


@pytest.mark.slow
def test_longer_rung_lies_inside_the_bar(coarser: None) -> None:
    """Held out: n_max = 20, foreseen from rungs up to 12, at every redshift."""
    study = helium_study()
    assert study.atom == "helium"
    assert study.outcome.ok
    shorter = carry(
        study.rungs.n_max[:-1],
        np.log(study.rungs.free_electron_fraction[:-1]),
        study.noise.free_electron_fraction,
        float(RUNGS[-1]),
    )
    miss = np.log(study.rungs.free_electron_fraction[-1]) - shorter.value
    assert np.all(np.abs(miss) <= shorter.bar)
    low = study.redshift <= 2000.0
    assert np.all(shorter.fitted[low])
    assert np.all((shorter.exponent[low] > 1.3) & (shorter.exponent[low] < 2.0))


@pytest.mark.slow
def test_verdict_and_file(coarser: None, tmp_path: Path) -> None:
    from levelnet.cli.level_output import level_summary
    from levelnet.studies.answers import level_answer
    from levelnet.studies.verdict import verdict

    study = helium_study()
    found = verdict(study, 2e-5, 1600.0, 3500.0)
    assert found.n_max is not None
    assert 6 <= found.n_max <= 10
    said = level_summary(study, found)
    assert "for 0.002 % in x_e at 1600 < z < 3500: helium n_max = " in said
    assert "the ladder is that of helium; hydrogen has n_max = 4 on every rung" in said
    usual, _ = level_answer(study)
    assert (usual.low, usual.high) == (1600.0, 3500.0)
    levelnet.write(study, tmp_path / "he.h5")
    again = levelnet.read(tmp_path / "he.h5")
    assert isinstance(again, LevelStudy)
    assert again.atom == "helium"
    assert again.rungs.n_max.tolist() == list(RUNGS)


@pytest.mark.slow
def test_command_for_helium(
    coarser: None,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    Path("he.toml").write_text(setup_of().to_toml())
    words = ("levels", "he.toml", "--atom", "helium", "--rungs", "4,5,6,8", "--workers", "1")
    assert main([*words, "--json", "--plot", "figures"]) == 0
    said = json.loads(capsys.readouterr().out)
    assert said["atom"] == "helium"
    assert said["rungs"]["n_max"] == [4, 5, 6, 8]
    assert said["rungs"]["resolve_l_to"] == [4, 4, 4, 4]
    assert said["verdict"]["low"] == 1600.0
    assert Path("figures/levels.svg").is_file()
    assert main(["show", "he-levels.h5"]) == 0
    assert "helium n_max = 4, 5, 6, 8" in capsys.readouterr().out


# ---- which lines let a ladder converge


def ladder_of(higher: str, rungs: tuple[int, ...]) -> np.ndarray:
    """x_e over rungs and redshifts."""
    grid = {"redshift_start": 3500.0, "redshift_end": 1700.0, "redshifts": _REDSHIFTS}
    lines = {"helium_higher_lines": higher}
    if higher == "feedback":
        lines["helium"] = "sobolev_feedback"
    found = []
    for n in rungs:
        helium = {"n_max": n, "helium_ion": "saha"}
        setup = Setup(COSMOLOGY, {"n_max": 4}, helium, lines=lines, grid=grid)
        found.append(levelnet.solve(setup, pieces=_PIECES).free_electron_fraction)
    return np.array(found)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("higher", "rungs"), [("closed", (4, 6, 9, 13)), ("feedback", (7, 9, 13, 19))]
)
def test_closed_lines_and_feedback_converge(higher: str, rungs: tuple[int, ...]) -> None:
    """Law: what each further n does falls at least as 1/n^2.5, so that their sum ends."""
    electrons = ladder_of(higher, rungs)
    step = np.abs(np.diff(np.log(electrons[:, 1:]), axis=0))
    each = step / np.diff(rungs)[:, None]
    middle = np.sqrt(np.array(rungs[1:]) * np.array(rungs[:-1]))
    falls = -np.diff(np.log(each), axis=0) / np.diff(np.log(middle))[:, None]
    assert np.all(falls[-1] > 2.2)
    assert step[-1].max() < 1e-5
    limit = carry(np.array(rungs), np.log(electrons[:, 1:]), np.full(4, 1e-9))
    assert np.all(limit.fitted)


@pytest.mark.slow
def test_free_lines_never_converge() -> None:
    """Law: A P does not depend on n, so every line adds the same escape (Sobolev, thick lines)."""
    rungs = (6, 9, 13, 19)
    electrons = ladder_of("free", rungs)
    step = np.diff(np.log(electrons[:, 1:]), axis=0)
    each = step / np.diff(rungs)[:, None]
    # 2e-5 of x_e for each further line at z = 2100, and no less for the later ones.
    assert np.all(step < 0.0)
    assert -3.0e-5 < each[-1, 1] < -1.5e-5
    np.testing.assert_allclose(each[-1], each[-2], rtol=0.2)
    limit = carry(np.array(rungs), np.log(electrons[:, 1:]), np.full(4, 1e-9))
    assert not np.any(limit.fitted)
