"""Makers of the records of studies: they put together what the writer took apart."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

from ..atomic.helium_levels import HeliumLevels
from ..atomic.levels import LevelSet
from ..errors import FileFormatError, Outcome, cut_short
from ..escape.lines import Lines
from ..history.result import Channels, RadiationField
from ..history.setup import Setup
from ..records import build
from .escape_layout import ESCAPE_LAYOUT
from .level_layout import LEVEL_LAYOUT
from .parts import all_fields, check_positions, check_together, outcome_of, setup_of
from .schema import Content
from .weighing_layout import WEIGHING_LAYOUT

if TYPE_CHECKING:
    from ..studies.escape_records import EscapeStudy
    from ..studies.level_records import LevelStudy
    from ..studies.weighing import Weighing


def weighing_of(content: Content) -> Weighing:
    """Make the weighing that :func:`levelnet.store.write.content_of` took apart."""
    from ..studies.budget_record import ErrorBudget
    from ..studies.helium_weighing import HeliumWeights, IonWeights
    from ..studies.weighing import Weighing

    parts = all_fields(content, WEIGHING_LAYOUT)
    levels = LevelSet(**parts.pop("levels"))
    check_positions(parts, ("upper", "lower", "line_upper"), len(levels))
    budget = parts.pop("budget", None)
    if budget is not None and not set(parts["targets"]) <= set(budget["targets"]):
        raise FileFormatError("budget: lacks a target that was weighed")
    helium, ion = parts.pop("helium", None), parts.pop("helium_ion", None)
    if helium is not None:
        terms = helium.pop("levels")
        terms = HeliumLevels(n_max=int(terms["n"].max()), nuclear_charge=2, **terms)
        check_positions(helium, ("upper", "lower", "line_upper"), len(terms))
        helium = HeliumWeights(levels=terms, **helium)
    if ion is not None:
        ion["levels"] = LevelSet(**ion["levels"])
        check_positions(ion, ("upper", "lower"), len(ion["levels"]))
        ion = IonWeights(**ion)
    return Weighing(
        setup=setup_of(content),
        outcome=outcome_of(content),
        levels=levels,
        budget=None if budget is None else ErrorBudget(**budget),
        helium=helium,
        helium_ion=ion,
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
    parts = all_fields(content, ESCAPE_LAYOUT)
    helium = parts.pop("helium", None)
    setup = setup_of(content)
    found = _escape_study(parts, setup, outcome_of(content))
    if helium is None:
        return found
    check_together(helium, _OWN, "helium")
    shared = {name: parts[name] for name in _SHARED}
    at, names = int(helium["reference"]), helium["variants"]["outcome"]
    if not 0 <= at < len(names):
        raise FileFormatError(f"helium reference: must be 0 to {len(names) - 1}")
    name = names[at]
    if name not in Outcome.__members__:
        raise FileFormatError(f'outcome "{cut_short(name)}" is not known to this levelnet')
    inner = _escape_study(helium | shared, setup, Outcome[name])
    return replace(found, helium=replace(inner, setup=_reference_setup(inner)))


# What a study of helium within one of hydrogen has in common with it.
_SHARED = ("redshift", "observable_names", "observable_units")
_OWN = ("reference", "variants", "switches", "reference_error", "channels", "treatments")


def _escape_study(given: dict[str, Any], setup: Setup, outcome: Outcome) -> EscapeStudy:
    from ..studies.escape_records import EscapeStudy, NumericalError, Switches, Variants
    from ..studies.level_records import Question

    parts = dict(given)
    field, question = parts.pop("field", None), parts.pop("question", None)
    return EscapeStudy(
        setup=setup,
        outcome=outcome,
        variants=Variants(**parts.pop("variants")),
        switches=Switches(**parts.pop("switches")),
        reference_error=NumericalError(**parts.pop("reference_error")),
        channels=Channels(**parts.pop("channels")),
        field=None if field is None else RadiationField(**field),
        question=None if question is None else Question(**question),
        **parts,
    )


def _reference_setup(study: EscapeStudy) -> Setup:
    """The setup of the reference, from that of another variant and its own lines."""
    at = study.reference
    rate = float(study.variants.intercombination_rate_per_s[at])
    return replace(
        study.setup,
        lines=build(Lines, study.variants.chosen(at)),
        helium=replace(study.setup.helium, intercombination_rate_per_s=rate),
    )
