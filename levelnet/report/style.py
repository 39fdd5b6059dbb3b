"""How figures look: sizes, colours that colour-blind readers tell apart, fonts, fixed bytes.

Colours are those of Okabe & Ito 2008 (Color Universal Design, "How to make figures and
presentations that are friendly to colorblind people"; values from memory), maps are cividis (Nunez,
Anderton & Renslow 2018, PLoS ONE 13, e0199239) and the brown-to-teal diverging map of matplotlib.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from contextvars import ContextVar
from functools import cache
from io import BytesIO
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

BLUE, ORANGE, GREEN, PURPLE = "#0072B2", "#D55E00", "#009E73", "#CC79A7"
SKY, AMBER, BLACK, GREY = "#56B4E9", "#E69F00", "#000000", "#6E6E6E"
SERIES = (BLUE, ORANGE, GREEN, PURPLE, SKY, AMBER, BLACK)
DASHES = ("-", "--", "-.", ":", (0, (5, 1)), (0, (3, 1, 1, 1, 1, 1)), (0, (1, 1)))

# Widths of one and two columns of a journal page, in inches (common practice).
ONE_COLUMN_IN, TWO_COLUMNS_IN = 3.5, 7.1

FORMATS = ("svg", "pdf")

_SETTINGS: dict[str, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 8.0,
    "mathtext.fontset": "dejavusans",
    "axes.labelsize": 8.5,
    "axes.titlesize": 8.5,
    "axes.linewidth": 0.7,
    "axes.unicode_minus": True,
    "lines.linewidth": 1.4,
    "legend.fontsize": 7.5,
    "legend.frameon": False,
    "legend.handlelength": 2.6,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.top": True,
    "ytick.right": True,
    "xtick.labelsize": 7.5,
    "ytick.labelsize": 7.5,
    "figure.dpi": 150.0,
    "savefig.dpi": 600.0,
    "figure.constrained_layout.use": True,
    # Outlines in SVG look the same on every machine; TrueType in PDF is what journals take.
    "svg.fonttype": "path",
    "pdf.fonttype": 42,
    # Without a fixed salt the identifiers inside an SVG are random.
    "svg.hashsalt": "levelnet",
}


_STACKED = ContextVar("_STACKED", default=False)
_PANEL_IN = 2.6  # height of a panel where panels stand in one column


@contextmanager
def stacked() -> Iterator[None]:
    """Make figures of several columns as one column of panels, for a narrow screen."""
    token = _STACKED.set(True)
    try:
        yield
    finally:
        _STACKED.reset(token)


@contextmanager
def house_style() -> Iterator[None]:
    """Apply the settings above while a figure is made or saved; the user's own come back after.

    matplotlib's defaults come first, so that a user's settings file cannot change the figures.
    """
    import matplotlib

    with matplotlib.rc_context():
        # The backend is the user's (a notebook keeps its own).
        keep = {"backend", "backend_fallback", "interactive"}
        parameters: Any = matplotlib.rcParams
        parameters.update({k: v for k, v in matplotlib.rcParamsDefault.items() if k not in keep})
        parameters.update(_SETTINGS)
        yield


def new_figure(width_in: float, height_in: float) -> Figure:
    """Return an empty figure of the given size in inches, free of any global state.

    A notebook shows it as SVG, without any setting there; showing it fixes its layout. Within
    :func:`stacked` it is one column wide, and as high as its panels under one another need.
    """
    width = min(width_in, ONE_COLUMN_IN) if _STACKED.get() else width_in
    made: Figure = _shown_figure()(figsize=(width, height_in))
    return made


@cache
def _shown_figure() -> type[Figure]:
    """Kind of figure that a notebook can show; made late, for matplotlib is slow to import."""
    from matplotlib.figure import Figure

    class ShownFigure(Figure):
        """A figure of matplotlib that draws itself where HTML is shown, and may stack panels."""

        def _repr_svg_(self) -> str:
            return render(self, "svg").decode()

        def subplots(self, nrows: int = 1, ncols: int = 1, **choices: Any) -> Any:
            """Panels as of matplotlib, under one another where they are stacked."""
            if ncols == 1 or not _STACKED.get():
                return super().subplots(nrows, ncols, **choices)
            squeeze = choices.pop("squeeze", True)
            count = nrows * ncols
            self.set_size_inches(self.get_figwidth(), _PANEL_IN * count)
            panels = super().subplots(count, 1, squeeze=False, **choices).reshape(nrows, ncols)
            for axes in panels.flat:  # a shared axis has its numbers at the last panel alone
                axes.tick_params(labelbottom=True, labelleft=True)
            return panels.squeeze() if squeeze else panels

        def legend(self, *args: Any, **choices: Any) -> Any:
            """A legend; above the panels it has no more columns than the figure is wide for."""
            if str(choices.get("loc", "")).startswith("outside"):
                labels = args[1] if len(args) > 1 else [h.get_label() for h in choices["handles"]]
                fits = _columns(labels, 72.0 * self.get_figwidth(), choices.get("fontsize", 7.5))
                choices["ncols"] = min(choices.get("ncols", len(labels)), fits)
            return super().legend(*args, **choices)

    return ShownFigure


def text_width_pt(text: str, size_pt: float) -> float:
    """Width of a text in points, its formulas included."""
    from matplotlib.textpath import TextPath

    return float(TextPath((0.0, 0.0), text, size=size_pt).get_extents().width) if text else 0.0


def _columns(labels: Sequence[str], width_pt: float, size_pt: float) -> int:
    """Most columns of a legend that fit into a width, filled as evenly as they can be."""
    # Stroke, gap and space between columns, in letters: those of the settings and of matplotlib.
    beside_pt = (_SETTINGS["legend.handlelength"] + 0.8 + 2.0) * size_pt
    widest = max((text_width_pt(one, size_pt) for one in labels), default=0.0) + beside_pt
    most = max(1, min(len(labels), int(width_pt / widest)))
    rows = -(-len(labels) // most)
    return -(-len(labels) // rows) if rows else 1


def label_stacked(figure: Figure) -> None:
    """Adapt the labels of stacked panels: side by side the first of a row names the axis of all.

    Where names stand beside a panel it is narrow, and what is above and below it needs their room.
    """
    before = ""
    for axes in figure.axes:
        if axes.get_label() == "<colorbar>" or not axes.get_visible():
            continue
        if _in_words(axes):
            axes.xaxis.set_label_coords(1.0, -0.16)
            axes.xaxis.label.set_horizontalalignment("right")
            panel_letter(axes, axes.get_title(loc="left").strip("()"), place=-0.5)
        elif not axes.get_ylabel() and before:
            axes.set_ylabel(before)
        before = axes.get_ylabel()


def _in_words(axes: Axes) -> bool:
    """Whether names stand at the ticks of the vertical axis, which then needs no other."""
    plain = [re.sub(r"\$[^$]*\$", "", one.get_text()) for one in axes.get_yticklabels()]
    return any(any(map(str.isalpha, one)) for one in plain)


def panel_letter(axes: Axes, letter: str, place: float = 0.0) -> None:
    """Name a panel "(a)" above its upper left corner, where no curve runs.

    Parameters
    ----------
    axes : matplotlib Axes
        The panel.
    letter : str
        Its name.
    place : float, dimensionless
        Where, over the width of the panel; 0 is its corner.
    """
    axes.set_title(f"({letter})", loc="left", x=place, fontweight="bold", fontsize=8.5, pad=4.0)


def render(figure: Figure, file_format: str) -> bytes:
    """Draw `figure` as "svg", "pdf" or "png"; equal figures give equal bytes.

    The first drawing fixes the layout, for every later one would move it by a hair.

    Parameters
    ----------
    figure : matplotlib Figure
        Any figure made here.
    file_format : str
        "svg", "pdf" or "png".
    """
    undated = {"svg": {"Date": None}, "pdf": {"CreationDate": None}, "png": {}}[file_format]
    target = BytesIO()
    with house_style():
        if figure.get_constrained_layout():
            figure.draw_without_rendering()
            figure.set_layout_engine("none")
        figure.savefig(target, format=file_format, metadata=undated)
    return target.getvalue()
