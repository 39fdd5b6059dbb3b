"""``levelnet report``: results as one page of HTML that needs no network."""

from __future__ import annotations

import argparse
from pathlib import Path

from .console import Console
from .output import print_result
from .paths import check_target

NAME = "report"
SUMMARY = "set out results as one HTML page"
DESCRIPTION = (
    "Write one self-contained HTML page about result files: what was asked, what came out, "
    "figures, how far to trust it, where it comes from, and what to cite as text and as BibTeX. "
    "The page runs no script and needs no network."
)
EXAMPLE = "levelnet report result.h5 --output page.html"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of this command."""
    parser.add_argument(
        "files", metavar="FILE", nargs="+", type=Path, help="result files (HDF5) of any kind"
    )
    parser.add_argument(
        "-o",
        "--output",
        metavar="PAGE",
        type=Path,
        help="the page (default: name of the first file with .html, in the current folder)",
    )
    parser.add_argument(
        "--title", metavar="TEXT", default="", help="title of the page (default: of the result)"
    )
    parser.add_argument("--force", action="store_true", help="overwrite the page")


def run(options: argparse.Namespace, console: Console) -> int:
    """Read all files, write the page."""
    target = options.output or Path(f"{options.files[0].stem}.html")
    for path in options.files:
        check_target(target, options.force, path)

    from ..report.page.content import Origin
    from ..report.page.page import html_page
    from ..store import read_with_attributes, whole_file

    results = []
    for path in options.files:
        record, attributes = read_with_attributes(path)
        results.append((record, Origin(path.name, attributes)))
    with console.progress() as progress:
        page = html_page(results, options.title, progress)
    with whole_file(target, options.force) as raw:
        raw.write(page.encode())
    values = {
        "page": target,
        "n_bytes": len(page.encode()),
        "results": [
            {
                "file": path,
                "kind": origin.text("layout"),
                "setup_digest": origin.attributes.get("setup_digest"),
            }
            for path, (_, origin) in zip(options.files, results, strict=True)
        ],
    }
    size = f"{len(page.encode()) / 1e6:.1f} MB, needs no network"
    print_result(options.json, lambda: values, lambda: f"{target}: {size}", written=[target])
    return 0
