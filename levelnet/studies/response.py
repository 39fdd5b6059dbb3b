"""How an experiment answers to a change of x_e(z): kernels, and the covariance of what it measures.

    dO_i = int K_i(z) d ln x_e(z) d ln(1 + z),     sigma = sqrt(dO^T C^-1 dO)

from the first to the last redshift of the kernels; outside them the kernels are zero by statement.
K_i = dO_i/d ln x_e per unit of ln(1 + z) is linear in ln(1 + z) between rows, the change a cubic
spline between its own; their product is then integrated exactly.

The file is text. First line ``# levelnet response``; other lines that start with ``#`` and empty
ones are skipped. The first block has the header ``redshift,NAME,NAME,...`` and a row per redshift,
ascending; the second has the header ``covariance,NAME,...`` with the same names in the same order,
and a row per observable: its name, then its covariances.
"""

from __future__ import annotations

import hashlib
import itertools
import math
import re
from pathlib import Path
from typing import Annotated

import numpy as np
from pydantic import Field

from ..arrays import FloatArray
from ..errors import InputError, cut_short
from ..records import FIRST_FAULT, TUPLES, checked_record
from ..texts import read_bytes

FIRST_LINE = "# levelnet response"
MAX_OBSERVABLES, MAX_ROWS = 100, 5000
_MAX_BYTES = 16_000_000
# Largest asymmetry of a covariance, over the geometric mean of the variances: rounding in text.
_SYMMETRIC = 1e-9
# Between these sizes no square of kernel over spread leaves the range of floating-point numbers.
_LARGEST_KERNEL = 1e50
_SMALLEST_VARIANCE, _LARGEST_VARIANCE = 1e-100, 1e100
# Smallest eigenvalue of a correlation matrix: below, sigma would hang on the rounding of the text.
_SMALLEST_EIGENVALUE = 1e-10
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(3)


Row = tuple[float, ...]
Numbers = Annotated[Row, FIRST_FAULT, TUPLES]
Matrix = Annotated[tuple[Annotated[Row, FIRST_FAULT], ...], FIRST_FAULT, TUPLES]
Names = Annotated[tuple[str, ...], FIRST_FAULT, TUPLES, Field(min_length=1)]


@checked_record
class Response:
    """Kernels and covariance of an experiment.

    Parameters
    ----------
    names : tuple of str, length n_observables, 1 to 100
        Names of its observables: letters, digits and _.
    redshift : tuple of float, length n_redshift, 2 to 5000 (dimensionless)
        Strictly ascending, from 0 or above to 10000 or below.
    kernels : tuple of tuple of float, shape (n_redshift, n_observables), units of each observable
        dO_i/d ln x_e(z) per unit of ln(1 + z), -1e50 to 1e50.
    covariance : tuple of tuple of float, shape (n_observables, n_observables), products of units
        Of the observables; symmetric and positive definite, variances 1e-100 to 1e100, no
        eigenvalue of the correlation matrix below 1e-10.

    Raises
    ------
    InputError
        If a rule above is broken.
    """

    names: Names
    redshift: Numbers
    kernels: Matrix
    covariance: Matrix

    def __post_init__(self) -> None:
        """Check the rules about several fields."""
        _check_names(self.names)
        _check_redshift(self.redshift)
        _check_shape("kernels", self.kernels, len(self.redshift), len(self.names))
        _check_shape("covariance", self.covariance, len(self.names), len(self.names))
        _check_kernels(np.array(self.kernels))
        _check_covariance(np.array(self.covariance))

    def change(self, redshift: FloatArray, delta_ln_x_e: FloatArray) -> FloatArray:
        """Change of each observable, shape (n_observables,), in its own units.

        Parameters
        ----------
        redshift : ndarray, shape (n,), dimensionless
            Two or more, in either order; they must cover the kernels.
        delta_ln_x_e : ndarray, shape (n,), dimensionless
            Change of ln x_e there.

        Raises
        ------
        InputError
            If the redshifts do not cover those of the kernels.
        """
        from scipy.interpolate import CubicSpline

        order = np.argsort(redshift)
        low, high = float(redshift[order[0]]), float(redshift[order[-1]])
        if low > self.redshift[0] or high < self.redshift[-1]:
            raise InputError(
                f"response: its kernels run from redshift {self.redshift[0]:g} to "
                f"{self.redshift[-1]:g}, but x_e is known from {low:g} to {high:g} only"
            )
        x, kernel_x = np.log1p(redshift[order]), np.log1p(np.array(self.redshift))
        edges = np.unique(np.concatenate([x, kernel_x]))
        edges = edges[(edges >= kernel_x[0]) & (edges <= kernel_x[-1])]
        half, centre = 0.5 * np.diff(edges)[:, None], 0.5 * (edges[1:] + edges[:-1])[:, None]
        y = (centre + half * _NODES).ravel()
        weighed = CubicSpline(x, delta_ln_x_e[order])(y) * (half * _WEIGHTS).ravel()
        kernels = np.array(self.kernels).T
        return np.array([np.interp(y, kernel_x, one) @ weighed for one in kernels])

    def sigma(self, redshift: FloatArray, delta_ln_x_e: FloatArray) -> float:
        """Size of a change of x_e(z) in standard deviations of the experiment (dimensionless)."""
        root = np.linalg.cholesky(np.array(self.covariance))
        return float(np.linalg.norm(np.linalg.solve(root, self.change(redshift, delta_ln_x_e))))


def _check_names(names: tuple[str, ...]) -> None:
    if len(names) > MAX_OBSERVABLES:
        raise ValueError(f"{len(names)} observables, allowed are 1 to {MAX_OBSERVABLES}")
    for name in names:
        if not re.fullmatch(r"\w+", name, re.ASCII):
            raise ValueError(f'the name "{cut_short(name)}" may hold letters, digits and _ only')
        if names.count(name) > 1:
            raise ValueError(f'"{cut_short(name)}" is named twice')


def _check_redshift(redshift: Row) -> None:
    if not 2 <= len(redshift) <= MAX_ROWS:
        raise ValueError(f"{len(redshift)} redshifts, allowed are 2 to {MAX_ROWS}")
    if not 0.0 <= redshift[0] < redshift[-1] <= 10_000.0:
        raise ValueError(
            f"redshift runs from {redshift[0]:g} to {redshift[-1]:g}, allowed is "
            "ascending from 0 or above to 10000 or below"
        )
    for row, (low, high) in enumerate(itertools.pairwise(redshift), start=2):
        if not high > low:
            raise ValueError(f"redshift must ascend, but {high:g} in row {row} follows {low:g}")


def _check_shape(what: str, matrix: tuple[Row, ...], rows: int, columns: int) -> None:
    if len(matrix) != rows:
        raise ValueError(f"{what} has {len(matrix)} rows, {rows} are needed")
    for number, row in enumerate(matrix, start=1):
        if len(row) != columns:
            raise ValueError(f"{what}, row {number}: {len(row)} numbers, {columns} are needed")


def _check_kernels(kernels: FloatArray) -> None:
    if np.any(np.abs(kernels) > _LARGEST_KERNEL):
        i, j = np.argwhere(np.abs(kernels) > _LARGEST_KERNEL)[0]
        raise ValueError(
            f"kernel {kernels[i, j]:g} in row {i + 1}, column {j + 1}: allowed are "
            f"-{_LARGEST_KERNEL:g} to {_LARGEST_KERNEL:g}"
        )


def _check_covariance(covariance: FloatArray) -> None:
    variances = np.diag(covariance)
    if not np.all(variances > 0.0):
        at = int(np.argmin(variances > 0.0))
        raise ValueError(f"variance {variances[at]:g} in row {at + 1} must be positive")
    wild = (variances < _SMALLEST_VARIANCE) | (variances > _LARGEST_VARIANCE)
    if np.any(wild):
        at = int(np.argmax(wild))
        raise ValueError(
            f"variance {variances[at]:g} in row {at + 1}: allowed are {_SMALLEST_VARIANCE:g} to "
            f"{_LARGEST_VARIANCE:g}; choose another unit"
        )
    spread = np.sqrt(variances)
    uneven = np.abs(covariance - covariance.T) > _SYMMETRIC * np.outer(spread, spread)
    if np.any(uneven):
        i, j = np.argwhere(uneven)[0] + 1
        raise ValueError(f"covariance is not symmetric in row {i}, column {j}")
    # Of the correlations, so that units do not matter.
    smallest = float(np.linalg.eigvalsh(covariance / np.outer(spread, spread))[0])
    if not smallest >= _SMALLEST_EIGENVALUE:
        raise ValueError(
            f"covariance is not positive definite, or too close to singular: the smallest "
            f"eigenvalue of its correlation matrix is {smallest:.2g}, at least "
            f"{_SMALLEST_EIGENVALUE:g} is needed"
        )


def read_response(path: str | Path, sha256: str | None = None) -> Response:
    """Read a response file.

    Parameters
    ----------
    path : str or Path
        The file; its format stands at the head of this module.
    sha256 : str, optional
        Its SHA-256 checksum in hexadecimal; a different file is refused.

    Raises
    ------
    InputError
        If the file cannot be read, is another one than asked, or breaks a rule; the text names the
        line or row.
    """
    content = read_bytes(path, _MAX_BYTES)
    actual = hashlib.sha256(content).hexdigest()
    if sha256 is not None and sha256.lower() != actual:
        raise InputError(f"{path}: SHA-256 is {actual}, but {sha256} was asked for")
    try:
        lines = content.decode("ascii").splitlines()
    except UnicodeDecodeError:
        raise InputError(f"{path}: not plain text, no response") from None
    try:
        return _parse(lines)
    except InputError as error:
        raise InputError(f"{path}: {error}") from None


def _parse(lines: list[str]) -> Response:
    if not lines or lines[0].strip() != FIRST_LINE:
        raise InputError(f'the first line must be "{FIRST_LINE}"')
    header: list[str] = []
    labels: list[str] = []
    rows: dict[str, list[Row]] = {"redshift": [], "covariance": []}
    block = ""
    for number, line in enumerate(lines, start=1):
        first, *others = cells = [cell.strip() for cell in line.split(",")]
        if not line.strip() or line.startswith("#"):
            continue
        if first in rows:
            _check_header(block, header, cells, number)
            block, header = first, others
        elif block == "redshift":
            rows[block].append(_numbers(cells, len(header) + 1, number))
        elif block == "covariance":
            labels.append(first)
            rows[block].append(_numbers(others, len(header), number))
        else:
            raise InputError(f'line {number}: the header "redshift,NAME,..." is needed')
    if block != "covariance":
        raise InputError('a block with the header "covariance,NAME,..." is needed')
    if labels != header:
        raise InputError(f"the rows of the covariance must be named {', '.join(header)}")
    redshift = tuple(row[0] for row in rows["redshift"])
    kernels = tuple(row[1:] for row in rows["redshift"])
    return Response(tuple(header), redshift, kernels, tuple(rows["covariance"]))


def _check_header(block: str, header: list[str], cells: list[str], number: int) -> None:
    """One block of kernels, then one of covariances with the same names."""
    wanted = {"": "redshift", "redshift": "covariance"}.get(block)
    if cells[0] != wanted or (header and cells[1:] != header):
        raise InputError(
            f'line {number}: one block "redshift,NAME,..." is needed, then one block '
            '"covariance,NAME,..." with the same names'
        )


def _numbers(cells: list[str], count: int, line: int) -> Row:
    try:
        values = tuple(float(cell) for cell in cells)
    except ValueError:
        values = ()
    if len(values) != count or not all(map(math.isfinite, values)):
        raise InputError(f"line {line}: {count} finite numbers with commas between are needed")
    return values
