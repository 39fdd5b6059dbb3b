"""Chapters put into the template."""

from __future__ import annotations

from collections.abc import Sequence
from importlib import import_module
from importlib.resources import files

from .content import Chapter, Section


def page_text(title: str, chapters: Sequence[Chapter], citing: Section) -> str:
    """One page of HTML, whole: no script, and nothing that a browser would fetch.

    Parameters
    ----------
    title : str
        Of the page.
    chapters : sequence of Chapter
        A result each.
    citing : Section
        How to cite them.

    Returns
    -------
    str
        All text is escaped; equal arguments give equal text.
    """
    from jinja2 import Environment, StrictUndefined

    room = files(__package__)
    # Autoescape for everything; the template marks the two exceptions, both our own.
    world = Environment(autoescape=True, undefined=StrictUndefined, keep_trailing_newline=True)
    template = world.from_string(room.joinpath("page.html").read_text("utf-8"))
    return template.render(
        title=title,
        chapters=chapters,
        citing=citing,
        css=room.joinpath("page.css").read_text("utf-8"),
        # By its name, since nothing down here may import the top of the package.
        version=import_module("levelnet").__version__,
        files=[one.file for one in chapters],
    )
