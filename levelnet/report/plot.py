"""One figure of any result, for notebooks and scripts."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import TYPE_CHECKING, Any

from ..distilled.fast import FastHistory
from ..distilled.table import EffectiveTable
from ..errors import InputError
from ..history.result import History
from ..studies.escape_records import EscapeStudy
from ..studies.level_records import LevelStudy
from ..studies.levels import n_held_out
from ..studies.sweep_record import Sweep
from ..studies.weighing import Weighing
from .escape import (
    escape_channel_figure,
    escape_spectrum_figure,
    switch_figure,
    treatment_figure,
)
from .figures import figure_makers
from .level_checks import check_figure, resolve_figure
from .levels import level_figure
from .plots import history_figure
from .rates import certificate_figure, rate_figure
from .sweep import sweep_figure
from .weights import weighing_makers

if TYPE_CHECKING:
    from matplotlib.figure import Figure

Makers = dict[str, Callable[[], "Figure"]]


def plot(result: object, name: str = "") -> Figure:
    """Draw one figure of a result.

    Parameters
    ----------
    result : History, FastHistory, LevelStudy, EscapeStudy, EffectiveTable, Weighing or Sweep
        Any result.
    name : str
        Which figure; empty takes the first. A name that is not known is answered with those that
        are.

    Returns
    -------
    matplotlib Figure
        In the style of the project, free of pyplot's state. A notebook shows it as SVG; its
        ``savefig`` writes it.

    Raises
    ------
    InputError
        If there is no figure of that name, or none of such a result.
    """
    makers = makers_of(result)
    if name and name not in makers:
        raise InputError(f'figure "{name}": of this result there are {", ".join(makers)}')
    return makers[name or next(iter(makers))]()


def makers_of(result: object) -> Makers:
    """What draws each figure of a result, by its name."""
    known = _MAKERS.get(type(result))
    if known is None:
        raise InputError(f"plot: nothing is drawn of a {type(result).__name__}")
    return known(result)


def _of_levels(study: LevelStudy) -> Makers:
    makers: Makers = {"levels": partial(level_figure, study)}
    if n_held_out(len(study.rungs.n_max)):
        makers["check"] = partial(check_figure, study)
    if study.resolved is not None:
        makers["resolve"] = partial(resolve_figure, study)
    return makers


def _of_escape(study: EscapeStudy) -> Makers:
    makers: Makers = {
        "treatments": partial(treatment_figure, study),
        "switches": partial(switch_figure, study),
        "channels": partial(escape_channel_figure, study),
    }
    if study.field is not None:
        makers["spectrum"] = partial(escape_spectrum_figure, study)
    return makers


def _of_table(table: EffectiveTable) -> Makers:
    makers: Makers = {"rates": partial(rate_figure, table)}
    if table.certificate is not None:
        makers["certificate"] = partial(certificate_figure, table.certificate, table.tolerance)
    return makers


_MAKERS: dict[type, Callable[[Any], Makers]] = {
    History: figure_makers,
    FastHistory: lambda history: {"history": partial(history_figure, history)},
    LevelStudy: _of_levels,
    EscapeStudy: _of_escape,
    EffectiveTable: _of_table,
    Weighing: weighing_makers,
    Sweep: lambda sweep: {"sweep": partial(sweep_figure, sweep)},
}
