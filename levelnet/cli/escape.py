"""``levelnet escape``: how well each treatment of the Lyman lines gives the history."""

from __future__ import annotations

import argparse
import dataclasses
import time
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..studies.answers import escape_answer
from .console import Console
from .distill import worker_count, worker_processes
from .escape_output import escape_summary, escape_values
from .output import print_result, time_text
from .paths import check_folder, check_target
from .plan import print_plan
from .solve import cache_pieces
from .study import add_files, add_question, add_running, asked_range, asked_requirement

if TYPE_CHECKING:
    from ..history.setup import Setup
    from ..studies.escape_plan import Plan
    from ..studies.escape_records import EscapeStudy
    from ..studies.level_records import Question
    from ..studies.requirement import Requirement

NAME = "escape"
SUMMARY = "find out which treatment of the lines to the ground state is good enough"
DESCRIPTION = (
    "Run a setup with every treatment of the Lyman lines and with each switch of the radiation "
    "field resolved in frequency: alone, taken from the whole, and added one after another. Hold "
    "x_e and the observables against the whole, say which of them is enough, and write all of it "
    "to an HDF5 file. Where helium has levels, do the same for the lines of He I."
)
EXAMPLE = "levelnet escape setup.toml --within 0.001 --between 200 1600 --plot figures"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of this command."""
    add_files(parser, "-escape.h5")
    parser.add_argument(
        "--order",
        metavar="NAME,NAME,...",
        help="switches in the order in which they are added (default: stimulated,absorption,"
        "feedback,excited_two_photon,raman,scattering)",
    )
    parser.add_argument(
        "--atom",
        choices=("hydrogen", "helium"),
        help="compare the lines of this atom alone; with helium, --order takes intercombination,"
        "continuum,wings,diffusion,feedback,higher_lines (default: all that recombine)",
    )
    add_question(parser, "treatment")
    add_running(parser, "variants")


def run(options: argparse.Namespace, console: Console) -> int:
    """Run all variants, write them, print the verdict; 0 if the reference is ok, 1 if not."""
    from ..history.setup import load_setup
    from ..studies.level_records import Question

    setup = load_setup(options.setup)
    requirement = asked_requirement(options.requirement, setup)
    plans = _plans(setup, options)
    target = options.output or Path(f"{options.setup.stem}-escape.h5")
    check_target(target, options.force, options.setup)
    asked = () if requirement is None else tuple(requirement.to_toml().splitlines())
    questions = [
        Question(
            options.within,
            *asked_range(setup, options, "helium" if plan.species == "He I" else "hydrogen"),
            asked,
        )
        for plan in plans
    ]
    _check_place(options, plans)
    if options.plan:
        from ..studies.plans import plan_escape

        ends = [z for one in questions for z in (one.low, one.high)]
        return print_plan(
            plan_escape(setup, plans, ends, worker_count(options.workers)), options.json
        )
    start = time.monotonic()
    study = _study(setup, plans, requirement, questions, options, console)
    seconds = time.monotonic() - start
    study = _asked(study, questions)

    from ..store import write

    write(study, target, force=options.force)
    written = [target, *save_figures(study, options.plot, options.force, console)]
    print_result(
        options.json,
        lambda: study_values(study),
        lambda: study_text(study),
        written=written,
        seconds=seconds,
    )
    if not study.outcome.ok:
        console.error(f"{study.outcome.name}: {study.outcome.value}", kind="")
        return 1
    return 0


def _names(text: str) -> tuple[str, ...]:
    return tuple(text.replace(" ", "").split(","))


def _plans(setup: Setup, options: argparse.Namespace) -> tuple[Plan, ...]:
    from ..studies.escape import escape_plans

    order = None if options.order is None else _names(options.order)
    return escape_plans(setup, options.atom, order)


def _asked(study: EscapeStudy, questions: list[Question]) -> EscapeStudy:
    """The study with what was asked of it and of the study in it."""
    first, *more = questions
    helium = study.helium
    if helium is not None:
        helium = dataclasses.replace(helium, question=more[0])
    return dataclasses.replace(study, question=first, helium=helium)


def _check_place(options: argparse.Namespace, plans: tuple[Plan, ...]) -> None:
    """Refuse a folder that cannot take the figures, before any work."""
    if options.plot is None:
        return
    from ..report.escape import check_escape_figures

    check_folder(options.plot)
    names = [plan.species for plan in plans]
    check_escape_figures(options.plot, names, "H I" in names, options.force)


def _study(
    setup: Setup,
    plans: tuple[Plan, ...],
    requirement: Requirement | None,
    questions: list[Question],
    options: argparse.Namespace,
    console: Console,
) -> EscapeStudy:
    from ..studies.escape import expected_seconds, run_plans
    from ..studies.level_requirement import depths_asked
    from ..studies.rung import study_setup

    pieces = None if options.no_cache else cache_pieces(console)
    workers = worker_count(options.workers)
    grid = study_setup(setup, [z for one in questions for z in (one.low, one.high)])
    count = sum(len(plan.variants) + (plan.coarser is not None) for plan in plans)
    seconds = time_text(expected_seconds(grid, plans))
    console.notice(f"{count} runs, about {seconds} of processor time on {workers} processes")
    with console.progress() as progress, worker_processes(workers) as executor:
        return run_plans(
            grid,
            plans,
            optical_depth_to=() if requirement is None else tuple(depths_asked(requirement)),
            executor=executor,
            workers=workers,
            pieces=pieces,
            progress=progress,
        )


def study_values(study: EscapeStudy) -> dict[str, Any]:
    """Collect a study and the one in it with their verdicts."""
    helium = None if study.helium is None else study_values(study.helium)
    return escape_values(study, *escape_answer(study)) | {"helium": helium}


def study_text(study: EscapeStudy) -> str:
    """Return the summaries of a study and of the one in it."""
    both = [one for one in (study, study.helium) if one is not None]
    return "\n\n".join(escape_summary(one, *escape_answer(one)) for one in both)


def save_figures(
    study: EscapeStudy, folder: Path | None, force: bool, console: Console
) -> list[Path]:
    """Write the figures of a study, if a folder is given."""
    if folder is None:
        return []
    from ..report.escape import save_escape_figures

    with console.progress() as progress:
        return list(save_escape_figures(study, folder, force, progress))
