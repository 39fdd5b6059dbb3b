"""Through which channels He II recombined to He I, added up over the outputs of a history."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from .result import History

# The sum is told where the outputs see the recombination begin, and so many lie within it.
_BEGUN, _FEWEST = 0.02, 8
# Below it x_HeI is in Saha equilibrium.
_RARE = 1e-4


def recombined_through(history: History) -> dict[str, float]:
    """Share of each channel in all recombinations to He I down to the last output.

    Parameters
    ----------
    history : History
        Any.

    Returns
    -------
    dict of str to float, dimensionless
        By the names in `history.helium.channels`, the largest first; they sum to 1. Empty where
        helium is inert or held in Saha equilibrium throughout, where the outputs begin after 2 per
        cent of it are neutral, or where fewer than eight of them lie between that and 98 per cent.

    Notes
    -----
    The share of each channel in the net rate, times the gain of x_HeI, by the trapezoidal rule over
    the outputs: with 50 of them from z = 3500 to 1600 it is good to a per cent of all atoms.
    """
    if history.helium is None:
        return {}
    neutral = history.neutral_helium_fraction
    within = (neutral > _BEGUN) & (neutral < 1.0 - _BEGUN)
    if neutral[0] > _BEGUN or np.sum(within) < _FEWEST:
        return {}
    rate = history.helium.net_rate_per_s
    known = np.isfinite(rate).all(axis=1)  # NaN once helium is held, when none is left
    share, gain = rate[known] / rate[known].sum(axis=1, keepdims=True), np.diff(neutral[known])
    # In equilibrium the net rate is rounding, and its shares may be anything; little is gained.
    share[neutral[known] < _RARE] = 0.0
    added = (0.5 * (share[1:] + share[:-1]) * gain[:, None]).sum(axis=0)
    order = np.argsort(-added, kind="stable").tolist()
    return {history.helium.channels[k]: float(added[k] / added.sum()) for k in order}


def through_text(history: History) -> str:
    """Say it in one line; empty where it is not known."""
    found = recombined_through(history)
    return ", ".join(f"{name} {100.0 * share:.1f} %" for name, share in found.items())
