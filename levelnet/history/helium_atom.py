"""From a setup to helium as a run needs it: its atoms, their tables, its equations."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray, IntArray
from ..atomic.bound_bound import einstein_a
from ..atomic.helium_ground import ground_lines
from ..atomic.helium_lines import HeliumLines
from ..atomic.two_photon import two_photon_rate
from ..errors import InputError
from ..escape.treatment import LineTreatment, ResonanceLines, Sobolev
from ..network.helium import (
    HeliumLadders,
    HeliumReduction,
    KeptTerms,
    helium_ladders,
    tabulate_helium,
)
from ..network.ladder import Ladder, hydrogen_ladder
from ..network.reduced import KeptLevels
from ..network.tabulation import TabulatedReduction, tabulate
from ..pieces import Pieces, code_digest, content_key
from ..tables import list_tables
from .cost import table_tolerance
from .helium import COLDEST_K, HeliumEquations, IonNetwork
from .setup import Setup

Tell = Callable[[str, float], None]
Recall = Callable[[float, Callable[[float], FloatArray]], FloatArray]

_CODE = ("constants", "kernels", "numerics", "atomic", "network", "tables")
# Terms that talk to the ground state in any case: 2 1S, 2 1P, 2 3S, 2 3P.
_LOWEST: KeptTerms = ((2, 0, 0), (2, 1, 0), (2, 0, 1), (2, 1, 1))
# A line of this kind leaves from one J of its term; named after it.
_LEVEL_NAMES = {
    "intercombination": "2 3P1",
    "magnetic quadrupole": "2 3P2",
    "magnetic dipole": "2 3S",
}
# Tables of all runs reach at least so far, so that they share their nodes.
_HOTTEST_K = 2.0**14.75


@dataclass(frozen=True, slots=True, eq=False)
class HeliumAtoms:
    """Helium of one run.

    Attributes
    ----------
    first : HeliumLadders
        He I.
    second : Ladder or None
        He II; None where He III recombines in Saha equilibrium.
    equations : HeliumEquations
        What they say about the slow variables.
    nodes : int
        Reductions behind the tables.
    interpolation_error : float, dimensionless
        The larger error of the two tables.
    """

    first: HeliumLadders
    second: Ladder | None
    equations: HeliumEquations
    nodes: int
    interpolation_error: float


def helium_treatment(setup: Setup) -> LineTreatment:
    """How photons escape in the lines of He I to its ground state: the one place of the choice.

    Raises
    ------
    InputError
        For what is not available.
    """
    name = setup.lines.helium or "sobolev"
    if name != "sobolev":
        raise InputError(f'lines.helium = "{name}": not available yet; allowed is "sobolev"')
    if setup.lines.helium_higher_lines == "feedback":
        raise InputError(
            'lines.helium_higher_lines = "feedback": not available yet; allowed are "closed" and '
            '"free"'
        )
    return Sobolev()


def kept_terms(setup: Setup) -> KeptTerms:
    """Terms of He I that talk to the ground state: those with n = 2, and open n 1P."""
    top = setup.helium.n_max if setup.lines.helium_higher_lines in {"free", "feedback"} else 2
    return (*_LOWEST, *((n, 1, 0) for n in range(3, top + 1)))


def build_helium(setup: Setup, hottest_k: float, tell: Tell, pieces: Pieces | None) -> HeliumAtoms:
    """Helium of a setup, reduced from COLDEST_K up to `hottest_k`.

    Parameters
    ----------
    setup : Setup
        The run.
    hottest_k : float, K
        Highest T_r of the run.
    tell : callable
        Progress.
    pieces : Pieces or None
        Store of reductions.
    """
    treatment = helium_treatment(setup)
    top_k = max(_HOTTEST_K, 2.0 ** (math.ceil(4.0 * math.log2(hottest_k)) / 4.0))
    tolerance = table_tolerance(setup)
    tell("helium", 0.0)
    ladders = helium_ladders(setup.helium.n_max, kept_terms(setup))
    reduced = _table_of_first(ladders, top_k, tolerance, pieces)
    decay = [(int(n), int(l), int(s)) for n, l, s in _terms(ladders.kept)].index((2, 0, 0))
    assert setup.helium.two_photon_rate_per_s is not None
    lines = lines_to_ground(setup, ladders)
    first = IonNetwork(reduced, lines, treatment, decay, setup.helium.two_photon_rate_per_s)
    ionization_ev = float(ladders.levels.ionization_energy_ev[0])
    # Saha equilibrium of He III too asks the ion for its energy.
    ion = hydrogen_ladder(setup.helium.n_max, "nonrelativistic", ((2, 0), (2, 1)), charge=2)
    energies = ionization_ev, float(ion.levels.ionization_energy_ev[0])
    nodes, error = len(reduced.series.coefficients), reduced.interpolation_error
    if setup.helium.helium_ion == "saha":
        tell("helium", 1.0)
        return HeliumAtoms(ladders, None, HeliumEquations(first, None, energies), nodes, error)
    table = _table_of_second(ion, top_k, tolerance, pieces)
    tell("helium", 1.0)
    second = IonNetwork(table, _line_of_second(ion), Sobolev(), 0, two_photon_rate(2))
    return HeliumAtoms(
        ladders,
        ion,
        HeliumEquations(first, second, energies),
        nodes + table.n_nodes,
        max(error, table.interpolation_error),
    )


def lines_to_ground(setup: Setup, ladders: HeliumLadders) -> ResonanceLines:
    """Lines of the kept terms to 1 1S; those of 2 3P leave from its levels J = 1 and J = 2.

    Populations are those of terms, and the levels J share them by their weights: the rate counts
    the share of the level, so that depth and flow follow from the weight of the whole term.
    """
    rate = setup.helium.intercombination_rate_per_s
    assert rate is not None
    found = ground_lines(ladders.levels, rate)
    place = {int(where): k for k, where in enumerate(ladders.kept_position)}
    chosen = [
        i
        for i, level in enumerate(found.level.tolist())
        if level in place and found.rate_per_s[i] > 0.0
    ]
    level = found.level[chosen]
    names = [
        _LEVEL_NAMES.get(found.kind[i], ladders.levels.name(int(found.level[i]))) for i in chosen
    ]
    effective = found.rate_per_s[chosen] * found.share[chosen]
    return ResonanceLines(
        tuple(f"{name}-1 1S" for name in names),
        np.array([place[one] for one in level.tolist()], dtype=np.int64),
        effective,
        found.energy_ev[chosen],
        ladders.levels.statistical_weight[level],
        _decay_per_s(ladders.lines, level) + found.rate_per_s[chosen],
    )


def _decay_per_s(lines: HeliumLines, level: IntArray) -> FloatArray:
    """Spontaneous decay rates to excited terms, s^-1."""
    excited = range(1, len(lines.levels))
    return np.array(
        [sum(lines.einstein_a(upper, lower) for lower in excited) for upper in level.tolist()]
    )


def _terms(kept: KeptLevels) -> list[tuple[int, int, int]]:
    assert kept.spin is not None
    return list(zip(kept.n.tolist(), kept.l.tolist(), kept.spin.tolist(), strict=True))


def _line_of_second(ion: Ladder) -> ResonanceLines:
    rate = float(einstein_a(2, 1, 1, 0, 2))
    upper = np.array([1])
    weight = ion.kept.statistical_weight[upper] / ion.kept.ground_weight
    energy_ev = ion.kept.energy_ev[upper]
    return ResonanceLines(("2p-1s",), upper, np.array([rate]), energy_ev, weight, np.array([rate]))


def _table_of_first(
    ladders: HeliumLadders, top_k: float, tolerance: float, pieces: Pieces | None
) -> HeliumReduction:
    tables = [one.sha256 for one in list_tables() if one.name.startswith("helium/")]
    terms = [number for term in _terms(ladders.kept) for number in term]
    key = ("helium", code_digest(_CODE), *tables, ladders.levels.n_max, *terms)
    return tabulate_helium(ladders, COLDEST_K, top_k, tolerance, recall_from(pieces, *key))


def _table_of_second(
    ion: Ladder, top_k: float, tolerance: float, pieces: Pieces | None
) -> TabulatedReduction:
    key = ("helium ion", code_digest(_CODE), ion.n_max)
    return tabulate(ion, COLDEST_K, top_k, tolerance, recall=recall_from(pieces, *key))


def recall_from(pieces: Pieces | None, *depends_on: object) -> Recall | None:
    """Reductions from `pieces`, or computed and kept there, under what they depend on and T_r."""
    if pieces is None:
        return None
    atom = content_key(*depends_on)

    def recall(temperature_k: float, compute: Callable[[float], FloatArray]) -> FloatArray:
        key = content_key(atom, temperature_k)
        found = pieces.get(key)
        if found is not None and set(found) == {"node"}:
            return found["node"]
        value = compute(temperature_k)
        pieces.put(key, {"node": value})
        return value

    return recall
