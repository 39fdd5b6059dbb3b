"""Helium of a history, for the summary and for scripts."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ..arrays import IntArray
    from ..history.result import History

_FRACTIONS = (
    "neutral_helium_fraction",
    "singly_ionized_helium_fraction",
    "doubly_ionized_helium_fraction",
)
_HOW = (
    "handover_departure",
    "handover_ion_departure",
    "nodes",
    "interpolation_error",
    "conservation_error",
    "closure_error",
)


def helium_values(history: History, rows: list[int] | IntArray) -> dict[str, Any] | None:
    """Fractions at some outputs and how it went, under the names of the fields; None: inert."""
    if history.helium is None:
        return None
    found: dict[str, Any] = {"n_max": history.setup.helium.n_max}
    found |= {name: getattr(history, name)[rows] for name in _FRACTIONS}
    return found | {name: getattr(history.helium, name) for name in _HOW}


def helium_text(history: History) -> str:
    """How it went, for one line of a summary; empty where helium is inert."""
    how = history.helium
    if how is None:
        return ""
    # NaN where the outputs do not reach it.
    import numpy as np

    ends = {"left": np.nan, "right": np.nan}
    half = float(np.interp(0.5, history.neutral_helium_fraction, history.redshift, **ends))
    return (
        f"half neutral at z = {half:.0f}; hand-over lags {how.handover_departure:.1e} and "
        f"{how.handover_ion_departure:.1e}; charge and nuclei to {how.closure_error:.0e}"
    )
