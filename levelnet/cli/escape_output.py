"""A study of the escape as text for people and as plain values for JSON."""

from __future__ import annotations

import dataclasses
import math
from typing import TYPE_CHECKING, Any

from ..quantities import OBSERVABLES
from .output import aligned, field_values, plain_values, row

if TYPE_CHECKING:
    from ..arrays import FloatArray
    from ..studies.escape_records import EscapeStudy
    from ..studies.escape_verdict import EscapeDemands, EscapeVerdict

# Redshifts at which the effects of the switches are set side by side.
_SAMPLES = {"H I": (1300.0, 1100.0, 900.0), "He I": (2600.0, 2300.0, 2000.0, 1800.0)}
_WAYS = ("first", "last", "in order")


def escape_values(
    study: EscapeStudy, found: EscapeVerdict, met: EscapeDemands | None = None
) -> dict[str, Any]:
    """Collect a study, whole, with its verdict on x_e and, where asked, on a requirement."""
    from ..studies.escape_notes import demands_text, verdict_texts
    from ..studies.escape_verdict import differences, switch_effects, worse_than_absent

    worse = worse_than_absent(study, found.low, found.high)
    return {
        "title": study.setup.title,
        "setup_digest": study.setup.digest,
        "outcome": study.outcome.name,
        "ok": study.outcome.ok,
        "redshift": study.redshift,
        "observable_names": study.observable_names,
        "observable_units": study.observable_units,
        "variants": {**plain_values(study.variants), "difference": differences(study)},
        "treatments": study.treatments,
        "reference": study.reference,
        "switches": {
            **plain_values(study.switches),
            "effects": plain_values(switch_effects(study)),
        },
        "worse_than_absent": [dataclasses.asdict(one) for one in worse],
        "reference_error": plain_values(study.reference_error),
        "channels": plain_values(study.channels),
        "field": field_values(study.field),
        "verdict": {**dataclasses.asdict(found), "texts": verdict_texts(study, found)},
        "requirement": None
        if met is None
        else {**dataclasses.asdict(met), "text": demands_text(met)},
        "notes": study.notes,
    }


def escape_summary(
    study: EscapeStudy, found: EscapeVerdict, met: EscapeDemands | None = None
) -> str:
    """Return the summary of a study as lines of plain text."""
    from ..studies.escape_notes import demands_text, verdict_texts

    setup, names = study.setup, study.variants.name
    lines = [
        setup.title or "(no title)",
        row(
            "escape",
            f"setup {setup.digest}: {len(names)} variants, {_atom_text(study)}",
        ),
        row("outcome", study.outcome.value),
        "",
        *_difference_lines(study, found),
        "",
        *_switch_lines(study, found),
        "",
        *_share_lines(study),
        "",
    ]
    if met is not None:
        lines += [*_demand_lines(met), ""]
    lines += [row("verdict", text) for text in verdict_texts(study, found)]
    if met is not None:
        lines.append(row("verdict", demands_text(met)))
    return "\n".join([*lines, *(row("note", text) for text in study.notes)])


def _atom_text(study: EscapeStudy) -> str:
    setup = study.setup
    if study.species == "He I":
        return f"lines of He I, helium n_max = {setup.helium.n_max}, hydrogen by Sobolev"
    return f"hydrogen n_max = {setup.hydrogen.n_max}, lyman_lines = {setup.lines.lyman_lines}"


def _short(name: str) -> str:
    return OBSERVABLES[name].short if name in OBSERVABLES else name


def _difference_lines(study: EscapeStudy, found: EscapeVerdict) -> list[str]:
    """Each variant against the reference: x_e where it differs most, and the observables."""
    from ..studies.escape_verdict import largest_difference

    values = study.variants.observable
    changes = values / values[study.reference] - 1.0
    head = (
        "variant",
        f"x_e, {found.low:g} < z < {found.high:g}",
        "at z",
        *(_short(name) for name in study.observable_names),
    )
    body = []
    for k, name in enumerate(study.variants.name):
        if k == study.reference:
            continue
        one = largest_difference(study, k, found.low, found.high)
        seen = [_signed(change) for change in changes[k].tolist()]
        body.append((name, _signed(one.value), f"{one.redshift:.0f}", *seen))
    body.append(_error_row(study, found))
    return [
        f"relative difference from the reference, {study.variants.name[study.reference]}; of x_e "
        "the largest",
        *_table([head, *body]),
    ]


def _error_row(study: EscapeStudy, found: EscapeVerdict) -> tuple[str, ...]:
    own, seen = found.candidates[-1], study.reference_error.observable.tolist()
    bars = [f"{one:.1e}" if math.isfinite(one) else "-" for one in seen]
    return ("numerical error of it", f"{own.error:.1e}", f"{own.redshift:.0f}", *bars)


def _signed(value: float) -> str:
    return f"{value:+.1e}" if math.isfinite(value) else "-"


def _table(rows: list[tuple[str, ...]]) -> list[str]:
    """Columns of equal width, the first to the left and the others to the right."""
    width = max(len(one[0]) for one in rows)
    return aligned([(one[0].ljust(width), *one[1:]) for one in rows], right=True)


def _switch_lines(study: EscapeStudy, found: EscapeVerdict) -> list[str]:
    """What adding each switch does to x_e, the largest, then at some redshifts."""
    from ..studies.escape_verdict import switch_effects

    effects = switch_effects(study)
    curves = dict(zip(_WAYS, (effects.first, effects.last, effects.in_order), strict=True))
    return [
        f"change of x_e (%) by adding each switch, the largest at {found.low:g} < z < "
        f"{found.high:g}: first (to none), last (to",
        "all others), in order (to those above it); what a switch needs comes with it, what needs "
        "it goes with it",
        *_table(_largest_effects(study, found, curves)),
        "",
        *_table(_sampled_effects(study, curves)),
    ]


def _largest_effects(
    study: EscapeStudy, found: EscapeVerdict, curves: dict[str, FloatArray]
) -> list[tuple[str, ...]]:
    import numpy as np

    from ..studies.escape_verdict import worse_than_absent
    from ..studies.verdict import outputs_between

    inside = outputs_between(study.redshift, 1.0, found.low, found.high)
    worse = {one.name for one in worse_than_absent(study, found.low, found.high)}
    rows = [("switch", *curves, "")]
    for k, name in enumerate(study.switches.name):
        cells = []
        for curve in curves.values():
            place = inside[int(np.argmax(np.abs(curve[k, inside])))]
            cells.append(f"{100.0 * curve[k, place]:+.3f} at z = {study.redshift[place]:.0f}")
        alone = study.variants.name[study.switches.alone[k]]
        rows.append((name, *cells, "WORSE ALONE THAN ABSENT" if alone in worse else ""))
    return rows


def _sampled_effects(study: EscapeStudy, curves: dict[str, FloatArray]) -> list[tuple[str, ...]]:
    z = study.redshift
    places = [int(abs(z - one).argmin()) for one in _SAMPLES[study.species] if z[-1] <= one <= z[0]]
    heads = [(f"z = {z[k]:.0f}" if way == _WAYS[0] else "", way) for k in places for way in curves]
    rows = [("", *(place for place, _ in heads)), ("switch", *(way for _, way in heads))]
    for k, name in enumerate(study.switches.name):
        cells = [f"{100.0 * curve[k, at]:+.3f}" for at in places for curve in curves.values()]
        rows.append((name, *cells))
    return rows


def _share_lines(study: EscapeStudy) -> list[str]:
    """How atoms reached the ground state, by the end, in some variants."""
    shares = study.variants.cumulative_share
    shown = [k for k, one in enumerate(abs(shares).max(axis=0).tolist()) if one > 0.0]
    head = ("recombined through (%)", *(study.channels.names[k] for k in shown))
    places = [*study.treatments.tolist(), study.switches.base, *study.switches.cumulative.tolist()]
    body = [
        (study.variants.name[k], *(f"{100.0 * shares[k, c]:.3f}" for c in shown))
        for k in dict.fromkeys(places)
    ]
    return _table([head, *body])


def _demand_lines(met: EscapeDemands) -> list[str]:
    """Every demand on every candidate: error, that of the reference included, over its limit."""
    demands = met.findings[0]
    units = [" sigma" if one.unit == "sigma" else "" for one in demands]
    limits = [f"{one.limit:g}{unit}" for one, unit in zip(demands, units, strict=True)]
    body = [
        (name, *(f"{one.error:.1e} {'ok' if one.passed else 'no'}" for one in line))
        for name, line in zip(met.candidates, met.findings, strict=True)
    ]
    head = ("requirement", *(one.name for one in demands))
    return _table([head, ("limit", *limits), *body])
