"""What a study of the escape says: how far each variant is off, and which is enough."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from .escape_records import EscapeStudy
from .requirement import Finding, Requirement, check
from .verdict import outputs_between


class Largest(NamedTuple):
    """Largest relative difference of x_e from the reference in a range of redshift.

    Attributes
    ----------
    value : float, dimensionless
        x_e over that of the reference, less 1, with its sign.
    redshift : float, dimensionless
        Where.
    """

    value: float
    redshift: float


@dataclass(frozen=True, slots=True)
class Candidate:
    """One variant that a user could choose.

    Attributes
    ----------
    name : str
        What the variant is called.
    variant : int
        Its position.
    error : float, dimensionless
        Largest difference of x_e from the reference, and the numerical error of the reference, at
        one redshift in the range; of the reference itself the latter.
    redshift : float, dimensionless
        Where.
    passed : bool
        Whether the error is allowed.
    """

    name: str
    variant: int
    error: float
    redshift: float
    passed: bool


@dataclass(frozen=True, slots=True)
class EscapeVerdict:
    """Which variant gives x_e well enough.

    Attributes
    ----------
    within : float, dimensionless
        Relative error allowed in x_e.
    low, high : float, dimensionless
        Between which redshifts.
    candidates : tuple of Candidate
        Treatments without a field, from the simplest on; then those with one, by the number of
        switches that are on. The last is the reference.
    enough : int or None
        Position of the first candidate that passes; None where none does.
    relapse : int or None
        Position of a candidate with the same switches and more, or a field where `enough` has none,
        that does not pass: what passes then owes it to effects that cancel.
    """

    within: float
    low: float
    high: float
    candidates: tuple[Candidate, ...]
    enough: int | None
    relapse: int | None


@dataclass(frozen=True, slots=True)
class Worse:
    """A piece of physics whose presence alone takes x_e further from the reference.

    Attributes
    ----------
    name : str
        What the variant is called that has it.
    error : float, dimensionless
        Largest difference of x_e from the reference with it.
    error_without : float, dimensionless
        The same without.
    without : str
        What the variant without it is called.
    """

    name: str
    error: float
    error_without: float
    without: str


@dataclass(frozen=True, slots=True)
class EscapeDemands:
    """What a requirement says of a study.

    Attributes
    ----------
    enough : int or None
        Position of the first candidate that meets every demand; None where none does.
    candidates : tuple of str
        What the candidates are called, as in :class:`EscapeVerdict`.
    findings : tuple of tuple of Finding
        Every demand on every candidate.
    """

    enough: int | None
    candidates: tuple[str, ...]
    findings: tuple[tuple[Finding, ...], ...]


def differences(study: EscapeStudy) -> FloatArray:
    """x_e of each variant over that of the reference, less 1, shape (n_variants, n_redshift)."""
    fractions = study.variants.free_electron_fraction
    return np.asarray(fractions / fractions[study.reference] - 1.0)


def largest_difference(study: EscapeStudy, variant: int, low: float, high: float) -> Largest:
    """Largest difference of a variant between two redshifts; InputError where they do not fit."""
    inside = outputs_between(study.redshift, 1.0, low, high)
    values = differences(study)[variant, inside]
    worst = int(np.argmax(np.abs(values)))
    return Largest(float(values[worst]), float(study.redshift[inside][worst]))


def safe_ranges(
    study: EscapeStudy, variant: int, within: float, low: float, high: float
) -> tuple[tuple[float, float], ...]:
    """Between which outputs a variant gives x_e to an accuracy, each as (highest, lowest).

    Parameters
    ----------
    study : EscapeStudy
        Any.
    variant : int
        Its position.
    within : float, above 1e-8 to 1 (dimensionless)
        Relative error allowed in x_e, the numerical error of the reference counted.
    low, high : float, dimensionless
        Redshifts, ends included.
    """
    inside = outputs_between(study.redshift, within, low, high)
    own = study.reference_error.free_electron_fraction
    good = (np.abs(differences(study)[variant]) + own)[inside] <= within
    z = study.redshift[inside]
    edges = np.flatnonzero(np.diff(np.concatenate([[False], good, [False]]).astype(int)))
    return tuple(
        (float(z[first]), float(z[last - 1]))
        for first, last in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True)
    )


def candidates_of(study: EscapeStudy) -> tuple[int, ...]:
    """Positions of the variants that a user would choose, from the simplest on."""
    counts = study.variants.switched_on.sum(axis=1).tolist()
    treatments = study.treatments.tolist()
    others = [k for k in range(len(counts)) if k not in treatments]
    return (*treatments, *sorted(others, key=lambda k: (counts[k], k)))


def escape_verdict(study: EscapeStudy, within: float, low: float, high: float) -> EscapeVerdict:
    """Find the simplest variant that gives x_e to an accuracy over a range of redshift.

    Parameters
    ----------
    study : EscapeStudy
        Any.
    within : float, above 1e-8 to 1 (dimensionless)
        Relative error allowed in x_e, the numerical error of the reference counted.
    low, high : float, dimensionless
        Redshifts, ends included.

    Raises
    ------
    InputError
        If `within` is out of range, or the outputs do not cover the range of redshift.
    """
    inside = outputs_between(study.redshift, within, low, high)
    own = study.reference_error.free_electron_fraction
    errors = (np.abs(differences(study)) + own)[:, inside]
    found = []
    for k in candidates_of(study):
        worst = int(np.argmax(errors[k]))
        error = float(errors[k, worst])
        place = float(study.redshift[inside][worst])
        found.append(Candidate(study.variants.name[k], k, error, place, error <= within))
    enough = next((k for k, one in enumerate(found) if one.passed), None)
    relapse = None if enough is None else _relapse(study, found, enough)
    return EscapeVerdict(within, low, high, tuple(found), enough, relapse)


def _relapse(study: EscapeStudy, found: list[Candidate], enough: int) -> int | None:
    """First candidate after `enough` with all of its physics and more that does not pass."""
    on, first_field = study.variants.switched_on, len(study.treatments)
    less = on[found[enough].variant]
    for k in range(max(enough + 1, first_field), len(found)):
        if np.all(on[found[k].variant] >= less) and not found[k].passed:
            return k
    return None


def escape_demands(study: EscapeStudy, requirement: Requirement) -> EscapeDemands:
    """Hold every candidate against a requirement and find the simplest that meets it.

    Every error is made larger by the numerical error of the reference, in its own direction.

    Parameters
    ----------
    study : EscapeStudy
        With optical_depth(Z) among its observables where that is asked.
    requirement : Requirement
        What is asked.

    Raises
    ------
    InputError
        If the study does not cover what is asked.
    """

    def errors(name: str, k: int) -> FloatArray:
        values = getattr(study.variants, name)
        logs = np.log(values[k] / values[study.reference])
        bar = getattr(study.reference_error, name)
        return np.asarray(np.copysign(np.abs(logs) + bar, logs))

    def at(k: int) -> tuple[Finding, ...]:
        seen = dict(zip(study.observable_names, errors("observable", k).tolist(), strict=True))
        curves = errors("free_electron_fraction", k), errors("matter_temperature_k", k)
        return check(requirement, study.redshift, *curves, seen)

    places = candidates_of(study)
    findings = tuple(at(k) for k in places)
    enough = next((k for k, one in enumerate(findings) if all(f.passed for f in one)), None)
    return EscapeDemands(enough, tuple(study.variants.name[k] for k in places), findings)


@dataclass(frozen=True, slots=True, eq=False)
class SwitchEffects:
    """What adding each switch does to x_e; arrays have shape (n_switches, n_redshift).

    Attributes
    ----------
    first : ndarray, dimensionless
        x_e over x_e without it, less 1, where it is the first (what it needs comes with it).
    last : ndarray, dimensionless
        The same where it is the last (with what needs it).
    in_order : ndarray, dimensionless
        The same where those before it in the order are on already.
    """

    first: FloatArray
    last: FloatArray
    in_order: FloatArray


def switch_effects(study: EscapeStudy) -> SwitchEffects:
    """What each switch does alone, last, and in the order of the study."""
    fractions, switches = study.variants.free_electron_fraction, study.switches
    so_far = fractions[switches.cumulative]
    before = np.vstack([fractions[switches.base], so_far[:-1]])
    return SwitchEffects(
        fractions[switches.alone] / fractions[switches.base] - 1.0,
        fractions[study.reference] / fractions[switches.removed] - 1.0,
        so_far / before - 1.0,
    )


def worse_than_absent(study: EscapeStudy, low: float, high: float) -> tuple[Worse, ...]:
    """Switches and stimulated decay whose presence alone takes x_e further from the reference.

    Judged by the largest difference of x_e between two redshifts (dimensionless).
    """
    names, base = study.variants.name, study.switches.base
    pairs = [(k, base) for k in study.switches.alone.tolist()]
    treatments = study.treatments.tolist()
    chosen = {k: study.variants.chosen(k) for k in treatments}
    for k in treatments:
        if chosen[k]["two_photon"] == "stimulated":
            plain = {**chosen[k], "two_photon": "spontaneous"}
            pairs += [(k, other) for other in treatments if chosen[other] == plain]
    found = []
    for with_it, without in dict.fromkeys(pairs):
        error, less = (
            abs(largest_difference(study, k, low, high).value) for k in (with_it, without)
        )
        if error > less:
            found.append(Worse(names[with_it], error, less, names[without]))
    return tuple(found)
