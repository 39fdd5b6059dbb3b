"""Commands killed at random moments: no damaged file, no lost piece, the same bytes in the end.

The expected bytes are those of an undisturbed run, made here. Commands are forked from this warm
process, so that the moments fall into the work and the writing, not into the start of Python.
"""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import time
import warnings
from pathlib import Path

import pytest

from levelnet.cli.main import main
from levelnet.history import field, march
from tests.whole.test_command_line import GOOD, environment

KILLS = 7
SMALL = GOOD.replace("n_max = 4", "n_max = 6").replace("n_redshifts = 30", "n_redshifts = 12")
COARSE = "[lines.transfer]\nfrequency_step = 1e-3\n[accuracy]\nrelative = 1e-4\n"
FIELD = SMALL.replace("200.0", "900.0") + '[lines]\nhydrogen = "transfer"\n' + COARSE
SWEEP = SMALL.replace("[", "[setup.") + (
    "[combine]\nhydrogen.n_max = [4, 5]\ncosmology.curvature_density = [0.0, 0.01]\n"
)
COMMANDS = {
    "solve": "solve good.toml",
    "levels": "levels good.toml --rungs 4,5,6,7 --between 300 1600 --workers 1",
    "escape": "escape field.toml --between 1000 1600 --workers 1",
    "distill": "distill good.toml --tolerance 1e-3 --workers 1 --no-certificate --export csv",
    "weigh": "weigh good.toml --of x_e(900) --band 0 --output weights.h5 --plot figures",
    "sweep": "sweep sweep.toml --jobs 1",
    "history": "history table.h5 --output history.h5",
    "show": "show good.h5 --csv --plot figures",
}
NEEDED = {"history": "distill good.toml --output table.h5 --tolerance 1e-3 --no-certificate "
          "--workers 1", "show": "solve good.toml"}  # fmt: skip


def prepared(folder: Path) -> Path:
    folder.mkdir()
    for name, text in (("good", SMALL), ("field", FIELD), ("sweep", SWEEP)):
        (folder / f"{name}.toml").write_text(text)
    return folder


def started(words: str, folder: Path) -> int:
    """Run a command in a child of this process; give its number."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # newer Pythons warn of forks beside threads
        child = os.fork()
    if child:
        return child
    try:  # no exception may lead back into pytest
        sink = os.open(os.devnull, os.O_WRONLY)
        os.dup2(sink, 1)
        os.dup2(sink, 2)
        os.chdir(folder)
        os.environ["LEVELNET_CACHE"] = str(folder / "cache")
        os._exit(main([*words.split(), "--quiet"]))
    finally:
        os._exit(99)


def ended(child: int) -> int:
    """Wait for a child; its exit code, or minus the signal that ended it."""
    return os.waitstatus_to_exitcode(os.waitpid(child, 0)[1])


def results(folder: Path) -> dict[str, bytes]:
    """Everything that stands for a result: no pieces, and no temporary files."""
    return {
        str(path.relative_to(folder)): path.read_bytes()
        for path in folder.rglob("*")
        if path.is_file() and path.suffix not in {".toml", ".piece", ".piece-part", ".part"}
    }


def pieces(folder: Path) -> dict[Path, int]:
    return {path: path.stat().st_mtime_ns for path in folder.rglob("*.piece")}


@pytest.mark.slow
@pytest.mark.parametrize("command", COMMANDS)
def test_kills_at_random_moments(command: str, tmp_path: Path) -> None:
    words, moments = COMMANDS[command], random.Random(f"levelnet {command} 1")
    whole, torn = prepared(tmp_path / "whole"), prepared(tmp_path / "torn")
    for folder in (whole, torn):
        if command in NEEDED:
            assert ended(started(NEEDED[command], folder)) == 0
    before = results(whole)
    begin = time.monotonic()
    assert ended(started(words, whole)) == 0
    window = time.monotonic() - begin
    expected = results(whole)
    assert len(expected) > len(before)
    kills, known = 0, dict[Path, int]()
    while kills < KILLS:
        child = started(words, torn)
        begin = time.monotonic()
        time.sleep(moments.uniform(0.0, window))
        os.kill(child, signal.SIGKILL)
        code = ended(child)
        assert code in {-signal.SIGKILL, 0}
        kills += code != 0
        found = results(torn)
        # What is there is whole: the work of this command, or nothing of it.
        assert all(found[name] == expected[name] for name in found)
        there = pieces(torn)
        assert known.items() <= there.items()
        known = there
        if code == 0:  # pieces made it fast: the next moments fall closer together
            window = min(window, time.monotonic() - begin)
        for name in found.keys() - before.keys():
            (torn / name).unlink()
    assert ended(started(words, torn)) == 0
    assert results(torn) == expected
    # A damaged piece would have been computed again and replaced.
    assert known.items() <= pieces(torn).items()
    assert not list(torn.glob("*.part"))


@pytest.mark.slow
def test_a_march_killed_between_its_stretches_goes_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Short stretches instead of a long march; each kill comes when one or two more are kept."""
    monkeypatch.setattr(field, "_LONG_S", 0.0)
    monkeypatch.setattr(march, "_STRETCH_S", 0.08)
    fine = FIELD.replace("frequency_step = 1e-3", "frequency_step = 2e-4")
    whole, torn = (prepared(tmp_path / name) for name in ("whole", "torn"))
    for folder in (whole, torn):
        (folder / "fine.toml").write_text(fine)
    # The reductions are there already: what comes next are stretches.
    assert ended(started("solve field.toml --output first.h5", torn)) == 0
    assert ended(started("solve fine.toml", whole)) == 0
    expected, known = results(whole), pieces(torn)
    for kills in range(4):
        child = started("solve fine.toml", torn)
        deadline = time.monotonic() + 100.0
        while len(pieces(torn)) < len(known) + 1 + kills % 2 and time.monotonic() < deadline:
            time.sleep(0.002)
        os.kill(child, signal.SIGKILL)
        assert ended(child) == -signal.SIGKILL
        there = pieces(torn)
        # None is written a second time: each run went on where the last one was.
        assert known.items() < there.items()
        known = there
    assert not (torn / "fine.h5").exists()
    assert ended(started("solve fine.toml", torn)) == 0
    assert (torn / "fine.h5").read_bytes() == expected["fine.h5"]
    assert known.items() < pieces(torn).items()


@pytest.mark.parametrize(
    "command",
    [
        "levels",
        *(pytest.param(one, marks=pytest.mark.slow) for one in ("solve", "sweep", "distill")),
    ],
)
def test_sigterm_ends_a_command_in_order(command: str, tmp_path: Path) -> None:
    folder = prepared(tmp_path / "work")
    for path in folder.glob("*.toml"):
        path.write_text(path.read_text().replace("n_max = 6", "n_max = 150"))
    given = (
        COMMANDS[command].replace("4,5,6,7", "20,30,40,150").replace("--workers 1", "--workers 2")
    )
    words = given.replace("--jobs 1", "--jobs 2 --cases kept").split()
    (folder / "sweep.toml").write_text(SWEEP.replace("[4, 5]", "[150, 151]"))
    cache = {"LEVELNET_CACHE": str(folder / "cache")}
    with subprocess.Popen(
        [sys.executable, "-m", "levelnet", *words],
        cwd=folder,
        env={**environment(), **cache},
        stderr=subprocess.PIPE,
        text=True,
    ) as running:
        deadline = time.monotonic() + 100.0
        while not list((folder / "cache").glob("*.piece")) and time.monotonic() < deadline:
            assert running.poll() is None
            time.sleep(0.05)
        sent = time.monotonic()
        running.send_signal(signal.SIGTERM)
        _, said = running.communicate(timeout=60)
    assert running.returncode == 143
    assert "terminated; no file was left half-written" in said
    assert "Traceback" not in said
    # Workers are not waited for until their tasks are done, and none is left behind.
    assert time.monotonic() - sent < 20.0
    assert not list(folder.rglob("*.part")) and not list(folder.glob("*.h5"))
