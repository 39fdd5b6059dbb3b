"""Published atomic data as CSV files; this package computes nothing (see README.md)."""

from pathlib import Path


def path(name: str) -> Path:
    """Path of the file `name` ("sources.toml", "hydrogen/energy_levels.csv") as installed."""
    return Path(__file__).parent / name
