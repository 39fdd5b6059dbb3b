"""The expanding universe: densities, expansion rate, times, temperatures; no atoms."""

from .adapters import from_astropy, with_expansion
from .cosmology import Cosmology, DensityParameters
from .expansion import (
    ExpansionTable,
    read_expansion_table,
    tabulate_expansion,
    write_expansion_table,
)
from .matter import compton_rate_per_s, saha_log_odds

__all__ = [
    "Cosmology",
    "DensityParameters",
    "ExpansionTable",
    "compton_rate_per_s",
    "from_astropy",
    "read_expansion_table",
    "saha_log_odds",
    "tabulate_expansion",
    "with_expansion",
    "write_expansion_table",
]
