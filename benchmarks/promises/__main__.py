"""Is every promise about cost kept? One run, one table, error first.

    python -m benchmarks.promises [--largest 300] [--only P1 P4 ...]

P1 to P11 in words and numbers stand in `targets.py`. Everything is timed in this process, on one
BLAS thread, in process time, best of several turns of ours, the rivals and a 1536^3 dgemm; but
memory (P6), which is that of fresh processes. The exit code is 1 where a promise is missed. With
--largest 1000 all of it runs: some 9 GB and ten minutes, both estimated from 500.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence

from benchmarks.timing import best_of, machine, matrix_product  # pins threads

# isort: split
from benchmarks.promises.elimination import memory_rows, rows_of
from benchmarks.promises.others import history_rows, line_rows
from benchmarks.promises.table import Row, lay_out, summary
from benchmarks.promises.targets import TARGETS, sizes

_APART = {"P6", "P9", "P10"}  # not measured on the atom that the others share


def measure(names: Sequence[str], largest: int) -> list[Row]:
    """Rows of these promises up to this n_max."""
    rows: list[Row] = []
    if "P6" in names and sizes("P6", largest):
        tell("memory")
        rows += memory_rows(sizes("P6", largest))
    wanted = {
        n: {name for name in names if n in sizes(name, largest)} - _APART for n in every_size()
    }
    for n_max, some in wanted.items():
        if some:
            tell(f"n_max = {n_max}")
            rows += rows_of(n_max, some)
    if "P9" in names and sizes("P9", largest):
        tell("dipole lines")
        rows += line_rows(sizes("P9", largest))
    if "P10" in names:
        tell("histories from a table")
        rows += history_rows()
    return rows


def every_size() -> list[int]:
    """All n_max of all promises."""
    return sorted({n for name, one in TARGETS.items() if name != "P10" for n in one.promise})


def tell(what: str) -> None:
    """Say what is being measured; the table comes at the end."""
    print(f"measuring {what}", file=sys.stderr, flush=True)


def main(arguments: Sequence[str] | None = None) -> int:
    """Print the table; give the exit code."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--largest", type=int, default=300, help="largest n_max (default 300)")
    parser.add_argument("--only", nargs="+", choices=list(TARGETS), help="only these")
    options = parser.parse_args(arguments)
    names = options.only or list(TARGETS)
    asked = sum(len(sizes(name, options.largest)) for name in names)
    if not asked:
        parser.error(f"--largest {options.largest}: {' '.join(names)} are for larger sizes")
    rows = measure(names, options.largest)
    product, operations = matrix_product()
    print(machine())
    print(f"dgemm of 1536^3: {1e-9 * operations / best_of([product], 3)[0]:.0f} GFLOP/s")
    print(lay_out(rows))
    text, code = summary(rows, sum(len(TARGETS[name].promise) for name in names) - asked)
    print(text)
    return code


if __name__ == "__main__":
    sys.exit(main())
