"""Exact reductions at many T_r: in parallel, each kept on disk as soon as it is there.

A worker is given names and numbers only and builds its atom once. What it computes does not depend
on who computes it: one BLAS thread, nothing shared.
"""

from __future__ import annotations

import functools
import multiprocessing
import multiprocessing.connection
import os
import signal
import threading
from collections.abc import Callable, Iterator
from concurrent.futures import (
    BrokenExecutor,
    Executor,
    Future,
    ProcessPoolExecutor,
    as_completed,
)
from dataclasses import dataclass, field

import numpy as np
from threadpoolctl import threadpool_limits

from ..arrays import FloatArray
from ..atomic.overrides import Override
from ..atomic.species import Hydrogen
from ..errors import SolveError
from ..network.assembly import Workspace
from ..network.ladder import Ladder, hydrogen_ladder
from ..network.rates import RateConstants, rate_constants, stack
from ..network.reduction import Pairs, exchange_pairs, reduce_at
from ..pieces import Pieces, code_digest, content_key
from .kept import KeptChoice

# After this many rounds with a pool that broke, inputs go one by one to a single worker.
_ROUNDS = 2
_ATTEMPTS = 2


@dataclass(frozen=True, slots=True)
class Atom:
    """All that the reduction of a hydrogenic atom depends on, besides T_r.

    Attributes
    ----------
    n_max : int
        Highest n.
    energies : str
        "measured" or "nonrelativistic".
    kept : tuple of (n, l)
        Kept levels.
    resolve_l_to : int
        Highest n with levels resolved in l.
    overrides : tuple of Override
        Factors on lines and cross sections.
    charge : int
        Nuclear charge: 1 hydrogen, 2 the helium ion.
    """

    n_max: int
    energies: str
    kept: KeptChoice
    resolve_l_to: int
    overrides: tuple[Override, ...] = ()
    charge: int = 1

    @staticmethod
    def of(hydrogen: Hydrogen, kept: KeptChoice, overrides: tuple[Override, ...] = ()) -> Atom:
        """Hydrogen of a setup with these kept levels and overridden rates."""
        return Atom(hydrogen.n_max, hydrogen.energies, kept, hydrogen.highest_resolved, overrides)

    def ladder(self, n_max: int | None = None) -> Ladder:
        """Build the ladder, or its part up to `n_max`."""
        top = n_max or self.n_max
        resolved = min(self.resolve_l_to, top)
        return hydrogen_ladder(top, self.energies, self.kept, resolved, self.overrides, self.charge)

    @property
    def name(self) -> str:
        """Content name of the atom with the code that computes it."""
        code = code_digest(("constants", "kernels", "numerics", "atomic", "network"))
        factors = tuple(one.key for one in self.overrides)
        what = self.n_max, self.energies, self.kept, self.resolve_l_to, factors, self.charge
        return content_key("distilled node", code, *what)


@functools.lru_cache(maxsize=1)
def prepared(atom: Atom) -> tuple[Ladder, Pairs, RateConstants]:
    """The ladder of an atom, its pairs of kept levels and its constants; built once a process."""
    ladder = atom.ladder()
    pairs = exchange_pairs(ladder)
    return ladder, pairs, rate_constants(ladder, pairs)


class _Buffers(threading.local):
    """Buffers of one thread, which uses them for one reduction of an atom after the other."""

    atom: Atom | None = None
    workspace: Workspace | None = None

    def of(self, atom: Atom, ladder: Ladder) -> Workspace:
        """Give those of this atom, new ones where the last was another."""
        if self.workspace is None or self.atom != atom:
            self.atom, self.workspace = atom, Workspace.of(ladder)
        return self.workspace

    def drop(self) -> None:
        """Give the memory back."""
        self.atom = self.workspace = None


_buffers = _Buffers()


@functools.lru_cache(maxsize=4)
def outline(atom: Atom) -> tuple[Ladder, Pairs, RateConstants]:
    """Kept levels, pairs and constants of an atom, the same bits without its highest levels.

    No detour's least climb leads more than two shells above the kept levels; the process that only
    hands out work need not hold the whole atom.
    """
    top = min(atom.n_max, max(n for n, _ in atom.kept) + 2)
    ladder = atom.ladder(top)
    pairs = exchange_pairs(ladder)
    return ladder, pairs, rate_constants(ladder, pairs)


def compute_node(atom: Atom, temperature_k: float) -> dict[str, FloatArray]:
    """Reduce the network at one T_r: the task of a worker.

    Returns
    -------
    dict of ndarray
        "node": ln of the downward exchange rates with their barriers kept out, then ln G_ie of
        each kept level, shape (n_pairs + n_kept * n_energies,).
    """
    with threadpool_limits(limits=1, user_api="blas"):
        ladder, pairs, _ = prepared(atom)
        return {"node": stack(reduce_at(ladder, pairs, temperature_k, _buffers.of(atom, ladder)))}


def drop_buffers() -> None:
    """Give back what reductions in this thread left for the next one."""
    _buffers.drop()


def process_pool(workers: int) -> ProcessPoolExecutor:
    """Pool of worker processes started afresh (spawn), as forked threads and locks would not be."""
    return ProcessPoolExecutor(
        workers, mp_context=multiprocessing.get_context("spawn"), initializer=start_worker
    )


def start_worker() -> None:
    """Make a worker leave Ctrl-C to its parent, and end with it however the parent ends."""
    # Ctrl-C reaches the whole group of processes; only the parent is to answer.
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_end_with_parent, daemon=True).start()


def _end_with_parent() -> None:
    # A parent that is killed cannot tell its workers; the sentinel becomes ready all the same.
    parent = multiprocessing.parent_process()
    if parent is not None:
        multiprocessing.connection.wait([parent.sentinel])
        os._exit(1)


@dataclass(slots=True, eq=False)
class NodeSource:
    """Gives nodes: known ones at once, from pieces, else computed through the executor.

    Attributes
    ----------
    atom : Atom
        What is reduced.
    executor : Executor or None
        None: in this process, one after the other.
    pieces : Pieces or None
        Where nodes are kept.
    on_node : callable
        Told after each node.
    workers : int
        How many processes a pool gets that replaces a broken one.
    known : dict
        Nodes by temperature in K.
    """

    atom: Atom
    executor: Executor | None
    pieces: Pieces | None
    on_node: Callable[[], None]
    workers: int = 1
    known: dict[float, FloatArray] = field(default_factory=dict)

    def at(self, temperatures_k: FloatArray) -> FloatArray:
        """Nodes at these temperatures, shape (n_temperatures, n_stored)."""
        wanted = [float(t) for t in temperatures_k]
        missing = [t for t in dict.fromkeys(wanted) if t not in self.known and not self._recall(t)]
        if missing:
            for temperature_k, arrays in self._compute(missing):
                self._keep(temperature_k, arrays["node"])
        return np.array([self.known[t] for t in wanted])

    def _recall(self, temperature_k: float) -> bool:
        if self.pieces is None:
            return False
        found = self.pieces.get(content_key(self.atom.name, temperature_k))
        if found is None or set(found) != {"node"} or not self._genuine(found["node"]):
            return False
        self.known[temperature_k] = found["node"]
        self.on_node()
        return True

    def _genuine(self, node: FloatArray) -> bool:
        _, pairs, constants = outline(self.atom)
        size = len(pairs.lower) + constants.n_kept * len(constants.electron_k)
        return node.shape == (size,) and bool(np.isfinite(node).all())

    def _keep(self, temperature_k: float, node: FloatArray) -> None:
        self.known[temperature_k] = node
        if self.pieces is not None:
            self.pieces.put(content_key(self.atom.name, temperature_k), {"node": node})
        self.on_node()

    def _compute(self, missing: list[float]) -> Iterator[tuple[float, dict[str, FloatArray]]]:
        if self.executor is None:
            try:
                for temperature_k in missing:
                    yield temperature_k, compute_node(self.atom, temperature_k)
            finally:
                drop_buffers()
            return
        left = dict.fromkeys(missing)
        yield from _through(self.executor, self.atom, left)
        for _ in range(_ROUNDS - 1):
            if left:
                with process_pool(self.workers) as pool:
                    yield from _through(pool, self.atom, left)
        for temperature_k in list(left):
            yield temperature_k, _alone(self.atom, temperature_k)


def _through(
    executor: Executor, atom: Atom, left: dict[float, None]
) -> Iterator[tuple[float, dict[str, FloatArray]]]:
    """Compute what is `left` and strike it off; ends early, without error, if the pool breaks."""
    futures: dict[Future[dict[str, FloatArray]], float] = {}
    try:
        for temperature_k in left:
            try:
                futures[executor.submit(compute_node, atom, temperature_k)] = temperature_k
            except BrokenExecutor:
                break
        for future in as_completed(futures):
            try:
                arrays = future.result()
            except BrokenExecutor:
                continue  # others may have been finished before
            del left[futures[future]]
            yield futures[future], arrays
    finally:
        for future in futures:
            future.cancel()


def _alone(atom: Atom, temperature_k: float) -> dict[str, FloatArray]:
    """Compute one node in a worker of its own, so that a worker's death names its input."""
    for _ in range(_ATTEMPTS):
        with process_pool(1) as pool:
            try:
                return pool.submit(compute_node, atom, temperature_k).result()
            except BrokenExecutor:
                continue
    raise SolveError(
        f"T_r = {temperature_k:.6g} K, n_max = {atom.n_max}: the worker process died "
        f"{_ATTEMPTS} times while reducing the network there; is memory short?"
    )
