"""Runs with a field resolved in frequency that several test files look at, each computed once."""

from __future__ import annotations

from functools import lru_cache

from levelnet.arrays import FloatArray
from levelnet.background.cosmology import Cosmology
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from tests.small_runs import COSMOLOGY

SWITCHES = ("feedback", "excited_two_photon", "raman", "scattering")
REDSHIFTS = (1300.0, 1200.0, 1100.0, 1050.0, 920.0, 900.0, 700.0, 400.0)


def field_setup(
    *on: str,
    two_photon: str = "spontaneous",
    step: float = 1e-3,
    n_max: int = 5,
    lyman_lines: int = 3,
    cosmology: Cosmology = COSMOLOGY,
    highest_two_photon_n: int = 4,
) -> Setup:
    """Setup in which only the switches named take part."""
    chosen = {switch: switch in on for switch in SWITCHES}
    more = {"frequency_step": step, "highest_two_photon_n": highest_two_photon_n}
    lines = {"hydrogen": "transfer", "two_photon": two_photon, "lyman_lines": lyman_lines}
    grid = {"redshift_start": 1300.0, "redshift_end": 400.0, "redshifts": REDSHIFTS}
    return Setup(cosmology, {"n_max": n_max}, lines=lines | {"transfer": chosen | more}, grid=grid)


@lru_cache(maxsize=64)
def electrons(*on: str, **options: object) -> FloatArray:
    """x_e at `REDSHIFTS` of :func:`field_setup`."""
    return solve(field_setup(*on, **options)).free_electron_fraction  # type: ignore[arg-type]


@lru_cache(maxsize=16)
def sobolev_electrons(
    n_max: int = 5, lyman_lines: int = 3, two_photon: str = "spontaneous"
) -> FloatArray:
    """x_e at `REDSHIFTS` with isolated lines, 10 times as exact as by default."""
    lines = {"hydrogen": "sobolev", "lyman_lines": lyman_lines, "two_photon": two_photon}
    grid = {"redshift_start": 1300.0, "redshift_end": 400.0, "redshifts": REDSHIFTS}
    setup = Setup(COSMOLOGY, {"n_max": n_max}, lines=lines, grid=grid, accuracy={"relative": 1e-7})
    return solve(setup).free_electron_fraction
