"""The error budget: from uncertain rates, by the derivatives of a weighing, to its targets.

Linear: the relative error of a target is the sum over rates of d ln J / d ln R times the relative
error of R. All rates of one row err together, by one common factor; rows of one group too, each by
its own sigma, so that their contributions add with their signs. Different groups, and rows without
a group, are independent and add in squares.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

import atomic_tables

from ..arrays import BoolArray, FloatArray
from ..atomic.helium_selection import ground_line_mask, term_mask, term_pair_mask
from ..atomic.selection import Selector, check_exists, level_mask, line_mask, pair_mask
from ..atomic.selector_rows import (
    SELECTOR_COLUMNS,
    SelectorRow,
    number_in,
    parse_rows,
    read_rows,
)
from ..errors import InputError
from ..history.setup import Setup
from ..tables import read_table
from .budget_record import ErrorBudget
from .helium_weighing import HeliumWeights, IonWeights
from .weighing import Weighing

COLUMNS = (*SELECTOR_COLUMNS, "sigma", "group", "source")
DEFAULT_TABLES = ("hydrogen/rate_uncertainties", "helium/rate_uncertainties")
LARGEST_SIGMA = 1.0


@dataclass(frozen=True, slots=True)
class Uncertainty:
    """One row: how uncertain the selected rates are.

    Attributes
    ----------
    where : str
        "my.csv, row 3", for messages.
    number : int
        The row, from 1.
    selector : Selector
        The rates.
    sigma : float, 0 to 1 (dimensionless)
        Relative 1-sigma uncertainty, common to all of them.
    group : str
        Rows of the same group err together; "" for a row of its own.
    source : str
        Where the number comes from.
    """

    where: str
    number: int
    selector: Selector
    sigma: float
    group: str
    source: str

    @property
    def row(self) -> str:
        """What was assumed: "escape 2p: sigma 0.08, group two-photon and Raman above 2s"."""
        group = f", group {self.group}" if self.group else ""
        return f"{self.selector.text}: sigma {self.sigma!r}{group}"


def load_uncertainties(path: str | Path | None = None) -> tuple[Uncertainty, ...]:
    """Read how uncertain rates are.

    Parameters
    ----------
    path : str or Path, optional
        A CSV file with the columns ``process,upper,lower,sigma,group,source``; None: the project's
        tables of published uncertainties and of estimates, ``hydrogen/rate_uncertainties`` and
        ``helium/rate_uncertainties`` of `atomic_tables`.

    Returns
    -------
    tuple of Uncertainty
        One for each row.

    Raises
    ------
    InputError
        If the file cannot be read, has another header or no rows, or a row has a process or level
        that is not known, a sigma that is no number or outside 0 to 1, or no source. One line with
        the row, counted from 1 below the header.
    """
    if path is not None:
        return _read(path)
    for name in DEFAULT_TABLES:
        read_table(name)  # holds it against its checksum
    files = [atomic_tables.path(f"{name}.csv") for name in DEFAULT_TABLES]
    return tuple(one for file in files for one in _read(file))


def _read(path: str | Path) -> tuple[Uncertainty, ...]:
    rows = parse_rows(read_rows(path, COLUMNS), COLUMNS, str(path))
    return tuple(_uncertainty(row) for row in rows)


def _uncertainty(row: SelectorRow) -> Uncertainty:
    sigma = number_in(row, "sigma")
    if not 0.0 <= sigma <= LARGEST_SIGMA:
        raise InputError(
            f"{row.where}: sigma = {sigma:g}: allowed are relative uncertainties from 0 to "
            f"{LARGEST_SIGMA:g}"
        )
    if not row.cells["source"]:
        raise InputError(f"{row.where}: source is empty; say where the number comes from")
    group, source = row.cells["group"], row.cells["source"]
    return Uncertainty(row.where, row.number, row.selector, sigma, group, source)


def uncertainties_in(setup: Setup, path: str | Path | None = None) -> tuple[Uncertainty, ...]:
    """Load the uncertainties of a setup before it is weighed.

    Parameters
    ----------
    setup : Setup
        What will be weighed.
    path : str or Path, optional
        A file of one's own: InputError where a row selects nothing in the atom. None: the rows of
        the default tables that apply; those of an escape say what one treatment leaves out,
        Sobolev's of hydrogen and partial redistribution with the continuum of He I, and are left
        out themselves with any other.
    """
    rows, atom = load_uncertainties(path), setup.atom_size
    if path is not None:
        for one in rows:
            check_exists(one.selector, atom, one.where)
        return rows
    found = tuple(one for one in rows if one.selector.exists_in(atom))
    partial = setup.lines.helium_continuum
    meant = {
        "H I": setup.lines.hydrogen == "sobolev",
        "He I": partial is not None and partial.redistribution == "partial",
    }
    return tuple(
        one
        for one in found
        if one.selector.process != "escape" or meant.get(one.selector.species, True)
    )


def error_budget(weighing: Weighing, uncertainties: Sequence[Uncertainty]) -> ErrorBudget:
    """Propagate uncertain rates to the targets of a weighing.

    Parameters
    ----------
    weighing : Weighing
        Derivatives of the targets by every rate.
    uncertainties : sequence of Uncertainty
        From :func:`load_uncertainties`; at least one. Two rows may select the same rate: they
        are two reasons why it is uncertain.

    Returns
    -------
    ErrorBudget
        Relative errors in the linear approximation, in all and by group.

    Raises
    ------
    InputError
        If a row selects nothing in the atom that was weighed.

    References
    ----------
    JCGM 100:2008, Guide to the Expression of Uncertainty in Measurement, sec. 5 (propagation of
    correlated and uncorrelated uncertainties; from memory).
    """
    if not uncertainties:
        raise InputError("uncertainties: empty; at least one row is needed")
    names = [one.group or f"{one.selector.text} (row {one.number})" for one in uncertainties]
    groups = tuple(dict.fromkeys(names))
    contribution = np.zeros((len(weighing.targets), len(groups)))
    sources: list[list[str]] = [[] for _ in groups]
    for name, one in zip(names, uncertainties, strict=True):
        group = groups.index(name)
        contribution[:, group] += one.sigma * derivatives(weighing, one)
        if one.source not in sources[group]:
            sources[group].append(one.source)
    return ErrorBudget(
        weighing.targets,
        weighing.units,
        weighing.value,
        np.sqrt(np.sum(contribution**2, axis=1)),
        groups,
        contribution,
        tuple("; ".join(texts) for texts in sources),
        tuple(one.row for one in uncertainties),
    )


def derivatives(weighing: Weighing, one: Uncertainty) -> FloatArray:
    """Give d ln J / d ln of a common factor on the selected rates, shape (n_targets,)."""
    found = _derivatives(weighing, one.selector)
    if found is None:
        raise InputError(
            f'{one.where}: selector "{one.selector.text}" matches nothing among the levels and '
            f"lines weighed: {_weighed(weighing, one.selector.species)}"
        )
    return found


def _derivatives(weighing: Weighing, selector: Selector) -> FloatArray | None:
    """The same; None where nothing is selected."""
    process = selector.process
    if selector.species == "He I" or process == "absorption":
        return None if weighing.helium is None else _of_helium(weighing.helium, selector)
    part: Weighing | IonWeights | None = weighing
    if selector.species == "He II":
        part = weighing.helium_ion
    if part is None:
        return None
    if process in {"two_photon", "compton"}:
        single: FloatArray = getattr(part, process)
        return single
    if process == "bound_bound":
        chosen = pair_mask(selector, part.levels, part.upper, part.lower)
    elif process == "bound_free":
        chosen = level_mask(selector, part.levels)
    elif isinstance(part, IonWeights):
        return part.escape if line_mask(selector, np.array([2])).any() else None
    else:
        chosen = line_mask(selector, part.levels.n[part.line_upper])
    return _summed(getattr(part, process), chosen)


def _of_helium(helium: HeliumWeights, selector: Selector) -> FloatArray | None:
    process = selector.process
    if process in {"two_photon", "absorption"}:
        single: FloatArray = getattr(helium, process)
        return single
    if process == "bound_free":
        return _summed(helium.bound_free, term_mask(selector, helium.levels))
    if process == "escape" or selector.to_ground:
        by_line = helium.escape if process == "escape" else helium.strength
        return _summed(by_line, ground_line_mask(selector, helium.lines))
    chosen = term_pair_mask(selector, helium.levels, helium.upper, helium.lower)
    return _summed(helium.bound_bound, chosen)


def _summed(values: FloatArray, chosen: BoolArray) -> FloatArray | None:
    total: FloatArray = values[:, chosen].sum(axis=1)
    return total if chosen.any() else None


def _weighed(weighing: Weighing, species: str) -> str:
    if species == "H I":
        return f"{len(weighing.levels)} levels and {', '.join(weighing.lines)}"
    helium = weighing.helium
    if helium is None:
        return "helium was inert"
    if species == "He I":
        return f"{len(helium.levels)} levels of He I and {', '.join(helium.lines)}"
    ion = weighing.helium_ion
    return "He II in Saha equilibrium" if ion is None else f"{len(ion.levels)} levels of He II"
