"""What a sweep came to, as text for people and as plain values for JSON."""

from __future__ import annotations

import itertools
from collections import Counter
from pathlib import Path
from typing import TYPE_CHECKING, Any

from .output import aligned, row

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ..studies.sweep import Progressed
    from ..studies.sweep_cases import Cases
    from ..studies.sweep_record import Sweep

_SHOWN = 10  # cases listed one by one
_SHOWN_OBSERVABLES = ("last_scattering_redshift", "sound_horizon_mpc", "drag_redshift")


def sweep_values(sweep: Sweep, done: Progressed | None = None) -> dict[str, Any]:
    """Collect what the summary shows, with every observable."""
    return {
        "title": sweep.title,
        "n_cases": len(sweep),
        "swept": {key: list(c) for key, c in zip(sweep.swept, sweep.columns, strict=True)},
        "outcomes": dict(Counter(sweep.outcome)),
        "not_ok": [
            {"case": k, "outcome": sweep.outcome[k], "reason": sweep.reason[k]}
            for k in sweep.not_ok
        ],
        "observables": {name: sweep[name] for name in sweep.observable_names},
        "observable_units": dict(zip(sweep.observable_names, sweep.observable_units, strict=True)),
        "notes": [{"cases": list(cases), "note": text} for text, cases in sweep.notes().items()],
        **({} if done is None else _counts(done)),
    }


def sweep_summary(sweep: Sweep, done: Progressed | None = None) -> str:
    """Return the summary of a sweep as lines of plain text."""
    lines = [
        sweep.title or "(no title)",
        row("cases", f"{len(sweep)}: {_counted(sweep.outcome)}"),
        row("over", "; ".join(map(_range, sweep.swept, sweep.columns)) or "nothing"),
        *_done(done),
        "",
        *_table(sweep),
    ]
    labels = {k: sweep.label(k) for k in sweep.not_ok[:_SHOWN]}
    bad = [(labels[k], sweep.reason[k]) for k in labels]
    return "\n".join([*lines, *_notes(sweep), *_not_ok(bad, len(sweep.not_ok))])


def _notes(sweep: Sweep) -> list[str]:
    """What cases that are ok do not reach."""
    found = sweep.notes()
    lines = [
        row("note", f"{_whose(sweep, cases)}: {text}")
        for text, cases in itertools.islice(found.items(), _SHOWN)
    ]
    if len(found) > _SHOWN:
        lines.append(row("", f"and {len(found) - _SHOWN} more"))
    return ["", *lines] if lines else []


def _whose(sweep: Sweep, cases: tuple[int, ...]) -> str:
    if len(cases) == len(sweep):
        return "every case"
    more = f" and {len(cases) - 1} more" if len(cases) > 1 else ""
    return f"{sweep.label(cases[0])}{more}"


def _counted(outcomes: Sequence[str]) -> str:
    return ", ".join(f"{count} {name}" for name, count in Counter(outcomes).most_common())


def _done(done: Progressed | None) -> list[str]:
    if done is None:
        return []
    lost = f", {done.unanswered} without an answer" if done.unanswered else ""
    return [row("done now", f"{done.computed} computed{lost}, {done.found} were there")]


def _counts(done: Progressed) -> dict[str, int]:
    return {"computed": done.computed, "found": done.found, "unanswered": done.unanswered}


def _range(key: str, column: Sequence[Any]) -> str:
    different = list(dict.fromkeys(column))
    if len(different) <= 1:
        return f"{key} = {different[0]}" if different else key
    if isinstance(different[0], str):
        return f"{key} ({len(different)} values)"
    return f"{key} ({len(different)} values, {min(different):.6g} to {max(different):.6g})"


def _table(sweep: Sweep) -> list[str]:
    """A few cases, spread evenly, with a few observables."""
    from ..quantities import OBSERVABLES

    count = len(sweep)
    rows = sorted({round(k * (count - 1) / max(1, _SHOWN - 1)) for k in range(_SHOWN)})
    head = ("case", *sweep.swept, *(OBSERVABLES[name].short for name in _SHOWN_OBSERVABLES))
    body = [
        (
            str(k),
            *(_cell(column[k]) for column in sweep.columns),
            *(f"{sweep[name][k]:.6g}" for name in _SHOWN_OBSERVABLES),
        )
        for k in rows
        if k < count
    ]
    return aligned([head, *body], right=True)


def _cell(value: Any) -> str:
    return f"{value:.8g}" if isinstance(value, float) else str(value)[:24]


def _not_ok(bad: Sequence[tuple[str, str]], count: int) -> list[str]:
    if not count:
        return []
    lines = ["", *(row("not ok", f"{label}: {reason}") for label, reason in bad)]
    return lines + ([row("", f"and {count - len(bad)} more")] if count > len(bad) else [])


def shard_values(cases: Cases, chosen: range, done: Progressed, folder: Path) -> dict[str, Any]:
    """Collect what the summary of a shard shows."""
    return {
        "n_cases": len(cases),
        "shard_cases": len(chosen),
        **_counts(done),
        "not_ok": [{"case": k, "reason": reason} for k, reason in done.not_ok.items()],
        "folder": str(folder),
    }


def shard_summary(cases: Cases, chosen: range, done: Progressed, folder: Path) -> str:
    """Return the summary of one shard; its cases stand in the folder, not in a file yet."""
    lines = [
        cases.title or "(no title)",
        row("cases", f"{len(chosen)} of {len(cases)}, {len(done.not_ok)} of them not ok"),
        *_done(done),
        row("kept in", str(folder)),
    ]
    bad = [(cases.label(k), reason) for k, reason in list(done.not_ok.items())[:_SHOWN]]
    return "\n".join([*lines, *_not_ok(bad, len(done.not_ok))])
