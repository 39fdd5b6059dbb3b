"""``levelnet solve --compare-rates``: a history with overridden rates beside the one without."""

from __future__ import annotations

import dataclasses
import math
from typing import TYPE_CHECKING, Any

from ..errors import InputError
from ..quantities import OBSERVABLES
from .output import aligned

if TYPE_CHECKING:
    from ..history.result import History
    from ..history.setup import Setup

# Milestones that are no observables.
_LABELS = {"half_ionized_redshift": "half ionized", "transition_duration_s": "transition (s)"}


def without_overrides(setup: Setup) -> Setup:
    """Give the setup with every rate as computed; InputError where none is overridden."""
    from ..atomic.overrides import Rates

    if not setup.rates.table:
        raise InputError("--compare-rates: the setup overrides no rates (rates.overrides)")
    plain: Setup = dataclasses.replace(setup, rates=Rates())
    return plain


def further_observables(old: History, new: History, pieces: Any) -> dict[str, dict[str, float]]:
    """Old, new and relative change of the observables that are no milestones of a history."""
    from ..studies.rung import observables_of

    if not (old.outcome.ok and new.outcome.ok):
        return {}
    before, after = (observables_of(one.setup, pieces) for one in (old, new))
    pairs = zip(before.names, before.value.tolist(), after.value.tolist(), strict=True)
    marks = new.milestones.__slots__
    return {name: _change(a, b) for name, a, b in pairs if name not in marks}


def comparison_values(
    old: History, new: History, further: dict[str, dict[str, float]]
) -> dict[str, Any]:
    """Old, new and relative change of x_e at round redshifts, of milestones and observables.

    What is not reached is NaN.
    """
    from ..history.samples import sample_rows

    rows = [k for k in sample_rows(new.redshift) if k < len(old.redshift)]
    before, after = (one.free_electron_fraction[rows] for one in (old, new))
    marks = {
        name: _change(getattr(old.milestones, name), getattr(new.milestones, name))
        for name in new.milestones.__slots__
    }
    return {
        "old_setup_digest": old.setup.digest,
        "old_outcome": old.outcome.name,
        "overrides": [{"rates": one.text, "source": one.source} for one in new.setup.rates.table],
        "free_electron_fraction": {
            "redshift": new.redshift[rows],
            "old": before,
            "new": after,
            "relative_change": after / before - 1.0,
        },
        "milestones": marks,
        "observables": further,
    }


def _change(old: float, new: float) -> dict[str, float]:
    return {"old": old, "new": new, "relative_change": new / old - 1.0}


def _label(milestone: str) -> str:
    if milestone in _LABELS:
        return _LABELS[milestone]
    one = OBSERVABLES[milestone]
    return one.label if one.unit == "1" else f"{one.label} ({one.unit})"


def comparison_text(values: dict[str, Any], old: History, new: History) -> str:
    """Return the same as a table, old and new side by side."""
    electrons = values["free_electron_fraction"]
    lines = [("", "old", "new", "relative change")]
    columns = (electrons[name] for name in ("redshift", "old", "new", "relative_change"))
    lines += [
        (f"x_e at z = {z:.2f}", f"{a:.8e}", f"{b:.8e}", f"{change:+.2e}")
        for z, a, b, change in zip(*columns, strict=True)
    ]
    for name, pair in (values["milestones"] | values["observables"]).items():
        cells = (f"{pair['old']:.8g}", f"{pair['new']:.8g}", f"{pair['relative_change']:+.2e}")
        shown = cells if math.isfinite(pair["relative_change"]) else ("not reached", "", "")
        lines.append((_label(name), *shown))
    heads = [f"  {one['rates']}: {one['source']}" for one in values["overrides"]]
    limit = f"changes below {new.setup.accuracy.relative:g} (accuracy.relative) are not resolved"
    tail = [] if old.outcome.ok else [f"old: {old.outcome.value}"]
    return "\n".join(["overridden rates:", *heads, "", *aligned(lines), limit, *tail])
