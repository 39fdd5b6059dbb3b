"""Lines of He I to the ground state: resonance lines of the singlets and the forbidden ones."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray, IntArray, frozen_array
from ..errors import InputError
from ..tables import read_table
from .helium_levels import PER_CM_EV, HeliumLevels, term_numbers
from .species import INTERCOMBINATION_PER_S

GROUND = "1 1S"


@dataclass(frozen=True, slots=True, eq=False)
class GroundLines:
    """Lines to 1 1S as arrays of shape (n_lines,), by descending wavelength within each kind.

    Attributes
    ----------
    kind : tuple of str
        "resonance" (n 1P, ascending n), then "intercombination" (2 3P1), "magnetic quadrupole"
        (2 3P2), "magnetic dipole" (2 3S).
    level : ndarray of int, dimensionless
        Position of the upper term among the levels.
    statistical_weight : ndarray, dimensionless
        Weight of what radiates: the term, or its one level J (3 for 2 3P1, 5 for 2 3P2).
    share : ndarray, dimensionless
        That weight over the weight of the term: the part of the term's population that radiates
        where the levels J are populated by their weights.
    energy_ev : ndarray, eV
        Photon energy, with the fine structure of 2 3P.
    rate_per_s : ndarray, s^-1
        Einstein A of what radiates.
    """

    kind: tuple[str, ...]
    level: IntArray
    statistical_weight: FloatArray
    share: FloatArray
    energy_ev: FloatArray
    rate_per_s: FloatArray

    def __post_init__(self) -> None:
        """Check shapes and make every array read-only."""
        shape = (len(self.kind),)
        frozen_array(self, "level", shape, np.int64)
        for name in ("statistical_weight", "share", "energy_ev", "rate_per_s"):
            frozen_array(self, name, shape)


def ground_lines(
    levels: HeliumLevels, intercombination_rate_per_s: float = INTERCOMBINATION_PER_S
) -> GroundLines:
    """Every line of He I to the ground state but the two-photon decay.

    Parameters
    ----------
    levels : HeliumLevels
        Levels of helium, not the hydrogenic limit.
    intercombination_rate_per_s : float, s^-1, not negative
        Rate of 2 3P1; 0 switches the line off.

    Returns
    -------
    GroundLines
        Rates published where `helium/transition_rates` has them, resonance lines from n = 5 by
        :func:`resonance_rates_per_s`.

    References
    ----------
    Lach & Pachucki 2001, Phys. Rev. A 64, 042510 (2 3P1); Phys. Rev. A 80, 044501 (2009; 2 3P2,
    measured within 5 per cent); Drake 1971, Phys. Rev. A 3, 908 (2 3S). From memory.
    """
    if not 0.0 <= intercombination_rate_per_s < np.inf:
        raise InputError(
            f"intercombination_rate_per_s = {intercombination_rate_per_s:g}: must be 0 or above"
        )
    published = published_rates_per_s()
    resonance_rates = resonance_rates_per_s(levels)
    resonance = levels.series(1, 0)
    structure = read_table("helium/fine_structure")
    fine = dict(
        zip(structure.texts["level"], structure.numbers["energy_per_cm"] * PER_CM_EV, strict=True)
    )
    triplet_p, triplet_s = levels.index(2, 1, 1), levels.index(2, 0, 1)
    weight = np.append(levels.statistical_weight[resonance], [3.0, 5.0, 3.0])
    level = np.append(resonance, [triplet_p, triplet_p, triplet_s])
    forbidden_ev = [fine["2 3P1"], fine["2 3P2"], levels.energy_ev[triplet_s]]
    forbidden = [published["2 3P2", "1 1S0"], published["2 3S1", "1 1S0"]]
    return GroundLines(
        ("resonance",) * len(resonance)
        + ("intercombination", "magnetic quadrupole", "magnetic dipole"),
        level,
        weight,
        weight / levels.statistical_weight[level],
        np.append(levels.energy_ev[resonance], forbidden_ev),
        np.concatenate([resonance_rates, [intercombination_rate_per_s], forbidden]),
    )


def resonance_rates_per_s(levels: HeliumLevels) -> FloatArray:
    """Einstein A of every line n 1P -> 1 1S of helium.

    Parameters
    ----------
    levels : HeliumLevels
        Levels of helium, not the hydrogenic limit.

    Returns
    -------
    ndarray, shape (n_max - 1,), s^-1
        n = 2, 3, 4 as published. From n = 5 the law of the series: A nu^3 / E^3 is a smooth
        function of 1/nu^2, here the parabola through the three published lines; within 0.3 per cent
        of published oscillator strengths up to n = 10 and of the cross section at the threshold
        that the series joins.

    References
    ----------
    NIST Atomic Spectra Database; Seaton 1983, Rep. Prog. Phys. 46, 167 (smoothness in energy).
    """
    if levels.nuclear_charge != 2:
        raise InputError("resonance lines of helium: asked of levels in the hydrogenic limit")
    p = levels.series(1, 0)
    published = published_rates_per_s()
    known = {term_numbers(up)[0]: a for (up, low), a in published.items() if low == GROUND}
    n, nu = levels.n[p], levels.effective_n[p]
    scale = nu**3 / levels.energy_ev[p] ** 3
    rates = np.array([known.get(int(one), 0.0) for one in n])
    if levels.n_max > max(known):
        given = rates > 0.0
        law = np.polynomial.Polynomial.fit(
            nu[given] ** -2.0, (rates * scale)[given], len(known) - 1
        )
        rates[~given] = (law(nu**-2.0) / scale)[~given]
    return rates


def published_rates_per_s() -> dict[tuple[str, str], float]:
    """Published decay rates of He I by the names of upper and lower term or level, in s^-1."""
    table = read_table("helium/transition_rates")
    names = zip(table.texts["upper"], table.texts["lower"], strict=True)
    rates = table.numbers["einstein_a_per_s"].tolist()
    return dict(zip(names, rates, strict=True))
