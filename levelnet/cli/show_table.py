"""``levelnet show`` for tables of effective rates, histories made from them, and studies."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from ..errors import InputError
from ..studies.answers import level_answer
from . import escape, levels
from .console import Console
from .distill import check_exports, write_exports
from .level_output import level_summary, level_values
from .output import print_result
from .table_output import distilled_summary, distilled_values, table_summary, table_values

if TYPE_CHECKING:
    from ..distilled.fast import FastHistory
    from ..distilled.table import EffectiveTable
    from ..studies.escape_records import EscapeStudy
    from ..studies.level_records import LevelStudy


def show_levels(
    study: LevelStudy, folder: Path | None, options: argparse.Namespace, console: Console
) -> None:
    """Print the summary of a study and draw it where that was asked for."""
    _refuse_all(options, "a study of levels")
    written = levels.save_figures(study, folder, options.force, console)
    found, met = level_answer(study)
    print_result(
        options.json,
        lambda: level_values(study, found, met),
        lambda: level_summary(study, found, met),
        file=options.file,
        written=written,
    )


def show_escape(
    study: EscapeStudy, folder: Path | None, options: argparse.Namespace, console: Console
) -> None:
    """Print the summary of a study of the escape and draw it where that was asked for."""
    _refuse_all(options, "a study of the escape")
    written = escape.save_figures(study, folder, options.force, console)
    print_result(
        options.json,
        lambda: escape.study_values(study),
        lambda: escape.study_text(study),
        file=options.file,
        written=written,
    )


def show_table(
    table: EffectiveTable, folder: Path | None, options: argparse.Namespace, console: Console
) -> None:
    """Print the summary of a table, and draw or export it where that was asked for."""
    _refuse(options, "use --export csv")
    languages = tuple(dict.fromkeys(options.export or ()))
    check_exports(options.file, languages, options.force, table.setup)
    written: list[Path] = []
    if folder is not None:
        from ..report.rates import save_table_figures

        with console.progress() as progress:
            written += save_table_figures(table, folder, options.force, progress)
    written += write_exports(table, options.file, languages, options.force)
    print_result(
        options.json,
        lambda: table_values(table),
        lambda: table_summary(table),
        file=options.file,
        written=written,
    )


def show_distilled(
    history: FastHistory, folder: Path | None, options: argparse.Namespace, console: Console
) -> None:
    """Print the summary of a history made from a table; there is nothing to draw or write."""
    _refuse(options, "use levelnet history TABLE --output FILE.csv")
    if options.export or folder is not None:
        raise InputError("--plot, --export: not for a history made from a table")
    print_result(
        options.json,
        lambda: distilled_values(history, None),
        lambda: distilled_summary(history),
        file=options.file,
        written=[],
    )


def _refuse_all(options: argparse.Namespace, what: str) -> None:
    if options.redshift is not None or options.csv is not None or options.export:
        raise InputError(f"--redshift, --csv, --export: not for {what}")


def _refuse(options: argparse.Namespace, instead: str) -> None:
    """Refuse options that are for results of levelnet solve."""
    if options.redshift is not None:
        raise InputError("--redshift: chooses the departure map of a history; none is in this file")
    if options.csv is not None:
        raise InputError(f"--csv: for results of levelnet solve; {instead}")
