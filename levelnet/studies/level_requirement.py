"""A study of truncations held against a requirement: pass or fail of each rung, smallest n_max."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray
from ..errors import InputError
from .convergence import first_to_pass, truncation_error
from .helium_ladder import Atom
from .level_records import LevelStudy
from .levels import logarithm
from .requirement import Finding, Requirement, check
from .targets import parse_target
from .verdict import n_max_name


@dataclass(frozen=True, slots=True)
class Demands:
    """What a requirement says of a study.

    Attributes
    ----------
    n_max : int or None
        The smallest n_max that meets every demand, error bars included; None where not even ten
        times the longest rung does.
    beyond : bool
        True where it is longer than any rung, and so extrapolated.
    rungs : tuple of tuple of Finding
        Every demand on every rung.
    longer : tuple of Finding
        The same at `n_max`, or at ten times the longest rung where it is None.
    """

    n_max: int | None
    beyond: bool
    rungs: tuple[tuple[Finding, ...], ...]
    longer: tuple[Finding, ...]


def check_covered(requirement: Requirement, redshift: FloatArray) -> None:
    """Raise InputError if outputs at these redshifts cannot answer a requirement."""
    for depth in depths_asked(requirement):
        if not redshift[-1] < depth <= redshift[0]:
            raise InputError(
                f"requirement: optical_depth({depth:g}) lies outside the redshifts of the study, "
                f"above {redshift[-1]:g} to {redshift[0]:g}"
            )
    nothing = np.zeros(len(redshift))
    known = {name: 0.0 for name in requirement.targets if not _from_curves(name)}
    check(requirement, redshift, nothing, nothing, known)


def depths_asked(requirement: Requirement) -> tuple[float, ...]:
    """Redshifts (dimensionless) at which a requirement asks for the optical depth."""
    targets = [parse_target(name) for name in requirement.targets]
    return tuple(one.redshift for one in targets if one.kind == "optical_depth")


def demands(study: LevelStudy, requirement: Requirement) -> Demands:
    """Hold every rung against a requirement and find the smallest n_max that meets it.

    Every error is the truncation error made larger by its bar, in the direction of the error.

    Parameters
    ----------
    study : LevelStudy
        A ladder; with optical_depth(Z) among its observables where that is asked.
    requirement : Requirement
        What is asked.

    Raises
    ------
    InputError
        If the study does not cover what is asked.
    """

    def at(n_max: int) -> tuple[Finding, ...]:
        rungs, noise = study.rungs, study.noise

        def errors(name: str) -> FloatArray:
            logs = logarithm(getattr(rungs, name))
            error, bar = truncation_error(rungs.n_max, logs, getattr(noise, name), n_max)
            return np.asarray(np.copysign(np.abs(error) + bar, error))

        seen = dict(zip(study.observable_names, errors("observable").tolist(), strict=True))
        curves = errors("free_electron_fraction"), errors("matter_temperature_k")
        return check(requirement, study.redshift, *curves, seen)

    ladder = study.rungs.n_max
    found, beyond = first_to_pass(lambda n: all(one.passed for one in at(n)), ladder)
    furthest = 10 * int(ladder[-1]) if found is None else found
    return Demands(found, beyond, tuple(at(n) for n in ladder.tolist()), at(furthest))


def demands_text(found: Demands, longest: int, atom: Atom = "hydrogen") -> str:
    """Say in words and numbers which n_max of an atom meets a requirement."""
    name = n_max_name(atom)
    worst = max(found.longer, key=_share)
    closest = f"{worst.name}: {worst.error:.2g} of {worst.limit:g} {worst.unit}"
    if found.n_max is None:
        return (
            f"for the requirement: not known from these rungs; with ten times {name} = {longest} "
            f"still {closest}; run longer rungs"
        )
    text = f"for the requirement: {name} = {found.n_max} (closest to its limit is {closest})"
    if found.beyond:
        text += f"; beyond the longest rung, {longest}: by extrapolation"
    return text


def _share(one: Finding) -> float:
    return math.inf if math.isnan(one.error) else one.error / one.limit


def _from_curves(name: str) -> bool:
    return parse_target(name).kind in {"x_e", "T_m"}
