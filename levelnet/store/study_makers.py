"""Makers of the records of studies: they put together what the writer took apart."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from ..atomic.levels import LevelSet
from ..errors import FileFormatError
from ..history.result import Channels, RadiationField
from .escape_layout import ESCAPE_LAYOUT
from .level_layout import LEVEL_LAYOUT
from .parts import all_fields, check_positions, outcome_of, setup_of
from .schema import Content
from .weighing_layout import WEIGHING_LAYOUT

if TYPE_CHECKING:
    from ..studies.escape_records import EscapeStudy
    from ..studies.level_records import LevelStudy
    from ..studies.weighing import Weighing


def weighing_of(content: Content) -> Weighing:
    """Make the weighing that :func:`levelnet.store.write.content_of` took apart."""
    from ..studies.budget_record import ErrorBudget
    from ..studies.weighing import Weighing

    parts = all_fields(content, WEIGHING_LAYOUT)
    levels = LevelSet(**parts.pop("levels"))
    check_positions(parts, ("upper", "lower", "line_upper"), len(levels))
    budget = parts.pop("budget", None)
    if budget is not None and not set(parts["targets"]) <= set(budget["targets"]):
        raise FileFormatError("budget: lacks a target that was weighed")
    return Weighing(
        setup=setup_of(content),
        outcome=outcome_of(content),
        levels=levels,
        budget=None if budget is None else ErrorBudget(**budget),
        **parts,
    )


def level_study_of(content: Content) -> LevelStudy:
    """Make the study that :func:`levelnet.store.write.content_of` took apart."""
    from ..studies.level_records import (
        Estimate,
        Estimates,
        HeldOut,
        LevelStudy,
        Noise,
        Question,
        Rungs,
    )

    def estimates(given: dict[str, Any]) -> Estimates:
        return Estimates(**{name: Estimate(**one) for name, one in given.items()})

    parts = all_fields(content, LEVEL_LAYOUT)
    ladder, low = parts["rungs"]["n_max"], parts["level_n"]
    if len(ladder) == 0 or ladder[0] < 1 or not (ladder[1:] > ladder[:-1]).all():
        raise FileFormatError("n_max: must ascend from 1 or above")
    if len(low) == 0 or low.min() < 1:
        raise FileFormatError("n: must be 1 or above")
    held, resolved = parts.pop("held_out", None), parts.pop("resolved", None)
    question = parts.pop("question", None)
    return LevelStudy(
        setup=setup_of(content),
        outcome=outcome_of(content),
        rungs=Rungs(**parts.pop("rungs")),
        limit=estimates(parts.pop("limit")),
        noise=Noise(**parts.pop("noise")),
        held_out=None if held is None else HeldOut(held["n_max"], estimates(held["foreseen"])),
        resolved=None if resolved is None else Rungs(**resolved),
        question=None if question is None else Question(**question),
        **parts,
    )


def escape_study_of(content: Content) -> EscapeStudy:
    """Make the study that :func:`levelnet.store.write.content_of` took apart."""
    from ..studies.escape_records import EscapeStudy, NumericalError, Switches, Variants
    from ..studies.level_records import Question

    parts = all_fields(content, ESCAPE_LAYOUT)
    field, question = parts.pop("field", None), parts.pop("question", None)
    return EscapeStudy(
        setup=setup_of(content),
        outcome=outcome_of(content),
        variants=Variants(**parts.pop("variants")),
        switches=Switches(**parts.pop("switches")),
        reference_error=NumericalError(**parts.pop("reference_error")),
        channels=Channels(**parts.pop("channels")),
        field=None if field is None else RadiationField(**field),
        question=None if question is None else Question(**question),
        **parts,
    )
