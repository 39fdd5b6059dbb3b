"""The result of a sweep: every case side by side."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..arrays import FloatArray, frozen_array
from ..errors import Outcome
from ..history.labelled import labelled, made_by
from ..history.result import HISTORY_ARRAYS
from ..markup import html_table
from .sweep_cases import case_label

if TYPE_CHECKING:
    import xarray

_SHOWN = 10  # cases that a notebook lists


@dataclass(frozen=True, slots=True, eq=False)
class Sweep:
    """Histories and observables of many setups.

    Attributes
    ----------
    title : str
        What the sweep is about.
    swept : tuple of str, length n_swept
        Dotted keys in which the setups differ, such as "hydrogen.n_max".
    columns : tuple of tuple, each of length n_cases
        For each of these its value in every case: whole numbers, numbers (NaN where the key is left
        out) or texts.
    setups : tuple of str, length n_cases
        The whole setup of each case as TOML; :func:`levelnet.history.setup.parse_setup` reads it.
    outcome : tuple of str, length n_cases
        How each ended: name of an :class:`levelnet.Outcome`, or "FAILED".
    reason : tuple of str, length n_cases
        Why a case gave nothing, or nothing that may be used as it stands; of one that did, which
        observables its history does not reach and why; "" where nothing is missing.
    redshift : ndarray, shape (n_redshift,) or (n_cases, n_redshift), dimensionless
        Descending: outputs of all cases where these are the same, else those of each, NaN after
        its last one.
    arrays : dict of str to ndarray, shape (n_cases, n_redshift)
        The arrays of a :class:`levelnet.History` by their names there, in their units
        (dimensionless, K, cm^-3, s^-1, s, Mpc^-1); NaN for a case that failed.
    observable_names, observable_units : tuple of str, length n_observables
        What each column of `observable` is, in which unit.
    observable : ndarray, shape (n_cases, n_observables)
        Values, in units of `observable_units`; NaN where the case failed or its grid does not reach
        the event.
    """

    title: str
    swept: tuple[str, ...]
    columns: tuple[tuple[Any, ...], ...]
    setups: tuple[str, ...]
    outcome: tuple[str, ...]
    reason: tuple[str, ...]
    redshift: FloatArray
    arrays: dict[str, FloatArray]
    observable_names: tuple[str, ...]
    observable_units: tuple[str, ...]
    observable: FloatArray

    def __post_init__(self) -> None:
        """Check lengths and shapes, and make every array read-only."""
        count = len(self.setups)
        if {len(self.outcome), len(self.reason), *map(len, self.columns)} != {count}:
            raise ValueError("Sweep: every case needs an outcome, a reason and swept values")
        if len(self.swept) != len(self.columns) or set(self.arrays) != set(HISTORY_ARRAYS):
            raise ValueError("Sweep: names and columns do not fit together")
        n = self.redshift.shape[-1]
        frozen_array(self, "redshift", (n,) if self.redshift.ndim == 1 else (count, n))
        frozen_array(self, "observable", (count, len(self.observable_names)))
        object.__setattr__(self, "arrays", {k: self._frozen(k, n) for k in HISTORY_ARRAYS})

    def _frozen(self, name: str, n_redshift: int) -> FloatArray:
        values = np.array(self.arrays[name], dtype=float, order="C")
        if values.shape != (len(self.setups), n_redshift):
            raise ValueError(f"Sweep.{name}: shape {values.shape}")
        values.flags.writeable = False
        return values

    def __len__(self) -> int:
        """How many cases there are."""
        return len(self.setups)

    def __getitem__(self, name: str) -> FloatArray:
        """Array of a history over all cases, or an observable; KeyError for another name."""
        if name in self.arrays:
            return self.arrays[name]
        if name not in self.observable_names:
            raise KeyError(name)
        column: FloatArray = self.observable[:, self.observable_names.index(name)]
        return column

    @property
    def not_ok(self) -> tuple[int, ...]:
        """Positions of the cases whose results may not be used as they stand."""
        good = Outcome.CONVERGED.name
        return tuple(k for k, name in enumerate(self.outcome) if name != good)

    def notes(self) -> dict[str, tuple[int, ...]]:
        """What cases that are ok do not reach, each note once, with the positions of its cases."""
        found: dict[str, tuple[int, ...]] = {}
        for k, text in enumerate(self.reason):
            if text and self.outcome[k] == Outcome.CONVERGED.name:
                found[text] = (*found.get(text, ()), k)
        return found

    def label(self, k: int) -> str:
        """Case as a person knows it: its position and what is special in it."""
        special = zip(self.swept, (column[k] for column in self.columns), strict=True)
        return case_label(k, ((name, value) for name, value in special if not _left_out(value)))

    def to_xarray(self) -> xarray.Dataset:
        """Everything as an xarray Dataset with the swept keys as coordinates (needs the extra)."""
        import xarray

        rows = ("case", "redshift" if self.redshift.ndim == 1 else "output")
        coordinates: dict[str, Any] = {"case": np.arange(len(self))}
        coordinates |= {
            name: ("case", list(values))
            for name, values in zip(self.swept, self.columns, strict=True)
        }
        coordinates["redshift"] = (
            self.redshift if self.redshift.ndim == 1 else (rows, self.redshift)
        )
        found: dict[str, Any] = {
            name: labelled(name, rows, values) for name, values in self.arrays.items()
        }
        for name, unit in zip(self.observable_names, self.observable_units, strict=True):
            found[name] = ("case", self[name], {"units": unit})
        found |= {"outcome": ("case", list(self.outcome)), "reason": ("case", list(self.reason))}
        return xarray.Dataset(found, coordinates, {"title": self.title, **made_by()})

    def _repr_html_(self) -> str:
        """Show the first cases in a notebook."""
        rows = [
            (self.label(k), self.outcome[k], self.reason[k]) for k in range(min(len(self), _SHOWN))
        ]
        if len(self) > _SHOWN:
            rows.append((f"{len(self) - _SHOWN} more", "", ""))
        return html_table(repr(self)[1:-1], ("case", "outcome", "reason"), rows)

    def __repr__(self) -> str:
        """One line: how many cases, over which keys, how they ended."""
        over = ", ".join(self.swept) or "nothing"
        return f"<Sweep of {len(self)} cases over {over}: {len(self.not_ok)} not ok>"


def _left_out(value: object) -> bool:
    """Whether a case leaves a swept key out: NaN among numbers, empty among texts."""
    return value == "" or (isinstance(value, float) and math.isnan(value))
