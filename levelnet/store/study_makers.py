"""Makers of the records of studies: they put together what the writer took apart."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

from ..atomic.helium_levels import HeliumLevels
from ..atomic.levels import LevelSet
from ..errors import FileFormatError, Outcome
from ..escape.lines import Lines
from ..history.result import Channels, RadiationField
from ..history.setup import Setup, parse_setup
from ..records import build
from .escape_layout import ESCAPE_LAYOUT
from .level_layout import LEVEL_LAYOUT
from .parts import all_fields, outcome_of
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
    _check_positions(parts, len(levels))
    budget = parts.pop("budget", None)
    helium, ion = parts.pop("helium", None), parts.pop("helium_ion", None)
    if helium is not None:
        terms = helium.pop("levels")
        terms = HeliumLevels(n_max=int(terms["n"].max()), nuclear_charge=2, **terms)
        _check_positions(helium, len(terms))
        helium = HeliumWeights(levels=terms, **helium)
    if ion is not None:
        ion["levels"] = LevelSet(**ion["levels"])
        _check_positions(ion, len(ion["levels"]))
        ion = IonWeights(**ion)
    return Weighing(
        setup=parse_setup(str(content.attributes["setup"]), "stored setup"),
        outcome=outcome_of(content),
        levels=levels,
        budget=None if budget is None else ErrorBudget(**budget),
        helium=helium,
        helium_ion=ion,
        **parts,
    )


def _check_positions(parts: dict[str, Any], n_levels: int) -> None:
    for name in ("upper", "lower", "line_upper"):
        found = parts.get(name, ())
        if len(found) and not 0 <= found.min() <= found.max() < n_levels:
            raise FileFormatError(f"{name}: names levels that are not in the file")


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
    held, resolved = parts.pop("held_out", None), parts.pop("resolved", None)
    question = parts.pop("question", None)
    return LevelStudy(
        setup=parse_setup(str(content.attributes["setup"]), "stored setup"),
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
    setup = parse_setup(str(content.attributes["setup"]), "stored setup")
    found = _escape_study(parts, setup, outcome_of(content))
    if helium is None:
        return found
    shared = {name: parts[name] for name in _SHARED}
    at = int(helium["reference"])
    name = helium["variants"]["outcome"][at]
    if name not in Outcome.__members__:
        raise FileFormatError(f'outcome "{name}" is not known to this levelnet')
    inner = _escape_study(helium | shared, setup, Outcome[name])
    return replace(found, helium=replace(inner, setup=_reference_setup(inner)))


# What a study of helium within one of hydrogen has in common with it.
_SHARED = ("redshift", "observable_names", "observable_units")


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
