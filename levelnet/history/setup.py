"""The chosen parts of one run: built in Python or read from a TOML file, and written back."""

from __future__ import annotations

import dataclasses
import hashlib
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any

from pydantic import Field

from ..atomic.overrides import Override, Rates
from ..atomic.physics import Physics, scales
from ..atomic.selection import AtomSize
from ..atomic.species import Helium, Hydrogen
from ..atomic.term_patterns import HeliumSize
from ..background.cosmology import Cosmology
from ..errors import InputError
from ..escape.frequency_step import (
    COLDEST_FIELD_K,
    chosen_step,
    coarsest_step,
    fitted_step,
    highest_line,
)
from ..escape.lines import HIGHEST_FED, Lines
from ..markup import html_text
from ..records import FIRST_FAULT, build, checked_record, from_mapping
from ..texts import MOST_TOML, parse_toml, read_text

_MOST_FED_LINES = 10


@checked_record
class Grid:
    """Where the history is delivered.

    Parameters
    ----------
    redshift_start, redshift_end : float, dimensionless
        First (highest) and last redshift of the output. The integration itself always starts in
        Saha equilibrium, at a redshift it chooses and reports.
    n_redshifts : int, 2 to 100000
        Number of output redshifts, evenly spaced in ln(1 + z), where `redshifts` is not given.
    redshifts : tuple of float, dimensionless, or None
        Output redshifts, in any order, each hit exactly; they must lie between start and end.
    """

    redshift_start: Annotated[float, Field(gt=0.0, le=10_000.0)] = 1800.0
    redshift_end: Annotated[float, Field(ge=0.0, lt=10_000.0)] = 20.0
    n_redshifts: Annotated[int, Field(ge=2, le=100_000)] = 200
    redshifts: Annotated[tuple[float, ...], FIRST_FAULT] | None = None

    def __post_init__(self) -> None:
        """Check the rules about several fields."""
        if self.redshift_end >= self.redshift_start:
            raise ValueError(
                f"redshift_end = {self.redshift_end:g} must be below "
                f"redshift_start = {self.redshift_start:g}"
            )
        for redshift in self.redshifts or ():
            if not self.redshift_end <= redshift <= self.redshift_start:
                raise ValueError(
                    f"redshifts: {redshift:g} lies outside redshift_end = {self.redshift_end:g} "
                    f"to redshift_start = {self.redshift_start:g}"
                )
        if self.redshifts is not None and len(set(self.redshifts)) < 2:
            raise ValueError("redshifts: at least two different values are needed")


@checked_record
class Accuracy:
    """How exactly the history is computed.

    Parameters
    ----------
    relative : float, 1e-9 to 1e-3 (dimensionless)
        Largest relative error of the slow variables (ionized and neutral fraction, T_m) from
        stepping and from interpolating the reduced network.
    max_steps : int, 10 to 1000000
        Limit on the number of steps.
    interpolate : bool
        True: reduce the network at Chebyshev nodes in ln T_r and interpolate. False: reduce it at
        every evaluation (slow; for checking). Helium is interpolated either way; its error is
        among the figures of the history.
    """

    relative: Annotated[float, Field(ge=1e-9, le=1e-3)] = 1e-6
    max_steps: Annotated[int, Field(ge=10, le=1_000_000)] = 100_000
    interpolate: bool = True


@checked_record
class Setup:
    """Everything that defines one run.

    Parameters
    ----------
    cosmology : Cosmology
        The expanding universe.
    hydrogen : Hydrogen
        The hydrogen atom.
    helium : Helium, optional
        The helium atom; inert if left out.
    lines : Lines, optional
        How line photons escape.
    grid : Grid, optional
        Output redshifts.
    accuracy : Accuracy, optional
        Tolerances.
    physics : Physics, optional
        Changed constants of nature.
    rates : Rates, optional
        Overridden rates.
    title : str, optional
        Any text; stored with the result.

    Notes
    -----
    Each part may also be given as a plain mapping. Bad values raise one InputError that lists all.
    """

    cosmology: Annotated[Cosmology, from_mapping(Cosmology)]
    hydrogen: Annotated[Hydrogen, from_mapping(Hydrogen)]
    helium: Annotated[Helium, from_mapping(Helium)] = Helium()
    lines: Annotated[Lines, from_mapping(Lines)] = Lines()
    grid: Annotated[Grid, from_mapping(Grid)] = Grid()
    accuracy: Annotated[Accuracy, from_mapping(Accuracy)] = Accuracy()
    physics: Annotated[Physics, from_mapping(Physics)] = Physics()
    rates: Annotated[Rates, from_mapping(Rates)] = Rates()
    title: str = ""

    def __post_init__(self) -> None:
        """Check the rules about several parts."""
        count, n_max = self.lines.lyman_lines, self.hydrogen.n_max
        if isinstance(count, int) and count > n_max - 1:
            raise ValueError(
                f"lines.lyman_lines = {count}: hydrogen.n_max = {n_max} has only "
                f"{n_max - 1} Lyman lines"
            )
        top = self.hydrogen.highest_resolved
        if top < n_max and (isinstance(count, str) or count > top - 1):
            raise ValueError(
                f"lines.lyman_lines = {count!r}: only levels resolved in l can have open Lyman "
                f"lines: with hydrogen.resolve_l_to = {top} give a number from 1 to {top - 1}"
            )
        self.rates.check(self.atom_size)
        self._check_feedback()
        self._check_transfer()
        self._check_overrides_act()
        self._check_helium()

    def _check_helium(self) -> None:
        """Refuse treatments of lines that are not there."""
        if self.helium.n_max == 0:
            for name in ("helium", "helium_higher_lines"):
                if getattr(self.lines, name) is not None:
                    raise ValueError(
                        f"lines.{name}: helium is inert with helium.n_max = 0 and has no lines; "
                        "allowed from helium.n_max = 2"
                    )
        elif self.helium.n_max == 2 and self.lines.helium_higher_lines in {"free", "feedback"}:
            raise ValueError(
                f'lines.helium_higher_lines = "{self.lines.helium_higher_lines}": with '
                "helium.n_max = 2 there is no line n 1P -> 1 1S with n >= 3; allowed from "
                "helium.n_max = 3"
            )

    def _check_feedback(self) -> None:
        """Refuse feedback among so many lines that steps shorter than its delays take for ever."""
        count = self.atom_size.lyman_lines
        remembers = self.lines.hydrogen in {"sobolev_feedback", "transfer"}
        if remembers and count > _MOST_FED_LINES:
            raise ValueError(
                f"lines.lyman_lines: {count} lines with feedback; allowed are 1 to "
                f"{_MOST_FED_LINES}: further ones change x_e by about 1e-6 in all"
            )

    def _check_transfer(self) -> None:
        """Refuse what a resolved field cannot do."""
        if self.lines.transfer is None:
            return
        top, step = self.hydrogen.highest_resolved, self.frequency_step
        needed = max((n for n, _ in self.lines.field_levels), default=2)
        if needed > top:
            raise ValueError(
                f"lines.transfer: needs levels up to n = {needed} resolved in l, and "
                f"hydrogen.n_max or resolve_l_to = {top}; lower highest_two_photon_n, or set "
                "excited_two_photon and raman to false"
            )
        limit = coarsest_step(self.accuracy.relative)
        if step > limit:
            raise ValueError(
                f"lines.transfer.frequency_step = {step:g}: too coarse for accuracy.relative = "
                f"{self.accuracy.relative:g}, which allows up to {limit:.2g}"
            )
        # Also on the grid twice as coarse that tells the error.
        most = highest_line(fitted_step(2.0 * step)) - 1
        if self.atom_size.lyman_lines > most:
            raise ValueError(
                f"lines.transfer.frequency_step = {step:g}: twice this step tells {most} Lyman "
                f"lines apart, and lines.lyman_lines = {self.atom_size.lyman_lines}"
            )
        coldest_k = COLDEST_FIELD_K * scales(self.physics).energy
        lowest = coldest_k / self.cosmology.cmb_temperature_k - 1.0
        if self.grid.redshift_end < lowest:
            raise ValueError(
                f"grid.redshift_end = {self.grid.redshift_end:g}: the field is resolved down to "
                f"redshift {lowest:.4g} (T_r = {coldest_k:.4g} K)"
            )

    def _check_overrides_act(self) -> None:
        """Refuse factors on rates that this setup switches off."""
        for one in self.rates.table:
            process = one.selector.process
            if one.selector.species != "H I":
                self._check_helium_override_acts(one)
                continue
            if process == "escape" and self.lines.hydrogen == "closed":
                raise ValueError(
                    f'{one.where}: {one.text} changes nothing: lines.hydrogen = "closed"'
                )
            if process == "escape" and self.lines.hydrogen == "transfer":
                raise ValueError(
                    f'{one.where}: {one.text}: with lines.hydrogen = "transfer" the escape follows '
                    "from the field and cannot be overridden"
                )
            off = self.hydrogen.two_photon_rate_per_s == 0.0 and one.value_per_s is None
            if process == "two_photon" and off:
                raise ValueError(
                    f"{one.where}: {one.text} changes nothing: hydrogen.two_photon_rate_per_s = 0"
                )

    def _check_helium_override_acts(self, one: Override) -> None:
        off = self.helium.two_photon_rate_per_s == 0.0 and one.value_per_s is None
        if one.selector.process == "two_photon" and one.selector.species == "He I" and off:
            raise ValueError(
                f"{one.where}: {one.text} changes nothing: helium.two_photon_rate_per_s = 0"
            )

    @property
    def atom_size(self) -> AtomSize:
        """What selectors of rates must find their match in."""
        count, n_max = self.lines.lyman_lines, self.hydrogen.n_max
        lines = n_max - 1 if isinstance(count, str) else count
        return AtomSize(n_max, self.hydrogen.highest_resolved, lines, self._helium_size())

    def _helium_size(self) -> HeliumSize:
        """What helium has; nothing where there is no helium, or where it is inert."""
        if not self.helium_recombines:
            return HeliumSize()
        n_max = self.helium.n_max
        higher = self.lines.helium_higher_lines or "closed"
        return HeliumSize(
            n_max,
            {"closed": 2, "free": n_max, "feedback": min(n_max, HIGHEST_FED)}[higher],
            bool(self.helium.intercombination_rate_per_s),
            self.lines.helium == "continuum",
            self.helium.helium_ion == "network",
        )

    @property
    def helium_recombines(self) -> bool:
        """Whether helium is among the slow variables: it has levels, and there is some."""
        return self.helium.n_max > 0 and self.cosmology.helium_ratio() > 0.0

    @property
    def frequency_step(self) -> float:
        """Width of the cells of a resolved field in ln nu (dimensionless), asked or chosen."""
        chosen = self.lines.transfer
        if chosen is not None and chosen.frequency_step is not None:
            return chosen.frequency_step
        return chosen_step(self.accuracy.relative)

    @property
    def two_photon_rate_per_s(self) -> float:
        """2s-1s rate in s^-1 with its override, before any change of constants."""
        return self.rates.two_photon_rate_per_s(self.hydrogen.two_photon_rate_per_s)

    def to_toml(self) -> str:
        """Write the setup as TOML text; :func:`parse_setup` gives it back equal."""
        import tomli_w

        return tomli_w.dumps(_plain(dataclasses.asdict(self)))

    def _repr_html_(self) -> str:
        """Show the setup in a notebook, under its title and digest."""
        return html_text(f"Setup {self.digest}: {self.title or '(no title)'}", self.to_toml())

    @property
    def digest(self) -> str:
        """Sixteen hexadecimal digits that name this setup."""
        return hashlib.sha256(self.to_toml().encode()).hexdigest()[:16]


def _plain(values: Mapping[str, Any]) -> dict[str, Any]:
    """Drop what is not set (TOML has no null); scalars before tables, as TOML wants.

    A part that sets nothing is no table either, so that a setup keeps its digest when the program
    learns new choices.
    """
    kept = {key: value for key, value in values.items() if value is not None}
    scalars = {k: v for k, v in kept.items() if not isinstance(v, Mapping)}
    tables = {k: _plain(v) for k, v in kept.items() if isinstance(v, Mapping)}
    tables = {k: v for k, v in tables.items() if v}
    return {k: list(v) if isinstance(v, tuple) else v for k, v in scalars.items()} | tables


def parse_setup(text: str, where: str = "setup", with_files: bool = True) -> Setup:
    """Read a setup from TOML text; every complaint is listed at once with its path.

    Where `with_files` is False the text must hold everything itself: no other file is opened.
    """
    values = parse_toml(text, where)
    try:
        if not with_files:
            _refuse_files(values)
        return build(Setup, values)
    except InputError as error:
        raise InputError(f"{where}: {error}") from None


def _refuse_files(values: Mapping[str, Any]) -> None:
    for table, key in (("cosmology", "expansion_table"), ("rates", "overrides")):
        part = values.get(table)
        if isinstance(part, Mapping) and part.get(key) is not None:
            raise InputError(f"{table}.{key}: names a file; allowed here are its rows alone")


def load_setup(path: str | Path) -> Setup:
    """Read a setup file.

    Parameters
    ----------
    path : str or Path
        A TOML file.

    Returns
    -------
    Setup
        The chosen parts.

    Raises
    ------
    InputError
        If the file cannot be read or any key is unknown, missing, of the wrong type or out of
        range; the text lists every complaint with its path.
    """
    return parse_setup(read_text(path, MOST_TOML), str(path))
