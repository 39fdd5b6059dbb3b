"""Many cosmologies from one table, over the cores."""

from __future__ import annotations

from collections.abc import Iterable
from concurrent.futures import Executor
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np

from ..arrays import FloatArray
from ..background.cosmology import Cosmology
from ..errors import InputError, LevelnetError
from .fast import FastHistory
from .history import history_from_table
from .table import EffectiveTable

# Cosmologies handed to a worker at once: a few milliseconds of work.
_CHUNK = 8


@dataclass(frozen=True, slots=True, eq=False)
class Ensemble:
    """Histories of many cosmologies on the same redshifts.

    Attributes
    ----------
    redshift : ndarray, shape (n_redshift,), dimensionless
        Output redshifts, descending.
    free_electron_fraction, matter_temperature_k : ndarray, shape (n_cosmologies, n_redshift)
        x_e (dimensionless) and T_m (K).
    histories : tuple of FastHistory
        Everything else, in the order given.
    """

    redshift: FloatArray
    free_electron_fraction: FloatArray
    matter_temperature_k: FloatArray
    histories: tuple[FastHistory, ...]


def ensemble(
    table: EffectiveTable,
    cosmologies: Iterable[Cosmology],
    *,
    executor: Executor | None = None,
    **options: Any,
) -> Ensemble:
    """Compute the histories of many cosmologies.

    Parameters
    ----------
    table : EffectiveTable
        The table.
    cosmologies : iterable of Cosmology
        At least one.
    executor : concurrent.futures.Executor, optional
        Threads suffice: the kernel releases the interpreter's lock. Processes get the table once
        with every eight cosmologies. None: one after the other.
    options : any
        As for :func:`history_from_table`.

    Returns
    -------
    Ensemble
        In the order of the cosmologies, the same bits with any executor.

    Raises
    ------
    InputError
        As :func:`history_from_table`, with the number of the cosmology (from 0).
    """
    chosen = list(cosmologies)
    if not chosen:
        raise InputError("cosmologies: at least one is needed")
    chunks = [(k, chosen[k : k + _CHUNK]) for k in range(0, len(chosen), _CHUNK)]
    work = partial(_some, table, options)
    done = map(work, chunks) if executor is None else executor.map(work, chunks)
    histories = tuple(history for chunk in done for history in chunk)
    return Ensemble(
        histories[0].redshift,
        np.stack([one.free_electron_fraction for one in histories]),
        np.stack([one.matter_temperature_k for one in histories]),
        histories,
    )


def _some(
    table: EffectiveTable, options: dict[str, Any], chunk: tuple[int, list[Cosmology]]
) -> list[FastHistory]:
    first, cosmologies = chunk
    done = []
    for k, cosmology in enumerate(cosmologies):
        try:
            done.append(history_from_table(table, cosmology, **options))
        except LevelnetError as error:
            raise type(error)(f"cosmology {first + k}: {error}") from None
    return done
