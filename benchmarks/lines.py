"""What do all the dipole lines of an atom cost, and how exact are they?

    python -m benchmarks.lines [n_max ...]

The reference is Gordon's closed form (Gordon 1929, Ann. Phys. 394, 1031) in 200-digit arithmetic
(mpmath), at n <= 120. One coefficient is one pair (n, l) - (n', l + 1) with n != n'.
"""

from __future__ import annotations

import sys

from benchmarks.timing import best_of, machine, matrix_product  # first: pins threads

# isort: split
import mpmath
import numpy as np

from levelnet import constants as const
from levelnet.atomic.bound_bound import dipole_blocks, einstein_a
from levelnet.atomic.levels import reduced_mass_ratio


def gordon_einstein_a(n: int, l: int, n_lower: int, l_lower: int, digits: int = 200) -> float:
    """A of hydrogen from the closed form, in s^-1."""
    mpmath.mp.dps = digits
    mp, top = mpmath.mpf, max(l, l_lower)
    a, b = (n, n_lower) if l > l_lower else (n_lower, n)  # the state with the higher l first
    x = -4 * mp(a) * b / mp(a - b) ** 2
    f = mpmath.factorial
    head = mpmath.sqrt(f(a + top) * f(b + top - 1) / (f(a - top - 1) * f(b - top)))
    head *= (4 * mp(a) * b) ** (top + 1) / mp(a + b) ** (a + b) / (4 * f(2 * top - 1))
    bracket = mpmath.hyp2f1(-a + top + 1, -b + top, 2 * top, x)
    bracket -= (mp(a - b) / (a + b)) ** 2 * mpmath.hyp2f1(-a + top - 1, -b + top, 2 * top, x)
    integral = head * mp(abs(a - b)) ** (a + b - 2 * top - 2) * bracket
    omega = (1 / mp(n_lower) ** 2 - 1 / mp(n) ** 2) / 2
    scale = mp(4) / 3 * mp(const.FINE_STRUCTURE) ** 3 / mp(const.ATOMIC_TIME_S)
    rate = scale * omega**3 * top / (2 * l + 1) * integral**2
    return float(rate * mp(reduced_mass_ratio()))


def worst_error() -> float:
    """Largest relative error over lines with n <= 120."""
    rng = np.random.default_rng(1)
    worst = 0.0
    for _ in range(60):
        n = int(rng.integers(2, 121))
        n_lower = int(rng.integers(1, n))
        l = int(rng.integers(0, min(n, n_lower + 1)))
        l_lower = l - 1 if l > 0 and (rng.random() < 0.5 or l + 1 >= n_lower) else l + 1
        if not 0 <= l_lower < n_lower:
            continue
        exact = gordon_einstein_a(n, l, n_lower, l_lower)
        worst = max(worst, abs(float(einstein_a(n, l, n_lower, l_lower)) / exact - 1.0))
    return worst


def per_coefficient(n_max: int) -> tuple[float, float]:
    """Seconds per coefficient into a reused buffer, and how many operations dgemm does in it."""
    count = sum((n_max - l) * (n_max - l - 1) - (n_max - l - 1) for l in range(n_max - 1))
    buffer = np.empty(sum((n_max - l) * (n_max - l - 1) for l in range(n_max - 1)))
    product, operations = matrix_product()
    dipole_blocks(n_max, out=buffer)
    own, dgemm = best_of([lambda: dipole_blocks(n_max, out=buffer), product], 5)
    return own / count, own / count * operations / dgemm


if __name__ == "__main__":
    print(machine())
    print(f"largest relative error at n <= 120: {worst_error():.1e}")
    for size in [int(argument) for argument in sys.argv[1:]] or [100, 300]:
        seconds, flops = per_coefficient(size)
        print(
            f"n_max {size:4d}: {1e9 * seconds:.1f} ns per coefficient, as long as {flops:.0f} "
            "operations of dgemm"
        )
