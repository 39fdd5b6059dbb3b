"""All figures of a history as files: SVG and PDF, whole or not at all."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable
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
        If a file cannot be written; none is left half-written.
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
    Path(folder).mkdir(parents=True, exist_ok=True)
    for path, data in zip(paths, drawn, strict=True):
        _write_bytes(path, data)
    return tuple(paths)


def check_free(paths: tuple[Path, ...], force: bool) -> None:
    """Raise InputError if one of `paths` exists and `force` is not set."""
    for path in paths:
        if path.exists() and not force:
            raise InputError(f"{path}: exists already; --force (force=True) overwrites it")


def _write_bytes(path: Path, data: bytes) -> None:
    """Put `data` at `path` as a whole: a new file beside it is moved over it."""
    handle, name = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
    try:
        with os.fdopen(handle, "wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        umask = os.umask(0)
        os.umask(umask)
        Path(name).chmod(0o666 & ~umask)  # mkstemp makes files private; figures are for sharing
        Path(name).replace(path)
    except BaseException as error:
        Path(name).unlink(missing_ok=True)
        if isinstance(error, OSError) and error.filename is None:
            error.filename = str(path)  # a full disk does not say where
        raise
