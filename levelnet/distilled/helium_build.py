"""Distil helium: effective rates of He I and He II, and the escape from the lines of He I."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple

from ..escape.helium_lines import HeliumGroundLines
from ..escape.helium_treatment import HeliumTreatment
from ..history.helium import COLDEST_K
from ..history.helium_atom import HeliumAtoms, build_helium
from ..history.ion_network import HeliumIon
from ..history.setup import Setup
from ..network.helium import HeliumReduction
from ..network.tabulation import TabulatedReduction
from ..pieces import Pieces
from .helium_escape import LineTable, line_table
from .patches import Ranges
from .plasma import HOTTEST_K
from .stage import StageTable, make_stage

# T_m/T_r of matter while helium recombines: Compton scattering holds it within 1e-2 of 1.
_RATIO = (0.5, 1.5)


class HeliumParts(NamedTuple):
    """What a table holds of helium, and what it was made from."""

    first: StageTable
    ion: StageTable | None
    lines: LineTable
    atoms: HeliumAtoms


def distill_helium(
    setup: Setup,
    tolerances: tuple[float, float],
    tell: Callable[[str, float], None],
    pieces: Pieces | None,
) -> HeliumParts:
    """Make the tables of helium, from T_r = 1400 K up to where the full history starts.

    Parameters
    ----------
    setup : Setup
        With levels of helium.
    tolerances : tuple of float, dimensionless
        What the series through exact reductions may err in any logarithm, and the patches.
    tell : callable
        Progress.
    pieces : Pieces or None
        Store of reductions and of escape probabilities.
    """
    atoms = build_helium(setup, HOTTEST_K, tell, pieces, tolerances[0])
    first, second = atoms.equations.first, atoms.equations.second
    reduced = first.reduced
    assert isinstance(reduced, HeliumReduction)
    assert isinstance(first.lines, HeliumGroundLines)
    assert isinstance(first.treatment, HeliumTreatment)
    low, high = reduced.series.low, reduced.series.high
    ranges = Ranges(low, high, *(math.log(one) for one in _RATIO))
    stage = make_stage(reduced.kept, (reduced.series,), reduced.constants, ranges, tolerances[1])
    lines = line_table(
        first.lines,
        first.treatment,
        (first.decay, first.decay_rate_per_s),
        atoms.equations.ionization_ev[1],
        (COLDEST_K, math.exp(high)),
        tell,
        pieces,
    )
    return HeliumParts(stage, _ion(second, ranges, tolerances[1]), lines, atoms)


def _ion(network: HeliumIon | None, ranges: Ranges, tolerance: float) -> StageTable | None:
    if network is None:
        return None
    reduced = network.reduced
    assert isinstance(reduced, TabulatedReduction)
    return make_stage(reduced.kept, reduced.series, reduced.constants, ranges, tolerance)
