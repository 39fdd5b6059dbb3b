"""The chapter of an escape comparison: treatments of the Lyman lines against the resolved field."""

from __future__ import annotations

import dataclasses
import math
from functools import partial

import numpy as np

from ...studies.answers import escape_answer
from ...studies.escape_notes import demands_text, verdict_texts
from ...studies.escape_records import EscapeStudy
from ...studies.escape_verdict import (
    EscapeDemands,
    EscapeVerdict,
    largest_difference,
    switch_effects,
    worse_than_absent,
)
from ...studies.verdict import outputs_between
from ..escape import (
    escape_channel_figure,
    escape_spectrum_figure,
    switch_figure,
    treatment_figure,
)
from .content import Block, Chapter, Facts, Origin, Picture, Section, Table
from .drawing import picture
from .wording import (
    asked_section,
    largest_distortion,
    limit_text,
    most_through,
    observable_label,
    one_line,
    origin_section,
    sentence,
    signed_percent,
    study_headline,
    trust_section,
)

_OPEN = "none of the variants is shown to be as exact as was asked"
_WHAT = {
    ("H I", False): "Treatments of the Lyman lines against the field resolved in frequency",
    ("H I", True): "Treatments of the Lyman lines against the field resolved in frequency, and of "
    "the lines of He I against the best of them",
    ("He I", False): "Treatments of the lines of He I against the best of them",
}
_WAYS = ("added first", "added last", "added in order")


def escape_chapter(study: EscapeStudy, origin: Origin, prefix: str) -> Chapter:
    """Everything a page says of a study of the escape.

    Parameters
    ----------
    study : EscapeStudy
        Any.
    origin : Origin
        Its file.
    prefix : str
        Of every name in the chapter.
    """
    found, _ = escape_answer(study)
    inner = study.helium
    within = () if inner is None else _sections(inner, f"{prefix}-helium", "Lines of He I: ")
    asked = (
        ("variants", str(len(study.variants.name))),
        ("reference", study.variants.name[study.reference]),
        ("error of x_e allowed", f"{found.within:g} at {found.low:g} <= z <= {found.high:g}"),
    )
    more = () if inner is None else _answers(inner)
    answered = all(_answered(one) for one in (study, inner) if one is not None)
    ok, outcome, word = study_headline(study.outcome, "" if answered else _OPEN)
    return Chapter(
        name=prefix,
        title=one_line(study.setup.title),
        what=_WHAT[study.species, inner is not None],
        file=origin.name,
        ok=ok,
        outcome=outcome,
        word=word,
        answers=(*_answers(study), *(f"Lines of He I: {text}" for text in more)),
        sections=(
            asked_section(prefix, study.setup, asked),
            *_sections(study, prefix),
            *within,
            origin_section(prefix, origin),
        ),
    )


def _answered(study: EscapeStudy) -> bool:
    found, met = escape_answer(study)
    return found.enough is not None and (met is None or met.enough is not None)


def _answers(study: EscapeStudy) -> tuple[str, ...]:
    """What is enough; how far each treatment is off stands in the tables."""
    found, met = escape_answer(study)
    said = [verdict_texts(study, found)[-1], *(() if met is None else (demands_text(met),))]
    return tuple(sentence(text) for text in said)


def _sections(study: EscapeStudy, prefix: str, heading: str = "") -> tuple[Section, ...]:
    """What came out, the figures, and how far to trust them, of the lines of one atom."""
    found, met = escape_answer(study)
    trust = trust_section(prefix, _trust(study, found), study.notes)
    return (
        Section(f"{prefix}-found", f"{heading}What came out", _found(study, found, met)),
        Section(f"{prefix}-figures", f"{heading}Figures", _pictures(study, found, prefix)),
        dataclasses.replace(trust, title=f"{heading}{trust.title}"),
    )


def _found(
    study: EscapeStudy, found: EscapeVerdict, met: EscapeDemands | None
) -> tuple[Block, ...]:
    blocks: list[Block] = [_differences(study, found), _effects(study, found), _shares(study)]
    if met is not None:
        head = ("variant", *(limit_text(one) for one in met.findings[0]))
        rows = tuple(
            (name, *(f"{one.error:.1e} {'ok' if one.passed else 'no'}" for one in line))
            for name, line in zip(met.candidates, met.findings, strict=True)
        )
        blocks.append(Table("The requirement against every variant", head, rows))
    return tuple(blocks)


def _differences(study: EscapeStudy, found: EscapeVerdict) -> Table:
    values = study.variants.observable
    changes = values / values[study.reference] - 1.0
    head = (
        "variant",
        f"x_e, {found.low:g} to {found.high:g}",
        "at z",
        *(observable_label(name) for name in study.observable_names),
    )
    rows = []
    for k, name in enumerate(study.variants.name):
        if k == study.reference:
            continue
        one = largest_difference(study, k, found.low, found.high)
        seen = [_signed(change) for change in changes[k].tolist()]
        rows.append((name, signed_percent(one.value), f"{one.redshift:.0f}", *seen))
    caption = "Relative difference of each variant from the reference; of x_e the largest"
    return Table(caption, head, tuple(rows))


def _signed(value: float) -> str:
    return f"{value:+.1e}" if math.isfinite(value) else "not reached"


def _effects(study: EscapeStudy, found: EscapeVerdict) -> Table:
    effects = switch_effects(study)
    inside = outputs_between(study.redshift, 1.0, found.low, found.high)
    worse = {one.name for one in worse_than_absent(study, found.low, found.high)}
    rows = []
    for k, name in enumerate(study.switches.name):
        cells = []
        for curve in (effects.first, effects.last, effects.in_order):
            place = inside[int(np.argmax(np.abs(curve[k, inside])))]
            cells.append(f"{signed_percent(curve[k, place])} at z = {study.redshift[place]:.0f}")
        alone = study.variants.name[study.switches.alone[k]] in worse
        rows.append((name, *cells, "worse alone than absent" if alone else ""))
    caption = (
        "Change of x_e by each switch of the field, where it is largest: added to none, to all "
        "others, and in the order of the rows"
    )
    return Table(caption, ("switch", *_WAYS, "remark"), tuple(rows))


def _shares(study: EscapeStudy) -> Table:
    shares = study.variants.cumulative_share
    shown = [k for k, one in enumerate(np.abs(shares).max(axis=0).tolist()) if one > 0.0]
    places = [*study.treatments.tolist(), study.switches.base, *study.switches.cumulative.tolist()]
    rows = tuple(
        (study.variants.name[k], *(f"{100.0 * shares[k, c]:.3f}" for c in shown))
        for k in dict.fromkeys(places)
    )
    head = ("variant", *(study.channels.names[k] for k in shown))
    return Table("How atoms reached the ground state, per cent down to the end", head, rows)


def _pictures(study: EscapeStudy, found: EscapeVerdict, prefix: str) -> tuple[Picture, ...]:
    pictures = [
        picture(
            partial(treatment_figure, study),
            f"{prefix}-treatments",
            "Treatments without a field against the reference",
            "Relative difference of x_e in per cent against redshift, all treatments (a) and "
            f"those that are close (b). The largest: {_worst(study, found)}.",
        ),
        picture(
            partial(switch_figure, study),
            f"{prefix}-switches",
            "What each switch of the field does",
            "Change of x_e in per cent against redshift, each switch added first, last and in "
            f"order. Added last, at the largest: {_largest_last(study)}.",
        ),
        picture(
            partial(escape_channel_figure, study),
            f"{prefix}-channels",
            "How atoms reach the ground state in the reference",
            f"Shares of the channels at each redshift (a) and since the start (b). "
            f"{most_through(study.channels)}",
        ),
    ]
    if study.field is not None:
        title, make = "The field of the reference", partial(escape_spectrum_figure, study)
        said = (
            "Occupation number over that of the blackbody around Lyman-alpha at a few redshifts. "
            f"{largest_distortion(study.field)}"
        )
        pictures.append(picture(make, f"{prefix}-spectrum", title, said))
    return tuple(pictures)


def _worst(study: EscapeStudy, found: EscapeVerdict) -> str:
    """Largest difference of each treatment."""
    said = []
    for k in study.treatments.tolist():
        one = largest_difference(study, k, found.low, found.high)
        name = study.variants.name[k]
        said.append(f"{name} {signed_percent(one.value)} at z = {one.redshift:.0f}")
    return "; ".join(said)


def _largest_last(study: EscapeStudy) -> str:
    """Largest effect of each switch, added last."""
    effects = zip(study.switches.name, switch_effects(study).last, strict=True)
    return "; ".join(
        f"{name} {signed_percent(curve[int(np.argmax(np.abs(curve)))])}" for name, curve in effects
    )


def _trust(study: EscapeStudy, found: EscapeVerdict) -> tuple[Block, ...]:
    own = found.candidates[-1]
    rows = [
        (
            "numerical error of x_e of the reference",
            f"{own.error:.1e} at most, at z = {own.redshift:.0f}",
        ),
        *(
            (f"numerical error of {observable_label(name)}", f"{one:.1e}")
            for name, one in zip(
                study.observable_names, study.reference_error.observable.tolist(), strict=True
            )
            if math.isfinite(one)
        ),
    ]
    return (Facts(tuple(rows)),)
