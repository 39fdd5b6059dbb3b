"""Many setups: each computed once, kept as soon as it is there, put side by side."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import Executor
from functools import partial
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from ..errors import InputError, SolveError
from ..history.cost import estimate
from ..history.integrate import Progress
from ..history.result import HISTORY_ARRAYS
from ..history.setup import Setup
from ..pieces import MemoryPieces, Pieces
from ..quantities import OBSERVABLES, at_redshift
from .jobs import run_each
from .sweep_cases import MOST_CASES, Cases
from .sweep_record import Sweep
from .sweep_run import CaseResult, case_key, compute_case, failure, packed, unpacked

Piece = dict[str, FloatArray]


class Missing(InputError):
    """Cases that are not there yet."""


class Progressed(NamedTuple):
    """What a run of the missing cases did.

    Attributes
    ----------
    found : int
        Cases that were there already.
    computed : int
        Cases computed now; the same setup counts once.
    not_ok : dict of int to str
        Positions of cases whose results may not be used as they stand, and why not.
    unanswered : int
        Cases that were asked of a worker which gave no answer; they are not among `computed`.
    """

    found: int
    computed: int
    not_ok: dict[int, str]
    unanswered: int = 0


def sweep(
    cases: Cases,
    *,
    optical_depth_to: Iterable[float] = (),
    finished: Pieces | None = None,
    executor: Executor | None = None,
    workers: int = 1,
    pieces: Pieces | None = None,
    progress: Progress | None = None,
) -> Sweep:
    """Compute many setups and put their histories side by side.

    Parameters
    ----------
    cases : Cases
        From :func:`levelnet.vary` or :func:`levelnet.load_sweep`.
    optical_depth_to : iterable of float, optional (dimensionless)
        Redshifts Z for which optical_depth(Z) is among the observables.
    finished : Pieces, optional
        Where each case is kept once it is computed, such as ``levelnet.pieces.ResultFolder(path)``;
        what is there already is not computed again.
    executor : concurrent.futures.Executor, optional
        Computes the cases: a ``ProcessPoolExecutor`` started by "spawn", or that of a dask client
        (``client.get_executor()``, workers of one thread each). None: this process does. The bits
        are the same.
    workers : int, at least 1
        Processes of the pool that takes the place of one that broke.
    pieces : Pieces, optional
        Where reduced networks are kept, which cases with the same atom share.
    progress : callable, optional
        ``progress(stage, fraction)``.

    Returns
    -------
    Sweep
        Every case; those that failed carry their reason, and NaN.

    Raises
    ------
    InputError
        If there are no cases, or a finished one cannot be kept.

    Notes
    -----
    A case is integrated from where hydrogen is ionized, as in the studies, so that all observables
    are there: x_e differs from that of :func:`levelnet.solve` by less than the tolerance asked.
    """
    if not len(cases):
        raise InputError("no cases to compute")
    kept = MemoryPieces() if finished is None else finished
    depths = tuple(float(z) for z in optical_depth_to)
    compute_missing(
        cases,
        range(len(cases)),
        kept,
        optical_depth_to=depths,
        executor=executor,
        workers=workers,
        pieces=pieces,
        progress=progress,
    )
    return gather(cases, kept, depths)


def shard_of(count: int, number: int, shards: int) -> range:
    """Positions of the cases of shard `number` (from 1) of `shards`: every shards-th one."""
    where = f"shard {number}/{shards}"
    if not 1 <= shards <= MOST_CASES:
        raise InputError(f"{where}: the count of shards must be 1 to {MOST_CASES}")
    if not 1 <= number <= shards:
        raise InputError(f"{where}: the number must be 1 to {shards}")
    return range(number - 1, count, shards)


def compute_missing(
    cases: Cases,
    chosen: Sequence[int],
    finished: Pieces,
    *,
    optical_depth_to: tuple[float, ...] = (),
    executor: Executor | None = None,
    workers: int = 1,
    pieces: Pieces | None = None,
    progress: Progress | None = None,
) -> Progressed:
    """Compute the chosen cases that are not finished, and keep each; see :func:`sweep`.

    `progress` is also called every few seconds while an executor has not answered. Where a
    SolveError of its own, or the loss of the executor, ends the work, SolveError says what is kept.
    """
    tell = progress or (lambda stage, fraction: None)
    tell("looking for finished cases", 0.0)
    keys = {k: case_key(cases.setups[k], optical_depth_to) for k in chosen}
    wanted = {key: k for k, key in reversed(keys.items())}
    results = {key: unpacked(finished.get(key)) for key in wanted}
    # One that failed for want of memory, say, is tried again.
    missing = [key for key, one in results.items() if one is None or not one.lasting]
    setups = [cases.setups[wanted[key]] for key in missing]
    answered = 0
    task = partial(compute_case, pieces=pieces, optical_depth_to=optical_depth_to)
    computed = _each_computed(setups, task, executor, workers, pieces is not None, tell)
    try:
        for k, found in computed:
            piece = packed(_lost(found)) if isinstance(found, Exception) else found
            finished.put(missing[k], piece)
            results[missing[k]] = unpacked(piece)
            answered += not isinstance(found, Exception)
    except SolveError as error:
        raise SolveError(
            f"{error}; {answered} of the {len(missing)} cases that were missing are computed and "
            "kept, a rerun does the others"
        ) from error
    ends = {k: results[key] for k, key in keys.items()}
    bad = {k: one.reason for k, one in ends.items() if one is not None and not one.ok}
    return Progressed(len(wanted) - len(missing), answered, bad, len(missing) - answered)


def _each_computed(
    setups: Sequence[Setup],
    task: Callable[[Setup], Piece],
    executor: Executor | None,
    workers: int,
    shared: bool,
    tell: Progress,
) -> Iterator[tuple[int, Piece | Exception]]:
    """Position and piece of each setup, or what it failed with, as they come."""
    costs = [estimate(one, populations=0).seconds for one in setups]
    done = 0.0

    def still_waiting() -> None:
        tell("cases", done / sum(costs))

    for round_ in _rounds(setups, shared):
        jobs = [setups[k] for k in round_]
        of_round = [costs[k] for k in round_]
        for position, found in run_each(jobs, of_round, task, executor, workers, still_waiting):
            yield round_[position], found
            done += costs[round_[position]]
            still_waiting()


def _rounds(setups: Sequence[Setup], shared: bool) -> list[list[int]]:
    """First one case of each atom, then the others, which find its reductions where those are kept.

    Started together, all would reduce the same network.
    """
    if not shared:
        return [list(range(len(setups)))]
    leaders = first_of_each_atom(setups)
    others = sorted(set(range(len(setups))) - set(leaders))
    return [leaders, others]


def first_of_each_atom(setups: Sequence[Setup]) -> list[int]:
    """Positions of setups whose reduced network no earlier one has made."""
    first: dict[object, int] = {}
    for k, one in enumerate(setups):
        first.setdefault((one.hydrogen, one.helium, one.lines, one.rates.rows), k)
    return sorted(first.values())


def _lost(error: Exception) -> CaseResult:
    """A case whose worker gave no answer; another day it may."""
    text = str(error) or "no answer came from its worker"
    return failure(f"{type(error).__name__}: {text}", lasting=False)


def gather(cases: Cases, finished: Pieces, optical_depth_to: tuple[float, ...] = ()) -> Sweep:
    """Put finished cases side by side.

    Raises
    ------
    Missing
        If a case is not finished; says how many are not.
    """
    results = [unpacked(finished.get(case_key(s, optical_depth_to))) for s in cases.setups]
    missing = [k for k, one in enumerate(results) if one is None]
    if missing:
        raise Missing(
            f"{len(missing)} of {len(cases)} cases are not computed yet, the first is "
            f"{cases.label(missing[0])}"
        )
    there = [one for one in results if one is not None]
    redshift = _common_redshift(there)
    depths = [at_redshift("optical_depth", z) for z in optical_depth_to]
    names = (*OBSERVABLES, *depths)
    n_redshift = redshift.shape[-1]
    return Sweep(
        cases.title,
        cases.swept,
        cases.columns,
        tuple(one.to_toml() for one in cases.setups),
        tuple(one.outcome for one in there),
        tuple(one.reason for one in there),
        redshift,
        {
            name: _stacked([one.arrays.get(name) for one in there], n_redshift)
            for name in HISTORY_ARRAYS
        },
        names,
        (*(one.unit for one in OBSERVABLES.values()), *("1" for _ in depths)),
        _stacked([one.observable if len(one.observable) else None for one in there], len(names)),
    )


def _common_redshift(results: Sequence[CaseResult]) -> FloatArray:
    """Outputs of all cases, shape (n_redshift,), or of each where they differ."""
    given = [one.arrays["redshift"] for one in results if "redshift" in one.arrays]
    if not given:
        return np.empty(0)
    if len({one.tobytes() for one in given}) == 1:
        return given[0]
    return _stacked([one.arrays.get("redshift") for one in results], max(map(len, given)))


def _stacked(rows: Sequence[FloatArray | None], length: int) -> FloatArray:
    """Rows one below the other, shape (n_rows, length), NaN where there is nothing."""
    stacked = np.full((len(rows), length), np.nan)
    for k, one in enumerate(rows):
        if one is not None:
            stacked[k, : len(one)] = one
    return stacked
