"""A tabulated expansion rate H(z): in memory, as a file with a checksum, and from any callable.

The file is text: comment lines that start with ``#``, the first of them ``# levelnet expansion
table``; the header ``redshift,hubble_rate_per_s``; then one row per redshift, ascending from 0,
with H in s^-1.
"""

from __future__ import annotations

import functools
import hashlib
import math
import os
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from ..arrays import FloatArray, frozen_array
from ..errors import FileFormatError, InputError, RangeError
from ..texts import read_bytes
from .neutrinos import Number
from .patches import Patches, patches

FIRST_LINE = "# levelnet expansion table"
HEADER = "redshift,hubble_rate_per_s"
MIN_ROWS = 16
MAX_ROWS = 200_000  # what the text of a setup can carry; the spline errs by 1e-16 long before
# Hydrogen recombines below this redshift; a table that ends lower cannot carry a history.
MIN_LAST_REDSHIFT = 3000.0
_MAX_BYTES = 64_000_000


@dataclass(frozen=True, slots=True, eq=False)
class ExpansionTable:
    """The expansion rate at given redshifts, and a cubic spline of ln H in ln(1 + z) between them.

    Attributes
    ----------
    redshift : ndarray, shape (n_redshift,), dimensionless
        Strictly ascending from 0 to at least 3000; 16 to 200,000 rows.
    hubble_rate_per_s : ndarray, shape (n_redshift,), s^-1
        Expansion rate, positive.
    interpolation_error : float, dimensionless
        Error of ln H at every second row, of a spline that leaves them out; the largest. The spline
        through all rows is about 16 times better where H is smooth.

    Raises
    ------
    InputError
        If a rule above is broken; the text names the row.
    """

    redshift: FloatArray
    hubble_rate_per_s: FloatArray
    interpolation_error: float = field(init=False)
    _spline: Patches = field(init=False, repr=False)

    def __post_init__(self) -> None:
        """Check the rows, freeze them, and fit the spline."""
        redshift = np.asarray(self.redshift, dtype=float)
        rate = np.asarray(self.hubble_rate_per_s, dtype=float)
        _check_rows(redshift, rate)
        frozen_array(self, "redshift", redshift.shape)
        frozen_array(self, "hubble_rate_per_s", redshift.shape)
        x, y = np.log1p(redshift), np.log(rate)
        # The last row is kept, so that nothing is extrapolated.
        kept = np.union1d(np.arange(0, len(x), 2), [len(x) - 1])
        left_out = np.setdiff1d(np.arange(len(x)), kept)
        error = np.abs(_fit(x[kept], y[kept]).values(x[left_out]) - y[left_out]).max()
        object.__setattr__(self, "interpolation_error", float(error))
        object.__setattr__(self, "_spline", _fit(x, y))

    def rate_per_s(self, growth: Number) -> Number:
        """H in s^-1 at growth = 1 + redshift, float or ndarray; RangeError outside the table."""
        self.check_range(growth)
        if isinstance(growth, float):
            return math.exp(self._spline.value(math.log(growth)))
        return np.exp(self._spline.values(np.log(growth)))

    def log_slope(self, growth: Number) -> Number:
        """Return dln H/dln(1 + z), dimensionless, at growth = 1 + redshift; RangeError outside."""
        self.check_range(growth)
        if isinstance(growth, float):
            return self._spline.slope(math.log(growth))
        return self._spline.slopes(np.log(growth))

    @property
    def last_redshift(self) -> float:
        """Redshift of the last row, dimensionless."""
        return float(self.redshift[-1])

    def check_range(self, growth: Number) -> None:
        """Raise RangeError where growth = 1 + redshift lies outside the table."""
        last = 1.0 + self.last_redshift
        if isinstance(growth, float):
            low = high = growth
        else:
            low, high = float(np.min(growth, initial=last)), float(np.max(growth, initial=1.0))
        if not (low >= 1.0 and high <= last):
            wrong = low if low < 1.0 else high
            raise RangeError(
                f"redshift = {wrong - 1.0:g}: the expansion table holds 0 to {self.last_redshift:g}"
            )


def _fit(x: FloatArray, y: FloatArray) -> Patches:
    from scipy.interpolate import CubicSpline

    return patches(CubicSpline(x, y))


def _check_rows(redshift: FloatArray, rate: FloatArray) -> None:
    """Raise InputError where the rows are not an expansion history."""
    where = "expansion table"
    if redshift.ndim != 1 or rate.shape != redshift.shape:
        raise InputError(
            f"{where}: redshift has shape {redshift.shape} and hubble_rate_per_s {rate.shape}; "
            "one rate per redshift is needed"
        )
    if len(redshift) < MIN_ROWS:
        raise InputError(f"{where}: {len(redshift)} rows, at least {MIN_ROWS} are needed")
    if len(redshift) > MAX_ROWS:
        raise InputError(f"{where}: {len(redshift)} rows, at most {MAX_ROWS} are allowed")
    for name, values, good in (
        ("redshift", redshift, np.isfinite(redshift)),
        ("hubble_rate_per_s", rate, np.isfinite(rate) & (rate > 0.0)),
    ):
        if not np.all(good):
            row = int(np.argmin(good))
            allowed = "finite" if name == "redshift" else "positive and finite"
            raise InputError(
                f"{where}: {name} = {values[row]:g} in row {row + 1} must be {allowed}"
            )
    if redshift[0] != 0.0:
        raise InputError(f"{where}: starts at redshift = {redshift[0]:g}, must start at 0")
    rising = np.diff(redshift) > 0.0
    if not np.all(rising):
        row = int(np.argmin(rising))
        raise InputError(
            f"{where}: redshift must ascend, but {redshift[row + 1]:g} in row {row + 2} follows "
            f"{redshift[row]:g}"
        )
    if redshift[-1] < MIN_LAST_REDSHIFT:
        raise InputError(
            f"{where}: ends at redshift = {redshift[-1]:g}, must reach {MIN_LAST_REDSHIFT:g}"
        )


@functools.lru_cache(maxsize=16)
def inline_table(redshift: tuple[float, ...], rate_per_s: tuple[float, ...]) -> ExpansionTable:
    """Table of the numbers a Cosmology holds (redshift dimensionless, rate in s^-1); kept."""
    return ExpansionTable(np.array(redshift), np.array(rate_per_s))


def read_expansion_table(path: str | Path, sha256: str | None = None) -> ExpansionTable:
    """Read an expansion table file.

    Parameters
    ----------
    path : str or Path
        The file; a relative path is relative to the current directory.
    sha256 : str, optional
        Its SHA-256 checksum in hexadecimal; a different file is refused.

    Returns
    -------
    ExpansionTable
        Redshift (dimensionless) and H in s^-1.

    Raises
    ------
    InputError
        If the file cannot be read, is another file than asked, or its rows are not an expansion
        history. The text names the file and the line or row.
    """
    content = read_bytes(path, _MAX_BYTES)
    actual = hashlib.sha256(content).hexdigest()
    if sha256 is not None and sha256.lower() != actual:
        raise InputError(f"{path}: SHA-256 is {actual}, but {sha256} was asked for")
    redshift, rate = _parse(content, str(path))
    try:
        return ExpansionTable(redshift, rate)
    except InputError as error:
        raise InputError(f"{path}: {error}") from None


def _parse(content: bytes, where: str) -> tuple[FloatArray, FloatArray]:
    """Read the numbers; FileFormatError names the line that is wrong."""
    try:
        lines = content.decode("ascii").splitlines()
    except UnicodeDecodeError:
        raise FileFormatError(f"{where}: not plain text, no expansion table") from None
    if not lines or lines[0].strip() != FIRST_LINE:
        raise FileFormatError(f'{where}: the first line must be "{FIRST_LINE}"')
    rows: list[tuple[float, float]] = []
    header = False
    for number, line in enumerate(lines, start=1):
        text = line.strip()
        if not text or text.startswith("#"):
            continue
        if not header:
            if text != HEADER:
                raise FileFormatError(f'{where}, line {number}: the header must be "{HEADER}"')
            header = True
            continue
        try:
            redshift, rate = (float(part) for part in text.split(","))
        except ValueError:
            raise FileFormatError(
                f"{where}, line {number}: two numbers with a comma between are needed"
            ) from None
        rows.append((redshift, rate))
    values = np.array(rows, dtype=float).reshape(-1, 2)
    return values[:, 0], values[:, 1]


def write_expansion_table(table: ExpansionTable, path: str | Path) -> str:
    """Write an expansion table file, whole or not at all; an existing file is replaced.

    Parameters
    ----------
    table : ExpansionTable
        What to write; :func:`read_expansion_table` gives it back to the bit.
    path : str or Path
        The file.

    Returns
    -------
    str
        SHA-256 of the file, for the setup key ``expansion_table_sha256``.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    rows = zip(table.redshift.tolist(), table.hubble_rate_per_s.tolist(), strict=True)
    lines = [FIRST_LINE, "# redshift: dimensionless; hubble_rate_per_s: s^-1", HEADER]
    lines += [f"{redshift!r},{rate!r}" for redshift, rate in rows]
    content = ("\n".join(lines) + "\n").encode("ascii")
    target = Path(path)
    part = target.with_name(f"{target.name}.{os.getpid()}.part")
    try:
        part.write_bytes(content)
        os.replace(part, target)
    except OSError as error:
        part.unlink(missing_ok=True)
        raise InputError(f"{path}: cannot be written: {error.strerror}") from None
    return hashlib.sha256(content).hexdigest()


def tabulate_expansion(
    expansion: Any, redshift_max: float = 1e6, n_redshifts: int = 769
) -> ExpansionTable:
    """Sample an expansion rate.

    Parameters
    ----------
    expansion : callable, or an astropy cosmology
        Called with one redshift (float) it returns H in s^-1, as a float or as a quantity that
        converts itself to s^-1; or an object whose method ``H`` does.
    redshift_max : float, dimensionless, 3000 to 1e9
        Last redshift.
    n_redshifts : int, at least 512
        Number of rows, evenly spaced in ln(1 + z).

    Returns
    -------
    ExpansionTable
        Redshift (dimensionless) and H in s^-1.

    Raises
    ------
    InputError
        If an argument is out of range or a sample is not positive and finite.
    """
    if not MIN_LAST_REDSHIFT <= redshift_max <= 1e9:
        raise InputError(
            f"redshift_max = {redshift_max!r}: allowed are {MIN_LAST_REDSHIFT:g} to 1e9"
        )
    if n_redshifts < 512:
        raise InputError(f"n_redshifts = {n_redshifts!r}: at least 512 are needed")
    redshift = np.expm1(np.linspace(0.0, np.log1p(redshift_max), n_redshifts))
    redshift[-1] = redshift_max
    return ExpansionTable(redshift, sample_rate_per_s(expansion, redshift))


def sample_rate_per_s(expansion: Any, redshift: FloatArray) -> FloatArray:
    """H in s^-1 at redshifts (dimensionless), from anything :func:`tabulate_expansion` takes."""
    function: Callable[[Any], Any] = getattr(expansion, "H", expansion)
    if not callable(function):
        raise InputError(
            f"expansion: a {type(expansion).__name__} is neither callable nor has a method H"
        )
    if function is not expansion:  # astropy's H takes arrays, and is slow on single numbers
        return np.asarray(_per_s(function(redshift)), dtype=float)
    return np.array([_one_rate(function, z) for z in redshift.tolist()])


def _one_rate(function: Callable[[float], Any], redshift: float) -> float:
    rate = _per_s(function(redshift))
    try:
        return float(rate)
    except (TypeError, ValueError):
        raise InputError(
            f"expansion: gives {rate!r} at redshift {redshift:g}, not a number"
        ) from None


def _per_s(rate: Any) -> Any:
    return rate.to_value("1/s") if hasattr(rate, "to_value") else rate
