"""What the commands of studies have in common: options, and the question that is put."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from ..studies.answers import WITHIN
from .plan import add_plan

if TYPE_CHECKING:
    from ..history.setup import Setup
    from ..studies.helium_ladder import Atom
    from ..studies.requirement import Requirement


def add_files(parser: argparse.ArgumentParser, ending: str) -> None:
    """Declare the setup, and the result file with the ending of its usual name."""
    parser.add_argument("setup", metavar="SETUP", type=Path, help="setup file (TOML)")
    parser.add_argument(
        "-o",
        "--output",
        metavar="FILE",
        type=Path,
        help=f"result file (default: name of the setup with {ending}, in the current folder)",
    )


def add_question(parser: argparse.ArgumentParser, candidate: str) -> None:
    """Declare what the verdict is about; `candidate` is what it chooses from."""
    parser.add_argument(
        "--within",
        metavar="ERROR",
        type=float,
        default=WITHIN,
        help=f"relative error of x_e that the verdict allows (default: {WITHIN:g})",
    )
    parser.add_argument(
        "--between",
        metavar=("LOW", "HIGH"),
        nargs=2,
        type=float,
        help="redshifts between which it allows it; the outputs of the setup must cover them "
        "(default: as much of 200 to 1600 as they cover, of 1600 to 3500 where it is about "
        "helium)",
    )
    parser.add_argument(
        "--requirement",
        metavar="FILE",
        type=Path,
        help=f"accuracy that is asked (TOML): also say which {candidate} meets it",
    )


def add_running(parser: argparse.ArgumentParser, runs: str) -> None:
    """Declare how the work is done and where figures go; `runs` is what processes share."""
    add_plan(parser)
    parser.add_argument("--plot", metavar="FOLDER", type=Path, help="write figures into FOLDER")
    parser.add_argument(
        "--workers",
        metavar="N",
        type=int,
        help=f"processes that run {runs} (default: as many as there are processors)",
    )
    parser.add_argument(
        "--no-cache", action="store_true", help="neither read nor fill the cache of reductions"
    )
    parser.add_argument("--force", action="store_true", help="overwrite result and figures")


def asked_requirement(path: Path | None, setup: Setup) -> Requirement | None:
    """Read a requirement; what the outputs of the setup cannot answer is refused at once."""
    if path is None:
        return None
    from ..history.integrate import output_redshifts
    from ..studies.level_requirement import check_covered
    from ..studies.requirement import load_requirement

    requirement = load_requirement(path)
    check_covered(requirement, output_redshifts(setup))
    return requirement


def asked_range(
    setup: Setup, options: argparse.Namespace, atom: Atom = "hydrogen"
) -> tuple[float, float]:
    """The range that the verdict is about, inside the outputs of the setup."""
    from ..history.integrate import output_redshifts
    from ..studies.level_checks import covered
    from ..studies.rung import study_setup
    from ..studies.verdict import outputs_between

    outputs = output_redshifts(setup)
    low, high = covered(outputs, atom) if options.between is None else options.between
    outputs_between(output_redshifts(study_setup(setup, (low, high))), options.within, low, high)
    return low, high
