"""What made a file: versions, constants and tables, as text attributes; no time, no machine."""

from __future__ import annotations

from importlib import import_module
from importlib.metadata import PackageNotFoundError, version

from ..constants import CODATA_EDITION
from ..errors import TableError
from ..tables import list_tables

UNKNOWN = "unknown"


def provenance() -> dict[str, str]:
    """Versions, CODATA edition and table checksums, in the names of the layout."""
    libraries = {f"{name}_version": _version(name) for name in ("numpy", "scipy", "numba", "h5py")}
    return {
        "levelnet_version": levelnet_version(),
        **libraries,
        "codata_edition": CODATA_EDITION,
        "table_checksums": table_checksums(),
    }


def levelnet_version() -> str:
    """Return the version of this package, also where it runs from a folder without installation."""
    stated = getattr(import_module("levelnet"), "__version__", None)
    return str(stated) if stated else _version("levelnet")


def table_checksums() -> str:
    """One line per shipped atomic table: its name and sha256."""
    try:
        tables = list_tables()
    except TableError as error:
        # A result must not be lost because a catalogue, which may have no part in it, is damaged.
        return f"unreadable: {error}"
    return "\n".join(f"{table.name} {table.sha256}" for table in tables)


def _version(name: str) -> str:
    # Asked of the metadata, because importing numba to learn its version would take 0.3 s.
    try:
        return version(name)
    except PackageNotFoundError:
        return UNKNOWN
