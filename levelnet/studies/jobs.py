"""Many runs at once: the dearest first, in this process or in those of an executor."""

from __future__ import annotations

from collections.abc import Callable, Generator, Iterator, Sequence
from concurrent.futures import (
    FIRST_COMPLETED,
    BrokenExecutor,
    CancelledError,
    Executor,
    Future,
    as_completed,
    wait,
)
from typing import TypeVar

from ..distilled.nodes import process_pool
from ..errors import SolveError
from ..history.integrate import Progress

# Jobs handed out at once, so that waiting for any of them stays cheap.
_MOST_WAITING = 1024
_ATTEMPTS = 2
_LOOK_S = 2.0  # how long one waits for any answer before one is told

Job = TypeVar("Job")
Result = TypeVar("Result")


class ExecutorLost(SolveError):
    """Those who compute took back what was asked of them: jobs without an answer are not done."""


def run_jobs(
    jobs: Sequence[Job],
    costs: Sequence[float],
    task: Callable[[Job], Result],
    executor: Executor | None,
    progress: Progress | None,
    stage: str,
) -> list[Result]:
    """Results in the order of `jobs`, computed the dearest first.

    Parameters
    ----------
    jobs : sequence
        What `task` is called with.
    costs : sequence of float
        One for each, above 0, in any unit.
    task : callable
        Can be sent to other processes where there is an executor.
    executor : concurrent.futures.Executor or None
        None: this process does the work.
    progress : callable or None
        ``progress(stage, fraction)``.
    stage : str
        What `progress` is told; "runs", say.

    Raises
    ------
    SolveError
        If a worker process died; besides, whatever `task` raises.
    """
    tell = progress or (lambda stage, fraction: None)
    tell(stage, 0.0)
    found: dict[int, Result] = {}
    order = sorted(range(len(jobs)), key=lambda k: -costs[k])
    for k, result in _computed(jobs, order, task, executor, stage):
        found[k] = result
        tell(stage, sum(costs[j] for j in found) / sum(costs))
    return [found[k] for k in range(len(jobs))]


def _computed(
    jobs: Sequence[Job],
    order: list[int],
    task: Callable[[Job], Result],
    executor: Executor | None,
    stage: str,
) -> Iterator[tuple[int, Result]]:
    if executor is None:
        for k in order:
            yield k, task(jobs[k])
        return
    futures: dict[Future[Result], int] = {}
    try:
        for k in order:
            futures[executor.submit(task, jobs[k])] = k
        for future in as_completed(futures):
            yield futures[future], future.result()
    except BrokenExecutor as error:
        raise SolveError(
            f"a worker process died while it ran one of the {stage}; is memory short?"
        ) from error
    finally:
        for future in futures:
            future.cancel()


def run_each(
    jobs: Sequence[Job],
    costs: Sequence[float],
    task: Callable[[Job], Result],
    executor: Executor | None,
    workers: int = 1,
    still_waiting: Callable[[], None] = lambda: None,
) -> Iterator[tuple[int, Result | Exception]]:
    """Give every job's result, or what it failed with, as they come; no failure stops the rest.

    Parameters
    ----------
    jobs, costs, task, executor
        As for :func:`run_jobs`.
    workers : int, at least 1
        Processes of the pool that takes the place of one that broke. Whatever ran in a pool when it
        broke a second time is run once more, each in a process of its own, so that a job that kills
        its process is known by name.
    still_waiting : callable, optional
        Called every few seconds while `executor` has not answered; what it raises ends the waiting.

    Raises
    ------
    ExecutorLost
        If the executor cancels jobs.

    Yields
    ------
    tuple of int and result or Exception
        Position of the job, and what came of it.
    """
    left = dict.fromkeys(sorted(range(len(jobs)), key=lambda k: -costs[k]))
    if executor is None:
        for k in left:
            yield k, _tried(task, jobs[k])
        return
    yield from _through(executor, jobs, task, left, _MOST_WAITING, still_waiting)
    while left:
        with process_pool(workers) as pool:
            suspects = yield from _through(pool, jobs, task, left, workers)
        for k in suspects or list(left)[:1] * bool(left):
            del left[k]
            yield k, _alone(task, jobs[k])


def _through(
    executor: Executor,
    jobs: Sequence[Job],
    task: Callable[[Job], Result],
    left: dict[int, None],
    most: int,
    still_waiting: Callable[[], None] = lambda: None,
) -> Generator[tuple[int, Result | Exception], None, list[int]]:
    """Run what is `left` and strike it off; if the pool breaks, return what ran in it then."""
    running: dict[Future[Result], int] = {}
    waiting, suspects, broken = iter(list(left)), list[int](), False
    try:
        while True:
            while not broken and len(running) < most and (k := next(waiting, None)) is not None:
                try:
                    running[executor.submit(task, jobs[k])] = k
                except BrokenExecutor:
                    broken = True
            if not running:
                return suspects
            done = wait(running, timeout=_LOOK_S, return_when=FIRST_COMPLETED).done
            if not done:
                still_waiting()
            for future in done:
                k, found = running.pop(future), _tried(Future.result, future)
                if isinstance(found, CancelledError):
                    raise ExecutorLost(
                        "jobs were cancelled: the scheduler or the pool that had them is gone"
                    )
                if isinstance(found, BrokenExecutor):
                    broken = True
                    suspects.append(k)
                    continue
                del left[k]
                yield k, found
    finally:
        for future in running:
            future.cancel()


def _tried(task: Callable[[Job], Result], job: Job) -> Result | Exception:
    try:
        return task(job)
    except Exception as error:
        return error


def _alone(task: Callable[[Job], Result], job: Job) -> Result | Exception:
    for _ in range(_ATTEMPTS):
        with process_pool(1) as pool:
            found = _tried(lambda one: pool.submit(task, one).result(), job)
        if not isinstance(found, BrokenExecutor):
            return found
    return SolveError(f"its worker process died {_ATTEMPTS} times; is memory short?")
