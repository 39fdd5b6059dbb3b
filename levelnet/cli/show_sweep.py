"""What ``levelnet show`` does with a sweep."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from ..errors import InputError
from .console import Console
from .output import print_result
from .sweep_output import sweep_summary, sweep_values

if TYPE_CHECKING:
    from ..studies.sweep_record import Sweep


def show_sweep(
    sweep: Sweep, folder: Path | None, options: argparse.Namespace, console: Console
) -> None:
    """Print the summary of a sweep."""
    if folder is not None or options.redshift is not None or options.csv is not None:
        raise InputError("--plot, --redshift, --csv: for results of levelnet solve")
    if options.export:
        raise InputError("--export: writes tables of effective rates, but the file holds a sweep")
    print_result(
        options.json,
        lambda: sweep_values(sweep),
        lambda: sweep_summary(sweep),
        file=options.file,
        written=[],
    )
