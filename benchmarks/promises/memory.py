"""How much memory does a process need that makes exactly one node (P6)?

    python -m benchmarks.promises.memory n_max

prints its own peak in bytes and the error of its rates. The peak is that of the whole process,
interpreter and libraries included. VmHWM counts from exec on; ru_maxrss, which getrusage gives,
would begin with what the parent had.
"""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]


def peak_bytes() -> float:
    """Peak resident memory of this process so far; no number where the kernel does not tell."""
    try:
        with open("/proc/self/status", encoding="ascii") as file:
            found = [line.split()[1] for line in file if line.startswith("VmHWM:")]
    except OSError:
        return float("nan")
    return 1024.0 * float(found[0]) if found else float("nan")


def in_child(n_max: int) -> tuple[float, float]:
    """Peak in bytes and error of a fresh process; both infinite where it did not come to its end.

    A process that is killed for its memory has missed the promise too.
    """
    command = [sys.executable, "-m", "benchmarks.promises.memory", str(n_max)]
    done = subprocess.run(command, cwd=ROOT, stdout=subprocess.PIPE, text=True, check=False)
    if done.returncode:
        print(f"n_max = {n_max}: the process ended with {done.returncode}", file=sys.stderr)
        return float("inf"), float("inf")
    peak, error = done.stdout.split()
    return float(peak), float(error)


def main(n_max: int) -> None:
    import benchmarks.timing  # noqa: F401  (pins threads)

    # isort: split
    from benchmarks.promises.node import NodeMaker

    maker = NodeMaker(n_max)
    maker.make()
    peak = peak_bytes()
    print(peak, maker.error_of_captures())


if __name__ == "__main__":
    main(int(sys.argv[1]))
