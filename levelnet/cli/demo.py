"""``levelnet demo``: an invented scenario from setup to figures."""

from __future__ import annotations

import argparse
import time
from importlib.resources import files
from pathlib import Path

from .console import Console
from .output import history_values, print_result, summary_text, time_text
from .paths import check_folder
from .solve import compute, finish

NAME = "demo"
SUMMARY = "solve an invented scenario and draw it"
DESCRIPTION = (
    "Write the setup of an invented scenario, the accuracy it asks for and the response of its "
    "instrument; solve it, and draw its figures. The instrument and its cosmology do not exist."
)
EXAMPLE = "levelnet demo --output demo-folder"

_TEXTS = ("demo.toml", "demo-requirement.toml", "demo-response.csv")
_INVENTED = "This scenario is invented: no real instrument, no measured cosmology."


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of this command."""
    parser.add_argument(
        "--output",
        "-o",
        metavar="FOLDER",
        type=Path,
        default=Path("levelnet-demo"),
        help="folder for all that is written (default: levelnet-demo)",
    )
    parser.add_argument("--force", action="store_true", help="overwrite what is in the folder")


def demo_text(name: str = "demo.toml") -> str:
    """Return the text of a file of the demo: its setup, requirement or response."""
    return files("levelnet.cli").joinpath(name).read_text(encoding="utf-8")


def run(options: argparse.Namespace, console: Console) -> int:
    """Write setup, requirement, response, demo.h5 and figures; print the summary."""
    start = time.monotonic()
    folder: Path = options.output
    from ..report.figures import check_free, figure_paths, save_figures

    texts = {folder / name: demo_text(name) for name in _TEXTS}
    result_file = folder / "demo.h5"
    check_folder(folder)
    check_free((*texts, result_file, *figure_paths(folder)), options.force)

    from ..history.setup import parse_setup
    from ..store import whole_file, write

    history, seconds = compute(
        parse_setup(texts[folder / "demo.toml"], "demo.toml"), console, cache=True
    )
    # Nothing is written before the calculation has ended well enough to show.
    folder.mkdir(parents=True, exist_ok=True)
    for path, text in texts.items():
        with whole_file(path, options.force) as stream:
            stream.write(text.encode())
    write(history, result_file, force=options.force)
    with console.progress() as progress:
        figures = save_figures(history, folder, force=options.force, progress=progress)
    total = time.monotonic() - start
    written = [*texts, result_file, *figures]
    print_result(
        options.json,
        lambda: {**history_values(history), "invented": True, "total_seconds": total},
        lambda: f"{_INVENTED}\n\n{summary_text(history)}",
        written=written,
        seconds=seconds,
        time=f"{time_text(total)}, of it {time_text(seconds)} solving",
    )
    return finish(history, console)
