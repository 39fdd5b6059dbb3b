"""A sweep over dask.distributed whose worker is killed in mid-task: the bits of a serial run."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest

from levelnet.pieces import MemoryPieces, ResultFolder
from levelnet.studies.sweep import sweep
from levelnet.studies.sweep_cases import Cases, vary
from tests.small_runs import small_setup
from tests.unit.test_sweep import same_bits
from tests.whole.test_command_line import GOOD, environment

distributed = pytest.importorskip("distributed", reason="distributed is not installed")


def sixty_four() -> Cases:
    base = small_setup(
        3,
        grid={"redshift_start": 1400.0, "redshift_end": 800.0, "n_redshifts": 5},
        accuracy={"relative": 1e-4},
    )
    return vary(
        base,
        {
            "hydrogen.n_max": [3, 4],
            "cosmology.baryon_density_h2": [0.02, 0.021, 0.022, 0.023],
            "cosmology.hubble_km_s_mpc": [62.0, 64.0, 66.0, 68.0, 70.0, 72.0, 74.0, 76.0],
        },
    )


@pytest.mark.slow
@pytest.mark.filterwarnings("default")  # those of the library are its own
def test_a_worker_killed_in_mid_task(tmp_path: Path) -> None:
    cases, finished = sixty_four(), ResultFolder(tmp_path / "cases")
    assert len(cases) == 64
    killed: list[int] = []

    def kill_a_worker_at_work(client: distributed.Client) -> None:
        give_up = time.monotonic() + 120.0
        while time.monotonic() < give_up:
            running = [address for address, tasks in client.processing().items() if tasks]
            if running and len(list(finished.folder.glob("*.piece"))) >= 8:
                (number,) = client.run(os.getpid, workers=running[:1]).values()
                os.kill(number, signal.SIGKILL)
                killed.append(number)
                return
            time.sleep(0.01)

    with (
        distributed.LocalCluster(
            n_workers=2, threads_per_worker=1, dashboard_address=None, local_directory=tmp_path
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        before = set(client.run(os.getpid).values())
        killer = threading.Thread(target=kill_a_worker_at_work, args=(client,))
        killer.start()
        found = sweep(cases, finished=finished, executor=client.get_executor(pure=False))
        killer.join()
        assert len(killed) == 1 and killed[0] in before
    assert found.not_ok == ()
    assert len(list(finished.folder.glob("*.piece"))) == 64
    assert same_bits(found, sweep(cases, pieces=MemoryPieces()))


@pytest.mark.slow
@pytest.mark.filterwarnings("default")
def test_a_scheduler_that_dies_half_way_ends_with_a_clear_line(tmp_path: Path) -> None:
    rows = "\n".join(f"{4 + k % 2},{66 + k}" for k in range(40))
    (tmp_path / "sweep.csv").write_text(f"hydrogen.n_max,cosmology.hubble_km_s_mpc\n{rows}\n")
    (tmp_path / "setup.toml").write_text(GOOD)
    words = ["sweep", "sweep.csv", "--setup", "setup.toml", "--cases", "cases", "--scheduler"]
    dask = [sys.executable, "-m", "dask"]
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL, "cwd": tmp_path}
    scheduler = subprocess.Popen(
        [*dask, "scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard",
         "--scheduler-file", "address"],
        **quiet,
    )  # fmt: skip
    give_up = time.monotonic() + 120.0
    while not (tmp_path / "address").exists() and time.monotonic() < give_up:
        time.sleep(0.1)
    address = json.loads((tmp_path / "address").read_text())["address"]
    worker = subprocess.Popen([*dask, "worker", address, "--nthreads", "1", "--no-nanny"], **quiet)
    try:
        command = subprocess.Popen(
            [sys.executable, "-m", "levelnet", *words, address],
            cwd=tmp_path, env=environment(), text=True,
            stdout=subprocess.PIPE, stderr=subprocess.PIPE,
        )  # fmt: skip
        give_up = time.monotonic() + 240.0
        while len(list((tmp_path / "cases").glob("*.piece"))) < 2 and time.monotonic() < give_up:
            time.sleep(0.05)
        scheduler.kill()
        out, error = command.communicate(timeout=120.0)
    finally:
        for one in (worker, scheduler):
            one.kill()
            one.wait()
    assert command.returncode == 1
    kept = len(list((tmp_path / "cases").glob("*.piece")))
    assert 2 <= kept < 40 and not out
    assert error.startswith("levelnet: error: cases: ") and error.count("\n") == 1
    assert f"{kept} of the 40 cases that were missing are computed and kept" in error
