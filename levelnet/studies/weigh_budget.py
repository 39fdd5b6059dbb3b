"""A weighing with its error budget, in as many parts as memory asks for."""

from __future__ import annotations

import dataclasses
import itertools
from collections.abc import Sequence

import numpy as np

from ..history.cost import available_memory_bytes
from ..history.integrate import Progress
from ..history.setup import Setup
from ..pieces import Pieces
from . import weigh as engine
from .budget import Uncertainty, error_budget, load_uncertainties
from .budget_record import ErrorBudget
from .weighing import Weighing

# Of the free memory, what the derivatives of one part may take.
_SHARE = 0.3


def weigh_with_budget(
    setup: Setup,
    targets: Sequence[str],
    band: Sequence[str],
    uncertainties: Sequence[Uncertainty],
    *,
    progress: Progress | None = None,
    pieces: Pieces | None = None,
) -> Weighing:
    """Weigh targets, and budget their errors and those of further ones.

    Parameters
    ----------
    setup, targets, progress, pieces
        As for :func:`levelnet.weigh`.
    band : sequence of str
        Further targets whose error alone is wanted, such as x_e at many redshifts; the derivatives
        by every rate, 3 n_max^3 bytes each, are not kept.
    uncertainties : sequence of Uncertainty
        From :func:`levelnet.studies.budget.uncertainties_in`.

    Returns
    -------
    Weighing
        Of `targets`, with the budget of `targets` and `band`.
    """
    further = [name for name in band if name not in targets]
    sizes = parts_of(setup, len(targets), len(further))
    left = iter([*targets, *further])
    parts = [list(itertools.islice(left, size)) for size in sizes]
    kept: Weighing | None = None
    budgets: list[ErrorBudget] = []
    for part in parts:
        found = engine.weigh(setup, part, progress=progress, pieces=pieces)
        budgets.append(error_budget(found, uncertainties))
        kept = found.first(len(targets)) if kept is None else kept
    assert kept is not None
    notes = (*kept.notes, *budget_notes(setup, uncertainties))
    return dataclasses.replace(kept, budget=joined(budgets), notes=notes)


def parts_of(setup: Setup, n_targets: int, n_further: int) -> list[int]:
    """Sizes of the parts in which derivatives are made: all targets first, then what fits."""
    most = max(1, int(_SHARE * available_memory_bytes() / engine.bytes_per_target(setup)))
    first = min(n_further, max(0, most - n_targets))
    return [n_targets + first, *(min(most, n_further - k) for k in range(first, n_further, most))]


def budget_notes(setup: Setup, uncertainties: Sequence[Uncertainty]) -> tuple[str, ...]:
    """What to know of a budget by the default table; nothing where one's own is used instead.

    Parameters
    ----------
    setup : Setup
        Of the history that was weighed.
    uncertainties : sequence of Uncertainty
        Rows of the budget.

    Returns
    -------
    tuple of str
        One statement each.
    """
    default = load_uncertainties()
    used = [one for one in uncertainties if one in default]
    if not used:
        return ()
    notes = [
        "error budget: most rows of the default table are estimates; each source says how made"
    ]
    lines = setup.lines
    if lines.hydrogen != "sobolev":
        notes.append(f'error budget: the error of lines = "{lines.hydrogen}" is not in it')
    elif any(one.selector.process == "escape" for one in used):
        notes.append(
            "error budget: rows on escape stand for what Sobolev escape leaves out, shifts of "
            "known sign, not uncertain rates"
        )
    if lines.two_photon == "stimulated":
        notes.append('error budget: the error of two_photon = "stimulated" is not in it')
    if setup.helium_recombines:
        notes += _helium_notes(setup)
    return tuple(notes)


def _helium_notes(setup: Setup) -> list[str]:
    """What the default rows of helium stand for under this treatment of its lines."""
    name, choice = setup.lines.helium or "sobolev", setup.lines.helium_continuum
    if choice is None:
        return [
            f'error budget: what lines.helium = "{name}" leaves out, the H I continuum inside the '
            "lines of He I, is not in it: per cents of x_e below z = 2200"
        ]
    if choice.redistribution != "partial":
        return [
            f'error budget: the error of redistribution = "{choice.redistribution}" in the lines '
            "of He I is not in it: per cents of x_e below z = 2200"
        ]
    return [
        "error budget: the row on escape from 584 A stands for diffusion in the line, a shift of "
        "known sign that partial redistribution leaves out"
    ]


def joined(budgets: Sequence[ErrorBudget]) -> ErrorBudget:
    """One budget of all targets, from budgets of the same uncertainties."""
    first = budgets[0]
    return ErrorBudget(
        tuple(name for one in budgets for name in one.targets),
        tuple(unit for one in budgets for unit in one.units),
        np.concatenate([one.value for one in budgets]),
        np.concatenate([one.sigma for one in budgets]),
        first.groups,
        np.concatenate([one.contribution for one in budgets]),
        first.sources,
        first.rows,
    )
