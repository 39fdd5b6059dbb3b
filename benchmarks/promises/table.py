"""Rows of the table of promises: error first, then the figure, the promise and the verdict."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from benchmarks.promises.targets import TARGETS


@dataclass(frozen=True, slots=True)
class Row:
    """One promise at one size.

    Attributes
    ----------
    target : str
        "P1" to "P11".
    size : int
        n_max; of P10 the number of redshifts.
    error : float
        Largest relative error of what was measured.
    against : str
        What the error is measured against.
    allowed : float
        Largest error with which the promise counts as met.
    seen : float
        The figure.
    what : str
        The figure in words, where it is not the target's own.
    promise : float or None
        Its number; None where none is made.
    note : str
        Why there is no figure; such a row is not counted.
    """

    target: str
    size: int
    error: float
    against: str
    allowed: float
    seen: float
    what: str
    promise: float | None
    note: str = ""

    @property
    def is_counted(self) -> bool:
        """Whether the row holds a promise and a figure."""
        return self.promise is not None and not self.note

    @property
    def is_met(self) -> bool:
        """Whether figure and error are both as promised; never where one of them is no number."""
        if self.promise is None:
            return False
        at_least = TARGETS[self.target].at_least
        reached = self.seen >= self.promise if at_least else self.seen <= self.promise
        return reached and self.error <= self.allowed

    def cells(self) -> tuple[str, ...]:
        """What is printed."""
        sign = ">=" if TARGETS[self.target].at_least else "<="
        bound = "none" if self.promise is None else f"{sign} {figure(self.promise)}"
        first = (self.target, self.what, str(self.size))
        if self.note:
            return *first, "", "", "", bound, self.note
        verdict = ("met" if self.is_met else "MISSED") if self.is_counted else "-"
        return *first, f"{self.error:.1e}", self.against, figure(self.seen), bound, verdict


def figure(value: float) -> str:
    """Three digits; errors as powers of ten."""
    return f"{value:.1e}" if value != 0.0 and abs(value) < 1e-4 else f"{value:.3g}"


def row(target: str, size: int, error: float, against: str, allowed: float, seen: float) -> Row:
    """A row with the words and the number of its target."""
    promise = TARGETS[target].promise[size]
    return Row(target, size, error, against, allowed, seen, TARGETS[target].what, promise)


def without_figure(target: str, size: int, note: str) -> Row:
    """A row that says why there is no figure."""
    one = TARGETS[target]
    return Row(target, size, 0.0, "", 0.0, 0.0, one.what, one.promise[size], note)


HEAD = ("", "figure", "size", "error", "against", "seen", "promise", "")
RIGHT = {2, 3, 5}  # columns of numbers


def in_order(rows: Sequence[Row]) -> list[Row]:
    """By target; each in the order in which it was measured."""
    return sorted(rows, key=lambda one: int(one.target[1:]))


def lay_out(rows: Sequence[Row]) -> str:
    """The rows in order, aligned."""
    lines = [HEAD, *(one.cells() for one in in_order(rows))]
    width = [max(len(line[k]) for line in lines) for k in range(len(HEAD))]
    return "\n".join(
        "  ".join(
            cell.rjust(w) if k in RIGHT else cell.ljust(w)
            for k, (cell, w) in enumerate(zip(line, width, strict=True))
        ).rstrip()
        for line in lines
    )


def summary(rows: Sequence[Row], left_out: int) -> tuple[str, int]:
    """The last line, and the exit code: 1 where a promise is missed."""
    counted = [one for one in in_order(rows) if one.is_counted]
    missed = [f"{one.target} at {one.size}" for one in counted if not one.is_met]
    text = f"{len(counted) - len(missed)} of {len(counted)} met"
    if missed:
        text += f"; MISSED: {', '.join(missed)}"
    noted = sum(bool(one.note) for one in rows)
    if noted or left_out:
        text += f"; not measured: {left_out} at larger sizes, {noted} for the reason given"
    return text, int(bool(missed))
