"""A study of the escape in words: its verdict, and what to know before relying on it."""

from __future__ import annotations

import math

import numpy as np

from ..arrays import FloatArray
from ..errors import Outcome
from .answers import WITHIN
from .escape_records import EscapeStudy
from .escape_verdict import (
    EscapeDemands,
    EscapeVerdict,
    Worse,
    largest_difference,
    safe_ranges,
    worse_than_absent,
)
from .level_checks import covered
from .verdict import outputs_between

_LEFT_OUT = {
    "H I": "collisions, lines above lyman_lines, two-photon decay above highest_two_photon_n",
    "He I": "collisions, recoil, time dependence across a line, two-photon decay from above 2 1S, "
    "what the resolved field of hydrogen does; escape with diffusion is right to 2e-3",
}


def asked_range(study: EscapeStudy) -> tuple[float, float]:
    """Redshifts between which errors count: those asked, or as much of the usual as there is.

    The usual is 200 to 1600, and for lines of He I 1600 to 3500.
    """
    if study.question is not None:
        return study.question.low, study.question.high
    return usual_range(study.redshift, study.species)


def usual_range(redshift: FloatArray, species: str) -> tuple[float, float]:
    """As much as the outputs cover of where the species recombines."""
    return covered(redshift, "helium" if species == "He I" else "hydrogen")


def verdict_texts(study: EscapeStudy, found: EscapeVerdict) -> tuple[str, ...]:
    """Say how far each treatment is off, and which variant is enough."""
    said = []
    for k in study.treatments.tolist():
        one = largest_difference(study, k, found.low, found.high)
        said.append(
            f"{_capital(study.variants.name[k])} errs by at most {percent(abs(one.value))} in x_e "
            f"between z = {found.low:g} and {found.high:g} (at z = {one.redshift:.0f})"
        )
    return (*said, _enough_text(study, found))


def _enough_text(study: EscapeStudy, found: EscapeVerdict) -> str:
    goal = f"for {percent(found.within)} in x_e at {found.low:g} <= z <= {found.high:g}: "
    own = found.candidates[-1]
    reference = f"the numerical error of the reference, {percent(own.error)} at most,"
    if found.enough is None:
        closest = min(found.candidates, key=lambda one: one.error)
        return (
            f"{goal}none of those compared: {closest.name} comes closest with "
            f"{percent(closest.error)} at z = {closest.redshift:.0f}, {reference} counted; "
            "ask for less, or for a finer frequency step"
        )
    one = found.candidates[found.enough]
    if one.variant == own.variant:
        return f"{goal}you need {one.name}; {reference} is within"
    text = (
        f"{goal}{one.name}{_switches_on(study, one.variant)} is enough; it errs by "
        f"{percent(one.error)} at most, at z = {one.redshift:.0f}, {reference} counted"
    )
    if found.relapse is not None:
        more = found.candidates[found.relapse]
        text += (
            f"; ITS EFFECTS CANCEL: {more.name}, which has more of the physics, errs by "
            f"{percent(more.error)}"
        )
    return text


def _switches_on(study: EscapeStudy, variant: int) -> str:
    """The switches of a field in brackets, where neither none nor all are on."""
    if variant in study.treatments:
        return ""
    on = study.variants.switched_on[variant]
    names = [name for name, one in zip(study.switches.name, on.tolist(), strict=True) if one]
    return f" ({', '.join(names)})" if 0 < len(names) < len(on) else ""


def demands_text(found: EscapeDemands) -> str:
    """Say which candidate meets a requirement, and what is closest to its limit."""
    last = len(found.candidates) - 1
    place = last if found.enough is None else found.enough
    worst = max(found.findings[place], key=lambda one: _share(one.error, one.limit))
    closest = f"{worst.name}: {worst.error:.2g} of {worst.limit:g} {worst.unit}"
    if found.enough is None:
        return (
            "for the requirement: none of those compared; numerical errors of the reference leave "
            f"{closest}"
        )
    return (
        f"for the requirement: {found.candidates[found.enough]} is enough (closest to its limit "
        f"is {closest})"
    )


def worse_text(one: Worse) -> str:
    """Warn of physics that alone does harm."""
    return (
        f"WORSE THAN ABSENT: {one.name} errs by up to {percent(one.error)}, {one.without} by "
        f"{percent(one.error_without)}: it needs what compensates it"
    )


def escape_notes(study: EscapeStudy) -> tuple[str, ...]:
    """Say what a study does and does not tell."""
    low, high = asked_range(study)
    inside = outputs_between(study.redshift, 1.0, low, high)
    own = float(np.max(study.reference_error.free_electron_fraction[inside]))
    return (
        *(worse_text(one) for one in worse_than_absent(study, low, high)),
        *_outcome_notes(study),
        f"errors are differences from the reference, {study.variants.name[study.reference]}, whose "
        f"own numerical error of x_e is at most {percent(own)} there; what its physics leaves out "
        f"({_LEFT_OUT[study.species]}) is in none of them",
        *_check_notes(study, low, high),
        *_line_notes(study),
        *_safe_notes(study, low, high),
        "effects of single switches depend on which others are on: first, last and in order are "
        "all right, each for its question",
    )


def _outcome_notes(study: EscapeStudy) -> tuple[str, ...]:
    """Which variants did not end well; each way to end once."""
    names: dict[Outcome, list[str]] = {}
    for name, outcome in zip(study.variants.name, study.variants.outcome, strict=True):
        if not Outcome[outcome].ok:
            names.setdefault(Outcome[outcome], []).append(name)
    return tuple(f"{'; '.join(some)}: {outcome.value}" for outcome, some in names.items())


def _check_notes(study: EscapeStudy, low: float, high: float) -> tuple[str, ...]:
    """Without any switch a field is Sobolev's treatment: what numerics make of that."""
    names, base = study.variants.name, study.switches.base
    of_base = study.variants.chosen(base)
    if of_base["hydrogen"] != "transfer":
        return ()
    plain = {k: v for k, v in of_base.items() if k != "transfer"} | {"hydrogen": "sobolev"}
    same = [k for k in study.treatments.tolist() if study.variants.chosen(k) == plain]
    if not same:
        return ()
    inside = outputs_between(study.redshift, 1.0, low, high)
    x_e = study.variants.free_electron_fraction[:, inside]
    miss = float(np.max(np.abs(x_e[base] / x_e[same[0]] - 1.0)))
    return (
        f"check: {names[base]} and {names[same[0]]}, the same physics, differ by at most "
        f"{percent(miss)} in x_e there",
    )


def _safe_notes(study: EscapeStudy, low: float, high: float) -> tuple[str, ...]:
    """Where each treatment is good enough."""
    within = WITHIN if study.question is None else study.question.within
    said = []
    for k in study.treatments.tolist():
        ranges = safe_ranges(study, k, within, low, high)
        places = ", ".join(f"z = {first:.0f} to {last:.0f}" for first, last in ranges)
        said.append(
            f"safe to {percent(within)} in x_e: {study.variants.name[k]} at {places or 'no z'}"
        )
    return tuple(said)


def _line_notes(study: EscapeStudy) -> tuple[str, ...]:
    if study.species == "He I":
        if study.redshift[0] > 2900.0:
            return ()
        return (
            f"outputs start at z = {study.redshift[0]:.0f}: He I leaves equilibrium near z = 2900, "
            "and effects above the first output are not shown; raise grid.redshift_start",
        )
    if study.setup.lines.lyman_lines != 1:
        return ()
    return (
        "lines.lyman_lines = 1: no line above Lyman-alpha exchanges photons, so there is no "
        "feedback to compare",
    )


def percent(value: float) -> str:
    """A fraction in per cent, three digits."""
    return f"{100.0 * value:.3g} %"


def _capital(name: str) -> str:
    return name[:1].upper() + name[1:]


def _share(error: float, limit: float) -> float:
    return math.inf if math.isnan(error) else error / limit
