"""The chapter of a sweep: many setups side by side."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from typing import Any

import numpy as np

from ...errors import Outcome, cut_short
from ...studies.sweep_record import Sweep
from ..sweep import case_curve, drawn_cases, sweep_figure
from .content import Block, Chapter, Facts, Listing, Origin, Picture, Section, Table
from .drawing import picture
from .wording import one_line, origin_section, short_name, trust_section, unit_text

_SHOWN = 30  # cases listed one by one
_REASONS = 50  # failed cases listed one by one
_OBSERVABLES = ("last_scattering_redshift", "sound_horizon_mpc", "damping_per_mpc")


def sweep_chapter(sweep: Sweep, origin: Origin, prefix: str) -> Chapter:
    """Everything a page says of a sweep.

    Parameters
    ----------
    sweep : Sweep
        Any, with failed cases or without.
    origin : Origin
        Its file.
    prefix : str
        Of every name in the chapter.
    """
    bad = len(sweep.not_ok)
    return Chapter(
        name=prefix,
        title=one_line(sweep.title),
        what="Sweep: many setups side by side",
        file=origin.name,
        ok=not bad,
        outcome=(
            f"{bad} of {len(sweep)} cases may not be used as they stand" if bad else _ALL_WELL
        ),
        answers=(_answer(sweep),),
        sections=(
            Section(f"{prefix}-asked", "What was asked", _asked(sweep)),
            Section(f"{prefix}-found", "What came out", (_ranges(sweep), _cases(sweep))),
            Section(f"{prefix}-figures", "Figures", _pictures(sweep, prefix)),
            trust_section(prefix, (), _notes(sweep)),
            origin_section(prefix, origin),
        ),
    )


_ALL_WELL = f"every case {Outcome.CONVERGED.value}"


def _answer(sweep: Sweep) -> str:
    counts = Counter(map(_ended, sweep.outcome))
    said = ", ".join(f"{count} {name}" for name, count in counts.items())
    return f"{len(sweep)} cases over {', '.join(sweep.swept) or 'nothing'}: {said}."


def _ended(outcome: str) -> str:
    return outcome.lower().replace("_", " ")


def _asked(sweep: Sweep) -> tuple[Block, ...]:
    rows = [("cases", str(len(sweep)))]
    rows += [(key, _range(column)) for key, column in zip(sweep.swept, sweep.columns, strict=True)]
    first = Listing("The whole setup of the first case as TOML", sweep.setups[0].rstrip("\n"))
    return Facts(tuple(rows)), first


def _range(column: Sequence[Any]) -> str:
    # NaN stands where a case leaves the key out.
    given = [one for one in column if not isinstance(one, float) or math.isfinite(one)]
    different = list(dict.fromkeys(given))
    if all(isinstance(one, str) for one in different):
        shown = ", ".join(different[:8])
        return f"{len(different)} values: {shown}" + (", ..." if len(different) > 8 else "")
    return f"{len(different)} values, {min(different):.6g} to {max(different):.6g}"


def _ranges(sweep: Sweep) -> Table:
    """Smallest and largest of each observable over the cases that reach it."""
    rows = []
    for name, unit in zip(sweep.observable_names, sweep.observable_units, strict=True):
        values = sweep[name][np.isfinite(sweep[name])]
        cells = [f"{values.min():.8g}", f"{values.max():.8g}"] if len(values) else ["", ""]
        rows.append((short_name(name), str(len(values)), *cells, unit_text(unit)))
    head = ("observable", "cases", "smallest", "largest", "unit")
    return Table("Observables over all cases that reach them", head, tuple(rows))


def _cases(sweep: Sweep) -> Table:
    count = len(sweep)
    shown = sorted({round(k * (count - 1) / max(1, _SHOWN - 1)) for k in range(_SHOWN)})
    names = [name for name in _OBSERVABLES if name in sweep.observable_names]
    rows = []
    for k in shown:
        swept = [_cell(column[k]) for column in sweep.columns]
        _, x_e = case_curve(sweep, k)
        last = f"{x_e[-1]:.6e}" if len(x_e) else "none"
        seen = [f"{sweep[name][k]:.7g}" if math.isfinite(sweep[name][k]) else "" for name in names]
        rows.append((str(k), *swept, _ended(sweep.outcome[k]), last, *seen))
    head = ("case", *sweep.swept, "outcome", "x_e at its end", *(short_name(one) for one in names))
    caption = (
        "The cases" if len(shown) == count else f"{len(shown)} of {count} cases, spread evenly"
    )
    return Table(caption, head, tuple(rows))


def _cell(value: object) -> str:
    if isinstance(value, float):
        return f"{value:.6g}" if math.isfinite(value) else "default"
    return cut_short(one_line(str(value)), 40)


def _pictures(sweep: Sweep, prefix: str) -> tuple[Picture, ...]:
    drawn = drawn_cases(sweep)
    said = "No case gave a history, so that the figure is empty."
    if drawn:
        ends = [float(case_curve(sweep, k)[1][-1]) for k in drawn]
        said = (
            f"x_e of {len(drawn)} cases against redshift, on a logarithmic axis (left), and its "
            f"difference in per cent from case {drawn[0]} (right). At the last output of each it "
            f"lies between {min(ends):.4g} and {max(ends):.4g}."
        )
    return (picture(sweep_figure(sweep), f"{prefix}-sweep", "Histories of all cases", said),)


def _notes(sweep: Sweep) -> tuple[str, ...]:
    notes = [
        f"warning: {sweep.label(k)}: {sweep.reason[k] or sweep.outcome[k]}"
        for k in sweep.not_ok[:_REASONS]
    ]
    if len(sweep.not_ok) > _REASONS:
        notes.append(f"warning: {len(sweep.not_ok) - _REASONS} more cases, listed in the file")
    return (
        *notes,
        "a sweep keeps no populations and no validity figures of its cases: solve the case that "
        "they are wanted of; its setup stands in the file",
    )
