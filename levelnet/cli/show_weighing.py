"""``levelnet show`` for a weighing."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from ..errors import InputError
from .console import Console
from .output import print_result
from .weigh_text import weighing_summary
from .weigh_values import weighing_values

if TYPE_CHECKING:
    from ..studies.weighing import Weighing

_TOP = 10


def show_weighing(
    weighing: Weighing, folder: Path | None, options: argparse.Namespace, console: Console
) -> None:
    """Print the summary and draw the figures if asked for."""
    for name in ("redshift", "csv", "export"):
        if getattr(options, name) is not None:
            raise InputError(f"--{name}: not for a weighing, which the file holds; use --plot")
    written: list[Path] = []
    if folder is not None:
        from ..report.weights import save_weighing_figures

        with console.progress() as progress:
            written += save_weighing_figures(weighing, folder, options.force, progress)
    print_result(
        options.json,
        lambda: weighing_values(weighing, _TOP),
        lambda: weighing_summary(weighing, _TOP),
        file=options.file,
        written=written,
    )
