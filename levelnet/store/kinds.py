"""The kinds of files that there are."""

from __future__ import annotations

from .escape_layout import ESCAPE_LAYOUT
from .layout import HISTORY_LAYOUT
from .level_layout import LEVEL_LAYOUT
from .sweep_layout import SWEEP_LAYOUT
from .table_layout import DISTILLED_LAYOUT, TABLE_LAYOUT
from .weighing_layout import WEIGHING_LAYOUT

LAYOUTS = (
    HISTORY_LAYOUT,
    TABLE_LAYOUT,
    DISTILLED_LAYOUT,
    WEIGHING_LAYOUT,
    LEVEL_LAYOUT,
    ESCAPE_LAYOUT,
    SWEEP_LAYOUT,
)
