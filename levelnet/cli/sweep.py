"""``levelnet sweep``: many setups, here or on a cluster, in one file."""

from __future__ import annotations

import argparse
import re
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

from ..errors import InputError, SolveError
from .console import Console
from .distill import worker_count, worker_processes
from .output import print_result
from .paths import check_folder, check_target
from .plan import add_plan, print_plan
from .scheduler import check_address, dask_library, scheduler_workers
from .solve import cache_pieces
from .sweep_output import shard_summary, shard_values, sweep_summary, sweep_values

if TYPE_CHECKING:
    from concurrent.futures import Executor

    from ..history.integrate import Progress
    from ..pieces import ResultFolder
    from ..studies.sweep import Progressed
    from ..studies.sweep_cases import Cases
    from ..studies.sweep_record import Sweep

NAME = "sweep"
SUMMARY = "compute many setups, here or on a cluster, into one file"
DESCRIPTION = (
    "Compute many setups, grids and lists over any key of a setup, and put their histories and "
    "observables side by side in an HDF5 file. Each case is kept in a folder once it is there, so "
    "that a rerun does only what is missing. A case that fails is recorded with its reason and "
    "does not stop the others."
)
EXAMPLE = "levelnet sweep sweep.toml --jobs 8 --output sweep.h5"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of this command."""
    parser.add_argument(
        "sweep", metavar="SWEEP", type=Path, help="setup and what varies (TOML), or rows (CSV)"
    )
    parser.add_argument(
        "-o",
        "--output",
        metavar="FILE",
        type=Path,
        help="result file (default: name of the sweep with .h5, in the current folder)",
    )
    parser.add_argument(
        "--setup",
        metavar="SETUP",
        type=Path,
        help="setup file (TOML) with what the rows of a CSV file have in common",
    )
    parser.add_argument(
        "--cases",
        metavar="FOLDER",
        type=Path,
        help="where finished cases are kept (default: name of the sweep with -cases, in the "
        "current folder)",
    )
    parser.add_argument(
        "--depth-to",
        metavar="Z",
        type=float,
        nargs="+",
        default=[],
        help="redshifts up to which the optical depth is among the observables",
    )
    where = parser.add_mutually_exclusive_group()
    where.add_argument(
        "--jobs",
        "--workers",
        metavar="N",
        type=int,
        help="processes that compute cases (default: as many as there are processors)",
    )
    where.add_argument(
        "--scheduler",
        metavar="ADDRESS",
        help="dask.distributed scheduler whose workers compute the cases, such as "
        "tcp://host:8786 (needs the extra levelnet[cluster]; workers of one thread each)",
    )
    part = parser.add_mutually_exclusive_group()
    part.add_argument(
        "--shard",
        metavar="I/N",
        help="compute only every N-th case, from the I-th on, and write no file yet: for the I-th "
        "of N jobs of a cluster that see the same folder of cases",
    )
    part.add_argument(
        "--merge", action="store_true", help="compute nothing: write the file from finished cases"
    )
    add_plan(parser)
    parser.add_argument(
        "--no-cache", action="store_true", help="neither read nor fill the cache of atomic rates"
    )
    parser.add_argument("--force", action="store_true", help="overwrite the result file")


def run(options: argparse.Namespace, console: Console) -> int:
    """Compute what is missing, write the file; 0 if every case is ok, 1 if not."""
    from ..pieces import ResultFolder
    from ..studies.sweep_files import load_sweep

    if options.scheduler:
        check_address(options.scheduler)
        dask_library()
    cases = load_sweep(options.sweep, options.setup)
    folder = options.cases or Path(f"{options.sweep.stem}-cases")
    target = options.output or Path(f"{options.sweep.stem}.h5")
    chosen = _chosen(cases, options)
    check_folder(folder)
    workers = 1 if options.scheduler else worker_count(options.jobs, "--jobs")
    finished = ResultFolder(folder)
    if options.shard is None:
        check_target(target, options.force, options.sweep)
    if options.plan:
        return _print_plan(cases, chosen, workers, finished, options)
    start, done = time.monotonic(), None
    if not options.merge:
        done = _computed(cases, chosen, workers, finished, options, console)
    if options.shard is not None and done is not None:
        seconds = time.monotonic() - start
        print_result(
            options.json,
            lambda: shard_values(cases, chosen, done, folder),
            lambda: shard_summary(cases, chosen, done, folder),
            seconds=seconds,
        )
        return _code(len(done.not_ok), len(chosen), console)
    found = _gathered(cases, finished, options)

    from ..store import write

    write(found, target, force=options.force)
    print_result(
        options.json,
        lambda: sweep_values(found, done),
        lambda: sweep_summary(found, done),
        file=target,
        seconds=time.monotonic() - start,
    )
    return _code(len(found.not_ok), len(found), console)


def _code(bad: int, count: int, console: Console) -> int:
    """Exit code; cases that are not ok are said on stderr too."""
    if bad:
        console.error(f"{bad} of {count} cases are not ok; the result says why", kind="")
    return 1 if bad else 0


def _chosen(cases: Cases, options: argparse.Namespace) -> range:
    """Positions of the cases that are asked of this process."""
    from ..studies.sweep import shard_of

    if options.shard is None:
        return range(len(cases))
    match = re.fullmatch(r"(\d{1,18})/(\d{1,18})", options.shard, re.ASCII)
    if match is None:
        raise InputError(f"--shard {options.shard}: write the number and the count, such as 3/16")
    return shard_of(len(cases), int(match[1]), int(match[2]))


def _depths(options: argparse.Namespace) -> tuple[float, ...]:
    depths = tuple(dict.fromkeys(options.depth_to))
    for z in depths:
        if not 0.0 < z <= 10_000.0:
            raise InputError(f"--depth-to {z:g}: allowed are redshifts above 0, to 10000")
    return depths


def _computed(
    cases: Cases,
    chosen: range,
    workers: int,
    finished: ResultFolder,
    options: argparse.Namespace,
    console: Console,
) -> Progressed:
    from ..studies.sweep import compute_missing
    from ..studies.sweep_plan import check_sweep_memory

    depths = _depths(options)
    if not options.scheduler:
        check_sweep_memory(cases, chosen, workers)
    pieces = None if options.no_cache else cache_pieces(console)
    try:
        with (
            console.progress() as progress,
            _executor(options.scheduler, workers, console, progress) as (executor, told),
        ):
            return compute_missing(
                cases,
                chosen,
                finished,
                optical_depth_to=depths,
                executor=executor,
                workers=workers,
                pieces=pieces,
                progress=told,
            )
    except SolveError as error:
        raise SolveError(f"{finished.folder}: {error}") from error


def _gathered(cases: Cases, finished: ResultFolder, options: argparse.Namespace) -> Sweep:
    from ..studies.sweep import Missing, gather

    try:
        return gather(cases, finished, _depths(options))
    except Missing as error:
        # Not a matter of bad input: the other shards have work to do yet.
        raise SolveError(f"{finished.folder}: {error}; run without --merge to compute") from None


@contextmanager
def _executor(
    scheduler: str | None, workers: int, console: Console, progress: Progress
) -> Iterator[tuple[Executor | None, Progress]]:
    """Who computes (this process, its own, or a scheduler's workers), and who is told of it."""
    if scheduler is None:
        with worker_processes(workers) as executor:
            yield executor, progress
        return
    with scheduler_workers(scheduler, console) as (client, watch):

        def told(stage: str, fraction: float) -> None:
            watch()
            progress(stage, fraction)

        yield client, told


def _print_plan(
    cases: Cases,
    chosen: range,
    workers: int,
    finished: ResultFolder,
    options: argparse.Namespace,
) -> int:
    from ..studies.sweep_plan import plan_sweep

    return print_plan(plan_sweep(cases, chosen, workers, finished, _depths(options)), options.json)
