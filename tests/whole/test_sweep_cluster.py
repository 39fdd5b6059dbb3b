"""A sweep over dask.distributed whose worker is killed in mid-task: the bits of a serial run."""

from __future__ import annotations

import os
import signal
import threading
import time
from pathlib import Path

import pytest

from levelnet.pieces import MemoryPieces, ResultFolder
from levelnet.studies.sweep import sweep
from levelnet.studies.sweep_cases import Cases, vary
from tests.small_runs import small_setup
from tests.unit.test_sweep import same_bits

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
