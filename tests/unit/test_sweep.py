"""Sweeps: every case computed once, kept by content, failures told, shards as one."""

from __future__ import annotations

import dataclasses
import multiprocessing
import os
import signal
from concurrent.futures import BrokenExecutor, Executor, Future, ProcessPoolExecutor
from functools import lru_cache, partial
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import levelnet
from levelnet.cli.sweep_output import sweep_summary, sweep_values
from levelnet.errors import InputError, Outcome, SolveError
from levelnet.history.result import HISTORY_ARRAYS
from levelnet.history.run import solve
from levelnet.history.setup import parse_setup
from levelnet.pieces import MemoryPieces, ResultFolder
from levelnet.studies import jobs, sweep_run
from levelnet.studies import sweep as engine
from levelnet.studies.jobs import run_each
from levelnet.studies.rung import observables_of
from levelnet.studies.sweep import Missing, compute_missing, gather, shard_of, sweep
from levelnet.studies.sweep_cases import Cases, vary
from levelnet.studies.sweep_record import Sweep
from levelnet.studies.sweep_run import case_key, unpacked
from tests.small_runs import small_setup

GRID = {"redshift_start": 1500.0, "redshift_end": 500.0, "n_redshifts": 9}


def small_cases() -> Cases:
    """Four good cases of two atoms, and one that stops at its step limit."""
    return vary(
        small_setup(4, grid=GRID),
        together={
            "hydrogen.n_max": [4, 5, 4, 5, 4],
            "cosmology.hubble_km_s_mpc": [66.0, 66.0, 70.0, 70.0, 70.0],
            "accuracy.max_steps": [1000, 1000, 1000, 1000, 10],
        },
    )


@lru_cache(maxsize=1)
def plain() -> Sweep:
    return sweep(small_cases(), optical_depth_to=(1000.0,))


def same_bits(one: Sweep, other: Sweep) -> bool:
    arrays = [(one.redshift, other.redshift), (one.observable, other.observable)]
    arrays += [(one.arrays[name], other.arrays[name]) for name in HISTORY_ARRAYS]
    texts = ("title", "swept", "columns", "setups", "outcome", "reason", "observable_names")
    return all(a.tobytes() == b.tobytes() and a.shape == b.shape for a, b in arrays) and all(
        getattr(one, name) == getattr(other, name) for name in texts
    )


def test_a_case_is_what_solve_and_the_observables_give() -> None:
    cases, found = small_cases(), plain()
    for k in (0, 3):
        history = solve(cases.setups[k])
        assert found.redshift.tobytes() == history.redshift.tobytes()
        for name in HISTORY_ARRAYS:
            # Started elsewhere, within the tolerance of either, 1e-6; depths start at zero.
            np.testing.assert_allclose(
                found.arrays[name][k], getattr(history, name), rtol=2e-6, atol=1e-12
            )
        seen = observables_of(cases.setups[k])
        np.testing.assert_array_equal(found.observable[k, :-1], seen.value)
        assert found.observable_names == (*seen.names, "optical_depth(1000)")
        assert found.observable_units == (*seen.units, "1")
        assert parse_setup(found.setups[k]) == cases.setups[k]
    assert found["drag_redshift"][0] == found.observable[0, 6]
    with pytest.raises(KeyError):
        _ = found["no_such_name"]


def test_a_case_that_fails_is_told_and_does_not_stop_the_rest() -> None:
    found = plain()
    assert found.outcome == ("CONVERGED",) * 4 + ("STEP_LIMIT",)
    assert found.reason == ("",) * 4 + (Outcome.STEP_LIMIT.value,)
    assert found.not_ok == (4,)
    assert all(np.isnan(found.arrays[name][4]).all() for name in HISTORY_ARRAYS)
    assert np.isnan(found.observable[4]).all()
    assert np.isfinite(found.arrays["free_electron_fraction"][:4]).all()
    assert "over hydrogen.n_max, cosmology.hubble_km_s_mpc, accuracy.max_steps: 1 not ok" in (
        repr(found)
    )


def test_a_result_that_is_not_ok_is_kept_with_its_reason() -> None:
    # As in test_outcomes.py: below z ~ 300 no atom leaves 2p in a Hubble time.
    good = small_setup(4, 100.0, 20, lines={"hydrogen": "closed"})
    neither = dataclasses.replace(
        good, hydrogen=dataclasses.replace(good.hydrogen, two_photon_rate_per_s=0.0)
    )
    kept = MemoryPieces()
    found = sweep(Cases("", (good, neither)), finished=kept)
    assert found.outcome == (Outcome.QUASI_STEADY_LOST.name, "FAILED")
    assert found.reason[0] == Outcome.QUASI_STEADY_LOST.value
    assert np.isfinite(found.arrays["free_electron_fraction"][0]).all()
    # Nothing joins hydrogen to its ground state: that will not change, and is not tried again.
    assert "no channel to the ground state" in found.reason[1]
    assert compute_missing(Cases("", (good, neither)), range(2), kept)[:2] == (2, 0)


def test_what_a_good_case_does_not_reach_is_told_with_the_reason() -> None:
    wide = {"redshift_start": 1500.0, "redshift_end": 200.0, "n_redshifts": 9}
    cases = vary(
        small_setup(4, grid=wide),
        together={
            "cosmology.helium_mass_fraction": [0.245, 0.9999, 0.245, 0.245],
            "cosmology.baryon_density_h2": [0.0224, 0.0224, 1e-12, 0.0224],
            "grid.redshift_end": [200.0, 200.0, 200.0, 1200.0],
        },
    )
    kept = MemoryPieces()
    done = compute_missing(cases, range(4), kept, optical_depth_to=(300.0,))
    found = gather(cases, kept, (300.0,))
    assert done.not_ok == {} and found.not_ok == () and found.reason[0] == ""
    for k in range(4):
        missing = [n for n in found.observable_names if np.isnan(found[n][k])]
        assert bool(missing) == bool(found.reason[k])
        assert all(name in found.reason[k] for name in missing)
    for k in (1, 2):
        # tau over the grid, by what the case itself delivers from its start at z = 1500.
        depth = found.arrays["optical_depth"][k, 0]
        assert np.isnan(found["last_scattering_redshift"][k]) and 0.0 < depth < 1.0
        assert (
            "last_scattering_redshift, last_scattering_time_s, sound_horizon_mpc"
            in (found.reason[k])
        )
        assert "the optical depth comes to " in found.reason[k] and ", not to 1" in found.reason[k]
    assert "at the lowest redshift, 1200, x_e is 0.3" in found.reason[3]
    assert "optical_depth(300) not reached: that redshift is outside the grid" in found.reason[3]
    assert list(found.notes().values()) == [(1,), (2,), (3,)]
    text = sweep_summary(found)
    assert "note                  case 1 (cosmology.helium_mass_fraction = 0.9999" in text
    assert "not ok" not in text
    assert [one["cases"] for one in sweep_values(found)["notes"]] == [[1], [2], [3]]


def test_a_rerun_does_only_what_is_missing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    cases, folder = small_cases(), ResultFolder(tmp_path / "cases")
    first = compute_missing(cases, [0, 4], folder, optical_depth_to=(1000.0,))
    assert first == (0, 2, {4: Outcome.STEP_LIMIT.value}, 0)
    done: list[str] = []
    real = engine.compute_case

    def count(setup: Any, **more: Any) -> Any:
        done.append(setup.digest)
        return real(setup, **more)

    monkeypatch.setattr(engine, "compute_case", count)
    again = sweep(cases, optical_depth_to=(1000.0,), finished=folder)
    assert sorted(done) == sorted(cases.setups[k].digest for k in (1, 2, 3))
    assert same_bits(again, plain())
    # Another title is no other case.
    renamed = dataclasses.replace(
        cases, setups=tuple(dataclasses.replace(one, title="x") for one in cases.setups)
    )
    progressed = compute_missing(renamed, range(5), folder, optical_depth_to=(1000.0,))
    assert progressed[:2] == (5, 0)
    # Further observables are.
    assert case_key(cases.setups[0]) != case_key(cases.setups[0], (1000.0,))


def test_the_same_setup_twice_is_computed_once() -> None:
    setup = small_setup(4, grid=GRID)
    kept = MemoryPieces()
    assert compute_missing(Cases("", (setup, setup)), range(2), kept)[:2] == (0, 1)
    assert len(gather(Cases("", (setup, setup)), kept)) == 2


def test_a_damaged_case_is_computed_again(tmp_path: Path) -> None:
    cases, folder = small_cases(), ResultFolder(tmp_path / "cases")
    sweep(cases, optical_depth_to=(1000.0,), finished=folder)
    files = sorted(folder.folder.iterdir())
    assert len(files) == 5
    data = bytearray(files[2].read_bytes())
    data[len(data) // 2] ^= 1
    files[2].write_bytes(bytes(data))
    with pytest.raises(Missing, match="1 of 5 cases are not computed yet, the first is case"):
        gather(cases, folder, (1000.0,))
    found, computed, *_ = compute_missing(cases, range(5), folder, optical_depth_to=(1000.0,))
    assert (found, computed) == (4, 1)
    assert same_bits(gather(cases, folder, (1000.0,)), plain())


def test_shards_make_what_one_run_makes(tmp_path: Path) -> None:
    cases, folder = small_cases(), ResultFolder(tmp_path / "cases")
    shards = [shard_of(len(cases), k, 3) for k in (1, 2, 3)]
    assert sorted(k for one in shards for k in one) == list(range(5))
    for one in shards:
        compute_missing(cases, one, ResultFolder(tmp_path / "cases"), optical_depth_to=(1000.0,))
    assert same_bits(gather(cases, folder, (1000.0,)), plain())
    assert list(shard_of(2, 3, 3)) == []
    for number, count in ((0, 3), (4, 3)):
        with pytest.raises(InputError, match=f"shard {number}/{count}: the number must be 1 to"):
            shard_of(5, number, count)


def test_processes_and_shared_pieces_give_the_same_bits(tmp_path: Path) -> None:
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(2, mp_context=context) as pool:
        pieces = levelnet.pieces.FolderPieces(tmp_path)
        found = sweep(
            small_cases(), optical_depth_to=(1000.0,), executor=pool, workers=2, pieces=pieces
        )
    assert same_bits(found, plain())


def test_a_place_that_cannot_be_written_is_an_error(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match="file/cases: cannot be written"):
        sweep(
            Cases("", (small_setup(4, grid=GRID),)), finished=ResultFolder(tmp_path / "file/cases")
        )


def test_a_folder_in_the_place_of_a_piece_is_named(tmp_path: Path) -> None:
    setup, finished = small_setup(4, grid=GRID), ResultFolder(tmp_path)
    taken = finished._path(case_key(setup))
    taken.mkdir()
    with pytest.raises(InputError) as caught:
        sweep(Cases("", (setup,)), finished=finished)
    assert str(caught.value) == f"{taken}: cannot be written: Is a directory"


@pytest.mark.parametrize(
    ("error", "reason"),
    [
        (MemoryError(), "out of memory"),
        (ZeroDivisionError("by\nzero"), "internal: ZeroDivisionError: by zero"),
    ],
)
def test_what_another_day_may_not_have_is_tried_again(
    error: Exception, reason: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    cases, kept = Cases("", (small_setup(4, grid=GRID),)), MemoryPieces()

    def fail(*given: Any) -> None:
        raise error

    with monkeypatch.context() as patch:
        patch.setattr(sweep_run, "integrate_observed", fail)
        assert compute_missing(cases, [0], kept).not_ok == {0: reason}
        found = gather(cases, kept)
    assert found.outcome == ("FAILED",)
    assert found.reason == (reason,)
    assert found.redshift.shape == (0,)
    assert compute_missing(cases, [0], kept) == (0, 1, {}, 0)


def test_no_memory_for_a_case_is_its_reason(monkeypatch: pytest.MonkeyPatch) -> None:
    from levelnet.history import cost

    monkeypatch.setattr(cost, "available_memory_bytes", lambda: 1e6)
    piece = sweep_run.compute_case(small_setup(4), None)
    result = unpacked(piece)
    assert result is not None and not result.lasting
    assert "of memory needed, 1 MB available" in result.reason


def test_foreign_pieces_are_no_results() -> None:
    piece = sweep_run.compute_case(small_setup(4, grid=GRID), None)
    assert unpacked(None) is None
    assert unpacked({}) is None
    assert unpacked(piece | {"reason": np.array([-1.0])}) is None
    assert unpacked(piece) is not None


class Broken(Executor):
    """A pool that breaks with everything that is given to it."""

    def submit(self, *given: Any, **named: Any) -> Future[Any]:
        future: Future[Any] = Future()
        future.set_exception(BrokenExecutor("gone"))
        return future


def _square_or_die(flag: Path, number: int) -> int:
    if number == 3 or (number == 2 and not flag.exists()):
        flag.touch()
        os.kill(os.getpid(), signal.SIGKILL)
    return number**2


def test_a_job_that_kills_its_process_is_named_and_the_rest_go_on(tmp_path: Path) -> None:
    numbers = [0, 1, 2, 3, 4, 5]
    task = partial(_square_or_die, tmp_path / "flag")
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(2, mp_context=context) as pool:
        found = dict(run_each(numbers, [1.0] * 6, task, pool, workers=2))
    assert sorted(found) == numbers
    assert str(found.pop(3)) == "its worker process died 2 times; is memory short?"
    assert found == {k: k**2 for k in numbers if k != 3}


def test_a_broken_pool_is_replaced(monkeypatch: pytest.MonkeyPatch) -> None:
    pools: list[int] = []

    def count(workers: int) -> Any:
        pools.append(workers)
        return ProcessPoolExecutor(workers, mp_context=multiprocessing.get_context("spawn"))

    monkeypatch.setattr(jobs, "process_pool", count)
    found = dict(run_each([1, -2], [1.0, 2.0], abs, Broken(), workers=1))
    assert found == {0: 1, 1: 2}
    assert pools == [1]


def test_an_error_of_one_job_is_given_back() -> None:
    found = dict(run_each(["1", "x", "3"], [1.0, 2.0, 3.0], int, None))
    assert (found[0], found[2]) == (1, 3)
    assert isinstance(found[1], ValueError)


def test_an_answer_that_never_came_is_a_reason() -> None:
    cases, kept = Cases("", (small_setup(4, grid=GRID),)), MemoryPieces()

    class Lost(Executor):
        def submit(self, *given: Any, **named: Any) -> Future[Any]:
            future: Future[Any] = Future()
            future.set_exception(RuntimeError("the worker left"))
            return future

    done = compute_missing(cases, [0], kept, executor=Lost())
    assert done.not_ok == {0: "RuntimeError: the worker left"}
    assert (done.computed, done.unanswered) == (0, 1)
    assert compute_missing(cases, [0], kept)[:3] == (0, 1, {})


def test_cases_that_were_cancelled_are_not_computed() -> None:
    setups = [small_setup(n, grid=GRID) for n in (4, 5, 6)]
    cases, kept = Cases("", tuple(setups)), MemoryPieces()

    class Left(Executor):
        """It answers once; then its scheduler is gone, and it takes the rest back."""

        def submit(self, task: Any, *given: Any, **named: Any) -> Future[Any]:
            future: Future[Any] = Future()
            if given[0] == setups[2]:
                future.set_result(task(*given))
            else:
                future.cancel()
                future.set_running_or_notify_cancel()
            return future

    with pytest.raises(SolveError, match="of the 3 cases that were missing are computed and kept"):
        compute_missing(cases, [0, 1, 2], kept, executor=Left())
    with pytest.raises(Missing):
        gather(cases, kept)


def test_one_who_waits_is_told_now_and_then(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(jobs, "_LOOK_S", 0.01)

    class Silent(Executor):
        def submit(self, *given: Any, **named: Any) -> Future[Any]:
            return Future()

    def impatient(stage: str, fraction: float) -> None:
        if stage == "cases":
            raise SolveError("no workers")

    cases = Cases("", (small_setup(4, grid=GRID),))
    with pytest.raises(SolveError, match="no workers; 0 of the 1 cases"):
        compute_missing(cases, [0], MemoryPieces(), executor=Silent(), progress=impatient)


def test_a_sweep_without_cases_is_refused() -> None:
    with pytest.raises(InputError, match="no cases"):
        sweep(Cases("", ()))
