"""Compilation at the first use on a machine: which kernels some work needs and are not kept yet."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from typing import Any, NamedTuple

from ..history.setup import Setup
from ..kernels.blocks import solve_blocks
from ..kernels.compile import is_kept
from ..kernels.coulomb import follow
from ..kernels.effective import effective_history
from ..kernels.plasma_steps import plasma_history
from ..kernels.transfer import march


class Part(NamedTuple):
    """Kernels that are compiled together.

    Attributes
    ----------
    name : str
        What they are for.
    kernel : callable
        One of them, which calls others or comes after them.
    seconds : float, s
        CPU time of their compilation.
    memory_bytes : float, bytes
        Memory that it takes besides that of the run.
    """

    name: str
    kernel: Callable[..., Any]
    seconds: float
    memory_bytes: float


# Measured once each with numba 0.68 on one core of a 2 GHz-class x86-64 server under load, with
# n_max = 5, and 3 of helium: CPU time, and largest memory, of a run from an empty cache less those
# of the same run with all kept. `solve` took 10.6 s and 94 MB, with helium 13.0 s and 111 MB, with
# a resolved field 21.3 s and 177 MB; `distill` 30.1 s and 210 MB, with helium 79.3 s and 850 MB.
# What a part takes is what it adds. On a busier machine the compiler took up to twice the CPU time.
_HYDROGEN = Part("hydrogen", solve_blocks, 10.6, 9.4e7)
_HELIUM = Part("helium", follow, 2.4, 1.7e7)
_TRANSFER = Part("transfer", march, 10.7, 8.3e7)
_TABLES = Part("tables", effective_history, 19.5, 1.16e8)
_HELIUM_TABLES = Part("tables with helium", plasma_history, 66.3, 7.4e8)


class FirstUse(NamedTuple):
    """Compilation that is still to come on this machine.

    Attributes
    ----------
    names : tuple of str
        For what; none where all is kept.
    seconds, processor_seconds : float, s
        On the clock, and by all processes together: each compiles for itself.
    memory_bytes : float
        What it adds to the memory of all processes.
    """

    names: tuple[str, ...]
    seconds: float
    processor_seconds: float
    memory_bytes: float


def first_use(setups: Iterable[Setup], processes: int, tables: bool = False) -> FirstUse:
    """What runs of these setups need and this machine has not kept.

    Parameters
    ----------
    setups : iterable of Setup
        What is run.
    processes : int
        How many run at once.
    tables : bool
        Whether histories from tables of effective rates are run too, in one process.
    """
    missing = [one for one in _parts(list(setups), tables) if not is_kept(one.kernel)]
    by = [1 if one in {_TABLES, _HELIUM_TABLES} else processes for one in missing]
    return FirstUse(
        tuple(one.name for one in missing),
        sum(one.seconds for one in missing),
        sum(count * one.seconds for count, one in zip(by, missing, strict=True)),
        sum(count * one.memory_bytes for count, one in zip(by, missing, strict=True)),
    )


def _parts(setups: Sequence[Setup], tables: bool) -> list[Part]:
    """What the runs need, each once."""
    helium = any(one.helium_recombines for one in setups)
    needed = {
        _HYDROGEN: True,
        _HELIUM: helium,
        _TRANSFER: any(one.lines.transfer is not None for one in setups),
        _TABLES: tables and not helium,
        _HELIUM_TABLES: tables and helium,
    }
    return [one for one, is_needed in needed.items() if is_needed]
