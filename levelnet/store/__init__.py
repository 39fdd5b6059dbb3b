"""HDF5 files and text tables; the only place that imports h5py, and only when a file is opened."""

from .layout import LAYOUT_NAME, LAYOUT_VERSION, describe_layout
from .read import read, read_attributes
from .text import write_csv
from .whole_file import check_output, whole_file
from .write import write

__all__ = [
    "LAYOUT_NAME",
    "LAYOUT_VERSION",
    "check_output",
    "describe_layout",
    "read",
    "read_attributes",
    "whole_file",
    "write",
    "write_csv",
]
