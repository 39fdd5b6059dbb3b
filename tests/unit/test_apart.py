"""The process that reads HDF5: whatever becomes of it, the one that asked goes on."""

from __future__ import annotations

import os
import signal
import sys
from pathlib import Path
from typing import Any

import pytest

from levelnet.errors import FileFormatError
from levelnet.store import apart, read, write
from levelnet.store import reader_process as process
from tests.invented_history import invented_history


@pytest.fixture
def stored(tmp_path: Path) -> Path:
    write(invented_history(), tmp_path / "h.h5")
    return tmp_path / "h.h5"


@pytest.fixture
def kept(monkeypatch: pytest.MonkeyPatch) -> Any:
    """Give this test a process of its own, ended with it."""
    one = apart._Kept()
    monkeypatch.setattr(apart, "_KEPT", one)
    yield one
    one.end()


def answering(monkeypatch: pytest.MonkeyPatch, program: str) -> None:
    """Let another program stand for the reader: it has read the two lines of its start."""
    start = "import json, os, signal, sys, time; sys.stdin.readline(); sys.stdin.readline()\n"
    say = "say = lambda what: print(json.dumps(what), flush=True)\nsys.stdin.readline()\n"
    monkeypatch.setattr(apart, "_PROGRAM", start + say + program)


@pytest.mark.parametrize(
    ("program", "reason"),
    [
        ("os.abort()", "HDF5 does not survive reading it"),
        ("os.kill(os.getpid(), signal.SIGPROF)", "HDF5 does not come to an end over it"),
        ("sys.stdout.write('{'); sys.stdout.flush()", "HDF5 does not survive"),
        ("say({'damage': 'odd \\x1b[2J\\n thing'})", r"damaged: odd \?\[2J thing"),
        ("say({'foreign': 'of another trade'})", "h5: of another trade"),
        (
            "say({'variable': 'a', 'dimensions': [], 'attributes': {}, 'type': '<f8',"
            " 'shape': [1 << 40]})",
            "a declares 8796093022208 bytes, too many for such a file",
        ),
        (
            "say({'variable': 'a', 'dimensions': [], 'attributes': {}, 'type': '<f8',"
            " 'shape': [(1 << 26) + 1]})",
            "a declares 536870920 bytes, too many for such a file",
        ),
        (
            "say({'variable': 'a', 'dimensions': [], 'attributes': {}, 'type': '<f8',"
            " 'shape': [9]}); say({'bytes': 72}); sys.stdout.write('x' * 71)",
            "HDF5 does not survive",
        ),
    ],
)
def test_bad_ends_are_one_line_and_the_next_file_is_read(
    program: str, reason: str, stored: Path, kept: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    with monkeypatch.context() as other:
        answering(other, program)
        with pytest.raises(FileFormatError, match=reason) as caught:
            read(stored)
        assert str(caught.value).startswith(f"{stored}: ")
        assert str(caught.value).isprintable()
    kept.end()
    assert read(stored).setup == invented_history().setup


def test_one_process_for_many_files_and_another_after_its_death(stored: Path, kept: Any) -> None:
    read(stored)
    first = kept._process._process
    read(stored)
    assert kept._process._process is first
    first.kill()
    first.wait()
    read(stored)
    assert kept._process._process is not first


def test_complaint_leaves_the_process_alive(stored: Path, kept: Any) -> None:
    read(stored)
    first = kept._process
    with pytest.raises(apart.Damage, match="replaced while it was read"):
        apart.load_apart(stored, [0, 0, 0, 0])
    read(stored)
    assert kept._process is first


def test_interrupt_in_an_answer_ends_the_process(
    stored: Path, kept: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    def interrupted(*_: object) -> None:
        raise KeyboardInterrupt

    with monkeypatch.context() as other:
        other.setattr(apart._Process, "_stored", interrupted)
        with pytest.raises(KeyboardInterrupt):
            read(stored)
    assert kept._process is None  # what it still had to say is no answer to the next question
    assert read(stored).setup == invented_history().setup


@pytest.mark.filterwarnings("ignore:.*fork.*:DeprecationWarning")
def test_copy_by_fork_makes_its_own_process(stored: Path) -> None:
    read(stored)
    child = os.fork()
    if child == 0:
        try:
            mine = read(stored)
            os._exit(0 if mine.setup == invented_history().setup else 1)
        except BaseException:
            os._exit(2)
    assert os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) == 0
    assert read(stored).setup == invented_history().setup


def test_no_interpreter_is_one_line(
    stored: Path, kept: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(sys, "executable", str(stored.parent / "nothing"))
    with pytest.raises(FileFormatError, match="no process can be started for HDF5: No such file"):
        read(stored)


def test_time_and_memory_of_the_process_are_limited(stored: Path, kept: Any) -> None:
    read(stored)
    limits = Path(f"/proc/{kept._process._process.pid}/limits").read_text()
    found = {line[:26].strip(): line[26:].split()[0] for line in limits.splitlines()[1:]}
    assert int(found["Max address space"]) == (1 << 30) + 2 * stored.stat().st_size
    assert found["Max core file size"] == "0"


@pytest.mark.filterwarnings("ignore:.*fork.*:DeprecationWarning")
def test_alarm_kills_what_does_not_come_to_an_end() -> None:
    child = os.fork()
    if child == 0:
        process._alarm(0.05)
        while True:
            pass
    assert os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) == -signal.SIGPROF
