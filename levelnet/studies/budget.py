"""PROVISIONAL stand-in for the record of the branch `rates`."""

from __future__ import annotations

from dataclasses import dataclass

from ..arrays import FloatArray, frozen_array


@dataclass(frozen=True, slots=True, eq=False)
class ErrorBudget:
    targets: tuple[str, ...]
    units: tuple[str, ...]
    value: FloatArray
    sigma: FloatArray
    groups: tuple[str, ...]
    contribution: FloatArray
    sources: tuple[str, ...]

    def __post_init__(self) -> None:
        count = len(self.targets)
        for name in ("value", "sigma"):
            frozen_array(self, name, (count,))
        frozen_array(self, "contribution", (count, len(self.groups)))
