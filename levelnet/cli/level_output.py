"""A study of truncations as text for people and as plain values for JSON."""

from __future__ import annotations

import dataclasses
import math
from typing import TYPE_CHECKING, Any

from ..quantities import OBSERVABLES
from .output import aligned, plain_values, row

if TYPE_CHECKING:
    from ..studies.level_records import LevelStudy
    from ..studies.level_requirement import Demands
    from ..studies.verdict import Verdict


def level_values(study: LevelStudy, found: Verdict, met: Demands | None = None) -> dict[str, Any]:
    """Collect a study, whole, with its verdict on x_e and, where asked, on a requirement."""
    from ..studies.level_checks import check_held_out, check_limit
    from ..studies.level_requirement import demands_text
    from ..studies.verdict import population_changes, rung_errors, verdict_text

    rungs = study.rungs
    return {
        "title": study.setup.title,
        "setup_digest": study.setup.digest,
        "atom": study.atom,
        "outcome": study.outcome.name,
        "ok": study.outcome.ok,
        "rungs": {
            **plain_values(rungs),
            "largest_error": rung_errors(study, found.low, found.high),
            "largest_population_change": population_changes(study),
        },
        "redshift": study.redshift,
        "observable_names": study.observable_names,
        "observable_units": study.observable_units,
        "population_redshift": study.population_redshift,
        "level_n": study.level_n,
        "level_l": study.level_l,
        "limit": plain_values(study.limit),
        "limit_check": plain_values(check_limit(study)),
        "noise": plain_values(study.noise),
        "held_out": None
        if study.held_out is None
        else {**plain_values(study.held_out), **plain_values(check_held_out(study))},
        "resolved": None if study.resolved is None else _resolved_values(study, found),
        "verdict": {
            **dataclasses.asdict(found),
            "text": verdict_text(found, int(rungs.n_max[-1]), study.atom),
        },
        "requirement": None
        if met is None
        else {
            **dataclasses.asdict(met),
            "text": demands_text(met, int(rungs.n_max[-1]), study.atom),
        },
        "notes": study.notes,
    }


def _resolved_values(study: LevelStudy, found: Verdict) -> dict[str, Any]:
    from ..studies.level_checks import enough_resolved, resolved_text, shell_changes

    return {
        **plain_values(study.resolved),
        "largest_change": shell_changes(study, found.low, found.high),
        "enough": enough_resolved(study, found.within, found.low, found.high),
        "text": resolved_text(study, found.within, found.low, found.high),
    }


def level_summary(study: LevelStudy, found: Verdict, met: Demands | None = None) -> str:
    """Return the summary of a study as lines of plain text."""
    from ..studies.level_checks import resolved_text
    from ..studies.level_requirement import demands_text
    from ..studies.verdict import n_max_name, verdict_text

    rungs = ", ".join(str(n) for n in study.rungs.n_max.tolist())
    head = [
        study.setup.title or "(no title)",
        row("levels", f"setup {study.setup.digest}: {n_max_name(study.atom)} = {rungs}"),
        row("outcome", study.outcome.value),
        "",
        *_rung_lines(study, found),
        "",
        *_limit_lines(study),
        "",
        *_observable_lines(study),
        "",
    ]
    body = [row("verdict", verdict_text(found, int(study.rungs.n_max[-1]), study.atom))]
    if study.resolved is not None:
        head += [*_resolved_lines(study, found), ""]
        body.append(row("verdict", resolved_text(study, found.within, found.low, found.high)))
    if met is not None:
        head += [*_demand_lines(study, met), ""]
        body.append(row("verdict", demands_text(met, int(study.rungs.n_max[-1]), study.atom)))
    return "\n".join(
        [*head, *body, *_check_lines(study), *(row("note", text) for text in study.notes)]
    )


def _resolved_lines(study: LevelStudy, found: Verdict) -> list[str]:
    """What whole shells above some n do to x_e of the longest rung."""
    from ..studies.level_checks import shell_changes

    assert study.resolved is not None
    changes = shell_changes(study, found.low, found.high)
    head = ("l resolved up to", f"change of x_e, {found.low:g} < z < {found.high:g}")
    body = [
        (f"n = {top}", f"{change:+.2e}")
        for top, change in zip(study.resolved.resolve_l_to.tolist(), changes, strict=True)
    ]
    longest = study.rungs.n_max[-1]
    return [
        f"whole shells in place of levels, n_max = {longest}: largest relative change",
        *aligned([head, *body], right=True),
    ]


def _demand_lines(study: LevelStudy, met: Demands) -> list[str]:
    """Every demand on every rung: error, bar included, over its limit."""
    head = ("requirement", "limit", *(str(n) for n in study.rungs.n_max.tolist()))
    body = []
    for k, demand in enumerate(met.rungs[0]):
        unit = " sigma" if demand.unit == "sigma" else ""
        line = [rung[k] for rung in met.rungs]
        cells = [f"{one.error:.1e} {'ok' if one.passed else 'no'}" for one in line]
        body.append((demand.name, f"{demand.limit:g}{unit}", *cells))
    return aligned([head, *body], right=True)


def _short(name: str) -> str:
    """Head of the column of an observable; an optical depth goes by its name."""
    return OBSERVABLES[name].short if name in OBSERVABLES else name


def _rung_lines(study: LevelStudy, found: Verdict) -> list[str]:
    """Errors of each rung against the limit: x_e with its bar, observables without."""
    import numpy as np

    from ..studies.verdict import population_changes, rung_errors

    names = [_short(name) for name in study.observable_names]
    errors = study.rungs.observable / study.limit.observable.value - 1.0
    largest = rung_errors(study, found.low, found.high)
    populations = population_changes(study)
    head = ("n_max", f"x_e, {found.low:g} < z < {found.high:g}", "n = 2 to 4", *names)
    body = []
    for k, n in enumerate(study.rungs.n_max.tolist()):
        seen = [f"{one:+.1e}" if np.isfinite(one) else "-" for one in errors[k]]
        body.append((str(n), f"{largest[k]:.2e}", f"{populations[k]:.1e}", *seen))
    return [
        "relative error by truncation; of x_e the largest, error bar included; of populations of "
        "hydrogen, n = 2 to 4, the",
        "largest difference from the longest rung at any redshift",
        *aligned([head, *body], right=True),
    ]


def _limit_lines(study: LevelStudy) -> list[str]:
    from ..history.samples import sample_rows

    limit, longest = study.limit.free_electron_fraction, study.rungs.n_max[-1]
    last = study.rungs.free_electron_fraction[-1]
    head = ("z", "x_e, all levels", "error bar", f"x_e({longest})/x_e - 1", "exponent")
    body = [
        (
            f"{study.redshift[k]:.2f}",
            f"{limit.value[k]:.8e}",
            f"{limit.relative_error[k]:.1e}",
            f"{last[k] / limit.value[k] - 1.0:+.2e}",
            f"{limit.exponent[k]:.2f}" if limit.fitted[k] else "no law",
        )
        for k in sample_rows(study.redshift, study.atom)
    ]
    return aligned([head, *body], right=True)


def _observable_lines(study: LevelStudy) -> list[str]:
    """What an observer sees, for all levels."""
    limit = study.limit.observable
    head = ("observable, all levels", "value", "error bar", "unit")
    body = [
        (
            _short(name),
            f"{value:.8g}" if math.isfinite(value) else "not reached",
            f"{value * bar:.1e}" if math.isfinite(value) else "-",
            "" if unit == "1" else unit,
        )
        for name, unit, value, bar in zip(
            study.observable_names,
            study.observable_units,
            limit.value.tolist(),
            limit.relative_error.tolist(),
            strict=True,
        )
    ]
    return aligned([head, *body])


def _check_lines(study: LevelStudy) -> list[str]:
    from ..studies.level_checks import check_held_out

    held, figures = study.held_out, check_held_out(study)
    if held is None or figures is None:
        none = "none: six rungs or more are needed to hold one out of the fit"
        return [row("check", none), row("limit", _limit_text(study))]
    shorter = int(study.rungs.n_max[-len(held.n_max) - 1])
    lines = [
        row(
            "check",
            f"x_e of n_max = {n}, foreseen from rungs up to {shorter}: off by at most "
            f"{miss:.2f} of its error bar at every z"
            + ("" if miss <= 1.0 else ", OUTSIDE THE BAR")
            + (
                ""
                if math.isnan(bar)
                else f"; the bar is at most {100.0 * bar:.0f} % of the correction"
            ),
        )
        for n, miss, bar in zip(
            held.n_max.tolist(),
            figures.largest_miss_over_bar.tolist(),
            figures.largest_bar_over_correction.tolist(),
            strict=True,
        )
        if math.isfinite(miss)
    ]
    return [*lines, row("limit", _limit_text(study))]


def _bar_text(bar: float) -> str:
    """Bar over correction; nothing where no correction is large enough to tell."""
    return "" if math.isnan(bar) else f"; the bar is at most {100.0 * bar:.0f} % of the correction"


def _limit_text(study: LevelStudy) -> str:
    """Say how well the limit of x_e is known."""
    from ..studies.level_checks import LARGE, check_limit

    found = check_limit(study)
    place = f"{found.low:g} <= z <= {found.high:g}"
    counts = f"{found.n_without_law} of {found.n_redshift} redshifts"
    if found.n_without_law == found.n_redshift:
        return f"no law is fitted at any of the {found.n_redshift} redshifts in {place}"
    left_out = f"; {counts}, without a law, left out" if found.n_without_law else ""
    if found.n_far_below:
        left_out += (
            f"; {found.n_far_below}, where correction and bar are below {found.least:.0e} of x_e, "
            "left out"
        )
    if math.isnan(found.bar_over_correction):
        return (
            f"correction and error bar are below {found.least:.0e} of x_e wherever a law is "
            f"fitted, far below what is asked ({place})"
        )
    text = (
        f"its error bar is at most {100.0 * found.bar_over_correction:.0f} % of the correction "
        f"from the longest rung to all levels (at z = {found.redshift:.0f}; {place}{left_out})"
    )
    if found.bar_over_correction > LARGE:
        text += (
            f": MORE THAN {100.0 * LARGE:.0f} %, so the limit is poorly known; take more rungs, in "
            "steps of sqrt(2), or longer ones"
        )
    return text
