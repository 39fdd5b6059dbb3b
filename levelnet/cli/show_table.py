"""``levelnet show`` for tables of effective rates, histories made from them, and studies."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from ..errors import InputError
from .console import Console
from .distill import check_exports, write_exports
from .level_output import level_summary, level_values
from .levels import judged, save_figures
from .output import print_json
from .table_output import distilled_summary, distilled_values, table_summary, table_values

if TYPE_CHECKING:
    from ..distilled.history import FastHistory
    from ..distilled.table import EffectiveTable
    from ..studies.level_records import LevelStudy


def show_levels(
    study: LevelStudy, folder: Path | None, options: argparse.Namespace, console: Console
) -> int:
    """Print the summary of a study and draw it where that was asked for."""
    if options.redshift is not None or options.csv is not None or options.export:
        raise InputError("--redshift, --csv, --export: not for a study of levels")
    written = save_figures(study, folder, options.force, console)
    found, met = judged(study)
    if options.json:
        print_json({**level_values(study, found, met), "file": options.file, "written": written})
        return 0
    print(level_summary(study, found, met))
    print(f"{'file':<22}{options.file}")
    for path in written:
        print(f"{'written':<22}{path}")
    return 0


def show_distilled(
    record: EffectiveTable | FastHistory,
    folder: Path | None,
    options: argparse.Namespace,
    console: Console,
) -> int:
    """Print the summary and write what was asked for."""
    from ..distilled.table import EffectiveTable

    _refuse(options, isinstance(record, EffectiveTable))
    if isinstance(record, EffectiveTable):
        written = _write(record, folder, options, console)
        values, text = table_values(record), table_summary
        shown = text(record)
    else:
        written = []
        values, shown = distilled_values(record, None), distilled_summary(record)
    if options.json:
        print_json({**values, "file": options.file, "written": written})
        return 0
    print(shown)
    print(f"{'file':<22}{options.file}")
    for path in written:
        print(f"{'written':<22}{path}")
    return 0


def _refuse(options: argparse.Namespace, is_table: bool) -> None:
    """Refuse options that are for other records."""
    if options.redshift is not None:
        raise InputError("--redshift: chooses the departure map of a history; none is in this file")
    if options.csv is not None:
        instead = "--export csv" if is_table else "levelnet history TABLE --output FILE.csv"
        raise InputError(f"--csv: for results of levelnet solve; use {instead}")
    if not is_table and (options.export or options.plot is not None):
        raise InputError("--plot, --export: not for a history made from a table")


def _write(
    table: EffectiveTable, folder: Path | None, options: argparse.Namespace, console: Console
) -> list[Path]:
    languages = tuple(dict.fromkeys(options.export or ()))
    check_exports(options.file, languages, options.force)
    written: list[Path] = []
    if folder is not None:
        from ..report.rates import save_table_figures

        with console.progress() as progress:
            written += save_table_figures(table, folder, options.force, progress)
    return written + write_exports(table, options.file, languages, options.force)
