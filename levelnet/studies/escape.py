"""The study of line escape: every treatment and switch on one setup, against one reference."""

from __future__ import annotations

import dataclasses
import tempfile
from collections.abc import Iterable, Iterator
from concurrent.futures import Executor
from contextlib import contextmanager
from functools import partial
from typing import Literal

import numpy as np

from ..arrays import FloatArray
from ..history.cost import Cost, check_memory, estimate
from ..history.integrate import Progress, output_redshifts
from ..history.result import Channels
from ..history.setup import Setup
from ..pieces import FolderPieces, MemoryPieces, Pieces
from .escape_helium_plan import helium_plan
from .escape_plan import Plan, escape_plan, variant_setup
from .escape_records import EscapeStudy, NumericalError, Switches, Variants
from .escape_run import Job, VariantResult, compute_variant
from .jobs import run_jobs
from .rung import study_setup

# Cost of a field over that of a treatment without one, for the progress and the order only.
_FIELD_COST = 10.0


def escape_study(
    setup: Setup,
    *,
    order: Iterable[str] | None = None,
    optical_depth_to: Iterable[float] = (),
    also_at: Iterable[float] = (),
    executor: Executor | None = None,
    workers: int = 1,
    pieces: Pieces | None = None,
    progress: Progress | None = None,
) -> EscapeStudy:
    """Find out how well each treatment of the Lyman lines, and of those of He I, gives the history.

    Parameters
    ----------
    setup : Setup
        Cosmology, atoms, grid and lyman_lines are kept, and of [lines.transfer] what is no switch;
        the treatment that it names does not count. The study has a grid of its own: the output
        redshifts of the setup, and as many between that no step in ln(1 + z) exceeds 0.03.
    order : iterable of str, optional
        In which the switches are added one after another; the default is that of
        :data:`levelnet.studies.escape_plan.SWITCHES`.
    optical_depth_to : iterable of float, optional (dimensionless)
        Redshifts Z for which optical_depth(Z) is among the observables.
    also_at : iterable of float, optional (dimensionless)
        Redshifts that the grid is to hold too, such as the ends of the range of a verdict.
    executor : concurrent.futures.Executor, optional
        Runs the variants; None: this process does. The bits are the same.
    workers : int, at least 1
        How many variants the executor runs at once; as many must fit in memory.
    pieces : Pieces, optional
        Where reduced networks are kept; all variants share them in any case.
    progress : callable, optional
        ``progress(stage, fraction)``.

    Returns
    -------
    EscapeStudy
        Every history, which is which, and what numerics leave in the reference; in `helium` the
        same of the lines of He I, where helium recombines.

    Raises
    ------
    InputError
        If a treatment does not go with the setup, the order is none, or the runs do not fit in
        memory.
    SolveError
        If a variant fails.

    Notes
    -----
    The reference of hydrogen is the field resolved in frequency with all its switches; that of He I
    the continuum with partial redistribution, diffusion, feedback and higher lines. What these
    leave out (collisions, lines above lyman_lines) no difference between the variants shows.

    References
    ----------
    Rubino-Martin, Chluba & Sunyaev 2008, Astron. Astrophys. 485, 377; Hirata 2008, Phys. Rev. D
    78, 023001; Chluba & Thomas 2011, Mon. Not. R. Astron. Soc. 412, 748 (corrections to the escape
    of Lyman-alpha; from memory). Switzer & Hirata 2008, Phys. Rev. D 77, 083006 (He I).
    """
    return run_plans(
        study_setup(setup, also_at),
        escape_plans(setup, order=order),
        optical_depth_to=tuple(optical_depth_to),
        executor=executor,
        workers=workers,
        pieces=pieces,
        progress=progress,
    )


def escape_plans(
    setup: Setup,
    atom: Literal["hydrogen", "helium"] | None = None,
    order: Iterable[str] | None = None,
) -> tuple[Plan, ...]:
    """Plans for :func:`run_plans`.

    Parameters
    ----------
    setup : Setup
        The setup.
    atom : "hydrogen" or "helium", optional
        Whose lines are compared; None: those of hydrogen, then of helium where it recombines.
    order : iterable of str, optional
        In which the switches of the first plan are added; with ``atom = "helium"`` those of
        :data:`levelnet.studies.escape_helium_plan.HELIUM_SWITCHES`.
    """
    if atom == "helium":
        return (helium_plan(setup, order),)
    plan = escape_plan(setup, order)
    both = atom is None and setup.helium_recombines
    return (plan, helium_plan(setup)) if both else (plan,)


def plan_costs(setup: Setup, plan: Plan) -> tuple[list[Setup], list[Cost]]:
    """Setups of all variants of a plan on the grid of `setup`, and what each is to cost.

    No variant has populations, and all but the base find the reduced network of hydrogen.
    """
    setups = [job.setup for job in _jobs(setup, plan)]
    return setups, [estimate(one, 0, reduced=k != plan.base) for k, one in enumerate(setups)]


def expected_seconds(setup: Setup, plans: Iterable[Plan]) -> float:
    """Process time of all variants in s, to a factor of two or three; `setup` as in the study."""
    return sum(one.seconds for plan in plans for one in plan_costs(study_setup(setup), plan)[1])


def run_plans(
    setup: Setup,
    plans: tuple[Plan, ...],
    *,
    optical_depth_to: tuple[float, ...] = (),
    executor: Executor | None = None,
    workers: int = 1,
    pieces: Pieces | None = None,
    progress: Progress | None = None,
) -> EscapeStudy:
    """Run one plan, or that of hydrogen with that of helium in it; see :func:`escape_study`."""
    first, *more = (
        run_plan(
            setup,
            plan,
            optical_depth_to=optical_depth_to,
            executor=executor,
            workers=workers,
            pieces=pieces,
            progress=progress,
        )
        for plan in plans
    )
    return dataclasses.replace(first, helium=more[0]) if more else first


def run_plan(
    setup: Setup,
    plan: Plan,
    *,
    optical_depth_to: tuple[float, ...] = (),
    executor: Executor | None = None,
    workers: int = 1,
    pieces: Pieces | None = None,
    progress: Progress | None = None,
) -> EscapeStudy:
    """Run all variants of a plan on the grid of `setup`; see :func:`escape_study`."""
    jobs = _jobs(setup, plan)
    reference = jobs[plan.reference]
    check_memory(reference.setup, workers)
    costs = [_FIELD_COST if one.setup.lines.transfer else 1.0 for one in jobs]
    with _shared(pieces, executor) as kept:
        task = partial(compute_variant, pieces=kept, optical_depth_to=optical_depth_to)
        # The base fills the pieces: processes that start together would all reduce the network.
        done = {plan.base: task(jobs[plan.base])}
        left = [k for k in range(len(jobs)) if k not in done]
        found = run_jobs(
            [jobs[k] for k in left], [costs[k] for k in left], task, executor, progress, "variants"
        )
    done |= zip(left, found, strict=True)
    return _assemble(setup, plan, [done[k] for k in range(len(jobs))])


def _jobs(setup: Setup, plan: Plan) -> list[Job]:
    """Every variant with the same levels kept, so that all share one interior of the atom.

    Where the lines are closed the lowest levels have no exit once the field is cold. Their
    populations then mean nothing, and further kept levels would stop the integration there.
    """
    variants = [*plan.variants, *([] if plan.coarser is None else [plan.coarser])]
    setups = [variant_setup(setup, one) for one in variants]
    keeps = tuple(sorted({level for one in setups for level in one.lines.field_levels}))
    return [
        Job(
            variant.name,
            one,
            () if one.lines.hydrogen == "closed" else keeps,
            variant is plan.variants[plan.reference],
            plan.species,
        )
        for variant, one in zip(variants, setups, strict=True)
    ]


@contextmanager
def _shared(pieces: Pieces | None, executor: Executor | None) -> Iterator[Pieces]:
    """Pieces that all variants see, for the time of the study where none are given."""
    if pieces is not None:
        yield pieces
    elif executor is None:
        yield MemoryPieces()
    else:
        with tempfile.TemporaryDirectory() as folder:
            yield FolderPieces(folder)


def _assemble(setup: Setup, plan: Plan, results: list[VariantResult]) -> EscapeStudy:
    reference = results[plan.reference]
    own = variant_setup(setup, plan.variants[plan.reference])
    coarser = None if plan.coarser is None else results[-1]
    count = len(plan.variants)
    return EscapeStudy(
        own,
        reference.outcome,
        output_redshifts(setup),
        reference.observable_names,
        reference.observable_units,
        _variants(setup, plan, results[:count]),
        np.array(plan.treatments),
        plan.reference,
        Switches(
            plan.switches,
            plan.base,
            np.array(plan.alone),
            np.array(plan.removed),
            np.array(plan.cumulative),
        ),
        _numerical_error(reference, coarser, setup.accuracy.relative),
        # Made anew: arrays from another process are no longer read-only.
        dataclasses.replace(reference.channels),
        None if reference.field is None else dataclasses.replace(reference.field),
    )


def _variants(setup: Setup, plan: Plan, results: list[VariantResult]) -> Variants:
    channels = results[plan.reference].channels.names
    import tomli_w

    texts = [dataclasses.asdict(one.lines) for one in plan.variants]
    rates = [variant_setup(setup, one).helium.intercombination_rate_per_s for one in plan.variants]
    return Variants(
        tuple(one.name for one in plan.variants),
        tuple(tomli_w.dumps(_without_none(one)) for one in texts),
        np.array([np.nan if one is None else one for one in rates]),
        tuple(one.outcome.name for one in results),
        np.array([[name in on for name in plan.switches] for on in plan.switched_on]),
        np.array([one.electron_fraction for one in results]),
        np.array([one.matter_temperature_k for one in results]),
        np.array([one.observable for one in results]),
        np.array([_shares(one.channels, channels) for one in results]),
    )


def _shares(channels: Channels, names: tuple[str, ...]) -> list[float]:
    """Shares down to the last redshift by the names of the reference; 0 where there is none."""
    known = dict(zip(channels.names, channels.cumulative_share[-1].tolist(), strict=True))
    return [known.get(name, 0.0) for name in names]


def _without_none(values: dict[str, object]) -> dict[str, object]:
    kept = {key: value for key, value in values.items() if value is not None}
    return {k: _without_none(v) if isinstance(v, dict) else v for k, v in kept.items()}


def _numerical_error(
    reference: VariantResult, coarser: VariantResult | None, relative: float
) -> NumericalError:
    """The tolerance, and the whole difference from cells twice as wide: an upper bound."""

    def one(name: str) -> FloatArray:
        value: FloatArray = getattr(reference, name)
        step = 0.0 if coarser is None else np.abs(getattr(coarser, name) / value - 1.0)
        return np.asarray(np.where(np.isfinite(value), relative, np.nan) + step)

    return NumericalError(one("electron_fraction"), one("matter_temperature_k"), one("observable"))
