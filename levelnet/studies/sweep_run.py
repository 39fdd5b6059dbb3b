"""One case of a sweep: its name by content, its computation, and how it is kept.

What a case gives is kept as one piece, whole or not at all. A case that failed is kept too, with
its reason. A failure that another machine or another day may not have (memory, a process that
died) is computed again by a rerun; one that follows from the setup alone is not.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray
from ..background.last_scattering import Observed
from ..errors import InputError, Outcome, SolveError
from ..history.cost import check_memory
from ..history.helium_outputs import helium_moments
from ..history.level_pieces import setup_key
from ..history.outcome import outcome_of, relaxation_hubble
from ..history.outputs import history_arrays, local_at
from ..history.setup import Setup
from ..numerics.threads import one_blas_thread
from ..pieces import Pieces, array_text, code_digest, text_array
from .rung import integrate_observed, observed

FAILED = "FAILED"
"""Outcome of a case that gave no history for a reason that is no :class:`Outcome`."""


# Code of this layer that a case depends on besides that of a history.
_CODE = ("studies/rung", "studies/sweep_run")


@dataclass(frozen=True, slots=True, eq=False)
class CaseResult:
    """What came of one case.

    Attributes
    ----------
    outcome : str
        Name of an :class:`Outcome`, or "FAILED".
    reason : str
        Why there is no result that may be used as it stands; where there is one, which observables
        it does not reach and why, "" where it reaches all.
    lasting : bool
        Whether a rerun would come to the same.
    arrays : mapping of str to ndarray, shape (n_redshift,)
        "redshift" and the arrays of a :class:`levelnet.History`; empty where the case failed.
    observable : ndarray, shape (n_observables,)
        In the units of :data:`levelnet.quantities.OBSERVABLES`, then optical depths; empty where
        the case failed.
    """

    outcome: str
    reason: str
    lasting: bool
    arrays: Mapping[str, FloatArray]
    observable: FloatArray

    @property
    def ok(self) -> bool:
        """Whether the result may be used as it stands."""
        return self.outcome == Outcome.CONVERGED.name


def case_key(setup: Setup, optical_depth_to: tuple[float, ...] = ()) -> str:
    """Content name of a case: the setup, its title aside, and the code and tables behind it."""
    return setup_key("case of a sweep", setup, code_digest(_CODE), optical_depth_to)


def compute_case(
    setup: Setup, pieces: Pieces | None, optical_depth_to: tuple[float, ...] = ()
) -> dict[str, FloatArray]:
    """Compute one case: the task of a worker. No failure is raised, all are told.

    Parameters
    ----------
    setup : Setup
        The case.
    pieces : Pieces or None
        Where reduced networks are kept.
    optical_depth_to : tuple of float, dimensionless
        Redshifts Z for optical_depth(Z).

    Returns
    -------
    dict of ndarray
        A piece; :func:`unpacked` makes a :class:`CaseResult` of it.
    """
    try:
        check_memory(setup, populations=0)
    except InputError as error:
        return packed(failure(str(error), lasting=False))
    try:
        with one_blas_thread():
            return packed(_computed(setup, pieces, optical_depth_to))
    except SolveError as error:
        return packed(failure(str(error), lasting=True, outcome=error.outcome.name))
    except InputError as error:
        return packed(failure(str(error), lasting=True))
    except MemoryError:
        return packed(failure("out of memory", lasting=False))
    except Exception as error:  # one case must not end the others
        return packed(failure(f"internal: {type(error).__name__}: {error}", lasting=False))


def failure(reason: str, lasting: bool, outcome: str = FAILED) -> CaseResult:
    """What came of a case that gave nothing."""
    return CaseResult(outcome, " ".join(reason.split()), lasting, {}, np.empty(0))


def _computed(setup: Setup, pieces: Pieces | None, depths: tuple[float, ...]) -> CaseResult:
    integrated = integrate_observed(setup, pieces)
    outcome = integrated.trajectory.outcome
    if not outcome.ok:
        return failure(outcome.value, lasting=True, outcome=outcome.name)
    redshift = integrated.redshift
    here = [local_at(integrated, z) for z in redshift.tolist()]
    moments = helium_moments(integrated, redshift)
    slowest = [*map(relaxation_hubble, here), *(one.relaxation_hubble for one in moments)]
    outcome = outcome_of(setup, integrated, slowest)
    conditions = [one.conditions for one in here]
    seen = observed(setup, integrated, depths)
    arrays, _ = history_arrays(setup, integrated, redshift, conditions, moments)
    return CaseResult(
        outcome.name,
        _unreached(seen) if outcome.ok else outcome.value,
        True,
        {"redshift": redshift, **arrays},
        seen.value,
    )


def _unreached(seen: Observed) -> str:
    """Which observables a history does not reach, and why: those with the same reason together."""
    names: dict[str, list[str]] = {}
    for name, why in zip(seen.names, seen.missing, strict=True):
        if why:
            names.setdefault(why, []).append(name)
    return "; ".join(f"{', '.join(of)} not reached: {why}" for why, of in names.items())


def packed(result: CaseResult) -> dict[str, FloatArray]:
    """A result as a piece."""
    return {
        "outcome": text_array(result.outcome),
        "reason": text_array(result.reason),
        "lasting": np.array([float(result.lasting)]),
        "observable": result.observable,
        **{f"history/{name}": array for name, array in result.arrays.items()},
    }


def unpacked(piece: Mapping[str, FloatArray] | None) -> CaseResult | None:
    """Make a result of its piece; None where it is none."""
    if piece is None or not {"outcome", "reason", "lasting", "observable"} <= set(piece):
        return None
    arrays = {
        name.removeprefix("history/"): array
        for name, array in piece.items()
        if name.startswith("history/")
    }
    try:
        outcome, reason = array_text(piece["outcome"]), array_text(piece["reason"])
    except ValueError:
        return None
    return CaseResult(outcome, reason, bool(piece["lasting"].all()), arrays, piece["observable"])
