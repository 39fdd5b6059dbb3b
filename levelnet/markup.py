"""Small pieces of HTML for notebooks; every text in them is escaped."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from html import escape

_LONGEST = 4000  # characters of a text that a notebook shows


def html_table(caption: str, head: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    """Make a table.

    Parameters
    ----------
    caption : str
        What it shows.
    head : sequence of str
        Names of the columns.
    rows : iterable of sequence of str
        Cells; the first of each row names it.
    """
    first = "".join(f'<th scope="col">{escape(one)}</th>' for one in head)
    body = "".join(
        f'<tr><th scope="row">{escape(row[0])}</th>'
        + "".join(f"<td>{escape(cell)}</td>" for cell in row[1:])
        + "</tr>"
        for row in rows
    )
    return (
        f"<table><caption>{escape(caption)}</caption>"
        f"<thead><tr>{first}</tr></thead><tbody>{body}</tbody></table>"
    )


def html_text(title: str, text: str) -> str:
    """Make a text that opens under its title; a long one is cut, and says so."""
    shown = text if len(text) <= _LONGEST else f"{text[:_LONGEST]}\n... (cut here)"
    return f"<details><summary>{escape(title)}</summary><pre>{escape(shown)}</pre></details>"
