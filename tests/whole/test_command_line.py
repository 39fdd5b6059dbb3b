"""The command line from outside: exit codes, one-line complaints, whole files, JSON.

Most checks run :func:`levelnet.cli.main.main` in this process, which is what the console script
runs; what only a process has (imports, signals, a closed pipe) is run as one. What is expected here
is the project's own contract: exit codes 0, 1, 2 and 130, one line on stderr.
"""

from __future__ import annotations

import errno
import json
import os
import re
import signal
import subprocess
import sys
import time
from importlib.resources import files
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

import levelnet
from levelnet.cli.demo import demo_text
from levelnet.cli.main import main
from levelnet.errors import AccuracyWarning, SolveError
from levelnet.studies.requirement import load_requirement

ROOT = Path(__file__).resolve().parents[2]
GOOD = """\
title = "small"
[cosmology]
hubble_km_s_mpc = 68.0
baryon_density_h2 = 0.0224
matter_density_h2 = 0.142
helium_mass_fraction = 0.245
[hydrogen]
n_max = 4
[grid]
redshift_start = 1700.0
redshift_end = 200.0
n_redshifts = 30
"""


def environment() -> dict[str, str]:
    return {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONUNBUFFERED": "1"}


def process(*words: str, folder: Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "levelnet", *words],
        cwd=folder,
        env=environment(),
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )


def changed(old: str, new: str) -> str:
    assert old in GOOD
    return GOOD.replace(old, new)


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Work in an empty folder that holds one good setup."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "good.toml").write_text(GOOD)
    return tmp_path


@pytest.fixture(scope="module")
def solved(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Solve the small setup once, as a process, and return its file."""
    place = tmp_path_factory.mktemp("solved")
    (place / "good.toml").write_text(GOOD)
    done = process("solve", "good.toml", folder=place)
    assert done.returncode == 0, done.stderr
    assert "z_* (tau = 1)" in done.stdout
    assert sorted(p.name for p in place.iterdir()) == ["good.h5", "good.toml"]
    return place / "good.h5"


def complaint(capsys: pytest.CaptureFixture[str]) -> str:
    """Return the only line of stderr; stdout must be empty."""
    said = capsys.readouterr()
    assert said.out == ""
    lines = said.err.splitlines()
    assert len(lines) == 1, said.err
    assert lines[0].startswith("levelnet: error: ")
    assert "Traceback" not in lines[0]
    return lines[0]


BAD_SETUPS = {
    "unknown key": (changed("n_max = 4", "n_max = 4\nn_min = 1"), ["hydrogen.n_min", "unknown"]),
    "wrong type": (changed("n_max = 4", 'n_max = "4"'), ["hydrogen.n_max = '4'", "integer"]),
    "n_max 1": (changed("n_max = 4", "n_max = 1"), ["hydrogen.n_max = 1", "2"]),
    "n_max 10000": (
        changed("n_max = 4", "n_max = 10000"),
        ["n_max = 10000", " TB of memory", "2 to 1000"],
    ),
    "negative density": (
        changed("baryon_density_h2 = 0.0224", "baryon_density_h2 = -0.0224"),
        ["cosmology.baryon_density_h2 = -0.0224"],
    ),
    "grid upside down": (
        changed("redshift_end = 200.0", "redshift_end = 1800.0"),
        ["redshift_end = 1800", "below", "1700"],
    ),
    "cold": (
        changed("[hydrogen]", "cmb_temperature_k = 0.0\n[hydrogen]"),
        ["cosmology.cmb_temperature_k = 0.0", "greater than"],
    ),
    "not TOML": ("[cosmology\n", ["not valid TOML", "line 1"]),
    "three at once": (
        changed("n_max = 4", "n_max = 1\nnmax = 4").replace("0.0224", '"low"'),
        ["hydrogen.n_max", "hydrogen.nmax", "cosmology.baryon_density_h2"],
    ),
}


@pytest.mark.parametrize("name", BAD_SETUPS)
def test_bad_setup_is_one_line_and_writes_nothing(
    name: str, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    text, words = BAD_SETUPS[name]
    (folder / "bad.toml").write_text(text)
    before = sorted(folder.iterdir())
    assert main(["solve", "bad.toml"]) == 2
    line = complaint(capsys)
    assert "bad.toml" in line or name == "n_max 10000"
    for word in words:
        assert word in line
    assert sorted(folder.iterdir()) == before


def test_bad_setup_as_a_process(folder: Path) -> None:
    (folder / "bad.toml").write_text(BAD_SETUPS["three at once"][0])
    done = process("solve", "bad.toml", folder=folder)
    assert done.returncode == 2
    assert done.stdout == ""
    assert len(done.stderr.splitlines()) == 1
    assert "hydrogen.nmax: unknown key" in done.stderr


def test_dry_run_refuses_memory_too(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "big.toml").write_text(changed("n_max = 4", "n_max = 10000"))
    assert main(["solve", "big.toml", "--dry-run"]) == 2
    assert re.search(r"\d+(\.\d+)? TB of memory", complaint(capsys))


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (["solve"], "SETUP"),
        (["solve", "good.toml", "--frobnicate"], "--frobnicate"),
        (["solve", "good.toml", "--forc"], "--forc"),
        (["guess"], "guess"),
    ],
)
def test_bad_usage_is_one_line(
    words: list[str], expected: str, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    with pytest.raises(SystemExit) as ended:
        main(words)
    assert ended.value.code == 2
    assert expected in complaint(capsys)


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (["solve", "none.toml"], "none.toml: cannot be read"),
        (["solve", "good.toml", "-o", "none/a.h5"], "none"),
        (["solve", "good.toml", "-o", "good.toml", "--force"], "the file that is read"),
        (["solve", "good.toml", "-o", ".", "--force"], "not a plain file"),
        (["show", "none.h5"], "none.h5"),
        (["show", "good.toml"], "good.toml"),
        (["show", "good.toml", "--ascending"], "--csv"),
        (["show", "good.toml", "--redshift", "5"], "--plot"),
        (["show", "good.toml", "--json", "--csv", "-"], "--json"),
        (["demo", "--output", "good.toml"], "good.toml"),
        (["demo", "--output", "good.toml/x"], "good.toml"),
    ],
)
def test_bad_files_are_one_line(
    words: list[str], expected: str, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(words) == 2
    assert expected in complaint(capsys)
    assert [p.name for p in folder.iterdir()] == ["good.toml"]
    assert (folder / "good.toml").read_text() == GOOD


def test_existing_output_is_refused_before_the_work_starts(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    (folder / "good.h5").write_bytes(b"precious")
    monkeypatch.setattr("levelnet.history.run.solve", None)  # calling it would fail
    assert main(["solve", "good.toml"]) == 2
    line = complaint(capsys)
    assert "good.h5" in line
    assert "--force" in line
    assert (folder / "good.h5").read_bytes() == b"precious"


def test_foreign_and_damaged_files(
    solved: Path, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    with h5py.File("foreign.h5", "w") as file:
        file["x"] = np.arange(3)
    data = solved.read_bytes()
    Path("cut.h5").write_bytes(data[: len(data) // 2])
    Path("empty.h5").write_bytes(b"")
    for name in ("foreign.h5", "cut.h5", "empty.h5"):
        for more in ([], ["--plot"], ["--csv", "t.csv"]):
            assert main(["show", name, *more]) == 2
            assert name in complaint(capsys)
    assert not Path("t.csv").exists()
    assert not list(folder.glob("*figures"))


def test_solve_overwrites_only_with_force(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    Path("out.h5").write_bytes(b"old")
    assert main(["solve", "good.toml", "-o", "out.h5", "--force", "--json", "--no-cache"]) == 0
    values = json.loads(capsys.readouterr().out)
    assert values["ok"] is True
    assert values["file"] == "out.h5"
    assert 1000.0 < values["milestones"]["last_scattering_redshift"] < 1200.0
    shares = values["cumulative_channel_shares"]
    assert set(shares) == {"2s-1s", "2p-1s"}
    assert sum(shares.values()) == pytest.approx(1.0, abs=1e-12)
    history = levelnet.read("out.h5")
    samples = values["samples"]
    row = int(np.argmin(np.abs(history.redshift - samples["redshift"][0])))
    assert samples["free_electron_fraction"][0] == history.free_electron_fraction[row]


def test_options_of_solve_reach_the_engine(
    solved: Path, folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    seen: list[tuple[bool, bool]] = []

    def look(setup: Any, progress: Any = None, pieces: Any = None) -> object:
        seen.append((setup.accuracy.interpolate, pieces is not None))
        return levelnet.read(solved)

    monkeypatch.setattr("levelnet.history.run.solve", look)
    for words in ([], ["--direct"], ["--no-cache"]):
        assert main(["solve", "good.toml", "--force", *words]) == 0
    assert seen == [(True, True), (False, True), (True, False)]


def test_dry_run_writes_nothing(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["solve", "good.toml", "--dry-run", "--json"]) == 0
    values = json.loads(capsys.readouterr().out)
    assert values["memory_bytes"] > 0
    assert values["seconds"] > 0
    assert [p.name for p in folder.iterdir()] == ["good.toml"]


def test_show_prints_the_summary_of_solve(
    solved: Path, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["show", str(solved), "--json"]) == 0
    values = json.loads(capsys.readouterr().out)
    assert values["title"] == "small"
    assert values["written"] == []
    assert main(["show", str(solved)]) == 0
    text = capsys.readouterr().out
    peak = values["milestones"]["visibility_peak_redshift"]
    assert f"z = {peak:.2f}" in text


def test_show_csv_to_stdout_and_file(
    solved: Path, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["show", str(solved), "--csv", "-", "--ascending"]) == 0
    printed = capsys.readouterr().out
    assert main(["show", str(solved), "--csv", "t.csv", "--ascending"]) == 0
    assert Path("t.csv").read_text() == printed
    rows = np.loadtxt("t.csv", delimiter=",")
    assert np.all(np.diff(rows[:, 0]) > 0.0)
    capsys.readouterr()
    assert main(["show", str(solved), "--csv", "t.csv"]) == 2
    assert "t.csv" in complaint(capsys)
    assert main(["show", str(solved), "--csv", str(solved), "--force"]) == 2
    assert "the file that is read" in complaint(capsys)


def test_show_plot_writes_figures_once(
    solved: Path, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["show", str(solved), "--plot"]) == 0
    assert "good-figures" in capsys.readouterr().out
    names = sorted(p.name for p in Path("good-figures").iterdir())
    assert len(names) == 10
    assert {Path(name).suffix for name in names} == {".svg", ".pdf"}
    assert main(["show", str(solved), "--plot"]) == 2
    assert "--force" in complaint(capsys)
    assert main(["show", str(solved), "--plot", "f", "--redshift", "5000"]) == 2
    assert "redshift = 5000" in complaint(capsys)
    assert not Path("f").exists()


def test_tables_lists_sources(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["tables", "--json"]) == 0
    tables = json.loads(capsys.readouterr().out)
    assert tables
    for table in tables:
        assert table["authors"]
        assert re.fullmatch("[0-9a-f]{64}", table["sha256"])
    assert main(["tables"]) == 0
    text = capsys.readouterr().out
    assert all(table["name"] in text for table in tables)


def test_demo_says_that_it_is_invented(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    # A smaller atom, so that the test is short; the demo as it is runs under the benchmarks.
    small = files("levelnet.cli").joinpath("demo.toml").read_text().replace("= 30", "= 4")
    monkeypatch.setattr(
        "levelnet.cli.demo.demo_text",
        lambda name: small if name == "demo.toml" else demo_text(name),
    )
    monkeypatch.setattr("levelnet.report.style.render", lambda figure, kind: b"drawn")
    assert main(["demo"]) == 0
    assert "invented" in capsys.readouterr().out
    made = Path("levelnet-demo")
    assert (made / "demo.toml").read_text() == small
    assert levelnet.read(made / "demo.h5").setup == levelnet.load_setup(made / "demo.toml")
    assert len(list(made.glob("*.svg"))) == 5
    for name in ("demo.toml", "demo-requirement.toml", "demo-response.csv"):
        assert "INVENTED" in (made / name).read_text()
    asked = load_requirement(made / "demo-requirement.toml")
    assert asked.response is not None
    assert len(asked.response.rows.names) == 3
    assert main(["demo"]) == 2
    assert "--force" in complaint(capsys)


def test_failed_computation_is_exit_code_1(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    def fail(*arguments: object, **options: object) -> None:
        raise SolveError("the step size shrank\nto nothing at z = 900")

    monkeypatch.setattr("levelnet.history.run.solve", fail)
    assert main(["solve", "good.toml"]) == 1
    assert "shrank to nothing at z = 900" in complaint(capsys)
    assert [p.name for p in folder.iterdir()] == ["good.toml"]


def test_unexpected_error_has_no_traceback_unless_asked(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("levelnet.history.run.solve", lambda *a, **k: 1 / 0)
    assert main(["solve", "good.toml"]) == 1
    assert "internal: ZeroDivisionError" in complaint(capsys)
    with pytest.raises(ZeroDivisionError):
        main(["solve", "good.toml", "--debug"])


def test_disk_full_is_exit_code_1_and_leaves_nothing(
    solved: Path, folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(descriptor: int) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "fsync", full)
    monkeypatch.setattr("levelnet.report.style.render", lambda figure, kind: b"drawn")
    for words in (["solve", "good.toml"], ["show", str(solved), "--csv", "t.csv"]):
        assert main(words) == 1
        assert "No space left" in complaint(capsys)
    assert main(["show", str(solved), "--plot", "f"]) == 1
    assert "No space left" in complaint(capsys)
    assert [p.name for p in folder.rglob("*")] == ["good.toml"]


def test_disk_that_fills_up_leaves_no_figure_and_the_old_ones(
    solved: Path, folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    drawn = iter([b"old"] * 10 + [b"new"] * 30)
    monkeypatch.setattr("levelnet.report.style.render", lambda figure, kind: next(drawn))
    words = ["show", str(solved), "--plot", "a/f", "--force"]
    assert main(words) == 0
    assert {p.read_bytes() for p in (folder / "a/f").iterdir()} == {b"old"}
    written = 0

    def full(descriptor: int) -> None:
        nonlocal written
        written += 1
        if written % 5 == 0:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "fsync", full)
    capsys.readouterr()
    assert main(words) == 1
    assert "No space left" in complaint(capsys)
    assert {p.read_bytes() for p in (folder / "a/f").iterdir()} == {b"old"}
    assert main(["show", str(solved), "--plot", "b/f"]) == 1
    assert not (folder / "b").exists()


def test_warnings_are_one_line_each(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, solved: Path
) -> None:
    import warnings

    def warn(*arguments: object, **options: object) -> object:
        for _ in range(3):
            warnings.warn("depth 0.5\nbelow 1", AccuracyWarning, stacklevel=1)
        return levelnet.read(solved)

    monkeypatch.setattr("levelnet.history.run.solve", warn)
    assert main(["solve", "good.toml"]) == 0
    assert capsys.readouterr().err == "levelnet: warning: depth 0.5 below 1\n"


def test_result_that_is_not_ok_is_written_and_said(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, solved: Path
) -> None:
    import dataclasses

    from levelnet.errors import Outcome

    lost = dataclasses.replace(levelnet.read(solved), outcome=Outcome.QUASI_STEADY_LOST)
    monkeypatch.setattr("levelnet.history.run.solve", lambda *a, **k: lost)
    assert main(["solve", "good.toml", "--json"]) == 1
    said = capsys.readouterr()
    assert json.loads(said.out)["ok"] is False
    assert said.err.startswith("levelnet: QUASI_STEADY_LOST: ")
    assert len(said.err.splitlines()) == 1
    assert levelnet.read("good.h5").outcome is Outcome.QUASI_STEADY_LOST


def test_closed_pipe_is_silent(solved: Path, folder: Path) -> None:
    command = [sys.executable, "-m", "levelnet", "show", str(solved), "--csv", "-"]
    with subprocess.Popen(
        command, cwd=folder, env=environment(), stdout=subprocess.PIPE, stderr=subprocess.PIPE
    ) as running:
        assert running.stdout is not None
        assert running.stderr is not None
        running.stdout.close()  # as head does
        assert running.stderr.read() == b""
    assert running.returncode == 0


def test_interrupt_ends_with_130_and_leaves_nothing(folder: Path) -> None:
    # Large enough to be announced, and to last until the signal comes.
    (folder / "large.toml").write_text(changed("n_max = 4", "n_max = 300"))
    with subprocess.Popen(
        [sys.executable, "-m", "levelnet", "solve", "large.toml", "--no-cache"],
        cwd=folder,
        env=environment(),
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        # A runner in the background may ignore the signal, and children inherit that.
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),  # noqa: PLW1509
    ) as running:
        assert running.stderr is not None
        first = running.stderr.readline()
        assert first.startswith("levelnet: estimated: "), first
        running.send_signal(signal.SIGINT)
        out, rest = running.communicate(timeout=60)
    assert running.returncode == 130
    assert out == ""
    assert rest == "levelnet: interrupted; no file was left half-written\n"
    assert sorted(p.name for p in folder.iterdir()) == ["good.toml", "large.toml"]


def test_import_and_help_load_nothing_slow(folder: Path) -> None:
    slow = "numba h5py matplotlib sympy pydantic scipy numpy rich"
    check = (
        "import sys, levelnet; from levelnet.cli.main import build_parser; "
        "build_parser().format_help(); dir(levelnet); "
        f"print([m for m in {slow.split()} if m in sys.modules])"
    )
    done = subprocess.run(
        [sys.executable, "-c", check],
        env=environment(),
        cwd=folder,
        capture_output=True,
        text=True,
        check=True,
    )
    assert done.stdout == "[]\n"
    assert process("--version", folder=folder).stdout == f"levelnet {levelnet.__version__}\n"


def test_every_public_name_can_be_imported() -> None:
    for name in levelnet.__all__:
        assert getattr(levelnet, name) is not None
    with pytest.raises(AttributeError, match="no_such_name"):
        _ = levelnet.no_such_name


@pytest.fixture(scope="module")
def distilled(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Distil the small setup once, without a certificate, and return the table's file."""
    place = tmp_path_factory.mktemp("distilled")
    (place / "good.toml").write_text(GOOD)
    words = ["--no-certificate", "--workers", "1", "--tolerance", "1e-6", "--quiet"]
    assert main(["distill", str(place / "good.toml"), "-o", str(place / "t.h5"), *words]) == 0
    return place / "t.h5"


def test_distill_exports_beside_the_table(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    words = ["--no-certificate", "--workers", "1", "--tolerance", "1e-5", "--json"]
    exports = ["--export", "c99", "--export", "fortran", "--export", "csv"]
    assert main(["distill", "good.toml", "-o", "my-table.h5", *words, *exports]) == 0
    values = json.loads(capsys.readouterr().out)
    files = ["my-table.h5", "my_table.h", "my_table.c", "my_table.f90", "my_table.csv"]
    assert values["written"] == files
    assert values["kept_levels"] == ["2s", "2p"]
    assert sorted(p.name for p in folder.iterdir()) == sorted(["good.toml", *files])
    # Nothing is written over, and the work does not even start.
    (folder / "my-table.h5").unlink()
    assert main(["distill", "good.toml", "-o", "my-table.h5", *words, *exports]) == 2
    line = complaint(capsys)
    assert "my_table.h: already exists" in line
    assert "--force" in line
    assert not (folder / "my-table.h5").exists()


def test_distill_in_two_processes_gives_the_same_bytes(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    words = ["--no-certificate", "--no-cache", "--tolerance", "1e-4"]
    assert main(["distill", "good.toml", "-o", "a.h5", "--workers", "1", *words]) == 0
    assert main(["distill", "good.toml", "-o", "b.h5", "--workers", "2", *words]) == 0
    assert Path("a.h5").read_bytes() == Path("b.h5").read_bytes()


def test_distill_keeps_what_is_asked(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    words = ["--no-certificate", "--workers", "1", "--tolerance", "1e-4", "--json"]
    assert main(["distill", "good.toml", "--kept", "spd3", *words]) == 0
    values = json.loads(capsys.readouterr().out)
    assert values["kept_levels"] == ["2s", "2p", "3s", "3p", "3d"]
    assert values["written"] == ["good-table.h5"]


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (["--kept", "2s,2q"], '"2q" is no level'),
        (["--kept", "2s,3p"], "(2, 1) is missing"),
        (["--kept", "2s,2p,9d"], "2 <= n <= 4"),
        (["--tolerance", "0"], "tolerance = 0"),
        (["--tolerance", "nan"], "tolerance = nan"),
        (["--workers", "0"], "--workers = 0"),
        (["-o", "good.toml", "--force"], "the file that is read"),
    ],
)
def test_bad_arguments_of_distill(
    words: list[str], expected: str, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["distill", "good.toml", "--workers", "1", *words]) == 2
    assert expected in complaint(capsys)
    assert [p.name for p in folder.iterdir()] == ["good.toml"]


def test_killed_distillation_goes_on_to_the_same_bytes(folder: Path) -> None:
    (folder / "big.toml").write_text(changed("n_max = 4", "n_max = 40"))
    words = ["distill", "big.toml", "--no-certificate", "--workers", "1", "--tolerance", "1e-4"]
    cache = folder / "pieces"
    given = {**environment(), "LEVELNET_CACHE": str(cache)}
    start = [sys.executable, "-m", "levelnet", *words]
    first = subprocess.Popen([*start, "-o", "a.h5"], cwd=folder, env=given)
    kept: list[Path] = []
    deadline = time.monotonic() + 60.0
    while time.monotonic() < deadline and first.poll() is None and len(kept) < 6:
        kept = list(cache.glob("*")) if cache.exists() else []
        time.sleep(0.01)
    first.kill()
    first.wait()
    assert kept
    assert not (folder / "a.h5").exists(), "ended before it could be killed"
    ages = {path: path.stat().st_mtime_ns for path in kept if path.exists()}
    subprocess.run([*start, "-o", "b.h5"], cwd=folder, env=given, check=True, capture_output=True)
    assert all(path.stat().st_mtime_ns == age for path, age in ages.items())
    fresh = [*start, "-o", "c.h5", "--no-cache"]
    subprocess.run(fresh, cwd=folder, env=environment(), check=True, capture_output=True)
    assert (folder / "b.h5").read_bytes() == (folder / "c.h5").read_bytes()


def test_history_from_a_table(
    distilled: Path, solved: Path, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["history", str(distilled), "--setup", "good.toml", "-o", "h.csv", "--json"]) == 0
    values = json.loads(capsys.readouterr().out)
    assert values["ok"] is True
    assert values["written"] == ["h.csv"]
    full = levelnet.read(solved)
    found = np.array(values["history"]["free_electron_fraction"])
    assert np.max(np.abs(found / full.free_electron_fraction - 1.0)) < 1e-5
    assert np.loadtxt("h.csv", delimiter=",").shape == (30, 6)
    assert main(["history", str(distilled), "-o", "h.h5"]) == 0
    assert len(levelnet.read("h.h5").redshift) == 2000
    text = capsys.readouterr().out
    assert "z_* (tau = 1)" in text
    assert main(["show", "h.h5"]) == 0
    assert "x_e" in capsys.readouterr().out


def test_history_of_other_parameters(
    distilled: Path, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    words = ["history", str(distilled), "--redshifts", "1100", "900", "--json"]
    found = []
    for more in ([], ["--baryon-density-h2", "0.03"], ["--fine-structure-change", "0.01"]):
        assert main([*words, *more]) == 0
        given = json.loads(capsys.readouterr().out)["history"]
        assert given["redshift"] == [1100.0, 900.0]
        found.append(given["free_electron_fraction"][0])
    # More baryons recombine sooner; a tighter atom recombines sooner.
    assert found[1] < found[0]
    assert found[2] < found[0]
    assert main(["history", str(distilled), "--redshifts", "1100", "900", "-o", "-"]) == 0
    printed = capsys.readouterr().out
    rows = np.loadtxt(printed.splitlines(), delimiter=",")
    assert rows[0, 1] == found[0]


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (["--redshifts", "9000", "100"], "outside the table; it holds 27.5 to 9000 K"),
        (["--redshifts", "100", "1"], "outside the table"),
        (["--redshifts", "nan", "100"], "finite"),
        (["--baryon-density-h2", "0"], "baryon_density_h2 = 0.0"),
        (["--hubble-km-s-mpc", "-70"], "hubble_km_s_mpc = -70.0"),
        (["--setup", "good.toml", "--hubble-km-s-mpc", "70"], "--setup"),
        (["--setup", "none.toml"], "none.toml"),
        (["--setup", "other.toml"], "hydrogen.n_max = 5"),
        (["-o", "-", "--json"], "--json"),
        (["-o", "none/h.csv"], "none"),
    ],
)
def test_bad_arguments_of_history(
    words: list[str],
    expected: str,
    distilled: Path,
    folder: Path,
    capsys: pytest.CaptureFixture[str],
) -> None:
    (folder / "other.toml").write_text(changed("n_max = 4", "n_max = 5"))
    assert main(["history", str(distilled), *words]) == 2
    assert expected in complaint(capsys)
    assert sorted(p.name for p in folder.iterdir()) == ["good.toml", "other.toml"]


def test_what_is_no_table_is_refused(
    distilled: Path, solved: Path, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["history", str(solved)]) == 2
    assert "holds a history, not a table" in complaint(capsys)
    data = distilled.read_bytes()
    Path("cut.h5").write_bytes(data[: len(data) // 2])
    with h5py.File("foreign.h5", "w") as file:
        file["x"] = np.arange(3)
    for name in ("cut.h5", "foreign.h5", "none.h5", "good.toml"):
        for command in ("history", "show"):
            assert main([command, name]) == 2
            assert name in complaint(capsys)


def test_show_table(
    distilled: Path, solved: Path, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["show", str(distilled), "--json"]) == 0
    values = json.loads(capsys.readouterr().out)
    assert values["radiation_temperature_range_k"] == pytest.approx([27.5, 9000.0])
    assert values["certificate"] is None
    table = str(folder / "t.h5")
    Path(table).write_bytes(distilled.read_bytes())
    assert main(["show", table, "--plot", "figures", "--export", "c99"]) == 0
    assert "2s, 2p" in capsys.readouterr().out
    assert sorted(p.name for p in Path("figures").iterdir()) == ["rates.pdf", "rates.svg"]
    assert Path("t.c").exists()
    for words, expected in (
        (["--csv", "x.csv"], "--export csv"),
        (["--redshift", "1000", "--plot"], "--redshift"),
        (["--export", "c99"], "already exists"),
    ):
        assert main(["show", table, *words]) == 2
        assert expected in complaint(capsys)
    assert main(["show", str(solved), "--export", "c99"]) == 2
    assert "holds a history" in complaint(capsys)
