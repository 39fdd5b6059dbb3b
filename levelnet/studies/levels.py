"""The study of truncations: a ladder of n_max run rung by rung, carried to all levels."""

from __future__ import annotations

import dataclasses
import itertools
from collections.abc import Iterable, Sequence
from concurrent.futures import Executor
from functools import partial

import numpy as np

from ..arrays import FloatArray
from ..atomic.species import HIGHEST_N
from ..errors import InputError, Outcome
from ..history.cost import check_memory, estimate
from ..history.integrate import Progress, output_redshifts
from ..history.setup import Setup
from ..pieces import Pieces
from .convergence import FEWEST_RUNGS, carry, check_rung_count
from .helium_ladder import Atom, check_helium_ladder, n_max_of
from .jobs import run_jobs
from .level_records import Estimate, Estimates, HeldOut, LevelStudy, Noise, Rungs
from .rung import LOW_N, RungResult, compute_rung, rung_setup, study_setup

DEFAULT_COUNT = 7
"""Rungs of a ladder that is not given."""

# At this accuracy the numerical errors of differences between rungs were measured below 1e-10.
_RELATIVE = 1e-8
# The shortest rungs again, less accurately: an upper bound of numerical errors, for a second.
_COARSER = 10.0
_ROUNDING = 1e-15  # of a logarithm near zero, a few units in the last place
_RATIO = 2.0**0.5
_MOST_HELD_OUT = 2
POPULATION_REDSHIFTS = 12


def level_study(  # noqa: PLR0913  choices by name, each with a default
    setup: Setup,
    rungs: Iterable[int] | None = None,
    *,
    atom: Atom = "hydrogen",
    resolve: Iterable[int] = (),
    optical_depth_to: Iterable[float] = (),
    also_at: Iterable[float] = (),
    executor: Executor | None = None,
    workers: int = 1,
    pieces: Pieces | None = None,
    progress: Progress | None = None,
) -> LevelStudy:
    """Find out how many levels of hydrogen, or of helium, matter.

    Parameters
    ----------
    setup : Setup
        What to compute; its n_max counts only where no rungs are given, and its accuracy only if
        it is better than 1e-8. The study has a grid of its own: the output redshifts of the setup,
        and as many between that no step in ln(1 + z) exceeds 0.03.
    rungs : iterable of int, optional
        n_max of each rung, ascending, at least 4 of them, each at least 4. The default is seven in
        steps of sqrt(2) up to the n_max of the setup.
    atom : "hydrogen" or "helium"
        Whose n_max makes the rungs; the other atom is that of the setup on each. Populations
        recorded are those of hydrogen either way.
    resolve : iterable of int, optional
        Values of resolve_l_to to try at the longest n_max, ascending; of hydrogen alone.
    optical_depth_to : iterable of float, optional (dimensionless)
        Redshifts Z for which optical_depth(Z) is among the observables.
    also_at : iterable of float, optional (dimensionless)
        Redshifts that the grid is to hold too, such as the ends of the range of a verdict; those
        outside the outputs of the setup are left out.
    executor : concurrent.futures.Executor, optional
        Runs the rungs, the longest first; None: this process does. The bits are the same.
    workers : int, at least 1
        How many rungs the executor runs at once; as many must fit in memory.
    pieces : Pieces, optional
        Where reduced networks are kept; a study that was killed goes on from there.
    progress : callable, optional
        ``progress(stage, fraction)``.

    Returns
    -------
    LevelStudy
        Rungs, their limit for infinitely many levels with error bars, and the check of both.

    Raises
    ------
    InputError
        For rungs that make no ladder, for a setup with whole shells or with lines that change from
        rung to rung, or if the longest rungs do not fit in memory.
    SolveError
        If a rung fails.

    Notes
    -----
    The bar covers truncation only. It was held against longer rungs in several cosmologies and is
    honest where the rungs stand in steps of a factor two or less and the longest is at least 50;
    at redshifts below 200 it is wide.

    References
    ----------
    Grin & Hirata 2010, Phys. Rev. D 81, 083005; Chluba, Vasil & Dursi 2010, Mon. Not. R. Astron.
    Soc. 407, 599 (convergence with n_max).
    """
    ladder = default_rungs(n_max_of(setup, atom)) if rungs is None else tuple(rungs)
    shells = tuple(resolve)
    check_ladder(setup, ladder, shells, atom)
    setup = study_setup(setup, also_at)
    jobs, coarse = ladder_jobs(setup, ladder, shells, atom)
    check_memory(jobs[len(ladder) - 1], workers)
    places = _population_redshifts(output_redshifts(setup))
    task = partial(
        compute_rung,
        population_redshift=places,
        pieces=pieces,
        optical_depth_to=tuple(optical_depth_to),
    )
    every = [*jobs, *coarse]
    costs = [estimate(one, POPULATION_REDSHIFTS).seconds for one in every]
    results = run_jobs(every, costs, task, executor, progress, "rungs")
    return _assemble(jobs, len(ladder), results, places, atom)


def ladder_jobs(
    setup: Setup, ladder: Sequence[int], shells: Sequence[int], atom: Atom = "hydrogen"
) -> tuple[list[Setup], list[Setup]]:
    """Setups of all rungs, those with whole shells last, and of the shortest less accurately."""
    relative = min(setup.accuracy.relative, _RELATIVE)
    jobs = [rung_setup(setup, n, None, relative, atom) for n in ladder]
    jobs += [rung_setup(setup, ladder[-1], top, relative) for top in shells]
    return jobs, [rung_setup(setup, n, None, _COARSER * relative, atom) for n in ladder[:2]]


def default_rungs(n_max: int) -> tuple[int, ...]:
    """Ladder up to `n_max` in steps of sqrt(2), none below 4."""
    steps = (round(n_max / _RATIO**k) for k in reversed(range(DEFAULT_COUNT)))
    return tuple(sorted({max(n, LOW_N) for n in steps}))


def check_ladder(
    setup: Setup, rungs: Sequence[int], resolve: Sequence[int] = (), atom: Atom = "hydrogen"
) -> None:
    """Raise InputError for a ladder that tells nothing, in one line."""
    if atom == "helium":
        check_helium_ladder(setup, rungs, resolve, LOW_N)
        return
    top = setup.hydrogen.highest_resolved
    if top != setup.hydrogen.n_max:
        raise InputError(
            f"hydrogen.resolve_l_to = {top}: the study sets it itself; leave it out of the setup, "
            f"and give whole shells that are to be tried as resolve (--resolve {top})"
        )
    lines = setup.lines.lyman_lines
    if isinstance(lines, str):
        raise InputError(
            f'lines.lyman_lines = "{lines}": every rung would open further lines, and isolated '
            "high lines add escape without end; give the number of lines that escape, such as 1"
        )
    if setup.lines.transfer is not None:
        raise InputError(
            'lines.hydrogen = "transfer": the study holds errors to 1e-8, which a frequency grid '
            'does not reach; take "sobolev", with which truncation is nearly the same'
        )
    lowest = max(LOW_N, lines + 1)
    for name, values in (("rungs", rungs), ("resolve", resolve)):
        text = ", ".join(str(value) for value in values)
        if any(a >= b for a, b in itertools.pairwise(values)):
            raise InputError(f"{name} = {text}: each must be larger than the one before")
        if values and values[0] < lowest:
            reason = f"populations of every (n, l) to n = {LOW_N} are recorded"
            if lowest > LOW_N:
                reason = f"{lines} Lyman lines are open"
            raise InputError(f"{name} = {text}: the lowest allowed is {lowest} ({reason})")
        if values and values[-1] > HIGHEST_N:
            raise InputError(f"{name} = {text}: allowed are {lowest} to {HIGHEST_N}")
    check_rung_count(len(rungs))
    if resolve and resolve[-1] >= rungs[-1]:
        raise InputError(
            f"resolve = {resolve[-1]}: must be below the longest rung, n_max = {rungs[-1]}"
        )


def _population_redshifts(redshift: FloatArray) -> tuple[float, ...]:
    """A dozen output redshifts, evenly spread over the outputs."""
    chosen = np.linspace(0, len(redshift) - 1, min(POPULATION_REDSHIFTS, len(redshift)))
    return tuple(redshift[np.unique(chosen.astype(int))].tolist())


def _assemble(
    jobs: list[Setup],
    n_ladder: int,
    results: list[RungResult],
    places: tuple[float, ...],
    atom: Atom,
) -> LevelStudy:
    rungs = _rungs(jobs[:n_ladder], results[:n_ladder], atom)
    noise = _noise(results[:2], results[len(jobs) :])
    resolved = slice(n_ladder, len(jobs))
    low = [(n, l) for n in range(1, LOW_N + 1) for l in range(n)]
    outcomes = [one.outcome for one in results]
    return LevelStudy(
        jobs[n_ladder - 1],
        next((one for one in outcomes if not one.ok), Outcome.CONVERGED),
        output_redshifts(jobs[0]),
        results[0].observable_names,
        results[0].observable_units,
        np.array(places),
        np.array([n for n, _ in low]),
        np.array([l for _, l in low]),
        rungs,
        carry_all(rungs, noise),
        noise,
        hold_out(rungs, noise),
        _rungs(jobs[resolved], results[resolved], atom) if len(jobs) > n_ladder else None,
    )


def _rungs(setups: list[Setup], results: list[RungResult], atom: Atom) -> Rungs:
    return Rungs(
        np.array([n_max_of(one, atom) for one in setups]),
        np.array([one.hydrogen.highest_resolved for one in setups]),
        np.array([one.electron_fraction for one in results]),
        np.array([one.matter_temperature_k for one in results]),
        np.array([one.observable for one in results]),
        np.array([one.population for one in results]),
    )


def _noise(fine: list[RungResult], coarse: list[RungResult]) -> Noise:
    """Compare two rungs with the same two computed less accurately."""

    def change(name: str) -> list[FloatArray]:
        pairs = zip(fine, coarse, strict=True)
        return [logarithm(getattr(b, name)) - logarithm(getattr(a, name)) for a, b in pairs]

    def of_ratio(name: str) -> FloatArray:
        first, second = change(name)
        return np.asarray(np.maximum(np.abs(first - second), _ROUNDING))

    return Noise(
        _envelope(of_ratio("electron_fraction")),
        _envelope(of_ratio("matter_temperature_k")),
        of_ratio("observable"),
        float(np.max(np.abs(change("electron_fraction")))),
    )


def _envelope(values: FloatArray) -> FloatArray:
    """Largest among close neighbours: errors change sign, and must not count as none there."""
    padded = np.pad(values, 2, mode="edge")
    return np.asarray(np.max([padded[k : k + len(values)] for k in range(5)], axis=0))


def logarithm(values: FloatArray) -> FloatArray:
    """Give ln; NaN where a value is not there, or zero (the optical depth of no range)."""
    return np.log(np.where(values > 0.0, values, np.nan))


def carry_all(rungs: Rungs, noise: Noise, to: float = np.inf) -> Estimates:
    """Carry everything on the rungs to an n_max beyond the longest; infinite by default."""

    def one(name: str) -> Estimate:
        found = carry(rungs.n_max, logarithm(getattr(rungs, name)), getattr(noise, name), to)
        return Estimate(np.exp(found.value), found.bar, found.exponent, found.fitted.astype(int))

    return Estimates(*(one(field.name) for field in dataclasses.fields(Estimates)))


def n_held_out(n_rungs: int) -> int:
    """How many of so many rungs are held out of the check fit: two, if five or more are left."""
    return max(0, min(_MOST_HELD_OUT, n_rungs - FEWEST_RUNGS - 1))


def hold_out(rungs: Rungs, noise: Noise) -> HeldOut | None:
    """Foresee the longest rungs, two at most, from at least five shorter ones."""
    count = n_held_out(len(rungs.n_max))
    if not count:
        return None
    shorter = Rungs(*(getattr(rungs, field.name)[:-count] for field in dataclasses.fields(Rungs)))
    held = rungs.n_max[-count:]
    foreseen = [carry_all(shorter, noise, float(n)) for n in held.tolist()]

    def stacked(name: str) -> Estimate:
        every = [getattr(one, name) for one in foreseen]
        return Estimate(
            *(
                np.array([getattr(one, field.name) for one in every])
                for field in dataclasses.fields(Estimate)
            )
        )

    return HeldOut(held, Estimates(*(stacked(f.name) for f in dataclasses.fields(Estimates))))
