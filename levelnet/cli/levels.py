"""``levelnet levels``: how many levels of hydrogen, or of helium, matter."""

from __future__ import annotations

import argparse
import dataclasses
import time
from pathlib import Path
from typing import TYPE_CHECKING

from ..errors import InputError
from ..studies.answers import level_answer
from .console import Console
from .distill import worker_count, worker_processes
from .level_output import level_summary, level_values
from .output import print_result, size_text, time_text
from .paths import check_folder, check_target
from .plan import print_plan
from .solve import cache_pieces
from .study import add_files, add_question, add_running, asked_range, asked_requirement

if TYPE_CHECKING:
    from ..history.setup import Setup
    from ..studies.level_records import LevelStudy, Question
    from ..studies.requirement import Requirement

NAME = "levels"
SUMMARY = "find out how many levels of hydrogen, or of helium, matter"
DESCRIPTION = (
    "Run a setup on a ladder of n_max, carry x_e, T_m and the observables to infinitely many "
    "levels with error bars, hold the longest rungs against what the shorter ones foresee, say "
    "which n_max is enough, and write all of it to an HDF5 file. A run that was killed goes on "
    "where it was."
)
EXAMPLE = "levelnet levels setup.toml --rungs 20,30,45,70,100,140,200 --plot figures"
_LONG_S = 10.0  # above it the cost is announced before the work starts


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of this command."""
    add_files(parser, "-levels.h5")
    parser.add_argument(
        "--rungs",
        metavar="N,N,...",
        help="n_max of each rung, ascending, four or more, in steps of a factor two or less "
        "(default: seven in steps of sqrt(2) up to the n_max of the setup)",
    )
    parser.add_argument(
        "--atom",
        choices=("hydrogen", "helium"),
        default="hydrogen",
        help="whose n_max makes the rungs; the other atom is that of the setup (default: hydrogen)",
    )
    parser.add_argument(
        "--resolve",
        metavar="L,L,...",
        help="also run the longest rung with levels resolved in l up to these n only",
    )
    add_question(parser, "n_max")
    add_running(parser, "rungs")


def run(options: argparse.Namespace, console: Console) -> int:
    """Run the ladder, write it, print the verdict; 0 if every rung is ok, 1 if not."""
    from ..history.setup import load_setup
    from ..studies.level_records import Question

    setup = load_setup(options.setup)
    requirement = asked_requirement(options.requirement, setup)
    rungs = None if options.rungs is None else whole_numbers("--rungs", options.rungs)
    resolve = () if options.resolve is None else whole_numbers("--resolve", options.resolve)
    target = options.output or Path(f"{options.setup.stem}-levels.h5")
    check_target(target, options.force, options.setup)
    asked = () if requirement is None else tuple(requirement.to_toml().splitlines())
    question = Question(options.within, *asked_range(setup, options, options.atom), asked)
    ladder = _checked_ladder(setup, rungs, resolve, options)
    if options.plan:
        from ..studies.plans import plan_levels

        ends = question.low, question.high
        workers = worker_count(options.workers)
        plan = plan_levels(setup, ladder, resolve, ends, workers, options.atom)
        return print_plan(plan, options.json)
    start = time.monotonic()
    study = _study(setup, ladder, resolve, requirement, question, options, console)
    seconds = time.monotonic() - start
    study = dataclasses.replace(study, question=question)
    found, met = level_answer(study)

    from ..store import write

    write(study, target, force=options.force)
    written = [target, *save_figures(study, options.plot, options.force, console)]
    print_result(
        options.json,
        lambda: level_values(study, found, met),
        lambda: level_summary(study, found, met),
        written=written,
        seconds=seconds,
    )
    if not study.outcome.ok:
        console.error(f"{study.outcome.name}: {study.outcome.value}", kind="")
        return 1
    return 0


def whole_numbers(option: str, text: str) -> tuple[int, ...]:
    """Read whole numbers with commas between; InputError names the option and the part."""
    parts = text.replace(" ", "").split(",")
    for part in parts:
        if not (part.isascii() and part.isdigit() and len(part) <= 18):
            raise InputError(
                f'{option}: "{part}" is no whole number; write values such as 20,30,45'
            )
    return tuple(int(part) for part in parts)


def _checked_ladder(
    setup: Setup,
    rungs: tuple[int, ...] | None,
    resolve: tuple[int, ...],
    options: argparse.Namespace,
) -> tuple[int, ...]:
    """The rungs to run; what anything later would refuse is refused here, before any work."""
    from ..report.levels import check_figures
    from ..studies.convergence import FEWEST_RUNGS
    from ..studies.helium_ladder import n_max_of
    from ..studies.levels import check_ladder, default_rungs

    top = n_max_of(setup, options.atom)
    ladder = default_rungs(top) if rungs is None else rungs
    if options.atom == "helium" and not setup.helium_recombines:
        ladder = ()  # refused below, with the reason
    elif rungs is None and len(ladder) < FEWEST_RUNGS:
        raise InputError(
            f"{options.atom}.n_max = {top}: too low for a ladder up to it; give one, "
            "such as --rungs 20,30,45,70,100"
        )
    check_ladder(setup, ladder, resolve, options.atom)
    if options.plot is not None:
        check_folder(options.plot)
        check_figures(options.plot, len(ladder), bool(resolve), options.force)
    return ladder


def _study(
    setup: Setup,
    ladder: tuple[int, ...],
    resolve: tuple[int, ...],
    requirement: Requirement | None,
    question: Question,
    options: argparse.Namespace,
    console: Console,
) -> LevelStudy:
    from ..history.cost import check_memory
    from ..studies.level_requirement import depths_asked
    from ..studies.levels import level_study
    from ..studies.rung import rung_setup

    cost = check_memory(rung_setup(setup, ladder[-1], None, 1e-8, options.atom))
    if cost.seconds > _LONG_S:
        console.notice(
            f"estimated for the longest rung: {time_text(cost.seconds)}, "
            f"{size_text(cost.memory_bytes)} of memory"
        )
    pieces = None if options.no_cache else cache_pieces(console)
    workers = worker_count(options.workers)
    with console.progress() as progress, worker_processes(workers) as executor:
        return level_study(
            setup,
            ladder,
            atom=options.atom,
            resolve=resolve,
            optical_depth_to=() if requirement is None else depths_asked(requirement),
            also_at=(question.low, question.high),
            executor=executor,
            workers=workers,
            pieces=pieces,
            progress=progress,
        )


def save_figures(
    study: LevelStudy, folder: Path | None, force: bool, console: Console
) -> list[Path]:
    """Write the figures of a study, if a folder is given."""
    if folder is None:
        return []
    from ..report.levels import save_level_figures

    with console.progress() as progress:
        return list(save_level_figures(study, folder, force, progress))
