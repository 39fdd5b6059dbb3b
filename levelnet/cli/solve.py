"""``levelnet solve``: from a setup file to a result file."""

from __future__ import annotations

import argparse
import dataclasses
import re
import time
import warnings
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import AccuracyWarning, Outcome
from .compare_rates import (
    comparison_text,
    comparison_values,
    further_observables,
    without_overrides,
)
from .console import Console
from .output import history_values, print_result, size_text, summary_text, time_text
from .paths import check_target
from .plan import add_plan, print_plan

if TYPE_CHECKING:
    from ..history.result import History
    from ..history.setup import Setup

NAME = "solve"
SUMMARY = "solve a setup file, write the result as HDF5"
DESCRIPTION = (
    "Solve the ionization history and the level populations of a setup file (TOML), write them to "
    "an HDF5 file and print a summary."
)
EXAMPLE = "levelnet solve setup.toml --output result.h5"

_LONG_S, _LARGE_BYTES = 10.0, 2**30  # above either, cost is announced before the work starts


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of this command."""
    parser.add_argument("setup", metavar="SETUP", type=Path, help="setup file (TOML)")
    parser.add_argument(
        "-o",
        "--output",
        metavar="FILE",
        type=Path,
        help="result file (default: name of the setup with .h5, in the current folder)",
    )
    parser.add_argument("--force", action="store_true", help="overwrite the result file")
    add_plan(parser, "--dry-run")
    parser.add_argument(
        "--no-cache", action="store_true", help="neither read nor fill the cache of atomic rates"
    )
    parser.add_argument(
        "--direct",
        action="store_true",
        help="reduce the network at every evaluation instead of interpolating (slow, for checking)",
    )
    parser.add_argument(
        "--compare-rates",
        action="store_true",
        help="solve without the overridden rates of the setup too, and print old and new",
    )


def run(options: argparse.Namespace, console: Console) -> int:
    """Solve, write, print the summary; 0 if the outcome is ok, 1 if not."""
    from ..history.setup import load_setup

    setup = load_setup(options.setup)
    if options.direct:
        accuracy = dataclasses.replace(setup.accuracy, interpolate=False)
        setup = dataclasses.replace(setup, accuracy=accuracy)
    plain = without_overrides(setup) if options.compare_rates else None
    target = options.output or Path(f"{options.setup.stem}.h5")
    check_target(target, options.force, options.setup)
    if options.plan:
        from ..studies.plans import plan_solve

        return print_plan(plan_solve(setup), options.json)
    history, seconds = compute(setup, console, cache=not options.no_cache)
    compared = None
    if plain is not None:
        old, _ = compute(plain, console, cache=not options.no_cache)
        pieces = None if options.no_cache else cache_pieces(console)
        compared = comparison_values(old, history, further_observables(old, history, pieces))

    from ..store import write

    write(history, target, force=options.force)
    print_result(
        options.json,
        lambda: history_values(history) | ({} if compared is None else {"compare_rates": compared}),
        lambda: (
            summary_text(history)
            + ("" if compared is None else f"\n\n{comparison_text(compared, old, history)}\n")
        ),
        file=target,
        seconds=seconds,
    )
    return finish(history, console)


def compute(setup: Setup, console: Console, cache: bool) -> tuple[History, float]:
    """Solve with a look at cost first, one BLAS thread and a progress bar.

    Returns
    -------
    tuple of History and float
        The result, and the wall time in s.
    """
    from ..history.run import solve

    announce_cost(setup, console)
    pieces = cache_pieces(console) if cache else None
    start = time.monotonic()
    with console.progress() as progress:
        # The outcome is reported on its own line; the library's warning would say it twice.
        with warnings.catch_warnings():
            for one in Outcome:
                warnings.filterwarnings("ignore", re.escape(one.value), AccuracyWarning)
            history = solve(setup, progress=progress, pieces=pieces)
    return history, time.monotonic() - start


def announce_cost(setup: Setup, console: Console, histories: float = 1.0) -> None:
    """Refuse what cannot fit; say what work as long as some histories will take, if it is much."""
    from ..history.cost import check_memory

    cost = check_memory(setup)
    seconds = histories * cost.seconds
    if seconds > _LONG_S or cost.memory_bytes > _LARGE_BYTES:
        console.notice(f"estimated: {time_text(seconds)}, {size_text(cost.memory_bytes)} of memory")


def cache_pieces(console: Console) -> Any:
    """Return the folder of cached rates, or None where there is no place for it."""
    from ..pieces import FolderPieces, default_cache_folder

    try:
        return FolderPieces(default_cache_folder())
    except OSError as error:
        console.notice(f"no cache of atomic rates: {error.strerror or error}")
        return None


def finish(history: History, console: Console) -> int:
    """Exit code of a result; one that is not ok is said on stderr too."""
    if history.outcome.ok:
        return 0
    console.error(f"{history.outcome.name}: {history.outcome.value}", kind="")
    return 1
