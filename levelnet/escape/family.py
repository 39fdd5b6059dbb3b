"""All line-escape treatments, in one tuple."""

from __future__ import annotations

from ..errors import InputError
from .resolved import ResolvedField
from .treatment import Closed, LineTreatment, Open, Sobolev, SobolevFeedback

TREATMENTS: tuple[LineTreatment, ...] = (
    Closed(),
    Open(),
    Sobolev(),
    SobolevFeedback(),
    ResolvedField(),
)


def treatment(name: str) -> LineTreatment:
    """The member of the family with this name."""
    for member in TREATMENTS:
        if member.name == name:
            return member
    known = ", ".join(f'"{member.name}"' for member in TREATMENTS)
    raise InputError(f'lines.hydrogen = "{name}": known are {known}')
