"""``levelnet distill``: from a setup file to a table of effective rates, and its exports."""

from __future__ import annotations

import argparse
import os
import re
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import InputError
from .console import Console, end_workers
from .output import print_result
from .paths import check_target
from .plan import add_plan, print_plan
from .solve import cache_pieces
from .table_output import table_summary, table_values

if TYPE_CHECKING:
    from concurrent.futures import Executor

    from ..distilled.table import EffectiveTable
    from ..history.setup import Setup

NAME = "distill"
SUMMARY = "distill a setup's atom to a table of effective rates"
DESCRIPTION = (
    "Integrate out all levels of a setup's atom but a few, tabulate the effective rates that are "
    "left over both temperatures, measure their errors, and write the table to an HDF5 file. A run "
    "that was killed goes on where it was."
)
EXAMPLE = "levelnet distill setup.toml --output table.h5 --export c99"
LANGUAGES = ("c99", "fortran", "csv")
_LETTERS = "spdfghik"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of this command."""
    parser.add_argument("setup", metavar="SETUP", type=Path, help="setup file (TOML)")
    parser.add_argument(
        "-o",
        "--output",
        metavar="FILE",
        type=Path,
        help="table file (default: name of the setup with -table.h5, in the current folder)",
    )
    parser.add_argument(
        "--kept",
        metavar="LEVELS",
        help="levels to keep, such as 2s,2p,3d, or spd4 for all ns, np and nd up to n = 4 "
        "(default: 2s, 2p and every np with an open Lyman line)",
    )
    parser.add_argument(
        "--tolerance",
        metavar="ERROR",
        type=float,
        default=1e-8,
        help="error allowed in the logarithm of each rate (default: 1e-8)",
    )
    parser.add_argument(
        "--workers",
        metavar="N",
        type=int,
        help="processes that reduce the network (default: as many as there are processors)",
    )
    parser.add_argument(
        "--export",
        metavar="LANGUAGE",
        action="append",
        choices=LANGUAGES,
        help="also write the table beside the file as c99, fortran or csv; may be repeated",
    )
    parser.add_argument(
        "--no-certificate", action="store_true", help="do not measure the errors of the table"
    )
    parser.add_argument(
        "--no-cache", action="store_true", help="neither read nor fill the cache of reductions"
    )
    add_plan(parser)
    parser.add_argument("--force", action="store_true", help="overwrite table and exports")


def run(options: argparse.Namespace, console: Console) -> int:
    """Distil, write, export, print the summary."""
    from ..history.setup import load_setup

    setup = load_setup(options.setup)
    kept = None if options.kept is None else kept_levels(options.kept)
    target = options.output or Path(f"{options.setup.stem}-table.h5")
    languages = tuple(dict.fromkeys(options.export or ()))
    check_target(target, options.force, options.setup)
    check_exports(target, languages, options.force, setup)
    workers = worker_count(options.workers)
    if options.plan:
        from ..studies.plans import plan_distill

        plan = plan_distill(setup, options.tolerance, not options.no_certificate, workers, kept)
        return print_plan(plan, options.json)
    pieces = None if options.no_cache else cache_pieces(console)

    from ..distilled.build import distill
    from ..store import write

    start = time.monotonic()
    with console.progress() as progress, worker_processes(workers) as executor:
        table = distill(
            setup,
            kept=kept,
            tolerance=options.tolerance,
            executor=executor,
            workers=workers,
            pieces=pieces,
            progress=progress,
            certify=not options.no_certificate,
        )
    seconds = time.monotonic() - start
    write(table, target, force=options.force)
    written = [target, *write_exports(table, target, languages, options.force)]
    print_result(
        options.json,
        lambda: table_values(table),
        lambda: table_summary(table),
        written=written,
        seconds=seconds,
    )
    return 0


def kept_levels(text: str) -> tuple[tuple[int, int], ...]:
    """Read levels as a person writes them.

    Parameters
    ----------
    text : str
        Parts with commas between: "3d" is one level, "spd4" all levels of these letters from n = 2
        to 4.

    Returns
    -------
    tuple of (n, l)
        Each once, ascending.

    Raises
    ------
    InputError
        If a part is neither.
    """
    found: set[tuple[int, int]] = set()
    for part in text.replace(" ", "").split(","):
        if match := re.fullmatch(rf"(\d{{1,5}})([{_LETTERS}])", part):
            found.add((int(match[1]), _LETTERS.index(match[2])))
        elif match := re.fullmatch(rf"([{_LETTERS}]+)(\d{{1,3}})", part):
            orbits = {_LETTERS.index(letter) for letter in match[1]}
            top = range(2, int(match[2]) + 1)
            found |= {(n, l) for n in top for l in orbits if l < n}
        else:
            raise InputError(
                f'--kept: "{part}" is no level; write levels such as 2s,2p,3d, or spd4 for all '
                f"ns, np and nd up to n = 4 (letters {_LETTERS})"
            )
    return tuple(sorted(found))


def worker_count(workers: int | None, option: str = "--workers") -> int:
    """How many worker processes an option asks for; by default one for each core one may use."""
    count = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count()
    count = (count or 1) if workers is None else workers
    if not 1 <= count <= 1024:
        raise InputError(f"{option} = {count}: allowed are 1 to 1024")
    return count


@contextmanager
def worker_processes(count: int) -> Iterator[Executor | None]:
    """Worker processes; None where one process is enough."""
    if count == 1:
        yield None
        return
    from ..distilled.nodes import process_pool

    executor = process_pool(count)
    try:
        yield executor
    except KeyboardInterrupt:
        end_workers()  # those that were being started when the signal came
        raise
    finally:
        executor.shutdown(wait=True, cancel_futures=True)


def export_name(target: Path) -> str:
    """Name of exported files beside a table: that of the table, fit for source code."""
    name = re.sub(r"[^A-Za-z0-9_]", "_", target.stem)
    return (name if name[:1].isalpha() else f"rates_{name}")[:40]


def check_exports(target: Path, languages: tuple[str, ...], force: bool, setup: Setup) -> None:
    """Refuse places that cannot be written before any work starts."""
    from ..store import check_output

    for language in languages:
        for path in _export_paths(target, language, setup):
            check_output(path, force)


def _export_paths(target: Path, language: str, setup: Setup) -> tuple[Path, ...]:
    from ..store import export_paths

    return export_paths(target.parent, export_name(target), language, setup)


def write_exports(
    table: EffectiveTable, target: Path, languages: tuple[str, ...], force: bool
) -> list[Any]:
    """Write exports beside the file of a table; return their paths."""
    from ..store import write_export

    name = export_name(target)
    return [
        path
        for language in languages
        for path in write_export(table, target.parent, name, language, force)
    ]
