"""How right is it? One line a check, each against something outside levelnet.

    python -m benchmarks.accuracy

Takes a few minutes; the same checks stand in the tests with their tolerances.
"""

from __future__ import annotations

from benchmarks.factorization import general_matrix
from benchmarks.history import (  # pins threads
    GeneralSolver,
    at_redshifts,
    largest_error,
    setup,
    silent,
)
from benchmarks.lines import gordon_einstein_a, worst_error

# isort: split
import dataclasses

import mpmath
import numpy as np
from scipy.integrate import solve_ivp
from scipy.sparse.linalg import splu

from levelnet import constants as const
from levelnet.atomic.bound_bound import einstein_a
from levelnet.atomic.bound_free import photoionization_cross_section, recombination_coefficient
from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.atomic.levels import reduced_mass_ratio
from levelnet.background.conditions import Conditions
from levelnet.history.integrate import integrate_history
from levelnet.network.assembly import Workspace, factor_interior
from levelnet.network.ladder import hydrogen_ladder
from levelnet.network.populations import populations
from levelnet.tables import read_table

TEMPERATURES_K = (30.0, 100.0, 300.0, 1000.0, 2500.0, 3000.0, 4000.0, 6000.0)


def lines_at_the_top() -> float:
    """Einstein A at n = 1000 against Gordon's closed form in 800 digits."""
    mpmath.mp.dps = 800
    cases = ((1000, 1, 999, 0), (1000, 500, 999, 499), (1000, 1, 1, 0), (1000, 200, 500, 199))
    return max(
        abs(float(einstein_a(*case)) / gordon_einstein_a(*case, digits=800) - 1.0) for case in cases
    )


def cross_sections() -> float:
    """1s, 2s and 2p against the closed forms of Stobbe 1930."""
    k = np.geomspace(0.01, 3.0, 50)
    scale = np.pi**2 / 3.0 * const.FINE_STRUCTURE * const.BOHR_RADIUS_CM**2
    scale /= reduced_mass_ratio() ** 2
    worst = 0.0
    for n, l in ((1, 0), (2, 0), (2, 1)):
        x = 1.0 / (1.0 + n**2 * k**2)
        f = np.exp(-4.0 / k * np.arctan(n * k)) / -np.expm1(-2.0 * np.pi / k)
        shape = {(1, 0): 2**9 * x**4, (2, 0): 2**14 * x**4 * (1 + 3 * x)}.get(
            (n, l), 2**14 * x**5 * (1 + 8 * x / 3)
        )
        sigma = photoionization_cross_section(n, l, k**2)
        worst = max(worst, float(np.abs(sigma / (scale * shape * f) - 1.0).max()))
    return worst


def case_b() -> float:
    """Case-B recombination (n = 2 to 300 and a power-law tail) against Hummer 1994."""
    table = read_table("hydrogen/case_b_recombination")
    worst = 0.0
    names = list(table.numbers)
    mass = reduced_mass_ratio()
    for log_t, published in zip(table.numbers[names[0]], table.numbers[names[1]], strict=True):
        # The table is for infinite nuclear mass: alpha_inf(T) = mu^2 alpha(mu T), mu over m_e.
        t = 10.0**log_t * mass
        shells = []
        for n in range(2, 301):
            l = np.arange(n)
            shells.append(float(recombination_coefficient(np.full(n, n), l, t).sum()))
        slope = np.log(shells[-1] / shells[-50]) / np.log(300.0 / 251.0)
        tail = shells[-1] * 300.5 / (-slope - 1.0) * (300.5 / 300.0) ** slope
        total = (sum(shells) + tail) * mass**2 * np.sqrt(10.0**log_t) / 1e-11
        worst = max(worst, abs(total / published - 1.0))
    return worst


def equilibrium_and_conservation(n_max: int) -> tuple[float, float]:
    """Largest |ln b| in equilibrium, and largest imbalance, over the temperatures."""
    ladder = hydrogen_ladder(n_max, "measured", ((2, 0), (2, 1)))
    work = Workspace.of(ladder)
    departure = imbalance = 0.0
    for t in TEMPERATURES_K:
        factored = factor_interior(ladder, t, work)
        log_kept = log_saha_factor(
            ladder.kept.statistical_weight, ladder.kept.ionization_energy_ev, t
        )
        found = populations(factored, log_kept, Conditions(t, t, 1.0, 1.0, 1.0, 1.0, 1.0))
        departure = max(departure, float(np.abs(found.log_departure[1:]).max()))
        fates = factored.fates(np.vstack([factored.to_kept, factored.photoionization]))
        imbalance = max(imbalance, float(np.abs(fates.sum(axis=0) - 1.0).max()))
        imbalance = max(imbalance, found.conservation_error)
    return departure, imbalance


def against_splu(n_max: int) -> float:
    """Fates of the interior against splu on the CSR export, over the temperatures."""
    ladder = hydrogen_ladder(n_max, "measured", ((2, 0), (2, 1)))
    worst = 0.0
    for t in TEMPERATURES_K:
        factored = factor_interior(ladder, t)
        general = splu(general_matrix(ladder, t)).solve(factored.to_kept.T, trans="T").T
        fates = factored.fates(factored.to_kept)
        normal = fates > 1e-280
        worst = max(worst, float(np.abs(general[normal] / fates[normal] - 1.0).max()))
    return worst


def history_against_radau() -> float:
    """x_e and T_m at n_max = 30 against scipy's Radau with splu on the whole matrix."""
    ours = integrate_history(setup(30, 1e-8), silent)
    rival = GeneralSolver(ours.equations, ours.ladder)
    found = solve_ivp(
        rival.rate,
        (ours.trajectory.time[0], -np.log1p(ours.redshift[-1])),
        ours.trajectory.state[0],
        method="Radau",
        t_eval=-np.log1p(ours.redshift),
        rtol=1e-9,
        atol=1e-9,
    )
    return largest_error(found.y.T, at_redshifts(ours))


def interpolated_against_direct() -> tuple[float, float]:
    """x_e and T_m at n_max = 10 with and without interpolation, and the error as stored."""
    plain = setup(10, 1e-5)
    direct = dataclasses.replace(
        plain, accuracy=dataclasses.replace(plain.accuracy, interpolate=False)
    )
    first, second = (integrate_history(one, silent) for one in (plain, direct))
    error = largest_error(at_redshifts(first), at_redshifts(second))
    return error, first.equations.reduced.interpolation_error


def line(what: str, figure: float) -> None:
    """Print one check."""
    print(f"{what:62s} {figure:.1e}", flush=True)


if __name__ == "__main__":
    line("Einstein A, n <= 120, against Gordon 1929 in mpmath", worst_error())
    line("Einstein A, n = 1000, against Gordon 1929 in mpmath", lines_at_the_top())
    line("cross sections 1s, 2s, 2p, against Stobbe 1930", cross_sections())
    line("case-B recombination, 1000 to 25000 K, against Hummer 1994", case_b())
    for size in (30, 100, 300):
        logs, imbalance = equilibrium_and_conservation(size)
        line(f"equilibrium, n_max = {size}, 30 to 6000 K, largest |ln b|", logs)
        line(f"conservation, n_max = {size}, 30 to 6000 K", imbalance)
    line("block elimination, n_max = 30, against scipy splu", against_splu(30))
    line("block elimination, n_max = 100, against scipy splu", against_splu(100))
    error, stored = interpolated_against_direct()
    line("history, n_max = 10, interpolated against direct", error)
    line("  error of any reduced rate off the nodes, as stored", stored)
    line("history, n_max = 30, against scipy Radau with splu", history_against_radau())
