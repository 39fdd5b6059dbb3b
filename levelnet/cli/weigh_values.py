"""What a weighing says, as plain values for JSON."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ..studies.budget_record import ErrorBudget
    from ..studies.groups import Shares
    from ..studies.weighing import Weighing


def weighing_values(weighing: Weighing, top: int) -> dict[str, Any]:
    """Collect what the summary shows; a single target stands at the top level too."""
    setup = weighing.setup
    targets = [target_values(weighing, target, top) for target in weighing.targets]
    return {
        **(targets[0] if len(targets) == 1 else {}),
        "title": setup.title,
        "setup_digest": setup.digest,
        "outcome": weighing.outcome.name,
        "ok": weighing.outcome.ok,
        "outcome_text": weighing.outcome.value,
        "hydrogen_n_max": setup.hydrogen.n_max,
        "n_levels": len(weighing.levels),
        "n_transitions": len(weighing.upper),
        "targets": targets,
        "band": band_values(weighing),
        "notes": list(weighing.notes),
    }


def target_values(weighing: Weighing, target: str, top: int) -> dict[str, Any]:
    """Value of one target and its derivatives by ln of rates and parameters."""
    from ..studies.groups import by_l, by_level, by_shell, top_transitions

    at = weighing.index(target)
    levels = by_level(weighing, target)
    first = abs(levels.bound_free).argsort(kind="stable")[::-1][:top]
    return {
        "target": target,
        "value": weighing.value[at],
        "unit": weighing.units[at],
        "processes": weighing.processes(target),
        "parameters": dict(zip(weighing.parameters, weighing.parameter[at], strict=True)),
        "lines": dict(zip(weighing.lines, weighing.escape[at], strict=True)),
        "top": [one._asdict() for one in top_transitions(weighing, target, top)],
        "top_levels": [
            {"name": levels.names[k], "weight": levels.bound_free[k]}
            for k in first
            if levels.bound_free[k] != 0.0
        ],
        "shells": _shares(by_shell(weighing, target)),
        "l": _shares(by_l(weighing, target)),
        "helium": helium_values(weighing, at, top),
        "helium_ion": _ion_values(weighing, at),
        "budget": budget_values(weighing.budget, target),
    }


def helium_values(weighing: Weighing, at: int, top: int) -> dict[str, Any] | None:
    """Derivatives of one target by the rates of He I; None where helium is inert."""
    from ..studies.helium_groups import (
        helium_shares,
        line_weights,
        top_helium_transitions,
        top_terms,
    )

    helium = weighing.helium
    if helium is None:
        return None
    return {
        "processes": helium.processes(at),
        "lines": line_weights(helium, at),
        "groups": helium_shares(helium, at),
        "top": [one._asdict() for one in top_helium_transitions(helium, at, top)],
        "top_levels": [one._asdict() for one in top_terms(helium, at, top)],
    }


def _ion_values(weighing: Weighing, at: int) -> dict[str, Any] | None:
    ion = weighing.helium_ion
    return None if ion is None else {"processes": ion.processes(at)}


def _shares(shares: Shares) -> dict[str, Any]:
    return {
        "names": list(shares.names),
        "bound_free": shares.bound_free,
        "bound_bound_as_upper": shares.as_upper,
        "bound_bound_as_lower": shares.as_lower,
    }


def budget_values(budget: ErrorBudget | None, target: str) -> dict[str, Any] | None:
    """Relative error of one target and the groups it comes from, the largest first."""
    if budget is None:
        return None
    return {
        "sigma": budget.sigma[budget.targets.index(target)],
        "contributions": [one._asdict() for one in budget.ranked(target)],
    }


def band_values(weighing: Weighing) -> dict[str, Any] | None:
    """x_e along redshift (ascending) with its relative error; None where the budget has none."""
    budget = weighing.budget
    if budget is None:
        return None
    band = budget.band()
    if len(band.redshift) < 2:
        return None
    parts = band.contribution[::-1].T
    return {
        "redshift": band.redshift[::-1],
        "free_electron_fraction": band.free_electron_fraction[::-1],
        "sigma": band.sigma[::-1],
        "contributions": dict(zip(budget.groups, parts, strict=True)),
    }
