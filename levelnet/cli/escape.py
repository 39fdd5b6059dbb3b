"""``levelnet escape``: how well each treatment of the Lyman lines gives the history."""

from __future__ import annotations

import argparse
import dataclasses
import time
from pathlib import Path
from typing import TYPE_CHECKING

from .console import Console
from .distill import worker_count, worker_processes
from .escape_output import escape_summary, escape_values
from .output import print_result
from .paths import check_folder, check_target
from .plan import print_plan
from .solve import cache_pieces
from .study import WITHIN, add_files, add_question, add_running, asked_range, asked_requirement

if TYPE_CHECKING:
    from ..history.setup import Setup
    from ..studies.escape_records import EscapeStudy
    from ..studies.escape_verdict import EscapeDemands, EscapeVerdict
    from ..studies.level_records import Question
    from ..studies.requirement import Requirement

NAME = "escape"
SUMMARY = "find out which treatment of the Lyman lines is good enough"
DESCRIPTION = (
    "Run a setup with every treatment of the Lyman lines and with each switch of the radiation "
    "field resolved in frequency: alone, taken from the whole, and added one after another. Hold "
    "x_e and the observables against the whole, say which of them is enough, and write all of it "
    "to an HDF5 file."
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
    add_question(parser, "treatment")
    add_running(parser, "variants")


def run(options: argparse.Namespace, console: Console) -> int:
    """Run all variants, write them, print the verdict; 0 if the reference is ok, 1 if not."""
    from ..history.setup import load_setup
    from ..studies.level_records import Question

    setup = load_setup(options.setup)
    requirement = asked_requirement(options.requirement, setup)
    order = None if options.order is None else _names(options.order)
    target = options.output or Path(f"{options.setup.stem}-escape.h5")
    check_target(target, options.force or options.plan, options.setup)
    asked = () if requirement is None else tuple(requirement.to_toml().splitlines())
    question = Question(options.within, *asked_range(setup, options), asked)
    _check_place(options)
    if options.plan:
        from ..studies.plans import plan_escape

        ends = question.low, question.high
        plan = plan_escape(setup, order, ends, worker_count(options.workers))
        return print_plan(plan, options.json)
    start = time.monotonic()
    study = _study(setup, order, requirement, question, options, console)
    seconds = time.monotonic() - start
    study = dataclasses.replace(study, question=question)
    found, met = judged(study)

    from ..store import write

    write(study, target, force=options.force)
    written = [target, *save_figures(study, options.plot, options.force, console)]
    print_result(
        options.json,
        lambda: escape_values(study, found, met),
        lambda: escape_summary(study, found, met),
        written=written,
        seconds=seconds,
    )
    if not study.outcome.ok:
        console.error(f"{study.outcome.name}: {study.outcome.value}", kind="")
        return 1
    return 0


def _names(text: str) -> tuple[str, ...]:
    return tuple(text.replace(" ", "").split(","))


def _check_place(options: argparse.Namespace) -> None:
    """Refuse a folder that cannot take the figures, before any work."""
    if options.plot is None:
        return
    from ..report.escape import check_escape_figures

    check_folder(options.plot)
    check_escape_figures(options.plot, True, options.force)


def _study(
    setup: Setup,
    order: tuple[str, ...] | None,
    requirement: Requirement | None,
    question: Question,
    options: argparse.Namespace,
    console: Console,
) -> EscapeStudy:
    from ..studies.escape import escape_study
    from ..studies.level_requirement import depths_asked

    pieces = None if options.no_cache else cache_pieces(console)
    workers = worker_count(options.workers)
    with console.progress() as progress, worker_processes(workers) as executor:
        return escape_study(
            setup,
            order=order,
            optical_depth_to=() if requirement is None else depths_asked(requirement),
            also_at=(question.low, question.high),
            executor=executor,
            workers=workers,
            pieces=pieces,
            progress=progress,
        )


def judged(study: EscapeStudy) -> tuple[EscapeVerdict, EscapeDemands | None]:
    """Answer what the study was asked; if nothing was, the usual on as much as it covers."""
    from ..studies.escape_notes import asked_range
    from ..studies.escape_verdict import escape_demands, escape_verdict
    from ..studies.requirement import parse_requirement

    asked = study.question
    within = WITHIN if asked is None else asked.within
    found = escape_verdict(study, within, *asked_range(study))
    if asked is None or not asked.requirement:
        return found, None
    requirement = parse_requirement("\n".join(asked.requirement), "requirement", None)
    return found, escape_demands(study, requirement)


def save_figures(
    study: EscapeStudy, folder: Path | None, force: bool, console: Console
) -> list[Path]:
    """Write the figures of a study, if a folder is given."""
    if folder is None:
        return []
    from ..report.escape import save_escape_figures

    with console.progress() as progress:
        return list(save_escape_figures(study, folder, force, progress))
