"""The chapter of a study of levels: a ladder of n_max and where it leads."""

from __future__ import annotations

import math
from functools import partial

import numpy as np

from ...history.samples import sample_rows
from ...studies.answers import level_answer
from ...studies.level_checks import LARGE, check_held_out, check_limit, resolved_text, shell_changes
from ...studies.level_records import LevelStudy
from ...studies.level_requirement import Demands, demands_text
from ...studies.verdict import Verdict, n_max_name, population_changes, rung_errors, verdict_text
from ..level_checks import check_figure, resolve_figure
from ..levels import level_figure
from .content import Block, Chapter, Facts, Origin, Picture, Section, Table
from .drawing import picture
from .wording import (
    asked_section,
    limit_text,
    observable_label,
    one_line,
    origin_section,
    sentence,
    signed_percent,
    study_headline,
    trust_section,
    unit_text,
)

_OPEN = "these rungs do not tell how many levels are needed"
_WHAT = {
    "hydrogen": "How many levels matter: a ladder of n_max",
    "helium": "How many levels of helium matter: a ladder of its n_max",
}


def levels_chapter(study: LevelStudy, origin: Origin, prefix: str) -> Chapter:
    """Everything a page says of a study of levels.

    Parameters
    ----------
    study : LevelStudy
        Any.
    origin : Origin
        Its file.
    prefix : str
        Of every name in the chapter.
    """
    found, met = level_answer(study)
    rungs = ", ".join(str(n) for n in study.rungs.n_max.tolist())
    asked = (
        (f"rungs, {n_max_name(study.atom)}", rungs),
        ("error of x_e allowed", f"{found.within:g} at {found.low:g} < z < {found.high:g}"),
    )
    answered = found.n_max is not None and (met is None or met.n_max is not None)
    ok, outcome, word = study_headline(study.outcome, "" if answered else _OPEN)
    return Chapter(
        name=prefix,
        title=one_line(study.setup.title),
        what=_WHAT[study.atom],
        file=origin.name,
        ok=ok,
        outcome=outcome,
        word=word,
        answers=tuple(sentence(text) for text in _answers(study, found, met)),
        sections=(
            asked_section(prefix, study.setup, asked),
            Section(f"{prefix}-found", "What came out", _found(study, found, met)),
            Section(f"{prefix}-figures", "Figures", _pictures(study, prefix)),
            trust_section(prefix, _trust(study), study.notes),
            origin_section(prefix, origin),
        ),
    )


def _answers(study: LevelStudy, found: Verdict, met: Demands | None) -> tuple[str, ...]:
    longest = int(study.rungs.n_max[-1])
    said = [verdict_text(found, longest, study.atom)]
    if study.resolved is not None:
        said.append(resolved_text(study, found.within, found.low, found.high))
    if met is not None:
        said.append(demands_text(met, longest, study.atom))
    return tuple(said)


def _found(study: LevelStudy, found: Verdict, met: Demands | None) -> tuple[Block, ...]:
    blocks: list[Block] = [_rungs(study, found), _limit(study), _observables(study)]
    if study.resolved is not None:
        changes = shell_changes(study, found.low, found.high)
        rows = tuple(
            (f"n = {top}", f"{change:+.2e}")
            for top, change in zip(study.resolved.resolve_l_to.tolist(), changes, strict=True)
        )
        caption = (
            f"Whole shells in place of levels, n_max = {study.rungs.n_max[-1]}: largest relative "
            f"change of x_e at {found.low:g} < z < {found.high:g}"
        )
        blocks.append(Table(caption, ("l resolved up to", "change of x_e"), rows))
    if met is not None:
        blocks.append(_demands(study, met))
    return tuple(blocks)


def _rungs(study: LevelStudy, found: Verdict) -> Table:
    errors = rung_errors(study, found.low, found.high)
    populations = population_changes(study)
    rows = tuple(
        (str(n), f"{error:.2e}", f"{change:.1e}")
        for n, error, change in zip(study.rungs.n_max.tolist(), errors, populations, strict=True)
    )
    caption = (
        f"Truncation: largest relative error of x_e at {found.low:g} < z < {found.high:g}, its "
        "error bar counted, and largest difference of a population of hydrogen, n = 2 to 4, from "
        "that of the longest rung"
    )
    return Table(caption, (n_max_name(study.atom), "error of x_e", "populations"), rows)


def _limit(study: LevelStudy) -> Table:
    limit, longest = study.limit.free_electron_fraction, int(study.rungs.n_max[-1])
    last = study.rungs.free_electron_fraction[-1]
    rows = tuple(
        (
            f"{study.redshift[k]:.2f}",
            f"{limit.value[k]:.8e}",
            f"{limit.relative_error[k]:.1e}",
            f"{last[k] / limit.value[k] - 1.0:+.2e}",
            f"{limit.exponent[k]:.2f}" if math.isfinite(limit.exponent[k]) else "no law",
        )
        for k in sample_rows(study.redshift, study.atom)
    )
    head = ("z", "x_e, all levels", "error bar", f"x_e({longest}) / it - 1", "exponent")
    return Table("x_e carried to all levels, with relative error bars", head, rows)


def _observables(study: LevelStudy) -> Table:
    limit = study.limit.observable
    last = study.rungs.observable[-1]
    rows = []
    for k, name in enumerate(study.observable_names):
        value, bar = float(limit.value[k]), float(limit.relative_error[k])
        if not math.isfinite(value):
            rows.append((observable_label(name), "not reached", "", ""))
            continue
        unit = unit_text(study.observable_units[k])
        change = signed_percent(float(last[k]) / value - 1.0)
        rows.append((observable_label(name), f"{value:.8g} {unit}".rstrip(), f"{bar:.1e}", change))
    head = (
        "observable",
        "all levels",
        "error bar",
        f"{n_max_name(study.atom)} = {study.rungs.n_max[-1]}",
    )
    return Table("Observables carried to all levels", head, tuple(rows))


def _demands(study: LevelStudy, met: Demands) -> Table:
    head = (n_max_name(study.atom), *(limit_text(one) for one in met.longer))
    rows = tuple(
        (str(n), *(f"{one.error:.1e} {'ok' if one.passed else 'no'}" for one in line))
        for n, line in zip(study.rungs.n_max.tolist(), met.rungs, strict=True)
    )
    return Table("The requirement against every rung, error bars counted", head, rows)


def _pictures(study: LevelStudy, prefix: str) -> tuple[Picture, ...]:
    limit, rungs = study.limit.free_electron_fraction, study.rungs
    errors = rungs.free_electron_fraction / limit.value - 1.0
    late = int(np.argmin(np.abs(study.redshift - max(200.0, float(study.redshift[-1])))))
    n_max, name = rungs.n_max.tolist(), n_max_name(study.atom)
    pictures = [
        picture(
            partial(level_figure, study),
            f"{prefix}-levels",
            "Truncation error",
            f"Relative error of x_e against {name} (a), close to the limit of all levels "
            f"(b) and of each rung against redshift (c). At z = {study.redshift[late]:.0f}"
            f" it falls from {signed_percent(errors[0, late])} at {name} = {n_max[0]} to "
            f"{signed_percent(errors[-1, late])} at {name} = {n_max[-1]}.",
        )
    ]
    checked = check_held_out(study)
    if checked is not None:
        miss = float(np.nanmax(checked.largest_miss_over_bar))
        pictures.append(
            picture(
                partial(check_figure, study),
                f"{prefix}-check",
                "The longest rungs as foreseen from the shorter ones",
                "Misses over error bars, and the exponent of the approach, against redshift. The "
                f"largest miss is {miss:.2f} of the error bar.",
            )
        )
    if study.resolved is not None:
        pictures.append(
            picture(
                partial(resolve_figure, study),
                f"{prefix}-resolve",
                "Whole shells in place of levels",
                "Relative change of x_e against redshift where the shells above some n are "
                "populated by statistical weight; the table above has the largest.",
            )
        )
    return tuple(pictures)


def _trust(study: LevelStudy) -> tuple[Block, ...]:
    limit, checked = check_limit(study), check_held_out(study)
    rows = [("largest numerical error of x_e of one rung", f"{study.noise.common:.1e}")]
    if math.isfinite(limit.bar_over_correction):
        poor = "; poorly known" if limit.bar_over_correction > LARGE else ""
        rows.append(
            (
                "error bar of the limit over the correction to it",
                f"{100.0 * limit.bar_over_correction:.0f} % at most, at z = "
                f"{limit.redshift:.0f} ({limit.low:g} <= z <= {limit.high:g}){poor}",
            )
        )
    rows.append(
        ("redshifts without a law", f"{limit.n_without_law} of {limit.n_redshift} in that range")
    )
    if limit.n_far_below:
        rows.append(
            (
                f"redshifts with correction and bar below {limit.least:.0e} of x_e, left out",
                f"{limit.n_far_below} of {limit.n_redshift}",
            )
        )
    if checked is not None and study.held_out is not None:
        rows += [
            (
                f"{n_max_name(study.atom)} = {n}, foreseen from shorter rungs",
                f"off by at most {miss:.2f} of its error bar"
                + ("" if miss <= 1.0 else ": OUTSIDE THE BAR"),
            )
            for n, miss in zip(
                study.held_out.n_max.tolist(), checked.largest_miss_over_bar.tolist(), strict=True
            )
            if math.isfinite(miss)
        ]
    return (Facts(tuple(rows)),)
