"""What to know before relying on a history from a table."""

from __future__ import annotations

from ..background.cosmology import Cosmology
from ..escape.lines import Lines
from ..history.notes import override_notes, standing_notes
from .table import EffectiveTable


def table_notes(
    table: EffectiveTable,
    cosmology: Cosmology,
    lines: Lines,
    two_photon_rate_per_s: float | None = None,
) -> tuple[str, ...]:
    """Say what :func:`levelnet.solve` says of the same choices, but for limits crossed.

    Figures of the lines along the history, and the warnings that hang on them, are worked out by
    :func:`levelnet.solve` alone.

    Parameters
    ----------
    table, cosmology, two_photon_rate_per_s
        As for :func:`levelnet.history_from_table`.
    lines : Lines
        Line treatment in use.
    """
    setup, own = table.setup, table.setup.two_photon_rate_per_s
    n_max = 0 if table.helium is None else setup.helium.n_max
    replaced = two_photon_rate_per_s not in {None, own}
    overrides = [
        one
        for one in setup.rates.table
        if not (replaced and one.selector.process == "two_photon" and one.selector.species == "H I")
    ]
    return (
        *standing_notes(setup, lines, cosmology.helium_ratio(), n_max),
        "lines: limits are not judged along a history from a table; levelnet solve warns where one "
        "is crossed",
        *override_notes(overrides),
    )
