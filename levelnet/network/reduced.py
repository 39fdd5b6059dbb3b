"""What the slow variables need of the interior: a Protocol, and the records it answers with."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import NamedTuple, Protocol

from ..arrays import FloatArray, IntArray, frozen_array


@dataclass(frozen=True, slots=True, eq=False)
class KeptLevels:
    """The levels that are not eliminated; every array has shape (n_kept,).

    Attributes
    ----------
    n, l : ndarray of int
        Quantum numbers, in ascending order of energy.
    statistical_weight : ndarray, dimensionless
        2 (2l + 1); of helium (2 spin + 1)(2l + 1).
    energy_ev, ionization_energy_ev : ndarray, eV
        Above the ground state, and to the continuum.
    ground_weight : float, dimensionless
        Weight of the ground state: 2, of helium 1.
    spin : ndarray of int, or None
        Total spin of helium, 0 or 1.
    """

    n: IntArray
    l: IntArray
    statistical_weight: FloatArray
    energy_ev: FloatArray
    ionization_energy_ev: FloatArray
    ground_weight: float = 2.0
    spin: IntArray | None = None

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.n),)
        if self.spin is not None:
            frozen_array(self, "spin", shape, int)
        frozen_array(self, "n", shape, int)
        frozen_array(self, "l", shape, int)
        for name in ("statistical_weight", "energy_ev", "ionization_energy_ev"):
            frozen_array(self, name, shape)

    def __len__(self) -> int:
        """Count the levels."""
        return len(self.n)

    def __iter__(self) -> Iterator[tuple[int, int]]:
        """Give (n, l) of each level."""
        return iter(zip(self.n.tolist(), self.l.tolist(), strict=True))


class ReducedRates(NamedTuple):
    """Effective rates between kept levels and continuum; slopes are d ln rate / d ln T.

    Attributes
    ----------
    recombination : ndarray, shape (n_kept,), cm^3 s^-1
        A_i: recombination into level i, directly or through eliminated levels.
    recombination_slope_radiation, recombination_slope_matter : ndarray, shape (n_kept,)
        Slopes in T_r and T_m.
    log_photoionization : ndarray, shape (n_kept,)
        ln of B_i in s^-1, by detailed balance from A_i at T_m = T_r.
    photoionization_slope : ndarray, shape (n_kept,)
        Slope in T_r.
    exchange : ndarray, shape (n_kept, n_kept), s^-1
        R_ij, from row to column through eliminated levels or directly; zero diagonal.
    exchange_slope : ndarray, shape (n_kept, n_kept)
        Slopes in T_r.
    """

    recombination: FloatArray
    recombination_slope_radiation: FloatArray
    recombination_slope_matter: FloatArray
    log_photoionization: FloatArray
    photoionization_slope: FloatArray
    exchange: FloatArray
    exchange_slope: FloatArray


class Reduced(Protocol):
    """A reduced network: live, tabulated, or read from a file."""

    @property
    def kept(self) -> KeptLevels:
        """The kept levels."""
        ...

    def rates(self, radiation_temperature_k: float, matter_temperature_k: float) -> ReducedRates:
        """Effective rates at two temperatures; RangeError outside the range they are known in."""
        ...
