"""HDF5 files and text tables; the only place that imports h5py, and only when a file is opened."""

from .escape_layout import ESCAPE_LAYOUT, describe_escape_layout
from .exports import export_paths, write_export
from .layout import LAYOUT_NAME, LAYOUT_VERSION, describe_layout
from .level_layout import LEVEL_LAYOUT, describe_level_layout
from .read import read, read_attributes, read_table, read_with_attributes
from .sweep_layout import SWEEP_LAYOUT, describe_sweep_layout
from .table_layout import DISTILLED_LAYOUT, TABLE_LAYOUT, describe_table_layout
from .text import write_csv, write_distilled_csv
from .weighing_layout import WEIGHING_LAYOUT, describe_weighing_layout
from .whole_file import check_output, whole_file
from .write import write, write_distilled

__all__ = [
    "DISTILLED_LAYOUT",
    "ESCAPE_LAYOUT",
    "LAYOUT_NAME",
    "LAYOUT_VERSION",
    "LEVEL_LAYOUT",
    "SWEEP_LAYOUT",
    "TABLE_LAYOUT",
    "WEIGHING_LAYOUT",
    "check_output",
    "describe_escape_layout",
    "describe_layout",
    "describe_level_layout",
    "describe_sweep_layout",
    "describe_table_layout",
    "describe_weighing_layout",
    "export_paths",
    "read",
    "read_attributes",
    "read_table",
    "read_with_attributes",
    "whole_file",
    "write",
    "write_csv",
    "write_distilled",
    "write_distilled_csv",
    "write_export",
]
