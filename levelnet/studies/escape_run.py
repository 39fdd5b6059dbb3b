"""One variant of a study of the escape: a history without its populations."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from ..errors import Outcome, SolveError
from ..history.course import state_at
from ..history.helium_outputs import helium_channels
from ..history.level_pieces import setup_key
from ..history.outcome import outcome_of, relaxation_hubble
from ..history.outputs import channels
from ..history.result import Channels, RadiationField
from ..history.setup import Setup
from ..history.validity import steps_of
from ..numerics.threads import one_blas_thread
from ..pieces import Pieces, code_digest
from .record_pieces import recalled
from .rung import integrate_observed, observed


class Job(NamedTuple):
    """One variant that is to be run.

    Attributes
    ----------
    name : str
        What the variant is called.
    setup : Setup
        Its setup.
    keeps : tuple of (n, l)
        Levels kept from elimination beside those of its lines.
    with_field : bool
        Whether its field is given back.
    species : str
        "H I" or "He I": whose channels to the ground state are given back.
    """

    name: str
    setup: Setup
    keeps: tuple[tuple[int, int], ...]
    with_field: bool
    species: str = "H I"


class VariantResult(NamedTuple):
    """What one variant gives.

    Attributes
    ----------
    electron_fraction, matter_temperature_k : ndarray, shape (n_redshift,)
        n_e/n_H and T_m in K.
    observable_names, observable_units : tuple of str, length n_observables
        As in :class:`levelnet.background.last_scattering.Observed`.
    observable : ndarray, shape (n_observables,)
        In these units; NaN where the grid does not reach the event.
    channels : Channels
        How atoms reached the ground state.
    field : RadiationField or None
        The field, if it was asked for and the treatment resolves one.
    outcome : Outcome
        How the run ended.
    """

    electron_fraction: FloatArray
    matter_temperature_k: FloatArray
    observable_names: tuple[str, ...]
    observable_units: tuple[str, ...]
    observable: FloatArray
    channels: Channels
    field: RadiationField | None
    outcome: Outcome


def compute_variant(
    job: Job, pieces: Pieces | None, optical_depth_to: tuple[float, ...] = ()
) -> VariantResult:
    """Compute one variant: the task of a worker.

    Parameters
    ----------
    job : Job
        The variant.
    pieces : Pieces or None
        Where reduced networks are kept.
    optical_depth_to : tuple of float, dimensionless
        Redshifts Z for optical_depth(Z).

    Raises
    ------
    SolveError
        If the run ended before its last output.
    """
    code = code_digest(("studies/rung", "studies/escape_run"))
    key = setup_key(
        "variant", job.setup, code, job.keeps, job.with_field, optical_depth_to, job.species
    )
    return recalled(pieces, key, VariantResult, lambda: _variant(job, pieces, optical_depth_to))


def _variant(job: Job, pieces: Pieces | None, optical_depth_to: tuple[float, ...]) -> VariantResult:
    setup = job.setup
    with one_blas_thread():
        integrated = integrate_observed(setup, pieces, job.keeps)
        outcome = integrated.trajectory.outcome
        if not outcome.ok:
            raise SolveError(f"{job.name}: {outcome.value}", outcome=outcome)
        redshift = integrated.redshift
        times = (-np.log1p(redshift)).tolist()
        states = np.array([state_at(integrated, s) for s in times])
        here = [integrated.equations.local(s, y) for s, y in zip(times, states, strict=True)]
        seen = observed(setup, integrated, optical_depth_to)
        flows = np.array([one.solution.flow for one in here])
        return VariantResult(
            np.array([integrated.equations.electron_fraction(one) for one in states]),
            setup.cosmology.radiation_temperature_k(redshift) * np.exp(states[:, 1]),
            seen.names,
            seen.units,
            seen.value,
            helium_channels(integrated, redshift)
            if job.species == "He I"
            else channels(
                integrated, steps_of(integrated), redshift, flows, setup.accuracy.relative
            ),
            integrated.field.field if integrated.field and job.with_field else None,
            outcome_of(setup, integrated, map(relaxation_hubble, here)),
        )
