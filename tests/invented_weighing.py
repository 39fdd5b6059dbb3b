"""A small weighing for tests of files, tables and figures: invented numbers, nothing computed."""

from __future__ import annotations

import dataclasses

import numpy as np

from levelnet.atomic.helium_levels import helium_levels
from levelnet.atomic.helium_lines import helium_lines
from levelnet.atomic.helium_transitions import helium_transitions
from levelnet.atomic.levels import LevelSet, hydrogenic_levels
from levelnet.errors import Outcome
from levelnet.studies.budget_record import ErrorBudget
from levelnet.studies.helium_weighing import HeliumWeights, IonWeights
from levelnet.studies.weighing import Weighing
from tests.invented_history import invented_setup
from tests.small_helium import helium_setup
from tests.small_runs import small_setup

PARAMETERS = ("hubble_km_s_mpc", "baryon_density_h2", "matter_density_h2", "cmb_temperature_k")
UNITS = {"z_*": "1", "sound_horizon_mpc": "Mpc", "damping_per_mpc": "Mpc^-1"}


def shell_levels(n_max: int, whole_from: int) -> LevelSet:
    """Levels resolved in l below `whole_from`; above, one entry with l = -1 for each shell."""
    levels = hydrogenic_levels(n_max, "nonrelativistic")
    kept = (levels.n < whole_from) | (levels.l == 0)
    whole = levels.n[kept] >= whole_from
    n = levels.n[kept]
    return LevelSet(
        n,
        np.where(whole, -1, levels.l[kept]),
        np.where(whole, 2.0 * n**2, levels.statistical_weight[kept]),
        levels.energy_ev[kept],
        levels.ionization_energy_ev[kept],
    )


def dipole_pairs(levels: LevelSet) -> tuple[np.ndarray, np.ndarray]:
    """Positions of upper and lower levels of every dipole transition between excited levels."""
    pairs = [
        (u, v)
        for u in range(len(levels))
        for v in range(len(levels))
        if levels.n[u] > levels.n[v] > 1
        and (levels.l[u] < 0 or levels.l[v] < 0 or abs(levels.l[u] - levels.l[v]) == 1)
    ]
    upper, lower = np.array(pairs, np.int64).reshape(-1, 2).T
    return upper, lower


def invented_weighing(
    targets: tuple[str, ...] = ("x_e(900)", "z_*"),
    n_max: int = 5,
    whole_from: int = 10**6,
    scale: float = 1.0,
) -> Weighing:
    """Derivatives of both signs that fall with n over many decades; `scale` 0 makes all of them 0.

    Shells from `whole_from` on are whole.
    """
    random = np.random.default_rng(20261201)
    levels = shell_levels(n_max, whole_from)
    upper, lower = dipole_pairs(levels)
    line_upper = np.flatnonzero((levels.l == 1) & (levels.n <= 3))
    lines = tuple(f"{n}p-1s" for n in levels.n[line_upper])

    def by(*shape: int) -> np.ndarray:
        return scale * random.normal(0.0, 1.0, shape) * 10.0 ** random.uniform(-3.0, 0.0, shape)

    count = len(targets)
    return Weighing(
        setup=dataclasses.replace(invented_setup(), hydrogen={"n_max": max(n_max, 3)}),
        outcome=Outcome.CONVERGED,
        targets=targets,
        units=tuple(UNITS.get(name, "1") for name in targets),
        value=random.uniform(0.01, 0.5, count),
        levels=levels,
        upper=upper,
        lower=lower,
        lines=lines,
        line_upper=line_upper,
        parameters=PARAMETERS,
        bound_bound=0.1 * by(count, len(upper)) * 4.0 / (levels.n[upper] * levels.n[lower]),
        bound_free=by(count, len(levels)) * (levels.n > 1) / levels.n**2.0,
        escape=by(count, len(lines)),
        two_photon=by(count),
        compton=1e-4 * by(count),
        parameter=by(count, len(PARAMETERS)),
        notes=("every number is INVENTED",),
    )


def plain_weighing() -> Weighing:
    """Derivatives that a reader can add up by hand, of three targets."""
    levels, targets = hydrogenic_levels(4), ("x_e(900)", "T_m(200)", "x_e(1100)")
    upper, lower = dipole_pairs(levels)
    return Weighing(
        setup=small_setup(4, lines={"lyman_lines": 2}),
        outcome=Outcome.CONVERGED,
        targets=targets,
        units=("1", "K", "1"),
        value=np.array([0.02, 490.0, 0.14]),
        levels=levels,
        upper=upper,
        lower=lower,
        lines=("2p-1s", "3p-1s"),
        line_upper=np.array([levels.index(2, 1), levels.index(3, 1)]),
        parameters=("hubble_km_s_mpc",),
        bound_bound=np.outer([1.0, -2.0, 0.5], np.arange(1.0, len(upper) + 1.0)),
        bound_free=np.outer([-1.0, 1.0, 3.0], np.arange(len(levels)) / 10.0),
        escape=np.array([[-0.25, -0.01], [0.1, 0.02], [-0.23, -0.03]]),
        two_photon=np.array([-0.56, -0.04, -0.51]),
        compton=np.array([1e-4, 0.5, 1e-6]),
        parameter=np.zeros((len(targets), 1)),
    )


GROUPS = ("two_photon", "2p-1s escape", "f values n <= 5", "cross sections", "compton")


def invented_budget(targets: tuple[str, ...] = ("x_e(900)", "z_*")) -> ErrorBudget:
    """Contributions of both signs over three decades; the last group contributes nothing."""
    random = np.random.default_rng(7)
    shape = (len(targets), len(GROUPS))
    size = np.array([2e-3, 8e-4, 5e-5, 2e-5, 0.0]) * random.uniform(0.5, 1.0, shape)
    contribution = size * random.choice([-1.0, 1.0], shape)
    return ErrorBudget(
        targets=targets,
        units=tuple(UNITS.get(name, "1") for name in targets),
        value=random.uniform(0.01, 0.5, len(targets)),
        sigma=np.sqrt(np.sum(contribution**2, axis=1)),
        groups=GROUPS,
        contribution=contribution,
        sources=tuple(f"invented source of {name}, {2000 + k}" for k, name in enumerate(GROUPS)),
        rows=("two_photon,2s,,0.01,two_photon", "compton,,,1e-6,compton"),
    )


def band_targets(count: int = 24) -> tuple[str, ...]:
    """Names of x_e at `count` redshifts from 1700 to 22."""
    return tuple(f"x_e({z:.6g})" for z in np.geomspace(1700.0, 22.0, count))


def with_helium(weighing: Weighing, n_max: int = 3) -> Weighing:
    """The same with invented derivatives by the rates of He I and He II."""
    random, count = np.random.default_rng(11), len(weighing.targets)

    def by(*shape: int) -> np.ndarray:
        return random.normal(0.0, 1.0, shape) * 10.0 ** random.uniform(-5.0, -2.0, shape)

    levels = helium_levels(n_max)
    found = helium_transitions(helium_lines(levels))
    names = ("2 3S-1 1S", "2 3P2-1 1S", "2 3P1-1 1S", "2 1P-1 1S")
    ends = (2, 0, 1), (2, 1, 1), (2, 1, 1), (2, 1, 0)
    helium = HeliumWeights(
        levels,
        found.upper,
        found.lower,
        names,
        np.array([levels.index(*one) for one in ends]),
        by(count, len(found.upper)),
        by(count, len(levels)) * (levels.n > 1),
        by(count, len(names)),
        by(count, len(names)),
        by(count),
        by(count),
    )
    second = hydrogenic_levels(n_max, "nonrelativistic", 2)
    upper, lower = dipole_pairs(second)
    ion = IonWeights(
        second,
        upper,
        lower,
        1e-6 * by(count, len(upper)),
        1e-6 * by(count, len(second)),
        1e-6 * by(count),
        1e-6 * by(count),
    )
    setup = helium_setup(n_max)
    return dataclasses.replace(weighing, setup=setup, helium=helium, helium_ion=ion)
