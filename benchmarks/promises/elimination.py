"""Everything that is measured on one atom: P1 to P8 and P11 at one n_max."""

from __future__ import annotations

from benchmarks.timing import best_of, clocked, matrix_product  # first: pins threads

# isort: split
import numpy as np

from benchmarks.promises.memory import in_child
from benchmarks.promises.node import NodeMaker
from benchmarks.promises.rivals import rivals_of
from benchmarks.promises.table import Row, row, without_figure
from benchmarks.promises.targets import TARGETS, conserved
from levelnet.network import assembly
from levelnet.network.assembly import FactoredInterior

TEMPERATURES_K = (30.0, 100.0, 300.0, 1000.0, 2500.0, 3000.0, 4000.0, 6000.0)
FEW_TEMPERATURES_K = (30.0, 2500.0, 6000.0)  # above n_max = 500, where each takes half a minute
_REPEATS = ((30, 20), (100, 15), (200, 7), (300, 5), (1000, 3))  # up to n_max, times
# Warms up the child's compile cache, whose compiler would count as memory: library calls and
# small blocks.
WARM_UP = 60


def memory_rows(sizes: list[int]) -> list[Row]:
    """P6; first of all, while this process is small."""
    in_child(WARM_UP)
    found = []
    for n_max in sizes:
        peak, error = in_child(n_max)
        if np.isnan(peak):
            found.append(without_figure("P6", n_max, "no VmHWM here"))
            continue
        one = 8.0 * n_max**3 / 3.0
        allowed = TARGETS["P8"].promise[n_max]
        found.append(row("P6", n_max, error, "populations", allowed, peak / one))
    return found


def rows_of(n_max: int, wanted: set[str]) -> list[Row]:
    """Measure what is wanted at this size."""
    maker = NodeMaker(n_max)
    kelvin = TEMPERATURES_K if n_max <= 500 else FEW_TEMPERATURES_K
    rows = error_rows(maker, wanted, kelvin)
    if wanted & {"P1", "P2", "P3", "P4", "P5", "P11"}:
        rows += cost_rows(maker, wanted)
    return rows


def error_rows(maker: NodeMaker, wanted: set[str], kelvin: tuple[float, ...]) -> list[Row]:
    """P7 and P8: the error is the figure."""
    n_max, rows = maker.n_max, []
    if wanted & {"P7", "P8"}:
        imbalance, mismatch = maker.errors(kelvin)
        if "P7" in wanted:
            allowed = TARGETS["P7"].promise[n_max]
            rows.append(row("P7", n_max, imbalance, "sum of sources", allowed, imbalance))
        if "P8" in wanted:
            allowed = TARGETS["P8"].promise[n_max]
            rows.append(row("P8", n_max, mismatch, "adjoint", allowed, mismatch))
    return rows


def cost_rows(maker: NodeMaker, wanted: set[str]) -> list[Row]:
    """P1 to P5 and P11: all in turn, our factorization inside the node that it belongs to."""
    n_max = maker.n_max
    maker.make()  # touches all memory, compiles what is not compiled
    factored = maker.factored()
    balance = imbalance_of_chances(factored)
    rivals, rows = rivals_of(maker, factored, wanted)
    errors = [one.error(factored) for one in rivals.values()]
    del factored  # its buffers are used again
    product, operations = matrix_product()
    actions = [maker.make, product, *(one.factor for one in rivals.values())]
    with clocked(assembly, "factor_symmetric") as clock:
        node, dgemm, *theirs = best_of(actions, repeats(n_max))
    ideal = 7.0 / 12.0 * n_max**4 * dgemm / operations
    if "P1" in wanted:
        rows.append(
            row("P1", n_max, balance, "sum of chances", conserved(n_max), ideal / clock.best)
        )
    if "P4" in wanted:
        error = maker.error_of_captures()
        rows.append(
            row("P4", n_max, error, "populations", TARGETS["P8"].promise[n_max], node / ideal)
        )
    for (name, rival), error, seconds in zip(rivals.items(), errors, theirs, strict=True):
        rows.append(row(name, n_max, error, rival.name, rival.allowed, seconds / clock.best))
    return rows


def imbalance_of_chances(factored: FactoredInterior) -> float:
    """How far the chances to leave a level through all exits are from 1."""
    exits = np.vstack([factored.to_kept, factored.photoionization])
    return float(np.max(np.abs(factored.fates(exits).sum(axis=0) - 1.0)))


def repeats(n_max: int) -> int:
    """How often all take their turn."""
    return next(count for size, count in _REPEATS if n_max <= size)
