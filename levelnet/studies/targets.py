"""stand-in until the branch observables is merged."""

from __future__ import annotations

import re
from typing import NamedTuple

from ..background.last_scattering import OBSERVABLES


class Target(NamedTuple):
    name: str
    kind: str
    unit: str = "1"
    redshift: float = 0.0
    upper: tuple[int, int] = (0, 0)
    lower: tuple[int, int] = (0, 0)


def parse_target(text: str) -> Target:
    if m := re.fullmatch(r"(x_e|T_m|optical_depth)\((.*)\)", text):
        return Target(text, m[1], "1", float(m[2]))
    if m := re.fullmatch(r"line\((\d+)(\w)-(\d+)(\w)\)", text):
        return Target(
            text,
            "line",
            "1",
            0.0,
            (int(m[1]), "spdfg".index(m[2])),
            (int(m[3]), "spdfg".index(m[4])),
        )
    assert text in OBSERVABLES
    return Target(text, "observable")
