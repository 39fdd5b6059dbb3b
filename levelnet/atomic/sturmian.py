"""Hydrogenic p states in a Sturmian basis: bound states and continuum as one finite set.

The basis is complete: sums over the eigenstates of the Hamiltonian in it converge, geometrically
with its size, to sums over every p state, the continuum included. Atomic units throughout, for
charge 1 and an infinitely heavy nucleus.
"""

from __future__ import annotations

import functools
from typing import NamedTuple

import numpy as np
from scipy.linalg import eigh
from scipy.special import eval_genlaguerre, gammaln, roots_laguerre

from ..arrays import FloatArray

# An eigenvalue as near as this to a bound level is that level: rounding leaves 5e-13, relative.
_CONVERGED = 1e-11


class SturmianBasis(NamedTuple):
    """A basis for the p states: see :func:`_p_hamiltonian`."""

    exponent: float  # lambda, in inverse Bohr radii
    size: int


class VirtualStates(NamedTuple):
    """What the matrix element nl -> 1s needs of its intermediate p states."""

    degenerate: float  # R(1s,np) R(np,nl), in a.u.
    weight: FloatArray  # (2 h - 1) R(1s,p) R(p,nl) of the others, in a.u.
    pole: FloatArray  # h = (E_p - E_1s)/Delta of the others


@functools.cache
def p_states(basis: SturmianBasis) -> tuple[FloatArray, FloatArray]:
    """Energies, ascending, and vectors of the p states in a basis; n'p is number n' - 2."""
    energy, vectors = eigh(*_p_hamiltonian(basis))
    bound = -0.5 / (np.arange(basis.size) + 2.0) ** 2
    # Exact, so that resonances stand where they belong, and np is degenerate with nl.
    converged = np.isclose(energy, bound, rtol=_CONVERGED, atol=0.0)
    return np.where(converged, bound, energy), vectors


def _p_hamiltonian(basis: SturmianBasis) -> tuple[FloatArray, FloatArray]:
    """Hamiltonian and overlap of the p Sturmian functions, in a.u.

    The functions N_k x^2 exp(-x/2) L_k^(3)(x), x = lambda r, are normalised to <k|1/r|k> = 1. They
    obey H|k> = [-lambda^2/8 + ((k + 2) lambda/2 - 1)/r] |k>, so that both matrices are tridiagonal
    and known in closed form (Rotenberg 1970, Adv. At. Mol. Phys. 6, 233; from memory).
    """
    k = np.arange(basis.size, dtype=np.float64)
    beside = -np.sqrt((k[:-1] + 1.0) * (k[:-1] + 4.0))
    overlap = np.diag(2.0 * (k + 2.0)) + np.diag(beside, 1) + np.diag(beside, -1)
    overlap /= basis.exponent
    potential = np.diag(0.5 * basis.exponent * (k + 2.0) - 1.0)
    return potential - basis.exponent**2 / 8.0 * overlap, overlap


def dipole_integrals(n: int, l: int, basis: SturmianBasis) -> FloatArray:
    """Integrals <nl|r|k> over the p Sturmian functions, shape (size,), in a.u.

    Gauss-Laguerre in t = (1/n + lambda/2) r is exact: the rest is a polynomial.
    """
    nodes, weights = roots_laguerre((basis.size + n) // 2 + 2)
    decay = 1.0 / n + 0.5 * basis.exponent
    r = nodes / decay
    x = basis.exponent * r
    k = np.arange(basis.size)[:, None]
    norm = np.exp(0.5 * (gammaln(k + 1.0) - gammaln(k + 4.0)))
    functions = norm * x**2 * eval_genlaguerre(k, 3, x)
    scale = 2.0 / n**2 * np.exp(0.5 * (gammaln(n - l) - gammaln(n + l + 1.0)))
    radial = scale * r * (2.0 * r / n) ** l * eval_genlaguerre(n - l - 1, 2 * l + 1, 2.0 * r / n)
    integrals: FloatArray = functions @ (weights * r * radial) / decay
    return integrals


def scaled_amplitude(states: VirtualStates, fraction: FloatArray) -> FloatArray:
    """Return y (1 - y) Delta M in a.u., at y = `fraction`, the energy of one photon over Delta.

    The bracket of M is (2 h - 1)/((h - y) (h - 1 + y))/Delta for the state at h. The degenerate
    state, at h = 1, gives 1/(y (1 - y))/Delta exactly, so the product has no pole at y = 0 or 1.
    Poles elsewhere give an infinity.
    """
    rest = 1.0 - fraction
    total = np.zeros_like(fraction)
    with np.errstate(divide="ignore"):
        for weight, pole in zip(states.weight, states.pole, strict=True):
            total += weight / ((pole - fraction) * (pole - rest))
    amplitude: FloatArray = states.degenerate + fraction * rest * total
    return amplitude


@functools.cache
def virtual_states(
    n: int, l: int, basis: SturmianBasis, lowest_intermediate: int = 2
) -> VirtualStates:
    """Form the dipole products 1s - p - nl of the p states in a basis, from that n' upwards."""
    energy, vectors = p_states(basis)
    product = (dipole_integrals(1, 0, basis) @ vectors) * (dipole_integrals(n, l, basis) @ vectors)
    pole = (energy + 0.5) / gap_hartree(n)
    others = np.arange(len(pole)) >= lowest_intermediate - 2
    others[n - 2] = False
    weight = product * (2.0 * pole - 1.0)
    return VirtualStates(float(product[n - 2]), weight[others], pole[others])


def gap_hartree(n: int) -> float:
    """Energy of level n above 1s, in hartree."""
    return 0.5 - 0.5 / n**2
