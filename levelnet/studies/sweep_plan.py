"""What a sweep will take, foreseen from its setups alone."""

from __future__ import annotations

from collections.abc import Sequence

from ..errors import InputError
from ..history.cost import Cost, check_fits, estimate
from ..pieces import Pieces
from .plans import Plan, make_plan, with_first_use
from .sweep import first_of_each_atom
from .sweep_cases import Cases
from .sweep_run import case_key, unpacked


def plan_sweep(
    cases: Cases,
    chosen: Sequence[int],
    workers: int,
    finished: Pieces,
    optical_depth_to: tuple[float, ...] = (),
) -> Plan:
    """Plan the chosen cases that are not finished; cases with the same atom share its reductions.

    Raises
    ------
    InputError
        If the largest cases cannot be in memory at once; with the figure and the case.
    """
    check_sweep_memory(cases, chosen, workers)
    missing = dict[str, int]()
    for k in chosen:
        key = case_key(cases.setups[k], optical_depth_to)
        one = unpacked(finished.get(key))
        if one is None or not one.lasting:
            missing.setdefault(key, k)
    what = f"sweep of {len(chosen)} cases, {len(chosen) - len(missing)} of them there already,"
    setups = [cases.setups[k] for k in missing.values()]
    if not setups:
        return make_plan(what, [cases.setups[0]], [Cost(0.0, 0.0)], 1)
    first = set(first_of_each_atom(setups))
    costs = [estimate(one, 0, reduced=k not in first) for k, one in enumerate(setups)]
    return with_first_use(make_plan(what, setups, costs, workers), setups)


def check_sweep_memory(cases: Cases, chosen: Sequence[int], workers: int) -> None:
    """Refuse with the figure what cannot fit: as many of the largest as there are workers."""
    sizes = {k: estimate(cases.setups[k], 0).memory_bytes for k in chosen}
    ranked = sorted(sizes, key=lambda k: -sizes[k])[:workers]
    if not ranked:  # a shard may have no case
        return
    try:
        check_fits(cases.setups[ranked[0]], sum(sizes[k] for k in ranked), len(ranked))
    except InputError as error:
        raise InputError(f"{cases.label(ranked[0])}: {error}") from None
