"""Effective rates of the kept levels, exact: one elimination for each T_r, T_m by dot products."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ..arrays import FloatArray, frozen_array
from ..atomic.physics import Scales
from ..errors import RangeError
from ..history.cost import check_memory
from ..history.setup import Setup
from ..network.rates import RateConstants
from ..network.reduced import KeptLevels
from ..network.scaled import scaled_levels
from .nodes import drop_buffers
from .species import MATTER_K, RADIATION_K, atom_name, eliminated, scales_of

NEVER = -700.0
"""Stands for the logarithm of an exchange rate that is exactly zero, in nodes and tables."""


@dataclass(frozen=True, slots=True, eq=False)
class EffectiveRates:
    """Rates between kept levels and the continuum; leading axes are those of the temperatures.

    Attributes
    ----------
    kept_levels : KeptLevels
        The kept levels, in ascending order of n and l; of He I by energy, each with its spin.
    log_recombination : ndarray, shape (..., n_kept)
        ln of A_i in cm^3 s^-1: recombination into level i, directly or through eliminated levels,
        stimulated part included.
    log_photoionization : ndarray, shape (..., n_kept)
        ln of B_i in s^-1, by detailed balance from A_i at T_m = T_r.
    log_exchange : ndarray, shape (..., n_kept, n_kept)
        ln of R_ij in s^-1, from row to column; -inf on the diagonal and where levels do not talk.
    """

    kept_levels: KeptLevels
    log_recombination: FloatArray
    log_photoionization: FloatArray
    log_exchange: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = self.log_recombination.shape[:-1]
        n = len(self.kept_levels)
        frozen_array(self, "log_recombination", (*shape, n))
        frozen_array(self, "log_photoionization", (*shape, n))
        frozen_array(self, "log_exchange", (*shape, n, n))

    @property
    def recombination(self) -> FloatArray:
        """A_i, cm^3 s^-1, shape (..., n_kept)."""
        return _exp(self.log_recombination)

    @property
    def photoionization(self) -> FloatArray:
        """B_i, s^-1, shape (..., n_kept); underflows to 0 in a cold field."""
        return _exp(self.log_photoionization)

    @property
    def exchange(self) -> FloatArray:
        """R_ij, s^-1, from row to column, shape (..., n_kept, n_kept); may underflow to 0."""
        return _exp(self.log_exchange)


def effective_rates(
    setup: Setup,
    radiation_temperature_k: ArrayLike,
    matter_temperature_k: ArrayLike,
    kept: Iterable[tuple[int, ...]] | None = None,
    atom: str = "H I",
) -> EffectiveRates:
    """Effective rates of the kept levels, by exact elimination of all others.

    Parameters
    ----------
    setup : Setup
        The atom (``hydrogen``; of helium ``helium``), its open lines (``lines``), changed constants
        (``physics``) and overrides of lines and cross sections (``rates``).
    radiation_temperature_k, matter_temperature_k : array_like, K
        Broadcast; one factorization for each different T_r. Hydrogen: 0.02 to 1e5 K; He I: T_r 50
        to 1e5 K, T_m 0.02 to 1e5 K; He II: 0.08 to 4e5 K; all times the factor by which changed
        constants scale energies.
    kept : iterable of (n, l), of He I (n, l, spin), optional
        Levels to keep. They must contain those that talk to the ground state, which are the
        default: of hydrogen 2s, 2p and every np whose Lyman line is open; of He I 2 1S, 2 1P, 2 3S,
        2 3P and every n 1P whose line is open (``lines.helium_higher_lines``); of He II 2s and 2p.
        An np beyond them is kept without a line to the ground state.
    atom : "H I", "He I" or "He II"
        Whose rates; of helium where it has levels (``helium.n_max``), whether there is any in the
        universe of the setup or not. Those of He II do not hang on ``helium.helium_ion``.

    Returns
    -------
    EffectiveRates
        Rates and their logarithms, which stay finite where the rates leave the doubles. Per atom;
        of He I the recombining ion is He II, of He II it is He III.

    Raises
    ------
    InputError
        For an atom without levels, kept levels that do not exist or do not suffice, an atom that
        does not fit in memory, and (RangeError) temperatures out of range.

    References
    ----------
    Ali-Haimoud & Hirata 2010, Phys. Rev. D 82, 063521; Burgin 2009, Bull. Lebedev Phys. Inst. 36,
    110.
    """
    name = atom_name(atom)
    build, factor = eliminated(setup, kept, name), scales_of(setup, name)
    radiation, matter = np.broadcast_arrays(
        _temperature("radiation_temperature_k", radiation_temperature_k, factor, RADIATION_K[name]),
        _temperature("matter_temperature_k", matter_temperature_k, factor, MATTER_K[name]),
    )
    if name == "H I":  # the largest helium takes less than is kept in reserve
        check_memory(setup, populations=0, coldest_k=float(radiation.min(initial=np.inf)))
    source = build()
    constants, n = source.constants, len(source.kept)
    capture, photo = np.empty((2, *radiation.shape, n))
    exchange = np.empty((*radiation.shape, n, n))
    try:
        for temperature_k in np.unique(radiation).tolist():
            here = radiation == temperature_k
            node = source.node(temperature_k)
            capture[here] = log_capture(constants, node, matter[here])
            photo[here] = log_photo(constants, node, temperature_k)
            exchange[here] = log_exchange(constants, node[: len(constants.lower)], temperature_k)
    finally:
        drop_buffers()
    return _scaled(source.kept, capture, photo, exchange, factor)


def log_capture(
    constants: RateConstants, node: FloatArray, matter_temperature_k: FloatArray
) -> FloatArray:
    """Ln of A_i from one node for many T_m, shape (n_temperatures, n_kept)."""
    spectrum = np.exp(node[len(constants.lower) :]).reshape(constants.n_kept, -1)
    matter = np.asarray(matter_temperature_k, float).ravel()
    with np.errstate(under="ignore"):
        total = spectrum @ np.exp(-constants.electron_k / matter)
    return np.asarray(np.log(total) + np.log(constants.volume_1k_cm3) - 1.5 * np.log(matter)).T


def log_photo(constants: RateConstants, node: FloatArray, temperature_k: float) -> FloatArray:
    """Ln of B_i by detailed balance at T_m = T_r, shape (n_kept,)."""
    at_equilibrium = log_capture(constants, node, np.array([temperature_k]))[0]
    return np.asarray(at_equilibrium - constants.saha.log_factor(temperature_k))


def log_exchange(
    constants: RateConstants, log_downward: FloatArray, temperature_k: float
) -> FloatArray:
    """Ln of R_ij from the stored downward logarithms, upward by detailed balance.

    Returns
    -------
    ndarray, shape (n_kept, n_kept)
        -inf on the diagonal and for pairs that do not talk.
    """
    i, j = constants.lower, constants.upper
    down = np.where(
        log_downward > NEVER, log_downward - constants.barrier_k / temperature_k, -np.inf
    )
    log_rate = np.full((constants.n_kept, constants.n_kept), -np.inf)
    log_rate[j, i] = down
    log_rate[i, j] = down + constants.log_weight_ratio - constants.rise_k / temperature_k
    return log_rate


def _scaled(
    kept: KeptLevels, capture: FloatArray, photo: FloatArray, exchange: FloatArray, factor: Scales
) -> EffectiveRates:
    return EffectiveRates(
        scaled_levels(kept, factor),
        capture + np.log(factor.recombination),
        photo + np.log(factor.line_rate),
        exchange + np.log(factor.line_rate),
    )


def _temperature(
    name: str, value: ArrayLike, factor: Scales, allowed_k: tuple[float, float]
) -> FloatArray:
    """Temperatures over the scale of energies; RangeError outside the allowed range."""
    given, unit, (low, high) = np.asarray(value, float), factor.energy, allowed_k
    scaled = given / unit
    bad = ~((scaled >= low) & (scaled <= high))
    if bad.any():
        raise RangeError(
            f"{name} = {given[bad].flat[0]:g}: allowed are {low * unit:g} to {high * unit:g} K"
        )
    return scaled


def _exp(exponent: FloatArray) -> FloatArray:
    with np.errstate(under="ignore"):
        result: FloatArray = np.exp(exponent)
    return result
