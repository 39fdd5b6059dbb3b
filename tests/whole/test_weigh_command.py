"""``levelnet weigh`` and ``show`` of its file, from outside: JSON, tables, files, exit codes.

Most checks put an invented weighing in place of the engine, to see what the screens make of known
numbers; what is expected is the project's own contract. The last ones run the engine itself.
"""

from __future__ import annotations

import dataclasses
import json
import os
import re
import signal
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import levelnet
from levelnet.cli.main import main
from levelnet.cli.weigh import band_targets, default_targets
from levelnet.errors import InputError, Outcome, SolveError
from levelnet.escape.lines import Lines
from levelnet.studies.budget import load_uncertainties
from levelnet.studies.groups import top_transitions
from levelnet.studies.weigh_budget import budget_notes
from levelnet.studies.weighing import Weighing
from tests.invented_weighing import PARAMETERS, invented_weighing, with_helium

ROOT = Path(__file__).resolve().parents[2]
GOOD = """\
title = "the Tarnholt Array (invented)"
[cosmology]
hubble_km_s_mpc = 68.0
baryon_density_h2 = 0.0224
matter_density_h2 = 0.142
[hydrogen]
n_max = 5
[grid]
redshift_start = 1700.0
redshift_end = 150.0
"""
PROCESSES = {"two_photon", "bound_bound", "bound_free", "lyman_alpha", "escape", "compton"}


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Work in an empty folder that holds one good setup."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "good.toml").write_text(GOOD)
    return tmp_path


@pytest.fixture
def asked(monkeypatch: pytest.MonkeyPatch) -> list[dict[str, Any]]:
    """Put invented numbers in place of the engine; return what it was asked."""
    calls: list[dict[str, Any]] = []

    def engine(setup: Any, targets: Any, *, progress: Any = None, pieces: Any = None) -> Weighing:
        calls.append({"targets": tuple(targets), "pieces": pieces})
        progress("weighing rates", 0.5)
        return dataclasses.replace(invented_weighing(tuple(targets)), setup=setup)

    monkeypatch.setattr("levelnet.studies.weigh.weigh", engine)
    return calls


@pytest.fixture
def quick_drawing(monkeypatch: pytest.MonkeyPatch) -> None:
    """Leave the drawing itself to the tests of figures."""
    monkeypatch.setattr("levelnet.report.style.render", lambda figure, kind: b"drawn")


def complaint(capsys: pytest.CaptureFixture[str]) -> str:
    """Return the only line of stderr; stdout must be empty."""
    said = capsys.readouterr()
    assert said.out == ""
    assert len(said.err.splitlines()) == 1, said.err
    assert said.err.startswith("levelnet: error: ")
    return said.err


def numbers(capsys: pytest.CaptureFixture[str]) -> dict[str, Any]:
    values: dict[str, Any] = json.loads(capsys.readouterr().out)
    return values


def test_one_target_stands_at_the_top_level(
    folder: Path, asked: list[dict[str, Any]], capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["weigh", "good.toml", "--of", "x_e(900)", "--json", "--top", "3"]) == 0
    values = numbers(capsys)
    weighing = invented_weighing(asked[0]["targets"])
    assert values["value"] == weighing.value[0]
    assert values["unit"] == "1"
    assert set(values["processes"]) == PROCESSES
    assert values["processes"] == weighing.processes("x_e(900)")
    assert values["parameters"] == dict(zip(PARAMETERS, weighing.parameter[0], strict=True))
    tops = [(one["name"], one["weight"]) for one in values["top"]]
    assert tops == list(top_transitions(weighing, "x_e(900)", 3))
    (only,) = values["targets"]
    assert only == {key: values[key] for key in only}
    assert values["ok"] is True
    assert [path.name for path in folder.iterdir()] == ["good.toml"]


def test_several_targets_stand_in_a_list(
    folder: Path, asked: list[dict[str, Any]], capsys: pytest.CaptureFixture[str]
) -> None:
    words = ["--of", "z_*", "--of", "x_e(900)", "--of", "last_scattering_redshift"]
    assert main(["weigh", "good.toml", *words, "--json", "--band", "5"]) == 0
    values = numbers(capsys)
    assert "value" not in values
    names = [one["target"] for one in values["targets"]]
    assert names == ["last_scattering_redshift", "x_e(900)"]  # the same twice is once
    # The band is weighed with them, and only its errors are told.
    assert asked[0]["targets"][:2] == tuple(names)
    redshift = values["band"]["redshift"]
    assert redshift == sorted([150.0, 537.5, 900.0, 925.0, 1312.0, 1700.0])
    for one in values["targets"]:
        parts = [part["contribution"] for part in one["budget"]["contributions"]]
        assert parts == sorted(parts, key=abs, reverse=True)
        assert one["budget"]["sigma"] == pytest.approx(np.linalg.norm(parts), rel=1e-12)
        assert all(part["source"] for part in one["budget"]["contributions"])


def test_what_is_weighed_unless_told(
    folder: Path, asked: list[dict[str, Any]], capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["weigh", "good.toml", "--json", "--no-budget"]) == 0
    assert asked[0]["targets"] == ("last_scattering_redshift", "x_e(1100)", "x_e(200)")
    values = numbers(capsys)
    assert values["band"] is None
    assert [one["budget"] for one in values["targets"]] == [None] * 3
    (folder / "good.toml").write_text(GOOD.replace("150.0", "500.0"))
    assert main(["weigh", "good.toml", "--json", "--band", "0"]) == 0
    assert asked[1]["targets"] == ("last_scattering_redshift", "x_e(1100)")
    assert main(["weigh", "good.toml", "--json"]) == 0
    assert len(asked[2]["targets"]) == 2 + 24
    redshifts = [float(name[4:-1]) for name in asked[2]["targets"][2:]]
    assert (min(redshifts), max(redshifts)) == (500.0, 1700.0)


@pytest.mark.parametrize(
    ("start", "end", "expected"),
    [
        (1800.0, 800.0, ["z_*", "x_e(1100.0)"]),
        (1700.0, 801.0, ["x_e(1100.0)"]),
        (9000.0, 5000.0, ["x_e(7000.0)"]),
        (1000.0002, 1000.0001, ["x_e(1000.00015)"]),
        (0.5, 0.0, ["z_*"]),
    ],
)
def test_any_grid_has_something_to_weigh(start: float, end: float, expected: list[str]) -> None:
    cosmology = {"hubble_km_s_mpc": 68.0, "baryon_density_h2": 0.0224, "matter_density_h2": 0.142}
    grid = {"redshift_start": start, "redshift_end": end}
    setup = levelnet.Setup(cosmology=cosmology, hydrogen={"n_max": 3}, grid=grid)
    assert default_targets(setup) == expected
    band = [float(name[4:-1]) for name in band_targets(setup, 24)]
    assert (band[0], band[-1]) == (start, end)
    assert band == sorted(set(band), reverse=True)


def test_cache_is_left_alone_if_asked(folder: Path, asked: list[dict[str, Any]]) -> None:
    assert main(["weigh", "good.toml", "--quiet"]) == 0
    assert main(["weigh", "good.toml", "--quiet", "--no-cache"]) == 0
    assert [call["pieces"] is not None for call in asked] == [True, False]


def test_tables_on_screen(
    folder: Path, asked: list[dict[str, Any]], capsys: pytest.CaptureFixture[str]
) -> None:
    words = ["--of", "x_e(900)", "--of", "z_*", "--top", "4"]
    assert main(["weigh", "good.toml", *words]) == 0
    said = capsys.readouterr()
    assert said.err == ""
    text = said.out
    weighing = invented_weighing(asked[0]["targets"])
    assert text.startswith("the Tarnholt Array (invented)\n")
    for name, value in weighing.processes("x_e(900)").items():
        assert re.search(rf"^{name} +{re.escape(f'{value:+.4g}')} ", text, re.M)
    first = top_transitions(weighing, "x_e(900)", 1)[0]
    assert f"1  {first.name} {first.weight:+.4g} " in text
    assert len(re.findall(r"^4 ", text, re.M)) >= 2
    assert "error budget" in text
    assert re.search(r"^group +source of its uncertainty$", text, re.M)
    assert max(map(len, text.splitlines())) < 140


@pytest.mark.parametrize("count", [1, 4, 9])
def test_many_targets_stand_in_blocks(
    count: int, folder: Path, asked: list[dict[str, Any]], capsys: pytest.CaptureFixture[str]
) -> None:
    names = [f"x_e({200 + 100 * k})" for k in range(count)]
    words = [word for name in names for word in ("--of", name)]
    assert main(["weigh", "good.toml", *words, "--no-budget"]) == 0
    text = capsys.readouterr().out
    assert len(re.findall(r"^two_photon ", text, re.M)) == -(-count // 4)
    assert all(name in text for name in names)


@pytest.mark.usefixtures("quick_drawing")
def test_file_and_figures(
    folder: Path, asked: list[dict[str, Any]], capsys: pytest.CaptureFixture[str]
) -> None:
    words = ["weigh", "good.toml", "--of", "x_e(900)", "-o", "w.h5", "--plot", "figures", "--json"]
    assert main(words) == 0
    written = numbers(capsys)["written"]
    names = [f"figures/{k}.{e}" for k in ("map-x_e-900", "ranking-x_e-900", "error-band")
             for e in ("svg", "pdf")]  # fmt: skip
    assert written == ["w.h5", *names]
    assert all(Path(name).is_file() for name in written)
    # Only what was asked for has its derivatives in the file; the budget knows the band.
    weighing = levelnet.read("w.h5")
    assert weighing.targets == ("x_e(900)",)
    assert weighing.budget.targets == asked[0]["targets"]
    for more in (["-o", "w.h5"], ["--plot", "figures"]):
        assert main(["weigh", "good.toml", "--of", "x_e(900)", *more]) == 2
        assert "--force" in complaint(capsys)
    assert len(asked) == 1  # refused before any work
    assert main([*words, "--force"]) == 0


@pytest.mark.usefixtures("quick_drawing")
def test_show_says_the_same(
    folder: Path, asked: list[dict[str, Any]], capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["weigh", "good.toml", "--of", "x_e(900)", "-o", "w.h5", "--json"]) == 0
    first = numbers(capsys)
    assert main(["show", "w.h5", "--json", "--plot"]) == 0
    again = numbers(capsys)
    assert len(again["written"]) == 6
    assert Path("w-figures/map-x_e-900.svg").is_file()
    assert first["notes"][0] == "every number is INVENTED"
    assert any("of the default table are estimates" in note for note in first["notes"])
    for key in ("value", "processes", "parameters", "targets", "band", "top", "notes"):
        assert again[key] == first[key]
    assert main(["show", "w.h5"]) == 0
    shown = capsys.readouterr().out
    assert main(["weigh", "good.toml", "--of", "x_e(900)"]) == 0
    printed = capsys.readouterr().out
    assert shown.split("\nfile ")[0] == printed.split("\ntime ")[0]
    assert re.search(r"^note +every number is INVENTED$", shown, re.M)
    for words in (["--csv"], ["--redshift", "5", "--plot"], ["--export", "csv"]):
        assert main(["show", "w.h5", *words]) == 2
        assert "not for a weighing" in complaint(capsys)


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (["--of", "x_e(nine)"], r"x_e\(nine\).*redshift"),
        (["--of", "age"], '"age" is not known; known are x_e'),
        (["--of", "line(3d-2s)"], "no line"),
        (["--of", ""], '""'),
        (["--top", "0"], "--top = 0: allowed are 1 to 1000"),
        (["--band", "1"], "--band = 1: allowed are 0 and 2 to 1000"),
        (["--band", "-3"], "--band = -3"),
        (["--no-budget", "--band", "5"], "--band: is for the error budget"),
        (["--no-budget", "--uncertainties", "u.csv"], "--uncertainties: is for the error budget"),
        (["--uncertainties", "none.csv"], "none.csv: cannot be read"),
        (["--uncertainties", "good.toml"], r"good\.toml"),
        (["-o", "good.toml", "--force"], "is the file that is read"),
        (["-o", "nowhere/w.h5"], "nowhere"),
        (["--plot", "good.toml"], "is a file, not a folder"),
    ],
)
def test_bad_arguments_are_one_line(
    words: list[str],
    expected: str,
    folder: Path,
    asked: list[dict[str, Any]],
    capsys: pytest.CaptureFixture[str],
) -> None:
    assert main(["weigh", "good.toml", *words]) == 2
    assert re.search(expected, complaint(capsys))
    assert asked == []
    assert [path.name for path in folder.iterdir()] == ["good.toml"]


def test_usage_is_one_line(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for words in (["weigh"], ["weigh", "good.toml", "--top", "x"], ["weigh", "good.toml", "--ov"]):
        with pytest.raises(SystemExit) as ended:
            main(words)
        assert ended.value.code == 2
        complaint(capsys)
    assert main(["weigh", "none.toml"]) == 2
    assert "none.toml: cannot be read" in complaint(capsys)


@pytest.mark.parametrize(
    ("error", "code"),
    [(SolveError("no\nway"), 1), (InputError("target x_e(9): below the grid"), 2)],
)
def test_engine_that_fails(
    error: Exception,
    code: int,
    folder: Path,
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    def fail(*arguments: object, **options: object) -> None:
        raise error

    monkeypatch.setattr("levelnet.studies.weigh.weigh", fail)
    assert main(["weigh", "good.toml", "-o", "w.h5", "--plot", "figures"]) == code
    complaint(capsys)
    assert [path.name for path in folder.iterdir()] == ["good.toml"]


def test_outcome_that_is_not_ok_is_exit_code_1(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    def lost(setup: Any, targets: Any, **options: Any) -> Weighing:
        weighing = invented_weighing(tuple(targets))
        return dataclasses.replace(weighing, outcome=Outcome.QUASI_STEADY_LOST)

    monkeypatch.setattr("levelnet.studies.weigh.weigh", lost)
    assert main(["weigh", "good.toml", "--json"]) == 1
    said = capsys.readouterr()
    assert json.loads(said.out)["ok"] is False
    assert said.err.startswith("levelnet: QUASI_STEADY_LOST: ")


def test_disk_that_is_full_leaves_nothing(
    folder: Path,
    asked: list[dict[str, Any]],
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    def full(descriptor: int) -> None:
        raise OSError(28, os.strerror(28))

    monkeypatch.setattr(os, "fsync", full)
    assert main(["weigh", "good.toml", "-o", "w.h5"]) == 1
    assert "No space left" in complaint(capsys)
    assert [path.name for path in folder.iterdir()] == ["good.toml"]


# ---- with the engine


def test_interrupt_ends_with_130_and_leaves_nothing(folder: Path) -> None:
    # Large enough to be announced, and to last until the signal comes.
    (folder / "large.toml").write_text(GOOD.replace("n_max = 5", "n_max = 300"))
    words = ["weigh", "large.toml", "--no-cache", "-o", "w.h5", "--plot", "figures"]
    with subprocess.Popen(
        [sys.executable, "-m", "levelnet", *words],
        cwd=folder,
        env={**os.environ, "PYTHONPATH": str(ROOT), "PYTHONUNBUFFERED": "1"},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        # A runner in the background may ignore the signal, and children inherit that.
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),  # noqa: PLW1509
    ) as running:
        assert running.stderr is not None
        assert running.stderr.readline().startswith("levelnet: estimated: ")
        running.send_signal(signal.SIGINT)
        out, rest = running.communicate(timeout=60)
    assert running.returncode == 130
    assert out == ""
    assert rest == "levelnet: interrupted; no file was left half-written\n"
    assert sorted(path.name for path in folder.iterdir()) == ["good.toml", "large.toml"]


def test_notes_are_those_of_the_history_and_of_the_budget(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    text = GOOD.replace("150.0", "900.0").replace("n_max = 5", "n_max = 3")
    rate = '[rates]\nrows = ["bound_free,3,,1.02,,INVENTED laboratory"]\n'
    lines = '[lines]\nhydrogen = "closed"\ntwo_photon = "stimulated"\n'
    (folder / "good.toml").write_text(text + rate + lines)
    (folder / "own.csv").write_text(
        "process,upper,lower,sigma,group,source\ntwo_photon,,,0.01,,INVENTED\n"
    )
    history = list(levelnet.solve(levelnet.load_setup("good.toml")).notes)
    assert any("INVENTED laboratory" in note for note in history)
    words = ["weigh", "good.toml", "--of", "x_e(1000)", "--json", "--band", "0"]
    assert main([*words, "--uncertainties", "own.csv"]) == 0
    # But for the warnings, which a history reads off its own line figures.
    assert numbers(capsys)["notes"] == [one for one in history if not one.startswith("warning")]
    # The default table: what it holds, and what it does not.
    setup = levelnet.load_setup("good.toml")
    table = [one for one in load_uncertainties() if one.selector.process != "escape"]
    told = " | ".join(budget_notes(setup, table))
    assert "estimates" in told
    assert 'lines = "closed" is not in it' in told
    assert 'two_photon = "stimulated" is not in it' in told
    usual = dataclasses.replace(setup, lines=Lines())
    assert "rows on escape" in " | ".join(budget_notes(usual, load_uncertainties()))
    assert len(budget_notes(usual, table)) == 1


def test_derivatives_are_what_a_changed_setup_does(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Independent: central differences of whole runs of `solve`, by what a setup can change."""
    short = GOOD.replace("150.0", "800.0") + "redshifts = [1700.0, 900.0, 800.0]\n"
    (folder / "good.toml").write_text(short.replace("n_max = 5", "n_max = 4"))
    assert main(["weigh", "good.toml", "--of", "x_e(900)", "--json", "--no-budget"]) == 0
    values = numbers(capsys)
    setup = levelnet.load_setup("good.toml")

    def electrons(**cosmology: float) -> float:
        two_photon = cosmology.pop("two_photon", setup.hydrogen.two_photon_rate_per_s)
        changed = dataclasses.replace(
            setup,
            hydrogen=dataclasses.replace(setup.hydrogen, two_photon_rate_per_s=two_photon),
            cosmology=dataclasses.replace(setup.cosmology, **cosmology),
        )
        return float(np.log(levelnet.solve(changed).free_electron_fraction[1]))

    # Two histories, each good to 1e-6 (the default of accuracy.relative).
    assert np.log(values["value"]) == pytest.approx(electrons(), abs=2e-6)
    step = 0.02  # the error of a central difference is of order step^2, and 2e-6 / step
    for name, found, centre in (
        ("two_photon", values["processes"]["two_photon"], 8.2246),
        ("baryon_density_h2", values["parameters"]["baryon_density_h2"], 0.0224),
    ):
        high, low = (electrons(**{name: centre * np.exp(s * step)}) for s in (1, -1))
        assert found == pytest.approx((high - low) / (2.0 * step), rel=1e-3), name


def test_rates_of_helium_on_screen_and_in_json(
    folder: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def engine(setup: Any, targets: Any, **_: Any) -> Weighing:
        return with_helium(invented_weighing(tuple(targets)))

    monkeypatch.setattr("levelnet.studies.weigh.weigh", engine)
    words = ["weigh", "good.toml", "--of", "x_e(900)", "--no-budget"]
    assert main([*words, "--json", "--top", "3"]) == 0
    values, helium = numbers(capsys), with_helium(invented_weighing(("x_e(900)",))).helium
    assert helium is not None
    assert values["helium"]["processes"] == helium.processes(0)
    lines = values["helium"]["lines"]
    assert lines["2 3P1-1 1S"] == {"strength": helium.strength[0, 2], "escape": helium.escape[0, 2]}
    assert len(values["helium"]["top"]) == 3
    assert set(values["helium_ion"]["processes"]) == {
        *("two_photon", "bound_bound", "bound_free", "escape")
    }
    assert sum(values["helium"]["groups"].values()) == pytest.approx(
        helium.bound_bound[0].sum() + helium.bound_free[0].sum(), rel=1e-12
    )
    assert main([*words, "--output", "w.h5"]) == 0
    said = capsys.readouterr().out
    assert main(["show", "w.h5"]) == 0
    shown = capsys.readouterr().out
    for text in (
        "He I line_strength",
        "He II escape",
        "He I lines to 1 1S, by Einstein A",
        "2 3P1-",
    ):
        assert text in said
        assert text in shown
