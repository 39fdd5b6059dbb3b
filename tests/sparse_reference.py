"""The same network through scipy's sparse LU on the exported matrix: the tests' second opinion."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import splu

from levelnet.network.assembly import (
    interior_photoionization,
    rate_matrix,
    recombination_coefficients,
)
from levelnet.network.ladder import Ladder


class SparseNetwork(NamedTuple):
    """Excited levels in the order of the LevelSet less the ground state; rates in s^-1."""

    ladder: Ladder
    matrix: sparse.csr_array
    photoionization: np.ndarray
    kept: np.ndarray
    inside: np.ndarray


def sparse_network(ladder: Ladder, kelvin: float) -> SparseNetwork:
    matrix = rate_matrix(ladder, kelvin)
    kept = ladder.kept_position - 1
    inside = np.setdiff1d(np.arange(matrix.shape[0]), kept)
    return SparseNetwork(ladder, matrix, interior_photoionization(ladder, kelvin)[1:], kept, inside)


def fates(network: SparseNetwork) -> np.ndarray:
    """Chance of each interior level to leave to each kept level or, last, to the continuum."""
    exits = -network.matrix[network.kept][:, network.inside].toarray()
    exits = np.vstack([exits, network.photoionization[network.inside]])
    return factored(network).solve(exits.T, trans="T").T


def factored(network: SparseNetwork) -> splu:
    inner = network.matrix[network.inside][:, network.inside]
    return splu(sparse.csc_array(inner))


def exchange(network: SparseNetwork) -> np.ndarray:
    """R_ij between kept levels, directly and through the interior; zero diagonal."""
    chance = fates(network)[:-1]
    out = -network.matrix[network.inside][:, network.kept].toarray()
    rates = -network.matrix[network.kept][:, network.kept].toarray().T + out.T @ chance.T
    np.fill_diagonal(rates, 0.0)
    return rates


def effective_recombination(network: SparseNetwork, kelvin: float, matter: float) -> np.ndarray:
    """A_i from the fates of what recombines into each level, cm^3 s^-1."""
    alpha = recombination_coefficients(network.ladder, kelvin, matter)[1:]
    return alpha[network.kept] + fates(network)[:-1] @ alpha[network.inside]


def effective_photoionization(network: SparseNetwork) -> np.ndarray:
    """B_i, directly and through the interior, s^-1."""
    out = -network.matrix[network.inside][:, network.kept].toarray()
    return network.photoionization[network.kept] + out.T @ fates(network)[-1]
