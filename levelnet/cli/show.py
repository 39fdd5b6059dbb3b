"""``levelnet show``: what is in a result file, as summary, table or figures."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, TextIO

from ..errors import InputError
from .console import Console
from .distill import LANGUAGES
from .output import history_values, print_result, summary_text
from .paths import check_folder, check_target

if TYPE_CHECKING:
    from ..history.result import History

NAME = "show"
SUMMARY = "sum up a result file; draw figures, write a table"
DESCRIPTION = (
    "Print the summary of a result file, a table of effective rates, a history made from one or a "
    "weighing, a study or a sweep; write its figures or its table."
)
EXAMPLE = "levelnet show result.h5 --plot figures"

_BESIDE = ""  # stands for "a folder named after the file"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of this command."""
    parser.add_argument("file", metavar="FILE", type=Path, help="result file (HDF5)")
    parser.add_argument(
        "--plot",
        metavar="FOLDER",
        nargs="?",
        const=_BESIDE,
        help="write figures (SVG and PDF) into FOLDER (default: name of the file with -figures)",
    )
    parser.add_argument(
        "--redshift",
        metavar="Z",
        type=float,
        help="redshift of the departure map (default: near the visibility peak)",
    )
    parser.add_argument(
        "--csv",
        metavar="FILE",
        nargs="?",
        const=_BESIDE,
        help="write the history as a table into FILE (default: name of the file with .csv); "
        "- prints it",
    )
    parser.add_argument(
        "-o",
        "--output",
        metavar="PATH",
        help="where the table of --csv or the figures of --plot go",
    )
    parser.add_argument(
        "--ascending", action="store_true", help="table with redshift ascending, not descending"
    )
    parser.add_argument(
        "--export",
        metavar="LANGUAGE",
        action="append",
        choices=LANGUAGES,
        help="of a table of effective rates: write it beside the file as c99, fortran or csv",
    )
    parser.add_argument("--force", action="store_true", help="overwrite what is written")


def run(options: argparse.Namespace, console: Console) -> int:
    """Print the summary and write what was asked for."""
    _place_output(options)
    folder = _checked_places(options)

    from ..store import read

    record = read(options.file)
    _screens()[type(record)](record, folder, options, console)
    return 0


def _screens() -> dict[type, Callable[..., None]]:
    """What shows a record, by its type."""
    from ..distilled.fast import FastHistory
    from ..distilled.table import EffectiveTable
    from ..history.result import History
    from ..studies.escape_records import EscapeStudy
    from ..studies.level_records import LevelStudy
    from ..studies.sweep_record import Sweep
    from ..studies.weighing import Weighing
    from .show_sweep import show_sweep
    from .show_table import show_distilled, show_escape, show_levels, show_table
    from .show_weighing import show_weighing

    return {
        History: _show_history,
        EffectiveTable: show_table,
        FastHistory: show_distilled,
        Weighing: show_weighing,
        LevelStudy: show_levels,
        EscapeStudy: show_escape,
        Sweep: show_sweep,
    }


def _show_history(
    history: History, folder: Path | None, options: argparse.Namespace, console: Console
) -> None:
    """Print the summary of a history; draw it, write its table."""
    if options.export:
        raise InputError("--export: writes tables of effective rates, but the file holds a history")
    written = _save_figures(history, folder, options, console)
    if options.csv == "-":
        _write_table(history, sys.stdout, options)
        return
    if options.csv is not None:
        _write_table(history, Path(options.csv), options)
        written.append(Path(options.csv))
    print_result(
        options.json,
        lambda: history_values(history),
        lambda: summary_text(history),
        file=options.file,
        written=written,
    )


def _place_output(options: argparse.Namespace) -> None:
    """Let --output name the one thing that is written; give the table its default name."""
    if options.output is not None:
        wanted = [name for name in ("plot", "csv") if getattr(options, name) is not None]
        if len(wanted) != 1 or getattr(options, wanted[0]) != _BESIDE:
            raise InputError("--output: names what a plain --plot or --csv writes; give one")
        setattr(options, wanted[0], options.output)
    if options.csv == _BESIDE:
        options.csv = f"{options.file.stem}.csv"


def _checked_places(options: argparse.Namespace) -> Path | None:
    """Refuse what cannot be done before anything is; return the folder for figures, if any."""
    if options.csv == "-" and options.json:
        raise InputError("--csv -: --json prints to stdout too; give one of them")
    if options.ascending and options.csv is None:
        raise InputError("--ascending: orders the table of --csv, which is not asked for")
    if options.redshift is not None and options.plot is None:
        raise InputError("--redshift: chooses the departure map of --plot, which is not asked for")
    if options.csv not in {None, "-"}:
        check_target(Path(options.csv), options.force, options.file)
    if options.plot is None:
        return None
    folder = Path(options.plot or f"{options.file.stem}-figures")
    check_folder(folder)
    return folder


def _save_figures(
    history: History, folder: Path | None, options: argparse.Namespace, console: Console
) -> list[Path]:
    if folder is None:
        return []
    from ..report.figures import save_figures

    with console.progress() as progress:
        paths = save_figures(history, folder, options.force, options.redshift, progress)
    return list(paths)


def _write_table(history: History, target: Path | TextIO, options: argparse.Namespace) -> None:
    from ..store import write_csv

    write_csv(history, target, ascending=options.ascending, force=options.force)
