"""From a setup to helium as a run needs it: its atoms, their tables, its equations."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ..arrays import FloatArray
from ..atomic.bound_bound import einstein_a
from ..atomic.two_photon import two_photon_rate
from ..escape.helium_continuum import HeliumContinuum
from ..escape.helium_lines import HeliumGroundLines, HigherLines, helium_ground_lines, kept_terms
from ..escape.helium_past import HeliumPast
from ..escape.helium_treatment import HeliumSobolev, HeliumSobolevFeedback, HeliumTreatment
from ..escape.treatment import ResonanceLines, Sobolev
from ..network.helium import (
    HeliumLadders,
    HeliumReduction,
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


def helium_treatment(setup: Setup) -> HeliumTreatment:
    """How photons escape in the lines of He I to its ground state: the one place of the choice."""
    name = setup.lines.helium or "sobolev"
    if name == "continuum":
        choice = setup.lines.helium_continuum
        assert choice is not None
        return HeliumContinuum(choice.redistribution)
    return HeliumSobolevFeedback() if name == "sobolev_feedback" else HeliumSobolev()


def helium_lines_of(setup: Setup, ladders: HeliumLadders) -> HeliumGroundLines:
    """Lines of the kept terms to 1 1S, and which of them lights which."""
    choice, rate = setup.lines.helium_continuum, setup.helium.intercombination_rate_per_s
    fed = setup.lines.helium == "sobolev_feedback" or (choice is not None and choice.feedback)
    assert rate is not None
    return helium_ground_lines(ladders, fed, _higher(setup), rate)


def _higher(setup: Setup) -> HigherLines:
    return setup.lines.helium_higher_lines or "closed"


def build_helium(
    setup: Setup,
    hottest_k: float,
    tell: Tell,
    pieces: Pieces | None,
    tolerance: float | None = None,
) -> HeliumAtoms:
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
    tolerance : float, optional
        Largest error in the ln of any rate; None: what the setup's accuracy asks for.
    """
    treatment = helium_treatment(setup)
    top_k = max(_HOTTEST_K, 2.0 ** (math.ceil(4.0 * math.log2(hottest_k)) / 4.0))
    tolerance = tolerance or table_tolerance(setup)
    tell("helium", 0.0)
    ladders = helium_ladders(setup.helium.n_max, kept_terms(setup.helium.n_max, _higher(setup)))
    reduced = _table_of_first(ladders, top_k, tolerance, pieces)
    decay = [(int(n), int(l), int(s)) for n, l, s in _terms(ladders.kept)].index((2, 0, 0))
    assert setup.helium.two_photon_rate_per_s is not None
    lines = helium_lines_of(setup, ladders)
    past = HeliumPast.of(lines) if lines.fed else None
    first = IonNetwork(reduced, lines, treatment, decay, setup.helium.two_photon_rate_per_s)
    ionization_ev = float(ladders.levels.ionization_energy_ev[0])
    # Saha equilibrium of He III too asks the ion for its energy.
    ion = hydrogen_ladder(setup.helium.n_max, "nonrelativistic", ((2, 0), (2, 1)), charge=2)
    energies = ionization_ev, float(ion.levels.ionization_energy_ev[0])
    nodes, error = len(reduced.series.coefficients), reduced.interpolation_error
    if setup.helium.helium_ion == "saha":
        tell("helium", 1.0)
        return HeliumAtoms(
            ladders, None, HeliumEquations(first, None, energies, past), nodes, error
        )
    table = _table_of_second(ion, top_k, tolerance, pieces)
    tell("helium", 1.0)
    second = IonNetwork(table, _line_of_second(ion), Sobolev(), 0, two_photon_rate(2))
    return HeliumAtoms(
        ladders,
        ion,
        HeliumEquations(first, second, energies, past),
        nodes + table.n_nodes,
        max(error, table.interpolation_error),
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
