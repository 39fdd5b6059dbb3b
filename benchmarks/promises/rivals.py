"""The same interior for general solvers: splu, CHOLMOD, and our own block LU (P2, P3, P5, P11)."""

from __future__ import annotations

import importlib
from typing import Any, Protocol

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import splu

from benchmarks.factorization import general_matrix
from benchmarks.promises import targets
from benchmarks.promises.node import TEMPERATURE_K, NodeMaker, largest
from benchmarks.promises.table import Row, without_figure
from levelnet.network.assembly import FactoredInterior, rate_blocks
from levelnet.numerics.block_lu import BlockLU, factor_general


class Rival(Protocol):
    """Another way to factor the interior.

    Attributes
    ----------
    name : str
        What the table calls it.
    allowed : float
        Largest difference from it that is put down to rounding.
    """

    name: str
    allowed: float

    def factor(self) -> object:
        """What is timed."""

    def error(self, factored: FactoredInterior) -> float:
        """Relative error of our chances to reach each kept level."""


class General:
    """scipy's SuperLU on the physical matrix."""

    name, allowed = "splu", targets.AGAINST_SPLU

    def __init__(self, maker: NodeMaker) -> None:
        self.matrix = general_matrix(maker.ladder, TEMPERATURE_K)

    def factor(self) -> None:
        splu(self.matrix)

    def error(self, factored: FactoredInterior) -> float:
        fates = splu(self.matrix).solve(factored.to_kept.T, trans="T").T
        return largest(factored.fates(factored.to_kept), fates)


class Symmetric:
    """CHOLMOD, with ordering and analysis, on the scaled matrix made from the physical one."""

    name, allowed = "CHOLMOD", targets.AGAINST_CHOLMOD

    def __init__(self, package: Any, matrix: sparse.csc_array) -> None:
        self.package = package
        self.cholmod = importlib.import_module("kvxopt.cholmod")
        # H_ij = -sqrt(M_ij M_ji / (M_ii M_jj)), 1 on the diagonal; weights follow from M_ij/M_ji.
        self.diagonal = matrix.diagonal()
        lower = sparse.coo_array(sparse.tril(matrix, -1))
        upper = sparse.coo_array(sparse.tril(matrix.T, -1))
        pairs = [part.tocsc().sorted_indices().tocoo() for part in (lower, upper)]
        i, j = pairs[0].coords
        value = -np.sqrt(pairs[0].data * pairs[1].data / (self.diagonal[i] * self.diagonal[j]))
        every = np.arange(len(self.diagonal))
        self.matrix = package.spmatrix(
            package.matrix(np.concatenate([value, np.ones(len(every))])),
            package.matrix(np.concatenate([i, every]).astype(np.int64)),
            package.matrix(np.concatenate([j, every]).astype(np.int64)),
            matrix.shape,
        )

    def factor(self) -> Any:
        factor = self.cholmod.symbolic(self.matrix)
        self.cholmod.numeric(self.matrix, factor)
        return factor

    def error(self, factored: FactoredInterior) -> float:
        scale = np.sqrt(self.diagonal)
        root = np.exp(factored.log_root_weight)
        right = self.package.matrix(np.ascontiguousarray((factored.to_kept * (root / scale)).T))
        self.cholmod.solve(self.factor(), right)
        fates = np.array(right).T / (root * scale)
        return largest(factored.fates(factored.to_kept), fates)


class WithoutSymmetry:
    """Our block LU; like splu it allocates as it goes."""

    name, allowed = "block LU", targets.AGAINST_BLOCK_LU

    def __init__(self, maker: NodeMaker, factored: FactoredInterior) -> None:
        blocks = rate_blocks(maker.ladder, TEMPERATURE_K)
        sink = factored.photoionization + factored.to_kept.sum(axis=0)
        self.shape, self.blocks, self.sink = maker.ladder.interior.shape, blocks, sink

    def factor(self) -> BlockLU:
        # It overwrites the rates that it is given.
        rates = ([one.copy() for one in side] for side in self.blocks)
        return factor_general(self.shape, *rates, self.sink)

    def error(self, factored: FactoredInterior) -> float:
        fates = self.factor().solve(factored.to_kept)
        return largest(factored.fates(factored.to_kept), fates)


def rivals_of(
    maker: NodeMaker, factored: FactoredInterior, wanted: set[str]
) -> tuple[dict[str, Rival], list[Row]]:
    """Rivals by the promise that they are for, and rows of those that are not there."""
    rivals: dict[str, Rival] = {}
    rows: list[Row] = []
    if wanted & {"P2", "P3", "P11"}:
        general = General(maker)
        rivals |= {name: general for name in ("P2", "P11") if name in wanted}
    if "P3" in wanted:
        try:
            package = importlib.import_module("kvxopt")
        except ImportError:
            rows.append(without_figure("P3", maker.n_max, "not installed"))
        else:
            rivals["P3"] = Symmetric(package, general.matrix)
    if "P5" in wanted:
        rivals["P5"] = WithoutSymmetry(maker, factored)
    return rivals, rows
