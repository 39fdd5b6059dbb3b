"""From the content of a file to the fields of records."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from ..errors import FileFormatError, Outcome, cut_short
from ..history.setup import Setup, parse_setup
from . import layout
from .schema import Content, Group, Layout


def outcome_of(content: Content) -> Outcome:
    """How the run ended that a file is from; FileFormatError for a name that is not known."""
    outcome = str(content.attributes["outcome"])
    if outcome not in Outcome.__members__:
        raise FileFormatError(f'outcome "{cut_short(outcome)}" is not known to this levelnet')
    return Outcome[outcome]


def setup_of(content: Content) -> Setup:
    """Setup of the run that a file is from; InputError where it names another file."""
    return parse_setup(str(content.attributes["setup"]), "stored setup", with_files=False)


def check_positions(parts: Mapping[str, Any], names: Sequence[str], count: int) -> None:
    """Raise FileFormatError where an array of `parts` names a level that is none of `count`."""
    for name in names:
        if len(parts[name]) and not 0 <= parts[name].min() <= parts[name].max() < count:
            raise FileFormatError(f"{name}: names levels that are not in the file")


def check_together(parts: Mapping[str, Any], names: Sequence[str], what: str) -> None:
    """Raise FileFormatError where some of `names` are among `parts` and others are not."""
    there = [name for name in names if parts.get(name) is not None]
    if there and len(there) < len(names):
        missing = next(name for name in names if name not in there)
        raise FileFormatError(f"{what}: {missing} is missing")


def all_fields(content: Content, kind: Layout) -> dict[str, Any]:
    """Collect the fields of the records in all groups of a file of this kind."""
    parts: dict[str, Any] = {}
    for group in (*kind.required, *kind.optional):
        if group.name in content.groups:
            merge(parts, fields_of(content, group))
    return parts


def merge(parts: dict[str, Any], more: dict[str, Any]) -> None:
    """Add the fields of another group; a record may lie in several."""
    for name, value in more.items():
        if isinstance(value, dict) and name in parts:
            merge(parts[name], value)
        else:
            parts[name] = value


def fields_of(content: Content, group: Group) -> dict[str, Any]:
    """Collect the fields of the records in one group: {"channels": {"names": ..., ...}, ...}."""
    fields: dict[str, Any] = {}
    for variable in group.variables:
        stored: Any = content.variables[f"{group.name}/{variable.name}"].values
        if variable is layout.REDSHIFT and not _same_redshift(content, stored):
            raise FileFormatError(f"redshift of group {group.name} differs from that of history")
        *outer, name = variable.field.split(".")
        inner = fields
        for key in outer:
            inner = inner.setdefault(key, {})
        inner[name] = stored if not hasattr(stored, "ndim") or stored.ndim else stored.item()
    fields.pop("", None)  # the position of a level is no field
    return fields


def _same_redshift(content: Content, stored: Any) -> bool:
    redshift: Any = content.variables[f"{layout.HISTORY.name}/redshift"].values
    return bool(stored.tobytes() == redshift.tobytes())
