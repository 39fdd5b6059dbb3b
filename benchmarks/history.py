"""What does a history cost, against factoring its nodes and against general-purpose solvers?

    python -m benchmarks.history

1. A full l-resolved history at n_max = 100, populations at 200 redshifts included, in units of
   factoring 100 nodes.
2. x_e and T_m at n_max = 50 against the same equations with scipy: the whole rate matrix refactored
   by splu at each evaluation inside solve_ivp(BDF). Errors of both are measured against a run with
   relative = 1e-9; the rival's tolerance is the loosest of those listed that reaches our error.
"""

from __future__ import annotations

import math

from benchmarks.factorization import factor_inputs
from benchmarks.timing import best_of, cpu_seconds, machine  # pins threads

# isort: split
import numpy as np
from scipy.integrate import solve_ivp
from scipy.sparse import csc_array
from scipy.sparse.linalg import splu

from levelnet import constants as const
from levelnet.atomic.detailed_balance import log_saha_factor
from levelnet.background.cosmology import Cosmology
from levelnet.background.matter import compton_rate_per_s
from levelnet.history.equations import SlowEquations, ionized_and_neutral
from levelnet.history.integrate import Integrated, integrate_history
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from levelnet.network.assembly import factor_symmetric, log_line_rates, recombination_coefficients
from levelnet.network.ladder import Ladder

# An invented cosmology; any other would do.
COSMOLOGY = Cosmology(68.0, 0.0224, 0.142, helium_mass_fraction=0.245)
REDSHIFTS = tuple(np.linspace(20.0, 1600.0, 80).tolist())


def setup(n_max: int, relative: float, n_redshifts: int | None = None) -> Setup:
    """A run of this size: at the listed redshifts, or at `n_redshifts` even ones."""
    grid = {"redshift_start": 1600.0, "redshift_end": 20.0}
    grid |= {"n_redshifts": n_redshifts} if n_redshifts else {"redshifts": REDSHIFTS}
    return Setup(COSMOLOGY, {"n_max": n_max}, grid=grid, accuracy={"relative": relative})


class GeneralSolver:
    """The same equations with a general sparse solver: nothing is reduced or interpolated."""

    def __init__(self, equations: SlowEquations, ladder: Ladder) -> None:
        """Prepare the pattern of the matrix; only values change from one evaluation to the next."""
        self.equations, self.ladder = equations, ladder
        lower, upper, strength = [], [], []
        for l in range(ladder.n_max - 1):
            n, other = np.meshgrid(
                np.arange(max(l + 1, 2), ladder.n_max + 1),
                np.arange(l + 2, ladder.n_max + 1),
                indexing="ij",
            )
            value = ladder.dipole.block(l)[n - l - 1, other - l - 2]
            own, partner = n * (n - 1) // 2 + l, other * (other - 1) // 2 + l + 1
            real = value > 0.0
            lower.append(np.where(n < other, own, partner)[real])
            upper.append(np.where(n < other, partner, own)[real])
            strength.append(value[real])
        self.lower, self.upper = np.concatenate(lower), np.concatenate(upper)
        self.strength = np.concatenate(strength)
        size = len(ladder.levels) - 1
        every = np.arange(size)
        rows = np.concatenate([self.upper - 1, self.lower - 1, every])
        columns = np.concatenate([self.lower - 1, self.upper - 1, every])
        marks = csc_array((np.arange(1.0, len(rows) + 1), (rows, columns)), shape=(size, size))
        self.order = marks.data.astype(int) - 1
        self.pattern = marks

    def rate(self, s: float, y: np.ndarray) -> np.ndarray:
        """Right-hand side of the slow variables, of the same form as levelnet's own."""
        equations, levels = self.equations, self.ladder.levels
        around = equations.background(s)
        ionized, neutral = ionized_and_neutral(float(y[0]))
        t_r, t_m = around.radiation_temperature_k, around.radiation_temperature_k * math.exp(y[1])
        loss = self.losses(t_r, around.hydrogen_density_cm3 * neutral / around.hubble_rate_per_s)
        exponent = levels.energy_ev[1:] / (const.BOLTZMANN_EV_K * t_r)
        boltzmann = neutral * levels.statistical_weight[1:] / 2.0 * np.exp(-exponent)
        pairs = around.hydrogen_density_cm3 * ionized**2
        source = recombination_coefficients(self.ladder, t_r, t_m)[1:] * pairs + loss * boltzmann
        population = splu(self.matrix(t_r, loss)).solve(source)
        flow = float(loss @ (population - boltzmann))
        heating = float(compton_rate_per_s(t_r, ionized, equations.cosmology.helium_ratio()))
        return np.array(
            [
                -flow / (around.hubble_rate_per_s * ionized * neutral),
                -1.0 + heating / around.hubble_rate_per_s * math.expm1(-y[1]),
            ]
        )

    def losses(self, t_r: float, column: float) -> np.ndarray:
        """Rates to the ground state: two-photon decay of 2s, escape of Lyman-alpha from 2p."""
        line = self.equations.lines
        depth = line.weight_ratio[0] * line.einstein_a_per_s[0] * line.wavelength_cm[0] ** 3
        depth *= column / (8.0 * math.pi)
        x = line.energy_ev[0] / (const.BOLTZMANN_EV_K * t_r)
        escape = line.einstein_a_per_s[0] * -math.expm1(-depth) / depth / -math.expm1(-x)
        loss = np.zeros(len(self.ladder.levels) - 1)
        loss[:2] = self.equations.two_photon_rate_per_s, escape
        return loss

    def matrix(self, t_r: float, loss: np.ndarray) -> csc_array:
        """Rate matrix of all excited levels at one T_r."""
        ladder, levels = self.ladder, self.ladder.levels
        rates = log_line_rates(ladder, self.lower, self.upper, self.strength, t_r)
        up, down = np.exp(rates[0]), np.exp(rates[1])
        alpha = recombination_coefficients(ladder, t_r, t_r)[1:]
        saha = log_saha_factor(levels.statistical_weight[1:], levels.ionization_energy_ev[1:], t_r)
        outflow = alpha * np.exp(-saha) + loss
        outflow += np.bincount(self.lower - 1, up, len(outflow))
        outflow += np.bincount(self.upper - 1, down, len(outflow))
        values = np.concatenate([-up, -down, outflow])
        pattern = self.pattern
        return csc_array((values[self.order], pattern.indices, pattern.indptr), pattern.shape)


def largest_error(found: np.ndarray, exact: np.ndarray) -> float:
    """Largest relative error of x_e and T_m; columns are the slow variables."""
    electrons, exact_electrons = (1.0 / (1.0 + np.exp(-y[:, 0])) for y in (found, exact))
    temperature = np.abs(found[:, 1] - exact[:, 1]).max()
    return max(float(np.abs(electrons / exact_electrons - 1.0).max()), float(temperature))


def at_redshifts(run: Integrated) -> np.ndarray:
    """Slow variables of one of our runs at the output redshifts, shape (n_redshift, 2)."""
    wanted = -np.log1p(run.redshift)
    return run.trajectory.state[np.searchsorted(run.trajectory.time, wanted - 1e-12)]


def silent(stage: str, fraction: float) -> None:
    """Progress that nobody watches."""


def whole_history() -> None:
    """Print the cost of everything, in units of factoring nodes."""
    run = setup(100, 1e-6, 200)
    solve(run)  # compiles, fills the atomic data
    ladder = integrate_history(run, silent).ladder
    arguments, coupling = factor_inputs(ladder, 3000.0)

    def prepare() -> None:
        arguments[1][:] = coupling

    node, history = np.inf, np.inf
    for _ in range(3):
        node = min(node, *best_of([lambda: factor_symmetric(*arguments)], 10, prepare))
        history = min(history, cpu_seconds(lambda: solve(run)))
    fine, plain = (at_redshifts(integrate_history(setup(100, r), silent)) for r in (1e-9, 1e-6))
    print(
        f"n_max 100, populations at 200 redshifts: error {largest_error(plain, fine):.1e} | "
        f"{history / (100 * node):.1f} times factoring 100 nodes | {history:.2f} s"
    )


def against_general_solver() -> None:
    """Print the cost at equal error against scipy's BDF with splu."""
    fine = integrate_history(setup(50, 1e-9), silent)
    exact = at_redshifts(fine)
    plain = setup(50, 1e-5)
    own = min(cpu_seconds(lambda: integrate_history(plain, silent)) for _ in range(3))
    error = largest_error(at_redshifts(integrate_history(plain, silent)), exact)
    rival = GeneralSolver(fine.equations, fine.ladder)
    for tolerance in (1e-5, 1e-6, 1e-7, 1e-8, 1e-9):
        found = []

        def run(tolerance: float = tolerance, found: list = found) -> None:
            found.append(
                solve_ivp(
                    rival.rate,
                    (fine.trajectory.time[0], -math.log1p(REDSHIFTS[0])),
                    fine.trajectory.state[0],
                    method="BDF",
                    t_eval=-np.log1p(fine.redshift),
                    rtol=tolerance,
                    atol=tolerance,
                )
            )

        seconds = cpu_seconds(run)
        rival_error = largest_error(found[0].y.T, exact)
        print(
            f"n_max 50: error {error:.1e}, rival {rival_error:.1e} (BDF at {tolerance:g}, "
            f"{found[0].nfev} evaluations) | {seconds / own:.1f} x | "
            f"{own:.2f} s against {seconds:.1f} s",
            flush=True,
        )
        if rival_error <= error:
            break


if __name__ == "__main__":
    print(machine())
    whole_history()
    against_general_solver()
