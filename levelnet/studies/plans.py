"""What long work will take, foreseen from the setup alone; what cannot fit is refused.

Times are those of :mod:`levelnet.history.cost`, good to a factor of two or three; what pieces of an
earlier run may save is not known beforehand. Where this machine has not compiled the kernels yet,
that is added (:mod:`levelnet.studies.first_use`).
"""

from __future__ import annotations

import dataclasses
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from ..distilled.build import (
    check_distillable,
    coldest_node_k,
    default_range_k,
    expected_reductions,
)
from ..history.cost import (
    Cost,
    available_memory_bytes,
    check_fits,
    check_memory,
    estimate,
    node_seconds,
)
from ..history.setup import Setup
from .escape import plan_costs
from .escape_plan import Plan as EscapePlan
from .first_use import first_use
from .helium_ladder import Atom
from .levels import POPULATION_REDSHIFTS, ladder_jobs
from .rung import study_setup
from .weigh import bytes_per_target
from .weigh_budget import parts_of

# A weighing solves once, takes every reduction once more backwards, and sums over the steps.
_HISTORIES_OF_A_WEIGHING = 3.0
# The histories of a certificate, measured at n_max = 40; they hardly depend on it.
_CERTIFICATE_S = 6.0
# What helium adds to them, measured at n_max = 3 with lines by Sobolev; where hydrogen absorbs in
# the lines an evaluation takes three times as long, and their escape is tabulated for a minute.
_HELIUM_CERTIFICATE_S, _ABSORBED, _ESCAPE_TABLE_S = 24.0, 3.0, 60.0


@dataclass(frozen=True, slots=True)
class Plan:
    """Predicted cost of some work.

    Attributes
    ----------
    what : str
        What was checked, with the digest of its setup.
    runs : int
        Histories (or, of a table, reductions) to be computed.
    workers : int
        Processes that share them.
    memory_bytes, available_bytes : float, bytes
        Largest memory in use by all of them at once, and what is there.
    seconds, processor_seconds : float, s
        Time on the clock, and on one processor.
    setup_digest : str
        Of the one setup that it is about; "" for several.
    first_use_of : tuple of str
        For what code is compiled first, as this machine has not kept it; in all figures.
    first_use_s : float, s
        How long that takes.
    """

    what: str
    runs: int
    workers: int
    memory_bytes: float
    available_bytes: float
    seconds: float
    processor_seconds: float
    setup_digest: str = ""
    first_use_of: tuple[str, ...] = ()
    first_use_s: float = 0.0


def make_plan(
    what: str, setups: Sequence[Setup], costs: Sequence[Cost], workers: int, first_s: float = 0.0
) -> Plan:
    """Put runs together; InputError, with the figure, if the largest cannot be there at once.

    Parameters
    ----------
    what : str
        What is planned.
    setups, costs : sequence of Setup and of Cost
        One for each run.
    workers : int
        Processes that share them.
    first_s : float, s
        Part of the time that is over before these share the rest.
    """
    ranked = sorted(costs, key=lambda one: -one.memory_bytes)
    needed = sum(one.memory_bytes for one in ranked[:workers])
    largest = max(setups, key=lambda one: one.hydrogen.n_max)
    check_fits(largest, needed, min(workers, len(costs)))
    total = sum(one.seconds for one in costs)
    longest = max(one.seconds for one in costs)
    shared = max(longest, (total - first_s) / workers)
    clock = total if workers == 1 else min(total, first_s + shared)
    return Plan(what, len(costs), workers, needed, available_memory_bytes(), clock, total)


def with_first_use(plan: Plan, setups: Iterable[Setup], tables: bool = False) -> Plan:
    """Add the compilation that these setups, and histories from `tables`, need on this machine."""
    processes = min(plan.workers, plan.runs)
    more = first_use(setups, processes, tables)
    return dataclasses.replace(
        plan,
        memory_bytes=plan.memory_bytes + more.memory_bytes,
        seconds=plan.seconds + more.seconds,
        processor_seconds=plan.processor_seconds + more.processor_seconds,
        first_use_of=more.names,
        first_use_s=more.seconds,
    )


def plan_solve(setup: Setup) -> Plan:
    """One history."""
    plan = make_plan(f"setup {setup.digest}", [setup], [check_memory(setup)], 1)
    return _about(setup, with_first_use(plan, [setup]))


def plan_levels(
    setup: Setup,
    rungs: Sequence[int],
    resolve: Sequence[int],
    also_at: Sequence[float],
    workers: int,
    atom: Atom = "hydrogen",
) -> Plan:
    """A study of levels: every rung, and the two shortest once more."""
    jobs, coarse = ladder_jobs(study_setup(setup, also_at), rungs, resolve, atom)
    check_memory(jobs[len(rungs) - 1], workers)
    every = [*jobs, *coarse]
    costs = [estimate(one, POPULATION_REDSHIFTS) for one in every]
    plan = make_plan(f"ladder of setup {setup.digest}", every, costs, workers)
    return _about(setup, with_first_use(plan, every))


def plan_escape(
    setup: Setup, plans: Sequence[EscapePlan], also_at: Sequence[float], workers: int
) -> Plan:
    """A study of the escape by one plan or both; the variants of each share a reduced network."""
    on_grid = study_setup(setup, also_at)
    each = [plan_costs(on_grid, plan) for plan in plans]
    for plan, (variants, _) in zip(plans, each, strict=True):
        check_memory(variants[plan.reference], workers)
    first = sum(costs[plan.base].seconds for plan, (_, costs) in zip(plans, each, strict=True))
    setups = [one for of_plan, _ in each for one in of_plan]
    costs = [one for _, of_plan in each for one in of_plan]
    what = f"variants of setup {setup.digest}"
    return _about(setup, with_first_use(make_plan(what, setups, costs, workers, first), setups))


def plan_distill(
    setup: Setup,
    tolerance: float,
    certify: bool,
    workers: int,
    kept: Iterable[tuple[int, int]] | None = None,
) -> Plan:
    """A table of effective rates: reductions for its series, for the reference, and at points."""
    check_distillable(setup, kept, tolerance)
    count = expected_reductions(setup, tolerance, certify)
    coldest_k = coldest_node_k(default_range_k(setup), certify)
    atom = check_memory(setup, workers, populations=0, coldest_k=coldest_k)
    one = Cost(atom.memory_bytes, node_seconds(setup))
    certificate = Cost(one.memory_bytes, _once_s(setup, certify))
    costs = [certificate, *[one] * count]
    what = f"table of setup {setup.digest}"
    plan = make_plan(what, [setup], costs, workers, certificate.seconds)
    plan = with_first_use(dataclasses.replace(plan, runs=count), [setup], tables=certify)
    return _about(setup, plan)


def _once_s(setup: Setup, certify: bool) -> float:
    """Time of what a table takes besides reductions of hydrogen, in s; one process does it."""
    seconds = _CERTIFICATE_S if certify else 0.0
    if not setup.helium_recombines:
        return seconds
    absorbs = setup.lines.helium == "continuum"
    if certify:
        seconds += _HELIUM_CERTIFICATE_S * (_ABSORBED if absorbs else 1.0)
    return seconds + (_ESCAPE_TABLE_S if absorbs else 0.0)


def plan_weigh(setup: Setup, n_targets: int, n_band: int) -> Plan:
    """A weighing, in as many parts as the derivatives of its targets need to fit."""
    first, *others = parts_of(setup, n_targets, n_band)
    largest = max([first, *others])
    cost = check_memory(setup, more_bytes=largest * bytes_per_target(setup))
    each = Cost(cost.memory_bytes, _HISTORIES_OF_A_WEIGHING * cost.seconds)
    again = Cost(cost.memory_bytes, (_HISTORIES_OF_A_WEIGHING - 1.0) * cost.seconds)
    costs = [each, *[again] * len(others)]
    what = f"weighing of setup {setup.digest}"
    plan = make_plan(what, [setup] * len(costs), costs, 1)
    return _about(setup, with_first_use(plan, [setup]))


def _about(setup: Setup, plan: Plan) -> Plan:
    return dataclasses.replace(plan, setup_digest=setup.digest)
