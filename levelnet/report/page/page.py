"""Results into one page."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from ...distilled.fast import FastHistory
from ...distilled.table import EffectiveTable
from ...errors import InputError
from ...history.result import History
from ...history.setup import Setup, parse_setup
from ...studies.escape_records import EscapeStudy
from ...studies.level_records import LevelStudy
from ...studies.sweep_record import Sweep
from ...studies.weighing import Weighing
from ...tables import TableSource
from .citing import citing_section
from .content import Chapter, Origin
from .escape_chapter import escape_chapter
from .fast_chapter import fast_chapter
from .history_chapter import history_chapter
from .levels_chapter import levels_chapter
from .render import page_text
from .sweep_chapter import sweep_chapter
from .table_chapter import table_chapter
from .weighing_chapter import weighing_chapter
from .works import Work, tables_read, works_of

_CHAPTERS: dict[type, Callable[[Any, Origin, str], Chapter]] = {
    History: history_chapter,
    LevelStudy: levels_chapter,
    EscapeStudy: escape_chapter,
    EffectiveTable: table_chapter,
    Weighing: weighing_chapter,
    Sweep: sweep_chapter,
}


def html_page(
    results: Sequence[tuple[object, Origin]],
    title: str = "",
    progress: Callable[[str, float], None] | None = None,
) -> str:
    """Set out results as one self-contained page of HTML.

    Parameters
    ----------
    results : sequence of (record, Origin)
        What :func:`levelnet.read` gives, with the file it is from; a chapter each.
    title : str
        Of the page; empty takes that of a single result.
    progress : callable or None
        ``progress(stage, fraction)``, called before each chapter with 0 <= fraction < 1.

    Returns
    -------
    str
        It names no time and no place, so that the same results give the same text (with the same
        matplotlib).

    Raises
    ------
    InputError
        If there is no result, or one of a kind that no chapter is for.
    """
    if not results:
        raise InputError("report: one result at least is needed")
    tell = progress or (lambda stage, fraction: None)
    chapters: list[Chapter] = []
    works: list[Work] = []
    tables: list[TableSource] = []
    for k, (record, origin) in enumerate(results):
        tell("drawing", k / len(results))
        setups = _setups_of(record, origin)
        chapters.append(_chapter(record, setups[0], origin, f"r{k + 1}"))
        for setup in setups:
            works += works_of(record, setup)
            tables += tables_read(setup)
    return page_text(
        title or _title(chapters),
        chapters,
        citing_section([one for _, one in results], works, tables),
    )


def _title(chapters: Sequence[Chapter]) -> str:
    """What all results are called; else what the only one is, or how many there are."""
    titles = {one.title for one in chapters}
    if len(titles) == 1 and "" not in titles:
        return titles.pop()
    return chapters[0].what if len(chapters) == 1 else f"{len(chapters)} results"


def _setups_of(record: object, origin: Origin) -> tuple[Setup, ...]:
    """The setup in a record, or, for one that carries none, that of its file; of a sweep all."""
    if isinstance(record, Sweep):
        return tuple(parse_setup(text, f"{origin.name}: stored setup") for text in record.setups)
    setup = getattr(record, "setup", None)
    if isinstance(setup, Setup):
        return (setup,)
    return (parse_setup(origin.text("setup"), f"{origin.name}: stored setup"),)


def _chapter(record: object, setup: Setup, origin: Origin, prefix: str) -> Chapter:
    if isinstance(record, FastHistory):
        return fast_chapter(record, setup, origin, prefix)
    make = _CHAPTERS.get(type(record))
    if make is None:
        raise InputError(f"{origin.name}: no report is made of a {type(record).__name__}")
    return make(record, origin, prefix)
