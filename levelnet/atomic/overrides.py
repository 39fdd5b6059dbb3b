"""The part of a setup that overrides rates: factors or values for selected ones, with sources."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated

import numpy as np

from ..arrays import FloatArray, IntArray
from ..errors import InputError
from ..records import FIRST_FAULT, TUPLES, checked_record
from .selection import AtomSize, Selector, check_exists, line_mask
from .selector_rows import (
    SELECTOR_COLUMNS,
    SelectorRow,
    number_in,
    parse_rows,
    read_rows,
)

COLUMNS = (*SELECTOR_COLUMNS, "factor", "value_per_s", "source")
LEAST_FACTOR, LARGEST_FACTOR = 1e-30, 1e6
_LARGEST_TWO_PHOTON_PER_S = 1e6
_ALLOWED = f"factors from {LEAST_FACTOR:g} to {LARGEST_FACTOR:g}"
_NETWORK = {"bound_bound", "bound_free"}
_INLINE = "rates.rows"


@dataclass(frozen=True, slots=True)
class Override:
    """One row: selected rates and what becomes of them.

    Attributes
    ----------
    where : str
        "my.csv, row 3", for messages.
    selector : Selector
        The rates.
    factor : float, dimensionless
        Multiplies each with its inverse; 1 where the two-photon rate is replaced.
    value_per_s : float or None, s^-1
        The new spontaneous rate, where that was given; of a line, `factor` holds it already.
    source : str
        Where the number comes from.
    """

    where: str
    selector: Selector
    factor: float
    value_per_s: float | None
    source: str

    @property
    def key(self) -> tuple[str, float]:
        """What of it acts on the network, for names of kept results."""
        return self.selector.text, self.factor

    @property
    def text(self) -> str:
        """What is done: "bound_bound 3d 2p x 1.01", "two_photon = 8.229 per s"."""
        if self.value_per_s is not None:
            return f"{self.selector.text} = {self.value_per_s:.10g} per s"
        return f"{self.selector.text} x {self.factor:.10g}"


@checked_record
class Rates:
    """Rates other than computed.

    Parameters
    ----------
    overrides : str or None
        A CSV file with the columns ``process,upper,lower,factor,value_per_s,source``, relative to
        the current directory. It is read at once and becomes `rows`, so that a setup and every
        result carry what it says; None afterwards.
    rows : tuple of str or None
        The rows of such a file, without its header. Each has either a factor (1e-30 to 1e6) on all
        that it selects, or a value in s^-1 for one transition or the two-photon rate, and a source.
        A rate and its inverse change together, so detailed balance holds. No two rows may select
        the same rate.

    Raises
    ------
    InputError
        If a rule is broken; the text names file and row.

    Notes
    -----
    Values are those of an atom with the measured constants; changed constants scale them like all
    others. Selectors are those of :mod:`levelnet.atomic.selection`.
    """

    overrides: str | None = None
    rows: Annotated[Annotated[tuple[str, ...], FIRST_FAULT] | None, TUPLES] = None

    def __post_init__(self) -> None:
        """Read the file and check every row."""
        where = _INLINE
        if self.overrides is not None:
            if self.rows:
                raise InputError("rates.overrides and rates.rows: give one of them, not both")
            where = self.overrides
            # Frozen for users; here the record is still being made.
            object.__setattr__(self, "rows", read_rows(where, COLUMNS))
            object.__setattr__(self, "overrides", None)
        object.__setattr__(self, "_where", where)
        self.table  # noqa: B018 (every complaint comes here, none later)

    @property
    def table(self) -> tuple[Override, ...]:
        """The rows, checked."""
        return _overrides(self.rows or (), str(getattr(self, "_where", _INLINE)))

    def check(self, atom: AtomSize) -> None:
        """Raise InputError where a row selects nothing in this atom."""
        for one in self.table:
            check_exists(one.selector, atom, one.where)

    @property
    def network(self) -> tuple[Override, ...]:
        """Overrides of hydrogen's lines among excited levels and of their photoionization."""
        return self.network_of("H I")

    def network_of(self, species: str) -> tuple[Override, ...]:
        """The same of "H I", "He I" or "He II"."""
        of = self._of(species)
        return tuple(
            one for one in of if one.selector.process in _NETWORK and not one.selector.to_ground
        )

    def _of(self, species: str) -> list[Override]:
        return [one for one in self.table if one.selector.species == species]

    @property
    def compton_factor(self) -> float:
        """Factor on the Compton rate, dimensionless."""
        return self._single("compton")

    @property
    def absorption_factor(self) -> float:
        """Factor on the cross section of H I 1s inside the lines of He I, dimensionless."""
        return self._single("absorption")

    def _single(self, process: str) -> float:
        return next((o.factor for o in self.table if o.selector.process == process), 1.0)

    def two_photon_rate_per_s(self, computed_per_s: float, species: str = "H I") -> float:
        """2s-1s rate, of He I that of 2 1S, in s^-1 in place of the computed one."""
        for one in self._of(species):
            if one.selector.process == "two_photon":
                return computed_per_s * one.factor if one.value_per_s is None else one.value_per_s
        return computed_per_s

    def escape_factors(self, n_upper: IntArray) -> FloatArray | None:
        """Factor on the escape of each Lyman line np-1s, shape of `n_upper`; None: all are 1."""
        return self._escape_factors("H I", n_upper)

    def ion_escape_factor(self) -> float:
        """Factor on the escape of 2p-1s of He II, dimensionless."""
        found = self._escape_factors("He II", np.array([2]))
        return 1.0 if found is None else float(found[0])

    def _escape_factors(self, species: str, n_upper: IntArray) -> FloatArray | None:
        chosen = [one for one in self._of(species) if one.selector.process == "escape"]
        if not chosen:
            return None
        factor = np.ones(len(n_upper))
        for one in chosen:
            factor[line_mask(one.selector, n_upper)] *= one.factor
        return factor

    def ground_line_factors(self, lines: Sequence[str], process: str) -> FloatArray | None:
        """Factors on lines of He I to 1 1S, shape (n_lines,); None: all are 1.

        `process` is "bound_bound", on their Einstein A, or "escape", on their net flow.
        """
        from .helium_selection import ground_line_mask

        factor = np.ones(len(lines))
        for one in self._of("He I"):
            if one.selector.process == process:
                factor[ground_line_mask(one.selector, lines)] *= one.factor
        return None if np.all(factor == 1.0) else factor


@lru_cache(maxsize=64)
def _overrides(rows: tuple[str, ...], where: str) -> tuple[Override, ...]:
    """Parse rows and hold them against each other; kept, for a setup is made again and again."""
    made = tuple(_override(row) for row in parse_rows(rows, COLUMNS, where))
    single: dict[tuple[int, ...], int] = {}
    several: list[int] = []
    for k, one in enumerate(made):
        name = one.selector.transition
        earlier = several if name is not None else range(k)
        before = [i for i in earlier if made[i].selector.overlaps(one.selector)]
        before += [single[name]] if name in single else []
        if before:
            raise InputError(
                f'{one.where}: selector "{one.selector.text}" selects rates that row '
                f"{min(before) + 1} already sets"
            )
        if name is None:
            several.append(k)
        else:
            single[name] = k
    return made


def _override(row: SelectorRow) -> Override:
    factor, value, source = (row.cells[name] for name in ("factor", "value_per_s", "source"))
    if not source:
        raise InputError(f"{row.where}: source is empty; say where the number comes from")
    if bool(factor) == bool(value):
        raise InputError(f"{row.where}: give either factor or value_per_s, one of them")
    if not value:
        number = number_in(row, "factor")
        if not LEAST_FACTOR <= number <= LARGEST_FACTOR:
            raise InputError(f"{row.where}: factor = {number:g}: allowed are {_ALLOWED}")
        return Override(row.where, row.selector, number, None, source)
    number = number_in(row, "value_per_s")
    if not 0.0 < number:
        raise InputError(f"{row.where}: value_per_s = {number:g}: must be above 0")
    return Override(row.where, row.selector, _factor_of(row, number), number, source)


def _factor_of(row: SelectorRow, value_per_s: float) -> float:
    """Factor that makes a rate `value_per_s`; 1 for the two-photon rate, which is replaced."""
    if row.selector.process == "two_photon":
        if value_per_s > _LARGEST_TWO_PHOTON_PER_S:
            raise InputError(
                f"{row.where}: value_per_s = {value_per_s:g}: allowed are values to "
                f"{_LARGEST_TWO_PHOTON_PER_S:g} s^-1"
            )
        return 1.0
    name = row.selector.transition
    if name is None and row.selector.species != "H I":
        raise InputError(
            f"{row.where}: value_per_s: rates of {row.selector.species} but those of two_photon "
            "take a factor"
        )
    if name is None:
        raise InputError(
            f"{row.where}: value_per_s needs a selector of one transition, such as bound_bound 3d "
            f'2p, or two_photon; "{row.selector.text}" takes a factor'
        )
    from .bound_bound import einstein_a

    try:
        factor = value_per_s / float(einstein_a(*name))
    except InputError as error:
        raise InputError(f"{row.where}: {error}") from None
    if not LEAST_FACTOR <= factor <= LARGEST_FACTOR:
        raise InputError(
            f"{row.where}: value_per_s = {value_per_s:g} is {factor:g} times the computed rate; "
            f"allowed are {_ALLOWED}"
        )
    return factor
