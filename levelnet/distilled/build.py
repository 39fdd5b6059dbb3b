"""Distil a setup: exact reductions over T_r, a series through them, patches, a certificate."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable, Iterable
from concurrent.futures import Executor

import numpy as np
from threadpoolctl import threadpool_limits

from ..arrays import FloatArray
from ..atomic.physics import scales
from ..errors import InputError, SolveError
from ..history.cost import check_memory
from ..history.setup import Setup
from ..network.rates import RateConstants
from ..network.scaled import scaled_levels
from ..network.tabulation import TabulatedReduction, node_count
from ..numerics.chebyshev import ChebyshevSeries, chebyshev_nodes
from ..pieces import Pieces
from .certificate import RADIATION_POINTS
from .certificate import certify as certify_table
from .helium_build import distill_helium
from .kept import (
    KeptChoice,
    check_helium_setup,
    check_lines,
    check_no_field,
    check_overrides,
    choose_kept,
)
from .nodes import Atom, NodeSource, outline
from .patches import Patches, Ranges, fit_patches
from .plasma import HOTTEST_K
from .table import EffectiveTable

Progress = Callable[[str, float], None]

TIGHTEST, LOOSEST = 1e-10, 1e-2
# Lowest T_r allowed, and the default range. The reference of the certificate, a little wider, still
# has the symmetric form, with half the time and memory of the other.
_COLDEST_K, _COLD_K, _HOT_K = 5.0, 27.5, 9000.0
# Of the range in ln T_r: so much wider is the reference, to have no node in common with the table.
_WIDER = 0.003
_LEAST_RATIO, _LARGEST_RATIO = 0.004, 10.0
# Shares of the tolerance: what the series through the exact nodes may err, and the patches.
_SERIES, _PATCHES = 0.1, 0.5
# Where the series is held against exact reductions, as fractions of its range: off every set of
# nodes, denser at the ends.
_CHECKS = np.array([0.0031, 0.0213, 0.0937, 0.2119, 0.3573, 0.5031, 0.6917, 0.8713, 0.9791])
_MOST_NODES = 400


def distill(  # noqa: PLR0913  choices by name, each with a default
    setup: Setup,
    *,
    kept: Iterable[tuple[int, int]] | None = None,
    tolerance: float = 1e-8,
    radiation_range_k: tuple[float, float] | None = None,
    ratio_range: tuple[float, float] = (0.01, 4.0),
    executor: Executor | None = None,
    workers: int = 1,
    pieces: Pieces | None = None,
    progress: Progress | None = None,
    certify: bool = True,
) -> EffectiveTable:
    """Make the table of effective rates of a setup.

    Parameters
    ----------
    setup : Setup
        The atom, its lines, the cosmology of the certificate, changed constants.
    kept : iterable of (n, l), optional
        Levels to keep, as for :func:`levelnet.effective_rates`.
    tolerance : float, 1e-10 to 1e-2 (dimensionless)
        Largest error in the ln of each rate, measured off the nodes; of exchange rates with the
        Boltzmann factor of their barrier kept out.
    radiation_range_k : tuple of float, K, within 5 to 27500
        Range of T_r, for the measured constants. None: 27.5 to 9000 K, z = 9.1 to 3300 at 2.7255 K;
        with levels of helium up to 27500 K, where it is doubly ionized.
    ratio_range : tuple of float, within 0.004 to 10
        Range of T_m/T_r, 1 inside. Matter above 8000 K and above T_r is refused all the same.
    executor : concurrent.futures.Executor, optional
        Computes the exact reductions, for example
        ``ProcessPoolExecutor(2, mp_context=multiprocessing.get_context("spawn"))``; None: this
        process does. The bits of the table are the same.
    workers : int, at least 1
        How many reductions the executor runs at once; as many atoms must fit in memory. A pool that
        breaks is replaced by one of as many processes.
    pieces : Pieces, optional
        Where finished reductions are kept, such as ``levelnet.pieces.FolderPieces(folder)``. A
        build that was killed goes on from there, to the same bits.
    progress : callable, optional
        ``progress(stage, fraction)``.
    certify : bool
        Measure the errors of the rates on random points and of three histories; False leaves
        `certificate` None.

    Returns
    -------
    EffectiveTable
        The table.

    Raises
    ------
    InputError
        For arguments out of range, an atom that does not fit in memory, or overrides of rates that
        are not in a table.
    SolveError
        If the tolerance is out of reach, or a worker process dies again and again on one input.
    """
    choice = check_distillable(setup, kept, tolerance)
    if radiation_range_k is None:
        radiation_range_k = default_range_k(setup)
    ranges = _ranges(radiation_range_k, ratio_range)
    coldest_k = coldest_node_k(radiation_range_k, certify)
    check_memory(setup, workers, populations=0, coldest_k=coldest_k)
    tell = progress or (lambda stage, fraction: None)
    atom = Atom.of(setup.hydrogen, choice, setup.rates.network)
    tell("atomic data", 0.0)
    with threadpool_limits(limits=1, user_api="blas"):
        constants = outline(atom)[2]
        counter = _Counter(tell, node_count(*radiation_range_k, _SERIES * tolerance))
        source = NodeSource(atom, executor, pieces, counter, workers)
        series = _series(source, constants, ranges, _SERIES * tolerance)
        tell("fitting patches", 0.0)
        patches = fit_patches(series, constants, ranges, _PATCHES * tolerance)
        table = _table(setup, atom, tolerance, ranges, patches)
        helium = None
        if setup.helium_recombines:
            tolerances = _SERIES * tolerance, _PATCHES * tolerance
            helium = distill_helium(setup, tolerances, tell, pieces)
            table = dataclasses.replace(
                table, helium=helium.first, helium_ion=helium.ion, helium_lines=helium.lines
            )
        if certify:
            reference = _reference(source, ranges, tolerance)
            atoms = None if helium is None else helium.atoms
            certificate = certify_table(table, source, reference, tell, atoms)
            table = dataclasses.replace(table, certificate=certificate)
    tell("done", 1.0)
    return table


def check_distillable(
    setup: Setup, kept: Iterable[tuple[int, int]] | None, tolerance: float
) -> KeptChoice:
    """The levels that a table keeps; InputError for a setup or tolerance that makes no table."""
    choice = choose_kept(setup, kept)
    if not TIGHTEST <= tolerance <= LOOSEST:
        raise InputError(f"tolerance = {tolerance:g}: allowed are {TIGHTEST:g} to {LOOSEST:g}")
    check_overrides(setup)
    check_lines(setup.lines)
    check_no_field(setup)
    check_helium_setup(setup)
    return choice


def default_range_k(setup: Setup) -> tuple[float, float]:
    """Range of T_r that a table has where none is asked for, in K."""
    return _COLD_K, HOTTEST_K if setup.helium_recombines else _HOT_K


def coldest_node_k(radiation_range_k: tuple[float, float], certify: bool = True) -> float:
    """Lowest T_r at which :func:`distill` may reduce hydrogen for a table of this range, in K."""
    low, high = radiation_range_k
    return low * (low / high) ** _WIDER if certify else low


def expected_reductions(setup: Setup, tolerance: float, certify: bool = True) -> int:
    """How often :func:`distill` is going to reduce hydrogen, if no series needs refining."""
    series = node_count(*default_range_k(setup), _SERIES * tolerance) + len(_CHECKS)
    return 2 * series + RADIATION_POINTS if certify else series


class _Counter:
    """Turns finished nodes into progress."""

    def __init__(self, tell: Progress, expected: int) -> None:
        self.tell, self.expected, self.done = tell, expected + len(_CHECKS), 0

    def __call__(self) -> None:
        self.done += 1
        self.tell("reducing the network", min(1.0, self.done / self.expected))


def _series(
    source: NodeSource, constants: RateConstants, ranges: Ranges, tolerance: float
) -> ChebyshevSeries:
    """Chebyshev series in ln T_r through exact nodes, good to `tolerance` off them."""
    low, high = ranges.log_low, ranges.log_high
    checks = low + (high - low) * _CHECKS
    count = node_count(math.exp(low), math.exp(high), tolerance)
    while count <= _MOST_NODES:
        places = chebyshev_nodes(low, high, count)
        # One call for both, so that all workers stay busy.
        values = source.at(np.exp(np.concatenate([places, checks])))
        series = ChebyshevSeries.fit(low, high, values[:count])
        error = max(
            _series_error(constants, ranges, series.evaluate(float(x))[0], exact, float(x))
            for x, exact in zip(checks, values[count:], strict=True)
        )
        if error <= tolerance:
            return series
        count = math.ceil(1.3 * count)
    raise SolveError(
        f"the series in ln T_r does not reach {tolerance:g} with {_MOST_NODES} nodes; "
        "loosen the tolerance"
    )


def _series_error(
    constants: RateConstants, ranges: Ranges, value: FloatArray, truth: FloatArray, x: float
) -> float:
    """Largest error in the ln of an exchange rate or a recombination coefficient at any T_m."""
    n_pairs = len(constants.lower)
    worst = float(np.max(np.abs(value[:n_pairs] - truth[:n_pairs]), initial=0.0))
    matter_k = np.exp(x + np.linspace(ranges.ratio_low, ranges.ratio_high, 9))
    spread = np.exp(-constants.electron_k / matter_k)
    capture, exact = (
        np.exp(stored[n_pairs:].reshape(constants.n_kept, -1)) @ spread for stored in (value, truth)
    )
    return max(worst, float(np.max(np.abs(np.log(capture / exact)))))


def _reference(source: NodeSource, ranges: Ranges, tolerance: float) -> TabulatedReduction:
    """The full network over all T_r of the table, on nodes of its own."""
    ladder, _, constants = outline(source.atom)
    shift = _WIDER * (ranges.log_high - ranges.log_low)
    own = ranges._replace(log_low=ranges.log_low - shift, log_high=ranges.log_high + shift)
    error = max(_SERIES * tolerance, 1e-11)
    series = _series(source, constants, own, error)
    return TabulatedReduction(ladder, constants, (series,), error)


def _table(
    setup: Setup, atom: Atom, tolerance: float, ranges: Ranges, patches: Patches
) -> EffectiveTable:
    ladder, _, constants = outline(atom)
    return EffectiveTable(
        setup,
        scaled_levels(ladder.kept, scales(setup.physics)),
        tolerance,
        *ranges,
        *patches,
        constants.lower,
        constants.upper,
        constants.barrier_k,
        constants.rise_k,
        constants.log_weight_ratio,
    )


def _ranges(radiation_k: tuple[float, float], ratio: tuple[float, float]) -> Ranges:
    low, high = radiation_k
    if not _COLDEST_K <= low < high <= HOTTEST_K:
        raise InputError(
            f"radiation_range_k = ({low:g}, {high:g}): allowed are ascending temperatures from "
            f"{_COLDEST_K:g} to {HOTTEST_K:g} K"
        )
    least, largest = ratio
    if not _LEAST_RATIO <= least < 1.0 < largest <= _LARGEST_RATIO:
        raise InputError(
            f"ratio_range = ({least:g}, {largest:g}): allowed are {_LEAST_RATIO:g} to "
            f"{_LARGEST_RATIO:g}, with 1 inside"
        )
    return Ranges(math.log(low), math.log(high), math.log(least), math.log(largest))
