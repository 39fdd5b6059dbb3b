"""Many runs at once: the dearest first, in this process or in those of an executor."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import BrokenExecutor, Executor, Future, as_completed
from typing import TypeVar

from ..errors import SolveError
from ..history.integrate import Progress

Job = TypeVar("Job")
Result = TypeVar("Result")


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
