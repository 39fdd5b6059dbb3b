"""A block-tridiagonal M-matrix with a border: a few last unknowns that couple to all the others.

For the inner part the border is one more place to leak to; the inner part is factored with that
leak among its outflows, by the methods of its own. What is left for the border is a Schur
complement whose off-diagonal terms have one sign, and whose diagonal is again the sum of what flows
out: to the other border unknowns, directly and through the inner part, and out of the network.
Nothing is subtracted (Grassmann, Taksar & Heyman 1985, Oper. Res. 33, 1107).

Symmetric form, H = [[H_ii, -C^T], [-C, H_bb]] with H v = c >= 0 and Y = C H_ii^-1:

    S_jk = -(C_bb + Y C^T)_jk,  j != k;
    S_jj = [c_j + (Y c_i)_j + sum_{k != j} |S_jk| v_k] / v_j
    x_b = S^-1 (r_b + Y r_i),  x_i = H_ii^-1 r_i + Y^T x_b
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.linalg import lapack

from ..arrays import FloatArray, IntArray
from ..errors import Outcome, SolveError
from .block_cholesky import BlockCholesky
from .block_lu import BlockLU


@dataclass(frozen=True, slots=True, eq=False)
class BorderedCholesky:
    """A factored symmetric H; vectors hold the inner unknowns, then those of the border.

    Attributes
    ----------
    inner : BlockCholesky
        Factors of H_ii.
    response : ndarray, shape (n_border, n_inner)
        Y.
    corner : ndarray, shape (n_border, n_border)
        Lower triangle of the Cholesky factor of S.
    """

    inner: BlockCholesky
    response: FloatArray
    corner: FloatArray

    def solve(self, right: FloatArray) -> FloatArray:
        """Solve H x = r; `right` has shape (n_right, n_inner + n_border)."""
        n_inner = self.response.shape[1]
        x = np.array(right, dtype=np.float64)
        inner, border = x[:, :n_inner], x[:, n_inner:]
        border += inner @ self.response.T
        border[...] = lapack.dpotrs(self.corner, border.T, lower=1)[0].T
        inner[...] = self.inner.solve(inner)
        inner += border @ self.response
        return x


def border_symmetric(
    inner: BlockCholesky,
    coupling: FloatArray,
    corner: FloatArray,
    weight: FloatArray,
    excess: FloatArray,
) -> BorderedCholesky:
    """Border a factored symmetric matrix.

    Parameters
    ----------
    inner : BlockCholesky
        H_ii, factored with the excess c_i + (C^T v_b)_i.
    coupling : ndarray, shape (n_border, n_inner)
        C, nonnegative.
    corner : ndarray, shape (n_border, n_border)
        C_bb, nonnegative and symmetric; its diagonal has no meaning.
    weight, excess : ndarray, shape (n_inner + n_border,)
        v, positive, and c = H v of the whole, nonnegative.

    Returns
    -------
    BorderedCholesky
        The factors.

    Raises
    ------
    SolveError
        If the Schur complement is not positive definite (an unknown without exit).
    """
    n_inner = coupling.shape[1]
    _require_exit(excess)
    response = inner.solve(coupling)
    v = weight[n_inner:]
    schur = corner + response @ coupling.T
    schur = 0.5 * (schur + schur.T)
    np.fill_diagonal(schur, 0.0)
    diagonal = (excess[n_inner:] + response @ excess[:n_inner] + schur @ v) / v
    factor, status = lapack.dpotrf(np.diag(diagonal) - schur, lower=1)
    if status or not np.isfinite(diagonal).all():
        raise SolveError(f"{Outcome.SINGULAR.value} (border)")
    return BorderedCholesky(inner, response, factor)


def _require_exit(exits: FloatArray) -> None:
    # Of a closed network rounding may leave a positive pivot.
    if not (np.isfinite(exits).all() and (exits > 0.0).any()):
        raise SolveError(f"{Outcome.SINGULAR.value} (border)")


class BorderRates(NamedTuple):
    """Rates of a border without symmetry, s^-1.

    Attributes
    ----------
    into : ndarray, shape (n_border, n_inner)
        From each inner unknown to each of the border.
    out : ndarray, shape (n_border, n_inner)
        From each unknown of the border to each inner one.
    among : ndarray, shape (n_border, n_border)
        From row to column; zero diagonal.
    """

    into: FloatArray
    out: FloatArray
    among: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class BorderedLU:
    """A factored A = D - R without symmetry; vectors as for :class:`BorderedCholesky`.

    Attributes
    ----------
    inner : BlockLU
        Factors of A_ii.
    diagonal : ndarray, shape (n_inner + n_border,), s^-1
        D.
    reach : ndarray, shape (n_border, n_inner)
        Chance of each inner unknown to reach each of the border first.
    stay : ndarray, shape (n_border, n_inner)
        A_ii^-T of the rates out of each border unknown, over its D.
    corner : (ndarray, ndarray)
        LU factors and pivots of the Schur complement over D.
    """

    inner: BlockLU
    diagonal: FloatArray
    reach: FloatArray
    stay: FloatArray
    corner: tuple[FloatArray, IntArray]

    def solve(self, right: FloatArray) -> FloatArray:
        """Solve A p = r; `right` has shape (n_right, n_inner + n_border)."""
        n_inner = self.reach.shape[1]
        p = np.array(right, dtype=np.float64)
        inner, border = p[:, :n_inner], p[:, n_inner:]
        border /= self.diagonal[n_inner:]
        border += inner @ self.stay.T
        border[...] = lapack.dgetrs(*self.corner, border.T)[0].T
        inner[...] = self.inner.solve(inner)
        inner += border @ self.reach
        return p

    def solve_transposed(self, right: FloatArray) -> FloatArray:
        """Solve A^T x = s; `right` has shape (n_right, n_inner + n_border)."""
        n_inner = self.reach.shape[1]
        x = np.array(right, dtype=np.float64)
        inner, border = x[:, :n_inner], x[:, n_inner:]
        border += inner @ self.reach.T
        border[...] = lapack.dgetrs(*self.corner, border.T, trans=1)[0].T
        inner[...] = self.inner.solve_transposed(inner)
        inner += border @ self.stay
        border /= self.diagonal[n_inner:]
        return x


def border_general(inner: BlockLU, rates: BorderRates, sink: FloatArray) -> BorderedLU:
    """Border a factored matrix without symmetry.

    Parameters
    ----------
    inner : BlockLU
        A_ii, factored with the rates into the border among its sinks.
    rates : BorderRates
        Rates of the border.
    sink : ndarray, shape (n_inner + n_border,), s^-1
        Outflow of each unknown from the network.

    Returns
    -------
    BorderedLU
        The factors.

    Raises
    ------
    SolveError
        If the Schur complement is singular (an unknown without exit).
    """
    n_inner = rates.into.shape[1]
    _require_exit(sink)
    diagonal = rates.out.sum(axis=1) + rates.among.sum(axis=1) + sink[n_inner:]
    if not np.all(diagonal > 0.0):
        raise SolveError(f"{Outcome.SINGULAR.value} (border)")
    reach = inner.solve(rates.into)
    out = rates.out / diagonal[:, None]
    stay = inner.solve_transposed(out)
    schur = rates.among / diagonal[:, None] + out @ reach.T
    np.fill_diagonal(schur, 0.0)
    outflow = sink[n_inner:] / diagonal + stay @ sink[:n_inner] + schur.sum(axis=1)
    lu, pivots, status = lapack.dgetrf(np.diag(outflow) - schur)
    if status or not np.isfinite(outflow).all():
        raise SolveError(f"{Outcome.SINGULAR.value} (border)")
    whole = np.concatenate([inner.diagonal, diagonal])
    return BorderedLU(inner, whole, reach, stay, (lu, pivots))
