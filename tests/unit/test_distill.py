from __future__ import annotations

import dataclasses
import os
import signal
import subprocess
import sys
import time
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from levelnet import EffectiveTable, distill
from levelnet.distilled import certificate, nodes
from levelnet.distilled.nodes import Atom, NodeSource, compute_node, process_pool
from levelnet.errors import InputError, SolveError
from levelnet.pieces import FolderPieces, MemoryPieces, content_key
from tests.small_runs import small_setup

SETUP = small_setup(5)
ATOM = Atom(5, "measured", ((2, 0), (2, 1)), 5)


@lru_cache
def plain() -> EffectiveTable:
    return distill(SETUP, certify=False)


def same_bits(one: EffectiveTable, other: EffectiveTable) -> bool:
    return all(
        getattr(one, name).tobytes() == getattr(other, name).tobytes()
        for name in ("equilibrium", "exchange", "departure", "barrier_k", "rise_k")
    )


def test_processes_and_threads_give_the_bits_of_one_process() -> None:
    with process_pool(2) as pool:
        assert same_bits(distill(SETUP, executor=pool, workers=2, certify=False), plain())
    with ThreadPoolExecutor(3) as threads:
        assert same_bits(distill(SETUP, executor=threads, certify=False), plain())


def test_pieces_are_used_and_give_the_same_bits(monkeypatch: pytest.MonkeyPatch) -> None:
    pieces = MemoryPieces()
    assert same_bits(distill(SETUP, pieces=pieces, certify=False), plain())

    def refuse(*_: Any) -> Any:
        raise AssertionError("computed again")

    monkeypatch.setattr(nodes, "compute_node", refuse)
    assert same_bits(distill(SETUP, pieces=pieces, certify=False), plain())


@pytest.mark.parametrize(
    "foreign",
    [
        {"node": np.zeros(3)},
        {"other": np.zeros(201)},
        {"node": np.full(201, np.nan)},
        {},
    ],
    ids=["shape", "name", "nan", "empty"],
)
def test_foreign_pieces_are_computed_again(foreign: dict[str, np.ndarray]) -> None:
    pieces = MemoryPieces()
    source = NodeSource(ATOM, None, pieces, lambda: None)
    truth = source.at(np.array([300.0]))
    key = content_key(ATOM.name, 300.0)
    assert pieces.get(key) is not None
    pieces.put(key, foreign)
    again = NodeSource(ATOM, None, pieces, lambda: None).at(np.array([300.0]))
    assert again.tobytes() == truth.tobytes()
    mended = pieces.get(key)
    assert mended is not None
    assert mended["node"].tobytes() == truth.tobytes()


def test_another_atom_has_other_pieces() -> None:
    names = {
        atom.name
        for atom in (
            ATOM,
            dataclasses.replace(ATOM, n_max=6),
            dataclasses.replace(ATOM, energies="nonrelativistic"),
            dataclasses.replace(ATOM, kept=((2, 0), (2, 1), (3, 1))),
            dataclasses.replace(ATOM, resolve_l_to=4),
        )
    }
    assert len(names) == 5


BUILD = """
import sys
from levelnet import distill
from levelnet.pieces import FolderPieces
from tests.small_runs import small_setup

if __name__ == "__main__":
    distill(small_setup(60), pieces=FolderPieces(sys.argv[1]), certify=False)
    print("finished")
"""


def test_killed_build_goes_on_to_the_same_bits(tmp_path: Path) -> None:
    folder, root = tmp_path / "pieces", Path(__file__).parents[2]
    env = os.environ | {"PYTHONPATH": str(root)}
    command = [sys.executable, "-c", BUILD, str(folder)]
    build = subprocess.Popen(command, env=env, stdout=subprocess.PIPE, cwd=root)
    give_up = time.monotonic() + 120.0
    while len(list(folder.glob("*.piece"))) < 5 and time.monotonic() < give_up:
        time.sleep(0.002)
    build.send_signal(signal.SIGKILL)
    said, _ = build.communicate(timeout=60)
    assert build.returncode == -signal.SIGKILL
    assert b"finished" not in said
    left = len(list(folder.glob("*.piece")))
    setup = small_setup(60)
    whole_pieces, computed = MemoryPieces(), 0
    whole = distill(setup, pieces=whole_pieces, certify=False)
    assert 5 <= left < len(whole_pieces._kept)

    real = nodes.compute_node

    def count(atom: Atom, temperature_k: float) -> dict[str, np.ndarray]:
        nonlocal computed
        computed += 1
        return real(atom, temperature_k)

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(nodes, "compute_node", count)
        resumed = distill(setup, pieces=FolderPieces(folder), certify=False)
    assert same_bits(resumed, whole)
    assert computed == len(whole_pieces._kept) - left


class Breaking(Executor):
    """Computes `good` tasks and then breaks, as a pool whose worker was killed."""

    def __init__(self, good: int) -> None:
        self.good = good

    def submit(self, function: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        if self.good > 0:
            self.good -= 1
            future.set_result(function(*args, **kwargs))
        else:
            future.set_exception(BrokenProcessPool("a worker died"))
        return future


def test_a_broken_pool_is_replaced(monkeypatch: pytest.MonkeyPatch) -> None:
    pools: list[int] = []

    def pool(workers: int) -> Executor:
        pools.append(workers)
        return ThreadPoolExecutor(workers)

    monkeypatch.setattr(nodes, "process_pool", pool)
    assert same_bits(distill(SETUP, executor=Breaking(7), workers=3, certify=False), plain())
    assert pools == [3]


def test_an_input_that_kills_every_worker_is_named(monkeypatch: pytest.MonkeyPatch) -> None:
    started = 0

    def pool(workers: int) -> Executor:
        nonlocal started
        started += 1
        return Breaking(0)

    monkeypatch.setattr(nodes, "process_pool", pool)
    source = NodeSource(ATOM, Breaking(1), None, lambda: None)
    with pytest.raises(SolveError, match=r"T_r = 400 K, n_max = 5: the worker process died 2"):
        source.at(np.array([300.0, 400.0]))
    assert list(source.known) == [300.0]  # what was done is kept
    assert started == 3  # one more round, then twice alone


def _die(atom: Atom, temperature_k: float) -> dict[str, np.ndarray]:
    os.kill(os.getpid(), signal.SIGKILL)
    return {}


@pytest.mark.slow
def test_a_worker_that_is_really_killed(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(nodes, "compute_node", _die)
    with process_pool(1) as pool, pytest.raises(SolveError, match="T_r = 300 K"):
        NodeSource(ATOM, pool, None, lambda: None).at(np.array([300.0]))


def test_an_error_in_a_worker_comes_through() -> None:
    with ThreadPoolExecutor(1) as pool, pytest.raises(InputError, match="kept levels"):
        bad = dataclasses.replace(ATOM, kept=((2, 0), (9, 1)))
        NodeSource(bad, pool, None, lambda: None).at(np.array([300.0]))


@pytest.mark.parametrize("kept", [((2, 0), (2, 1)), ((2, 0), (2, 1), (3, 0), (3, 1), (3, 2))])
def test_outline_has_the_constants_of_the_whole_atom(kept: tuple[tuple[int, int], ...]) -> None:
    _check_outline(Atom(20, "measured", kept, 20))
    _check_outline(Atom(20, "measured", kept, 3))


def _check_outline(atom: Atom) -> None:
    small, whole = nodes.outline(atom), nodes.prepared(atom)
    assert len(small[0].levels) < len(whole[0].levels)
    for name in ("lower", "upper", "barrier_k", "rise_k", "log_weight_ratio", "electron_k"):
        one, other = getattr(small[2], name), getattr(whole[2], name)
        assert np.asarray(one).tobytes() == np.asarray(other).tobytes(), name
    assert small[0].kept.energy_ev.tobytes() == whole[0].kept.energy_ev.tobytes()


def test_task_returns_named_arrays() -> None:
    node = compute_node(ATOM, 300.0)
    assert list(node) == ["node"]
    assert node["node"].shape == (1 + 2 * 100,)


def test_progress_is_told_in_order() -> None:
    told: list[tuple[str, float]] = []
    distill(SETUP, progress=lambda stage, share: told.append((stage, share)), certify=False)
    assert told[0] == ("atomic data", 0.0)
    assert told[-1] == ("done", 1.0)
    assert all(0.0 <= share <= 1.0 for _, share in told)
    reducing = [share for stage, share in told if stage == "reducing the network"]
    assert reducing == sorted(reducing)
    assert len(reducing) > 20


@pytest.mark.parametrize("tolerance", [1e-4, 1e-6, 1e-9, 1e-10])
def test_tolerance_asked_is_met(tolerance: float) -> None:
    table = distill(SETUP, tolerance=tolerance, certify=False)
    source = NodeSource(ATOM, None, None, lambda: None)
    _, names, errors = certificate.rate_errors(table, source, seed=11)
    assert len(names) == errors.shape[1] == 5
    assert np.abs(errors).max() < tolerance
    # Not by far more cells than it takes.
    assert np.abs(errors).max() > 1e-3 * tolerance


def test_narrow_ranges_make_a_small_table() -> None:
    table = distill(SETUP, radiation_range_k=(200.0, 5000.0), ratio_range=(0.1, 1.5), certify=False)
    assert table.radiation_range_k == pytest.approx((200.0, 5000.0))
    assert table.departure.size < plain().departure.size
    with pytest.raises(InputError, match=r"T_m/T_r = 0.05: outside the table; allowed: 0.1 to 1.5"):
        table.rates(1000.0, 50.0)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"tolerance": 1e-11}, r"tolerance = 1e-11: allowed are 1e-10 to 0.01"),
        ({"tolerance": 0.1}, "tolerance = 0.1"),
        ({"tolerance": float("nan")}, "tolerance = nan"),
        ({"radiation_range_k": (4.0, 9000.0)}, r"radiation_range_k = \(4, 9000\): .* 5 to 27500 K"),
        ({"radiation_range_k": (300.0, 300.0)}, "radiation_range_k"),
        ({"radiation_range_k": (25.0, 28_000.0)}, "radiation_range_k"),
        ({"radiation_range_k": (25.0, float("nan"))}, "radiation_range_k"),
        ({"ratio_range": (0.001, 4.0)}, r"ratio_range = \(0.001, 4\): .* 0.004 to 10, with 1"),
        ({"ratio_range": (0.5, 0.9)}, "ratio_range"),
        ({"ratio_range": (1.1, 4.0)}, "ratio_range"),
        ({"ratio_range": (0.01, 11.0)}, "ratio_range"),
        ({"kept": [(2, 0)]}, r"\(2, 1\) is missing"),
        ({"kept": [(2, 0), (2, 1), (6, 0)]}, r"kept = \(6, 0\)"),
    ],
)
def test_bad_arguments_are_one_line(arguments: dict[str, Any], message: str) -> None:
    with pytest.raises(InputError, match=message) as caught:
        distill(SETUP, **arguments)
    assert "\n" not in str(caught.value)


def test_memory_counts_every_worker(monkeypatch: pytest.MonkeyPatch) -> None:
    from levelnet.history import cost

    with monkeypatch.context() as little:
        little.setattr(cost, "available_memory_bytes", lambda: 1e8)
        with pytest.raises(InputError, match=r"hydrogen.n_max = 50: about .* of memory needed, "):
            distill(small_setup(50))
    # Room for one atom of n_max = 5 and not for four.
    monkeypatch.setattr(cost, "available_memory_bytes", lambda: 5e8)
    with ThreadPoolExecutor(4) as pool, pytest.raises(InputError, match="needed by 4 workers"):
        distill(SETUP, executor=pool, workers=4)
    distill(SETUP, certify=False)
    with pytest.raises(InputError, match="workers = 0: at least 1 is needed"):
        distill(SETUP, workers=0)


def test_certificate_says_what_it_measured(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(certificate, "_STEPPING", 1e-6)
    monkeypatch.setattr(certificate, "_REDSHIFTS", 8)
    found = distill(SETUP, tolerance=1e-6).certificate
    assert found is not None
    assert found.rate_names == (
        "recombination 2s",
        "recombination 2p",
        "photoionization 2s",
        "photoionization 2p",
        "exchange 2p-2s",
    )
    assert found.n_points == 512
    assert 0.0 < found.largest_rate_error < 1e-6
    assert np.all(found.rms_error <= found.largest_error)
    assert found.redshift[[0, -1]].tolist() == [1600.0, 20.0]
    assert found.history_error.shape == (3, 8)
    assert found.cosmologies[0] == "setup"
    assert all(text.startswith("invented: ") for text in found.cosmologies[1:])
    assert np.all(found.largest_history_error < 3e-6)
    assert np.all(found.largest_history_error > 0.0)


def test_certificate_finds_a_spoilt_table(monkeypatch: pytest.MonkeyPatch) -> None:
    spoilt = plain().equilibrium.copy()
    spoilt[7, 1, 0] += 1e-5
    table = dataclasses.replace(plain(), equilibrium=spoilt)
    _, names, errors = certificate.rate_errors(table, NodeSource(ATOM, None, None, lambda: None))
    largest = dict(zip(names, np.abs(errors).max(axis=0), strict=True))
    assert largest["recombination 2p"] == pytest.approx(1e-5, rel=1e-2)
    assert largest["photoionization 2p"] == pytest.approx(1e-5, rel=1e-2)
    assert largest["recombination 2s"] < 1e-8


PARENT = """
import multiprocessing, os, sys, time
from levelnet.distilled.nodes import process_pool

if __name__ == "__main__":
    with process_pool(1) as pool:
        print(pool.submit(os.getpid).result(), flush=True)
        time.sleep(120.0)
"""


@pytest.mark.skipif(not Path("/proc").is_dir(), reason="needs /proc to see a process end")
def test_workers_end_with_a_killed_parent(tmp_path: Path) -> None:
    script, root = tmp_path / "parent.py", Path(__file__).parents[2]
    script.write_text(PARENT)
    env = os.environ | {"PYTHONPATH": str(root)}
    with subprocess.Popen(
        [sys.executable, str(script)], env=env, stdout=subprocess.PIPE, text=True
    ) as parent:
        assert parent.stdout is not None
        worker = Path("/proc") / parent.stdout.readline().strip()
        assert worker.is_dir()
        parent.send_signal(signal.SIGKILL)
    give_up = time.monotonic() + 20.0
    while worker.is_dir() and _state(worker) != "Z" and time.monotonic() < give_up:
        time.sleep(0.05)
    assert not worker.is_dir() or _state(worker) == "Z"


def _state(process: Path) -> str:
    """Letter of the state of a process; Z: ended, and nobody has asked how."""
    try:
        return (process / "stat").read_text().rpartition(")")[2].split()[0]
    except FileNotFoundError:
        return "Z"
