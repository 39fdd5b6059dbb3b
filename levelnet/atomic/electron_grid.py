"""The quadrature rule over the energy of the free electron."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from .. import constants as const
from ..arrays import FloatArray, frozen_array
from ..errors import RangeError
from .levels import ionization_scale_ev

# Trapezoid rule in the logarithm of the electron energy. In ln(energy) the integrands are analytic
# and decay up to |Im| = pi/2, so the error falls as exp(-pi^2 / spacing). The tail left of the
# first node is summed as if flat, which errs by (first energy / kT)^2 / 2 < 1e-12 of the whole.
_FIRST_ENERGY = 1e-13
_SPACING = 0.335
_N_NODES = 100

COLDEST_K, HOTTEST_K = 0.02, 1e5
"""Matter temperatures per charge^2 between which the rule holds its error of 1e-10."""


@dataclass(frozen=True, slots=True, eq=False)
class ElectronGrid:
    """The quadrature rule: integral of g(energy) d(energy) = sum of weight * g(energy).

    Attributes
    ----------
    energy : ndarray, shape (n_nodes,), dimensionless
        Electron energies in units of chi, ascending.
    weight : ndarray, shape (n_nodes,), dimensionless
        Weights in units of chi.
    """

    energy: FloatArray
    weight: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make the arrays read-only."""
        for name in ("energy", "weight"):
            frozen_array(self, name, (len(self.energy),))


def electron_grid() -> ElectronGrid:
    """Return the one rule, good to 1e-10 for matter at 0.02 K to 1e5 K times charge^2.

    References
    ----------
    Trefethen & Weideman 2014, SIAM Rev. 56, 385 (convergence of the trapezoid rule).
    """
    energy = _FIRST_ENERGY * np.exp(_SPACING * np.arange(_N_NODES))
    weight = _SPACING * energy
    weight[0] /= -np.expm1(-_SPACING)
    return ElectronGrid(energy, weight)


def maxwell_factor(
    grid: ElectronGrid, matter_temperature_k: ArrayLike, charge: int = 1
) -> FloatArray:
    """Boltzmann factor exp(-energy chi / k T_m) of each node.

    Parameters
    ----------
    grid : ElectronGrid
        The quadrature rule.
    matter_temperature_k : array_like, K
        0.02 to 1e5 K times charge^2.
    charge : int, dimensionless
        Nuclear charge, 1 to 30.

    Returns
    -------
    ndarray, shape (..., n_nodes), dimensionless
        One row for each temperature.
    """
    temperature = np.asarray(matter_temperature_k, float)
    coldest, hottest = COLDEST_K * charge**2, HOTTEST_K * charge**2
    bad = ~((temperature >= coldest) & (temperature <= hottest))
    if bad.any():
        raise RangeError(
            f"matter temperature {temperature[bad].flat[0]:g} K: "
            f"allowed are {coldest:g} to {hottest:g} K for charge {charge}"
        )
    reduced = ionization_scale_ev(charge) / (const.BOLTZMANN_EV_K * temperature)
    with np.errstate(under="ignore"):
        factor: FloatArray = np.exp(-reduced[..., None] * grid.energy)
    return factor
