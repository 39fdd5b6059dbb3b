"""``levelnet weigh``: which rates the answer hangs on, and the error they leave in it."""

from __future__ import annotations

import argparse
import time
from pathlib import Path
from typing import TYPE_CHECKING

from ..errors import InputError
from ..quantities import known_targets
from .console import Console
from .output import print_result
from .paths import check_folder, check_target
from .plan import add_plan, print_plan
from .solve import announce_cost, cache_pieces
from .weigh_text import weighing_summary
from .weigh_values import weighing_values

if TYPE_CHECKING:
    from ..history.setup import Setup
    from ..studies.budget import Uncertainty
    from ..studies.weighing import Weighing

NAME = "weigh"
SUMMARY = "weigh every rate: what each does to x_e(z) and the observables"
DESCRIPTION = (
    "Solve a setup and give, for each target J, d ln J / d ln R for every rate R (each dipole "
    "transition, cross section, line escape, two-photon and Compton rate, and those of helium "
    "where it has levels) and for each parameter of the cosmology, and the error that the "
    "uncertainties of the rates leave in J. Nothing is written unless --output or --plot asks for "
    "it."
)
EXAMPLE = 'levelnet weigh setup.toml --of "x_e(900)" --of "z_*" --output weights.h5'
_BAND, _MOST = 24, 1000
_HISTORIES = 3.0  # as long as this many a weighing takes at most
_DEFAULT_REDSHIFTS = (1100.0, 200.0)
_SCATTERED = 800.0  # a grid that ends higher may not reach unit optical depth


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of this command."""
    parser.add_argument("setup", metavar="SETUP", type=Path, help="setup file (TOML)")
    parser.add_argument(
        "--of",
        metavar="TARGET",
        action="append",
        help=f"what to weigh, may be repeated: {known_targets()} (default: what the grid reaches "
        f"of z_*, x_e(1100) and x_e(200), z_* if it ends at {_SCATTERED:g} or below; x_e at its "
        "middle if that is nothing)",
    )
    parser.add_argument(
        "--uncertainties",
        metavar="FILE",
        type=Path,
        help="uncertainties of the rates for the error budget (CSV; default: the table of the "
        "project: published numbers and estimates derived from them)",
    )
    parser.add_argument("--no-budget", action="store_true", help="no error budget")
    parser.add_argument(
        "--band",
        metavar="N",
        type=int,
        help=f"redshifts at which the budget gives the error of x_e; 0 for none (default: {_BAND})",
    )
    parser.add_argument(
        "--top",
        metavar="N",
        type=int,
        default=10,
        help="transitions and levels listed for each target (default: 10)",
    )
    parser.add_argument(
        "-o", "--output", metavar="FILE", type=Path, help="write every number to an HDF5 file"
    )
    parser.add_argument(
        "--plot", metavar="FOLDER", type=Path, help="write figures (SVG and PDF) into FOLDER"
    )
    add_plan(parser)
    parser.add_argument("--force", action="store_true", help="overwrite file and figures")
    parser.add_argument(
        "--no-cache", action="store_true", help="neither read nor fill the cache of atomic rates"
    )


def run(options: argparse.Namespace, console: Console) -> int:
    """Weigh, budget, write, print; 0 if the outcome is ok, 1 if not."""
    from ..history.setup import load_setup
    from ..studies.targets import parse_target

    setup = load_setup(options.setup)
    asked = [parse_target(text).name for text in options.of or default_targets(setup)]
    targets = tuple(dict.fromkeys(asked))
    band = tuple(band_targets(setup, _band(options)))
    _check_places(options, targets, (*targets, *band), setup.helium_recombines)
    uncertainties = _checked_question(setup, (*targets, *band), options)
    if options.plan:
        from ..studies.plans import plan_weigh

        further = len(set(band) - set(targets))
        return print_plan(plan_weigh(setup, len(targets), further), options.json)
    start = time.monotonic()
    weighing = _weighed(setup, targets, band, uncertainties, options, console)
    seconds = time.monotonic() - start
    written = _write(weighing, options, console)
    print_result(
        options.json,
        lambda: weighing_values(weighing, options.top),
        lambda: weighing_summary(weighing, options.top),
        written=written,
        seconds=seconds,
    )
    if not weighing.outcome.ok:
        console.error(f"{weighing.outcome.name}: {weighing.outcome.value}", kind="")
        return 1
    return 0


def _band(options: argparse.Namespace) -> int:
    """Redshifts of the band, after a check of the options about numbers."""
    for name in ("uncertainties", "band"):
        if options.no_budget and getattr(options, name) is not None:
            raise InputError(f"--{name}: is for the error budget, which --no-budget leaves out")
    if not 1 <= options.top <= _MOST:
        raise InputError(f"--top = {options.top}: allowed are 1 to {_MOST}")
    if options.no_budget:
        return 0
    band = _BAND if options.band is None else int(options.band)
    if band != 0 and not 2 <= band <= _MOST:
        raise InputError(f"--band = {band}: allowed are 0 and 2 to {_MOST}")
    return band


def _check_places(
    options: argparse.Namespace, targets: tuple[str, ...], every: tuple[str, ...], helium: bool
) -> None:
    """Refuse what cannot be written before any work starts."""
    if options.output is not None:
        check_target(options.output, options.force, options.setup)
    if options.plot is not None:
        from ..report.figures import check_free
        from ..report.weights import figure_paths

        check_folder(options.plot)
        from ..studies.targets import parse_target

        # The budget of x_e at several redshifts is drawn as a band.
        electrons = [name for name in every if parse_target(name).kind == "x_e"]
        band = not options.no_budget and len(electrons) > 1
        check_free(figure_paths(targets, band, options.plot, helium), options.force)


def _checked_question(
    setup: Setup, names: tuple[str, ...], options: argparse.Namespace
) -> tuple[Uncertainty, ...]:
    """Rows of the budget; refuse what cannot be weighed before any work starts."""
    from ..studies.budget import uncertainties_in
    from ..studies.weigh import check_weighable

    check_weighable(setup, names)
    return () if options.no_budget else uncertainties_in(setup, options.uncertainties)


def default_targets(setup: Setup) -> list[str]:
    """What is weighed where nothing is asked for: all of it inside the grid, at least one."""
    start, end = setup.grid.redshift_start, setup.grid.redshift_end
    scattered = ["z_*"] if end <= _SCATTERED else []
    inside = [z for z in _DEFAULT_REDSHIFTS if end <= z <= start]
    if not scattered and not inside:
        inside = [0.5 * (start + end)]
    return [*scattered, *(f"x_e({z!r})" for z in inside)]


def band_targets(setup: Setup, count: int) -> list[str]:
    """x_e at `count` redshifts spread evenly over the grid, ends included."""
    import numpy as np

    from ..studies.targets import parse_target

    if not count:
        return []
    start, end = setup.grid.redshift_start, setup.grid.redshift_end
    # Few digits between the ends, but none that leads out of a narrow grid.
    between = np.linspace(start, end, count)[1:-1].tolist()
    rounded = [min(max(float(f"{z:.4g}"), end), start) for z in between]
    names = [parse_target(f"x_e({z!r})").name for z in (start, *rounded, end)]
    return list(dict.fromkeys(names))


def _weighed(
    setup: Setup,
    targets: tuple[str, ...],
    band: tuple[str, ...],
    uncertainties: tuple[Uncertainty, ...],
    options: argparse.Namespace,
    console: Console,
) -> Weighing:
    """Weigh the targets, and budget their errors and those of the band."""
    from ..studies.weigh import weigh
    from ..studies.weigh_budget import weigh_with_budget

    announce_cost(setup, console, _HISTORIES)
    pieces = None if options.no_cache else cache_pieces(console)
    with console.progress() as progress:
        if options.no_budget:
            return weigh(setup, targets, progress=progress, pieces=pieces)
        return weigh_with_budget(
            setup, targets, band, uncertainties, progress=progress, pieces=pieces
        )


def _write(weighing: Weighing, options: argparse.Namespace, console: Console) -> list[Path]:
    written: list[Path] = []
    if options.output is not None:
        from ..store import write

        write(weighing, options.output, force=options.force)
        written.append(options.output)
    if options.plot is not None:
        from ..report.weights import save_weighing_figures

        with console.progress() as progress:
            written += save_weighing_figures(weighing, options.plot, options.force, progress)
    return written
