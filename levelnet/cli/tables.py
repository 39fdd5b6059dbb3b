"""``levelnet tables``: the published numbers inside, and whose they are."""

from __future__ import annotations

import argparse
import dataclasses
import textwrap
from typing import TYPE_CHECKING

from .console import Console
from .output import print_json

if TYPE_CHECKING:
    from ..tables import TableSource

NAME = "tables"
SUMMARY = "list the atomic data inside, with their sources"
DESCRIPTION = "List the tables of published numbers that come with levelnet, with their sources."
EXAMPLE = "levelnet tables --json"

_INDENT, _WIDTH = 18, 100


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of this command: none of its own."""


def run(options: argparse.Namespace, console: Console) -> int:
    """Print every table with its units and origin."""
    from ..tables import list_tables

    tables = list_tables()
    if options.json:
        print_json([dataclasses.asdict(table) for table in tables])
        return 0
    if not tables:
        console.notice("no tables of published numbers: every rate is computed")
    print("\n\n".join(table_text(table) for table in tables))
    return 0


def table_text(table: TableSource) -> str:
    """Return what is known of a table as lines; facts that are not known are left out."""
    published = (table.authors_and_year, table.journal, table.place, table.doi)
    facts = {
        "quantity": table.quantity,
        "source": ", ".join(part for part in published if part),
        "columns": ", ".join(
            f"{column.name} ({column.unit})" if column.unit else column.name
            for column in table.columns
        ),
        "obtained": table.obtained,
        "digits": table.digits,
        "valid": table.valid,
        "disagreements": table.disagreements,
        "sha256": table.sha256,
    }
    lines = [_wrapped(label, text) for label, text in facts.items() if text]
    return "\n".join([table.name, *lines])


def _wrapped(label: str, text: str) -> str:
    return textwrap.fill(
        text,
        _WIDTH,
        initial_indent=f"  {label}".ljust(_INDENT),
        subsequent_indent=" " * _INDENT,
        break_on_hyphens=False,
        break_long_words=False,
    )
