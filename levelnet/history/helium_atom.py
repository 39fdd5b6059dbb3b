"""From a setup to helium as a run needs it: its atoms, their tables, its equations."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np

from ..arrays import FloatArray
from ..atomic.bound_bound import einstein_a
from ..atomic.helium_two_photon import helium_two_photon_factor
from ..atomic.physics import Scales, scales
from ..atomic.two_photon import stimulated_two_photon_factor, two_photon_rate
from ..escape.helium_continuum import helium_treatment
from ..escape.helium_lines import (
    HeliumGroundLines,
    HigherLines,
    helium_ground_lines,
    kept_terms,
    with_strengths,
)
from ..escape.helium_past import HeliumPast
from ..escape.treatment import ResonanceLines, Sobolev
from ..network.helium import (
    HeliumLadders,
    HeliumReduction,
    helium_ladders,
    tabulate_helium,
)
from ..network.ladder import Ladder, hydrogen_ladder
from ..network.reduced import KeptLevels
from ..network.scaled import scaled_levels, with_scales
from ..network.tabulation import TabulatedReduction, tabulate
from ..numerics.chebyshev import ChebyshevSeries, chebyshev_nodes
from ..pieces import Pieces, code_digest, content_key
from ..tables import list_tables
from .cost import table_tolerance
from .helium import COLDEST_K, HeliumEquations
from .ion_network import HeliumIon, NeutralHelium
from .setup import Setup

Tell = Callable[[str, float], None]
Recall = Callable[[float, Callable[[float], FloatArray]], FloatArray]

_CODE = ("constants", "kernels", "numerics", "atomic", "network", "tables")
# Tables of all runs reach at least so far, so that they share their nodes.
_HOTTEST_K = 2.0**14.75
# Nodes of the stimulation of two-photon decays; with them its ln is good to 1e-9, the rest being
# the quadrature behind it.
_STIMULATION_NODES = 28


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


def helium_lines_of(setup: Setup, ladders: HeliumLadders) -> HeliumGroundLines:
    """Lines of the kept terms to 1 1S, and which of them lights which."""
    rates, rate = setup.rates, setup.helium.intercombination_rate_per_s
    assert rate is not None
    fed = setup.lines.helium_fed
    lines = helium_ground_lines(ladders, fed, higher_lines(setup), rate, setup.physics)
    factor = rates.ground_line_factors(lines.names, "bound_bound")
    if factor is not None:
        lines = with_strengths(lines, factor)
    sigma = rates.absorption_factor * lines.hydrogen_cross_section_cm2
    return replace(lines, hydrogen_cross_section_cm2=sigma)


def higher_lines(setup: Setup) -> HigherLines:
    """What becomes of the lines of He I from n 1P, n from 3, to its ground state."""
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
    factor = scales(setup.physics, charge=2)
    # Of the atom with the measured constants.
    hottest_k /= factor.energy
    top_k = max(_HOTTEST_K, 2.0 ** (math.ceil(4.0 * math.log2(hottest_k)) / 4.0))
    tables = _Tables(top_k, tolerance or table_tolerance(setup), pieces)
    tell("helium", 0.0)
    ladders, first, nodes, error = _first(setup, tables, factor)
    # Saha equilibrium of He III too asks the ion for its energy.
    changed = setup.rates.network_of("He II")
    ion = hydrogen_ladder(
        setup.helium.n_max, setup.hydrogen.energies, ((2, 0), (2, 1)), None, changed, charge=2
    )
    second = None
    if setup.helium.helium_ion == "network":
        second, own_nodes, own_error = _second(setup, ion, tables, factor)
        nodes, error = nodes + own_nodes, max(error, own_error)
    tell("helium", 1.0)
    energies = (
        float(ladders.levels.ionization_energy_ev[0]) * factor.energy,
        float(ion.levels.ionization_energy_ev[0]) * factor.energy,
    )
    past = HeliumPast.of(first.lines) if first.lines.fed else None
    equations = HeliumEquations(first, second, energies, past, factor)
    return HeliumAtoms(ladders, None if second is None else ion, equations, nodes, error)


class _Tables(NamedTuple):
    """How reductions are tabulated: up to which T_r, to which error in the ln, kept where."""

    top_k: float
    tolerance: float
    pieces: Pieces | None


def _first(
    setup: Setup, tables: _Tables, factor: Scales
) -> tuple[HeliumLadders, NeutralHelium, int, float]:
    """He I: its terms, its network, reductions behind the table and the error of that."""
    changed = setup.rates.network_of("He I")
    terms = kept_terms(setup.helium.n_max, higher_lines(setup))
    ladders = helium_ladders(setup.helium.n_max, terms, overrides=changed)
    reduced = _table_of_first(ladders, tables, tuple(part for one in changed for part in one.key))
    decay = [(int(n), int(l), int(s)) for n, l, s in _terms(ladders.kept)].index((2, 0, 0))
    assert setup.helium.two_photon_rate_per_s is not None
    rate = setup.rates.two_photon_rate_per_s(setup.helium.two_photon_rate_per_s, "He I")
    lines = helium_lines_of(setup, ladders)
    network = NeutralHelium(
        with_scales(reduced, factor),
        lines,
        helium_treatment(setup.lines),
        decay,
        rate * factor.two_photon_rate,
        stimulation=_stimulation(setup, helium_two_photon_factor, tables.top_k, factor),
        escape_factor=setup.rates.ground_line_factors(lines.names, "escape"),
    )
    return ladders, network, len(reduced.series.coefficients), reduced.interpolation_error


def _second(
    setup: Setup, ion: Ladder, tables: _Tables, factor: Scales
) -> tuple[HeliumIon, int, float]:
    """He II: its network, reductions behind the table and the error of that."""
    changed = setup.rates.network_of("He II")
    keys = tuple(part for one in changed for part in one.key)
    table = _table_of_second(ion, tables, (setup.hydrogen.energies, *keys))
    gap_ev = float(ion.kept.energy_ev[0])
    rate = setup.rates.two_photon_rate_per_s(two_photon_rate(2), "He II")
    escape = setup.rates.ion_escape_factor()
    network = HeliumIon(
        with_scales(table, factor),
        _line_of_second(ion, factor),
        Sobolev(),
        0,
        rate * factor.two_photon_rate,
        stimulation=_stimulation(
            setup, lambda t: stimulated_two_photon_factor(t, gap_ev), tables.top_k, factor
        ),
        escape_factor=None if escape == 1.0 else np.array([escape]),
    )
    return network, table.n_nodes, table.interpolation_error


def _terms(kept: KeptLevels) -> list[tuple[int, int, int]]:
    assert kept.spin is not None
    return list(zip(kept.n.tolist(), kept.l.tolist(), kept.spin.tolist(), strict=True))


def _stimulation(
    setup: Setup, factor_at: Callable[[FloatArray], FloatArray], top_k: float, scale: Scales
) -> ChebyshevSeries | None:
    """Ln of the factor of a two-photon decay in the blackbody; None where it is spontaneous.

    "distorted" too is the blackbody for helium: the field resolved in frequency is hydrogen's.
    """
    if setup.lines.two_photon == "spontaneous":
        return None
    low, high = math.log(COLDEST_K), math.log(top_k)
    nodes = chebyshev_nodes(low, high, _STIMULATION_NODES)
    values = np.log(factor_at(np.exp(nodes)))[:, None]
    shift = math.log(scale.energy)
    return ChebyshevSeries.fit(low + shift, high + shift, values)


def _line_of_second(ion: Ladder, scale: Scales) -> ResonanceLines:
    rate = float(einstein_a(2, 1, 1, 0, 2)) * scale.line_rate
    kept, upper = scaled_levels(ion.kept, scale), np.array([1])
    weight = kept.statistical_weight[upper] / kept.ground_weight
    energy_ev = kept.energy_ev[upper]
    return ResonanceLines(("2p-1s",), upper, np.array([rate]), energy_ev, weight, np.array([rate]))


def _table_of_first(
    ladders: HeliumLadders, how: _Tables, changed: tuple[object, ...]
) -> HeliumReduction:
    tables = [one.sha256 for one in list_tables() if one.name.startswith("helium/")]
    terms = [number for term in _terms(ladders.kept) for number in term]
    key = ("helium", code_digest(_CODE), *tables, ladders.levels.n_max, *terms, *changed)
    recall = recall_from(how.pieces, *key)
    return tabulate_helium(ladders, COLDEST_K, how.top_k, how.tolerance, recall)


def _table_of_second(ion: Ladder, how: _Tables, chosen: tuple[object, ...]) -> TabulatedReduction:
    recall = recall_from(how.pieces, "helium ion", code_digest(_CODE), ion.n_max, *chosen)
    return tabulate(ion, COLDEST_K, how.top_k, how.tolerance, recall=recall)


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
