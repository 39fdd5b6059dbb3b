"""How fast is one exact elimination of the interior, against scipy's general sparse LU?

    python -m benchmarks.factorization [n_max ...]

Both factor the same physical matrix: ours as scaled symmetric blocks (block Cholesky with the
conserving diagonal), the rival (SuperLU through scipy.sparse.linalg.splu, default ordering) as CSC.
"of dgemm" is our rate, 7/12 n_max^4 operations over the time, over that of a 1536^3 dgemm timed in
between.

    python -m benchmarks.factorization shells

What whole shells cost: one reduction (assembly, elimination, border, fates of 2s and 2p) over that
of the same n_max with every level resolved in l; and what they change: the effective recombination
coefficient onto 2s and 2p together, at 3000 and 300 K.
"""

from __future__ import annotations

import functools
import sys

from benchmarks.timing import best_of, cpu_seconds, machine, matrix_product  # first: pins threads

# isort: split
import numpy as np
from scipy.sparse import csc_array
from scipy.sparse.linalg import splu

from levelnet.network import assembly
from levelnet.network.ladder import Ladder, hydrogen_ladder
from levelnet.network.reduction import exchange_pairs, reduce_at
from levelnet.network.tabulation import live_reduction

TEMPERATURE_K = 3000.0
LARGEST_FOR_RIVAL = 300
# n_max, then where l is resolved to.
SHELLS = ((100, (99, 90, 70, 50, 30, 10, 2)), (300, (150, 100, 50, 30, 10)))


def factor_inputs(ladder: Ladder, temperature_k: float) -> tuple[tuple, np.ndarray]:
    """The arguments of the factorization, and a copy of the couplings that it overwrites."""
    seen: dict[str, tuple] = {}
    plain = assembly.factor_symmetric

    def spy(*arguments):  # type: ignore[no-untyped-def]
        seen["arguments"] = arguments
        seen["coupling"] = arguments[1].copy()
        return plain(*arguments)

    assembly.factor_symmetric = spy
    try:
        assembly.factor_interior(ladder, temperature_k)
    finally:
        assembly.factor_symmetric = plain
    return seen["arguments"], seen["coupling"]


def general_matrix(ladder: Ladder, temperature_k: float) -> csc_array:
    """The physical matrix of the interior, as splu wants it."""
    inside = ladder.interior.position - 1
    return csc_array(assembly.rate_matrix(ladder, temperature_k)[inside][:, inside])


def report(n_max: int) -> None:
    """Print one size."""
    ladder = hydrogen_ladder(n_max, "nonrelativistic", ((2, 0), (2, 1)))
    arguments, coupling = factor_inputs(ladder, TEMPERATURE_K)
    factored = assembly.factor_interior(ladder, TEMPERATURE_K)
    fates = factored.fates(np.vstack([factored.to_kept, factored.photoionization]))
    conservation = np.abs(fates.sum(axis=0) - 1.0).max()

    def prepare() -> None:
        arguments[1][:] = coupling

    product, operations = matrix_product()
    ours = lambda: assembly.factor_symmetric(*arguments)  # noqa: E731
    repeats = 20 if n_max <= 100 else 5 if n_max <= 300 else 2
    error, ratios = float("nan"), ""
    if n_max <= LARGEST_FOR_RIVAL:
        matrix = general_matrix(ladder, TEMPERATURE_K)
        rival_fates = splu(matrix).solve(factored.to_kept.T, trans="T").T
        error = np.abs(rival_fates / fates[: len(rival_fates)] - 1.0).max()
        blocks = assembly.rate_blocks(ladder, TEMPERATURE_K)
        sink = factored.photoionization + factored.to_kept.sum(axis=0)
        general = lambda: assembly.factor_general(  # noqa: E731
            ladder.interior.shape, *([one.copy() for one in side] for side in blocks), sink
        )
        own, dgemm, lu = best_of([ours, product, general], repeats, prepare)
        rival = min(cpu_seconds(lambda: splu(matrix)) for _ in range(3 if n_max <= 100 else 2))
        ratios = f"splu {rival / own:5.1f} x, block LU {lu / own:4.1f} x"
    else:
        own, dgemm = best_of([ours, product], repeats, prepare)
    rate = 7.0 / 12.0 * n_max**4 / own
    print(
        f"n_max {n_max:4d}: against splu {error:.1e}, conservation {conservation:.1e} | {ratios} | "
        f"{rate / (operations / dgemm):.2f} of dgemm | {1e3 * own:.2f} ms",
        flush=True,
    )


def report_shells(n_max: int, tops: tuple[int, ...]) -> None:
    """Print the cost with whole shells above each of `tops`."""
    two = ((2, 0), (2, 1))
    ladders = [hydrogen_ladder(n_max, "measured", two, top) for top in (n_max, *tops)]
    inputs = [(a, exchange_pairs(a), TEMPERATURE_K, assembly.Workspace.of(a)) for a in ladders]
    actions = [functools.partial(reduce_at, *one) for one in inputs]
    times = best_of(actions, 20 if n_max <= 100 else 5)
    captured = [
        [live_reduction(a).rates(kelvin, kelvin).recombination.sum() for kelvin in (3000.0, 300.0)]
        for a in ladders
    ]
    for ladder, own, capture in zip(ladders, times, captured, strict=True):
        change = np.array(capture) / captured[0] - 1.0
        print(
            f"n_max {n_max}, l to {ladder.resolve_l_to:3d}: {len(ladder.shells):3d} shells, "
            f"{own / times[0]:5.3f} of resolved, {1e3 * own:7.2f} ms | recombination "
            f"{change[0]:+.1e} at 3000 K, {change[1]:+.1e} at 300 K",
            flush=True,
        )


if __name__ == "__main__":
    print(machine())
    if sys.argv[1:] == ["shells"]:
        for highest, resolved in SHELLS:
            report_shells(highest, resolved)
        sys.exit()
    for size in [int(argument) for argument in sys.argv[1:]] or [10, 20, 30, 50, 100, 200, 300]:
        report(size)
