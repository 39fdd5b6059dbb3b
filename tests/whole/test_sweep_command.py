"""``levelnet sweep`` from outside: one file, shards, a rerun, failures, one-line complaints.

What is expected is the project's own contract, as in test_command_line.py.
"""

from __future__ import annotations

import gc
import json
import sys
from pathlib import Path

import pytest

import levelnet
from levelnet.cli import scheduler
from levelnet.cli.main import main
from levelnet.studies.sweep_record import Sweep
from tests.whole.test_command_line import GOOD

BASE = GOOD.replace('title = "small"\n', 'title = "invented"\n').replace("[", "[setup.")
SMALL = BASE.replace("n_redshifts = 30", "n_redshifts = 8").replace("200.0", "700.0")
SWEEP = SMALL + "[together]\nhydrogen.n_max = [4, 5, 4]\naccuracy.max_steps = [5000, 5000, 10]\n"


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Work in an empty folder that holds a sweep of three cases, one of which fails."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "sweep.toml").write_text(SWEEP)
    return tmp_path


def run(*words: str) -> int:
    jobs = () if "--jobs" in words or "--scheduler" in words else ("--jobs", "1")
    return main(["sweep", "sweep.toml", *words, *jobs])


def test_shards_and_merge_make_the_file_of_one_run(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run("--output", "one.h5", "--cases", "one") == 1
    said = capsys.readouterr()
    assert "3: 2 CONVERGED, 1 STEP_LIMIT" in said.out
    assert "done now              3 computed, 0 were there" in said.out
    assert (
        "not ok                case 2 (hydrogen.n_max = 4, accuracy.max_steps = 10): the step"
        in (said.out)
    )
    assert said.err == "levelnet: 1 of 3 cases are not ok; the result says why\n"
    assert run("--shard", "1/2", "--cases", "some") == 1
    assert "2 of 3, 1 of them not ok" in capsys.readouterr().out
    assert not (folder / "sweep.h5").exists()
    assert run("--merge", "--cases", "some") == 1
    said = capsys.readouterr()
    assert "some: 1 of 3 cases are not computed yet, the first is case 1 (hydrogen" in said.err
    assert not (folder / "sweep.h5").exists()
    assert run("--shard", "2/2", "--cases", "some", "--json") == 0
    assert json.loads(capsys.readouterr().out)["computed"] == 1
    assert run("--merge", "--cases", "some", "--output", "two.h5") == 1
    assert (folder / "one.h5").read_bytes() == (folder / "two.h5").read_bytes()
    # A rerun computes nothing, and makes the same file.
    capsys.readouterr()
    assert run("--cases", "some", "--output", "three.h5", "--json") == 1
    shown = json.loads(capsys.readouterr().out)
    assert (shown["computed"], shown["found"]) == (0, 3)
    assert (folder / "three.h5").read_bytes() == (folder / "one.h5").read_bytes()
    assert main(["show", "three.h5", "--json"]) == 0
    shown = json.loads(capsys.readouterr().out)
    assert shown["outcomes"] == {"CONVERGED": 2, "STEP_LIMIT": 1}
    assert shown["not_ok"][0]["case"] == 2
    found = levelnet.read("three.h5")
    assert isinstance(found, Sweep) and found.title == "invented"


def test_plan_says_what_is_left_and_writes_nothing(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run("--plan", "--json") == 0
    plan = json.loads(capsys.readouterr().out)
    assert plan["runs"] == 3 and plan["workers"] == 1
    assert plan["what"] == "sweep of 3 cases, 0 of them there already,"
    assert {path.name for path in folder.iterdir()} == {"sweep.toml"}
    assert run("--shard", "3/3") == 1
    capsys.readouterr()
    assert run("--plan") == 0
    assert "sweep of 3 cases, 1 of them there already, is valid" in capsys.readouterr().out
    for target in ("missing/x.h5", "sweep.toml"):
        assert run("--plan", "--output", target) == 2
    (folder / "sweep.h5").write_text("mine")
    assert run("--plan") == 2
    (folder / "sweep.h5").unlink()
    assert run("--shard", "4/4") == 0  # a shard may have nothing to do
    (folder / "sweep.toml").write_text(SWEEP.replace("[4, 5, 4]", "[4, 900, 4]"))
    with pytest.MonkeyPatch.context() as patch:
        from levelnet.history import cost

        patch.setattr(cost, "available_memory_bytes", lambda: 5e8)
        capsys.readouterr()
        for words in (("--plan",), ()):
            assert run(*words) == 2
            said = capsys.readouterr().err
            assert "case 1 (hydrogen.n_max = 900, accuracy.max_steps = 5000): hydrogen" in said
            assert "GB of memory needed, 500 MB available" in said


@pytest.mark.parametrize(
    ("words", "reason"),
    [
        (("--shard", "0/3"), "shard 0/3: the number must be 1 to 3"),
        (("--shard", "x"), "--shard x: write the number and the count, such as 3/16"),
        (("--shard", "1/2", "--merge"), "not allowed with argument"),
        (("--jobs", "0"), "--jobs = 0: allowed are 1 to 1024"),
        (("--shard", "1/0"), "shard 1/0: the count of shards must be 1 to 1000000"),
        (
            ("--shard", "1/1000000000000"),
            "shard 1/1000000000000: the count of shards must be 1 to 1000000",
        ),
        (("--depth-to", "-1"), "--depth-to -1: allowed are redshifts above 0, to 10000"),
        (("--setup", "sweep.toml"), "--setup goes with CSV files only"),
        (("--output", "sweep.toml", "--force"), "is the file that is read"),
        (("--cases", "sweep.toml"), "sweep.toml: cannot be made"),
        (("--merge",), "3 of 3 cases are not computed yet"),
    ],
)
def test_complaints_are_one_line(
    words: tuple[str, ...], reason: str, folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    try:
        code = run(*words)
    except SystemExit as stopped:  # the parser's own complaints
        code = int(str(stopped.code))
    said = capsys.readouterr().err
    assert code == (1 if words == ("--merge",) else 2)
    assert reason in said and said.count("\n") == 1
    assert {path.name for path in folder.iterdir()} == {"sweep.toml"}


def test_a_scheduler_that_is_not_there(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    with monkeypatch.context() as patch:
        patch.setitem(sys.modules, "distributed", None)
        assert run("--scheduler", "tcp://127.0.0.1:1") == 2
        assert "install levelnet[cluster]" in capsys.readouterr().err
    pytest.importorskip("distributed")
    monkeypatch.setattr(scheduler, "_ANSWER_S", 1.0)
    # The second needs certificates, and the library says so in a way of its own.
    for address in ("tcp://127.0.0.1:1", "tls://127.0.0.1:1"):
        assert run("--scheduler", address) == 2
        gc.collect()  # a client that was not closed complains as it is forgotten
        said = capsys.readouterr().err
        assert f"--scheduler {address}: no scheduler answers" in said and said.count("\n") == 1


@pytest.mark.parametrize(
    "address",
    ["nonsense", "host:8786", "tcp://host", "tcp://host:0", "tcp://host:70000", "http://host:80"],
)
@pytest.mark.parametrize("more", [(), ("--plan",)])
def test_an_address_that_is_none_is_refused_at_once(
    address: str, more: tuple[str, ...], folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run("--scheduler", address, *more) == 2
    gc.collect()
    said = capsys.readouterr().err
    assert f"--scheduler {address}: no address; write scheme://host:port" in said
    assert said.count("\n") == 1


@pytest.mark.filterwarnings("default")  # those of the library are its own
def test_a_scheduler_without_workers_is_said_and_not_waited_for_for_ever(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    distributed = pytest.importorskip("distributed")
    monkeypatch.setattr(scheduler, "_PATIENCE_S", 1.0)
    with distributed.LocalCluster(
        n_workers=0, dashboard_address=None, local_directory=folder / "dask"
    ) as cluster:
        address = cluster.scheduler_address
        assert run("--scheduler", address) == 1
    said = capsys.readouterr().err.splitlines()
    assert said == [
        f"levelnet: scheduler {address}: it has no workers; waiting 1 s for one",
        f"levelnet: error: sweep-cases: the scheduler {address} had no workers for 1 s; 0 of the 3 "
        "cases that were missing are computed and kept, a rerun does the others",
    ]
    assert not (folder / "sweep.h5").exists()
