"""All figures of a history as files: SVG and PDF, whole or not at all."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING

from ..errors import InputError
from ..history.result import History
from . import style
from .departures import departure_curves_figure, departure_map_figure
from .helium import helium_departures_figure, helium_figure, helium_lines_figure
from .plots import channel_figure, history_figure, visibility_figure
from .spectrum import spectrum_figure

if TYPE_CHECKING:
    from matplotlib.figure import Figure

FIGURE_NAMES = ("history", "departure-map", "departure-curves", "channels", "visibility")
HELIUM_FIGURE_NAMES = ("helium", "helium-departures", "helium-lines")  # where it recombines
FIELD_FIGURE_NAME = "spectrum"  # only of a history that holds the radiation field


def make_figures(history: History, redshift: float | None = None) -> dict[str, Figure]:
    """Every figure of `history` by its name; `redshift` is that of the departure map.

    Parameters
    ----------
    history : History
        Any result.
    redshift : float or None, dimensionless
        The output nearest to it is drawn as the map; None takes the visibility peak.
    """
    return {name: make() for name, make in figure_makers(history, redshift).items()}


def figure_makers(
    history: History, redshift: float | None = None
) -> dict[str, Callable[[], Figure]]:
    """What makes each figure of :func:`make_figures`, by its name."""
    makers: tuple[Callable[[], Figure], ...] = (
        lambda: history_figure(history),
        lambda: departure_map_figure(history, redshift),
        lambda: departure_curves_figure(history),
        lambda: channel_figure(history),
        lambda: visibility_figure(history),
    )
    named = dict(zip(FIGURE_NAMES, makers, strict=True))
    if history.field is not None:
        named[FIELD_FIGURE_NAME] = lambda: spectrum_figure(history)
    if history.helium is not None:
        of_helium: tuple[Callable[[], Figure], ...] = (
            lambda: helium_figure(history),
            lambda: helium_departures_figure(history),
            lambda: helium_lines_figure(history),
        )
        named |= zip(HELIUM_FIGURE_NAMES, of_helium, strict=True)
    return named


def figure_paths(
    folder: str | Path, with_field: bool = False, with_helium: bool = False
) -> tuple[Path, ...]:
    """Files that :func:`save_figures` writes into `folder`, of a history with these parts."""
    names = [*FIGURE_NAMES, *[FIELD_FIGURE_NAME] * with_field]
    names += HELIUM_FIGURE_NAMES * with_helium
    return tuple(Path(folder) / f"{name}.{end}" for name in names for end in style.FORMATS)


def save_figures(
    history: History,
    folder: str | Path,
    force: bool = False,
    redshift: float | None = None,
    progress: Callable[[str, float], None] | None = None,
) -> tuple[Path, ...]:
    """Write all figures of `history` as SVG and PDF into `folder`, made where it is missing.

    Parameters
    ----------
    history : History
        Any result.
    folder : str or Path
        Where to.
    force : bool
        Replace figures that exist.
    redshift : float or None, dimensionless
        Redshift of the departure map.
    progress : callable or None
        ``progress(stage, fraction)``, called before each figure with 0 <= fraction < 1.

    Returns
    -------
    tuple of Path
        The files. Equal histories give equal bytes (with the same matplotlib).

    Raises
    ------
    InputError
        If a file exists and `force` is not set, or `folder` is a file, or `redshift` is outside.
    OSError
        If a file cannot be written; then none is.
    """
    parts = history.field is not None, history.helium is not None
    check_place(folder, figure_paths(folder, *parts), force)
    # Drawn in memory first, so that a figure that fails leaves nothing behind.
    return save_drawn(make_figures(history, redshift), folder, progress)


def check_place(folder: str | Path, paths: tuple[Path, ...], force: bool) -> None:
    """Raise InputError if `folder` is a file, or one of `paths` exists and `force` is not set."""
    check_free(paths, force)
    if Path(folder).exists() and not Path(folder).is_dir():
        raise InputError(f"{folder}: is a file, not a folder")


def save_drawn(
    figures: dict[str, Figure],
    folder: str | Path,
    progress: Callable[[str, float], None] | None = None,
) -> tuple[Path, ...]:
    """Write figures, by their names, as SVG and PDF; the folder is made where it is missing."""
    paths = [Path(folder) / f"{name}.{end}" for name in figures for end in style.FORMATS]
    drawn = []
    for count, path in enumerate(paths):
        if progress is not None:
            progress("drawing figures", count / len(paths))
        drawn.append(style.render(figures[path.stem], path.suffix[1:]))
    _write_all(Path(folder), dict(zip(paths, drawn, strict=True)))
    return tuple(paths)


def check_free(paths: tuple[Path, ...], force: bool) -> None:
    """Raise InputError if one of `paths` exists and `force` is not set."""
    for path in paths:
        if path.exists() and not force:
            raise InputError(f"{path}: exists already; --force (force=True) overwrites it")


def _write_all(folder: Path, contents: dict[Path, bytes]) -> None:
    """Put all files into `folder`, made where it is missing, or none: each is written, then moved.

    A full disk shows while the new files are still beside those they are to replace.
    """
    made = _make_folder(folder)
    try:
        with tempfile.TemporaryDirectory(prefix=".levelnet-", dir=folder) as room:
            new = {path: Path(room) / f"{path.name}.part" for path in contents}
            for path, data in contents.items():
                _write_bytes(new[path], data, path)
            for path, place in new.items():
                place.replace(path)
    except BaseException:
        for one in made:
            with suppress(OSError):  # not empty: another program uses it
                one.rmdir()
        raise


def _make_folder(folder: Path) -> list[Path]:
    """Make a folder; which ones had to be made, the innermost first."""
    missing = [one for one in (folder, *folder.parents) if not one.exists()]
    folder.mkdir(parents=True, exist_ok=True)
    return missing


def _write_bytes(place: Path, data: bytes, path: Path) -> None:
    """Write a whole file, which will stand at `path`."""
    try:
        with place.open("xb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
    except OSError as error:
        if error.filename is None:
            error.filename = str(path)  # a full disk does not say where
        raise
