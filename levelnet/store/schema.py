"""What a layout is made of: variables, groups, kinds of files, and the content of one file."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Kind = Literal["float64", "int64", "text"]


@dataclass(frozen=True, slots=True)
class Variable:
    """One dataset: what it is called, what it holds, and which field of the record it is."""

    name: str
    dimensions: tuple[str, ...]
    units: str
    long_name: str
    field: str
    kind: Kind = "float64"
    coordinates: str = ""

    @property
    def is_coordinate(self) -> bool:
        """True for the variable that gives a dimension its name and values."""
        return self.dimensions == (self.name,)

    @property
    def attributes(self) -> dict[str, str]:
        """The attributes on disk; no `units` for text, nor where each number has its own."""
        given = {"long_name": self.long_name}
        if self.units and self.kind != "text":
            given["units"] = self.units
        if self.coordinates:
            # Tells xarray that the quantum numbers are coordinates of the levels (CF, section 5).
            given["coordinates"] = self.coordinates
        return given


@dataclass(frozen=True, slots=True)
class Group:
    """One group of datasets that opens alone in xarray."""

    name: str
    description: str
    variables: tuple[Variable, ...]
    species: str = ""

    @property
    def part(self) -> tuple[str, ...]:
        """Fields, each in the one before, that lead to the part an optional group holds."""
        field = next(one.field for one in self.variables if "." in one.field)
        return tuple(field.split(".")[:-1])

    @property
    def attributes(self) -> dict[str, str]:
        """The attributes on disk."""
        given = {"description": self.description}
        return given | {"species": self.species} if self.species else given


@dataclass(frozen=True, slots=True)
class Layout:
    """One kind of file: its name and version, its attributes, its groups.

    Attributes
    ----------
    name, version
        As they stand in the file; a reader refuses a newer version.
    record : str
        What is in it, as a reader is told: "a history".
    attributes : dict
        Attributes of the file and what they mean.
    required, optional : tuple of Group
        Groups that every file has, in the order of writing, and those that a file may have.
    by_attributes : callable or None
        Makes the layout of one file from its attributes, where it depends on them; ValueError where
        they name none.
    """

    name: str
    version: int
    record: str
    attributes: dict[str, str]
    required: tuple[Group, ...]
    optional: tuple[Group, ...] = ()
    by_attributes: Callable[[Mapping[str, Any]], Layout] | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Stored:
    """One variable as it stands in a file: text as a tuple, numbers as an array."""

    dimensions: tuple[str, ...]
    attributes: dict[str, str]
    values: tuple[str, ...] | NDArray[Any]

    @property
    def shape(self) -> tuple[int, ...]:
        """Lengths of the dimensions."""
        return (len(self.values),) if isinstance(self.values, tuple) else self.values.shape


@dataclass(slots=True, eq=False)
class Content:
    """All that a file says, whatever its encoding; variables and groups by their path."""

    attributes: dict[str, str | int] = field(default_factory=dict)
    groups: dict[str, dict[str, str]] = field(default_factory=dict)
    variables: dict[str, Stored] = field(default_factory=dict)


def number_type(kind: Kind) -> np.dtype[Any]:
    """Return the type on disk of numbers of `kind`: little-endian on every machine."""
    return np.dtype("<i8") if kind == "int64" else np.dtype("<f8")


def describe(one: Layout, groups: tuple[Group, ...]) -> str:
    """Return a layout with these groups as text."""
    lines = [f"{one.name}, version {one.version}", "", "attributes of the file"]
    lines += [f"  {name}: {text}" for name, text in one.attributes.items()]
    for group in groups:
        lines += ["", f"group {group.name}: {group.description}"]
        for variable in group.variables:
            where = f"({', '.join(variable.dimensions)})" if variable.dimensions else ""
            units = f" [{variable.units}]" if "units" in variable.attributes else ""
            lines.append(
                f"  {variable.kind:7s} {variable.name}{where}{units}: {variable.long_name}"
            )
    lines += ["", "after the HDF5 data: one line with the sha256 of all bytes before it"]
    return "\n".join(lines) + "\n"
