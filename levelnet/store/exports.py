"""Exports of a table as files: source code or text for other languages, whole or not at all."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from .whole_file import check_output, whole_file

if TYPE_CHECKING:
    from ..distilled.table import EffectiveTable
    from ..history.setup import Setup


def export_paths(folder: str | Path, name: str, language: str, setup: Setup) -> tuple[Path, ...]:
    """Files that :func:`write_export` writes for a table of this setup."""
    from ..distilled.export import endings

    return tuple(Path(folder) / f"{name}{end}" for end in endings(language, setup))


def write_export(
    table: EffectiveTable, folder: str | Path, name: str, language: str, force: bool = False
) -> tuple[Path, ...]:
    """Write a table for users of another language.

    Parameters
    ----------
    table : EffectiveTable
        What to export.
    folder : str or Path
        Where to; it must exist.
    name : str
        Name of the files without ending, and in code the start of all global names.
    language : "c99", "fortran" or "csv"
        See :func:`levelnet.distilled.export.exported_texts`.
    force : bool
        True allows existing files to be replaced.

    Returns
    -------
    tuple of Path
        The files.

    Raises
    ------
    InputError
        If the name does not suit the language, or a file exists or cannot be written.
    """
    from ..distilled.export import exported_texts

    texts = exported_texts(table, language, name)
    places = {Path(folder) / file: text for file, text in texts.items()}
    # All are looked at before the first is written.
    for path in places:
        check_output(path, force)
    for path, text in places.items():
        with whole_file(path, force) as raw:
            raw.write(text.encode("ascii"))
    return tuple(places)
