"""The answer of a study to what it was asked, so that screens, files and pages agree."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from .escape_records import EscapeStudy
    from .escape_verdict import EscapeDemands, EscapeVerdict
    from .level_records import LevelStudy
    from .level_requirement import Demands
    from .verdict import Verdict

WITHIN = 1e-3
"""Relative error of x_e that a verdict allows where nothing else is asked."""


def level_answer(study: LevelStudy) -> tuple[Verdict, Demands | None]:
    """Answer what the study was asked; if nothing was, the usual on as much as it covers."""
    from .level_checks import covered
    from .level_requirement import demands
    from .requirement import parse_requirement
    from .verdict import verdict

    asked = study.question
    if asked is None:
        return verdict(study, WITHIN, *covered(study.redshift, study.atom)), None
    found = verdict(study, asked.within, asked.low, asked.high)
    if not asked.requirement:
        return found, None
    requirement = parse_requirement("\n".join(asked.requirement), "requirement", None)
    return found, demands(study, requirement)


def escape_answer(study: EscapeStudy) -> tuple[EscapeVerdict, EscapeDemands | None]:
    """Answer what the study was asked; if nothing was, the usual on as much as it covers."""
    from .escape_notes import asked_range
    from .escape_verdict import escape_demands, escape_verdict
    from .requirement import parse_requirement

    asked = study.question
    within = WITHIN if asked is None else asked.within
    found = escape_verdict(study, within, *asked_range(study))
    if asked is None or not asked.requirement:
        return found, None
    requirement = parse_requirement("\n".join(asked.requirement), "requirement", None)
    return found, escape_demands(study, requirement)
