"""Threads, clocks and the report line shared by the benchmarks."""

from __future__ import annotations

import os

for _name in ("OPENBLAS", "OMP", "MKL"):
    os.environ[f"{_name}_NUM_THREADS"] = "1"

import contextlib
import platform
import time
from collections.abc import Callable, Iterator, Sequence
from types import ModuleType

import numpy as np
from scipy.linalg import blas


def cpu_seconds(action: Callable[[], object]) -> float:
    """Process time of one call, s: steadier on a shared machine than the clock on the wall."""
    start = time.process_time()
    action()
    return time.process_time() - start


def best_of(
    actions: Sequence[Callable[[], object]],
    repeats: int,
    prepare: Callable[[], object] | None = None,
) -> list[float]:
    """Best time of each action, s; they alternate, `prepare` runs untimed before the first."""
    best = [np.inf] * len(actions)
    for _ in range(repeats):
        for k, action in enumerate(actions):
            if k == 0 and prepare is not None:
                prepare()
            best[k] = min(best[k], cpu_seconds(action))
    return best


class Clock:
    """Best process time of one function wherever it is called, s."""

    def __init__(self, function: Callable[..., object]) -> None:
        self.function, self.best = function, np.inf

    def __call__(self, *arguments: object, **options: object) -> object:
        start = time.process_time()
        result = self.function(*arguments, **options)
        self.best = min(self.best, time.process_time() - start)
        return result


@contextlib.contextmanager
def clocked(module: ModuleType, name: str) -> Iterator[Clock]:
    """Clock a function inside whatever calls it by its name in `module`."""
    clock = Clock(getattr(module, name))
    setattr(module, name, clock)
    try:
        yield clock
    finally:
        setattr(module, name, clock.function)
    if not np.isfinite(clock.best):
        raise RuntimeError(f"{name} was never called")


def matrix_product(size: int = 1536) -> tuple[Callable[[], object], float]:
    """One dgemm in place, and its floating-point operations: the yardstick of the machine."""
    a = np.asfortranarray(np.random.default_rng(0).random((size, size)))
    c = np.zeros((size, size), order="F")
    return lambda: blas.dgemm(1.0, a, a, c=c, overwrite_c=1), 2.0 * size**3


def machine() -> str:
    """Processor and versions, for the head of a report."""
    import numba
    import scipy

    processor = platform.processor() or platform.machine()
    try:
        with open("/proc/cpuinfo", encoding="ascii") as file:
            lines = [line for line in file if line.startswith("model name")]
            names = [line.split(":", 1)[1].strip() for line in lines]
        processor = names[0] if names else processor
    except OSError:
        pass
    versions = f"numpy {np.__version__}, scipy {scipy.__version__}, numba {numba.__version__}"
    python = platform.python_version()
    return f"{processor}, {os.cpu_count()} cores, one thread; Python {python}, {versions}"
