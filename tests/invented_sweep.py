"""A small sweep for tests of files: invented numbers, nothing computed."""

from __future__ import annotations

from typing import Any

import numpy as np

from levelnet.history.result import HISTORY_ARRAYS
from levelnet.studies.sweep_record import Sweep
from tests.small_runs import small_setup


def invented(apart: bool = False, **parts: Any) -> Sweep:
    """Three cases of invented numbers, one of which failed."""
    redshift = np.array([1500.0, 1000.0, 500.0])
    if apart:
        redshift = np.array([[1500.0, 1000.0, 500.0], [900.0, 800.0, np.nan], [np.nan] * 3])
    rows = np.arange(9.0).reshape(3, 3)
    rows[2] = np.nan
    setup = small_setup(4).to_toml()
    chosen: dict[str, Any] = {
        "title": "invented",
        "swept": ("hydrogen.n_max", "cosmology.curvature_density", "lines.hydrogen"),
        "columns": ((4, 5, 6), (0.0, np.nan, 0.1), ("sobolev", "", "open")),
        "setups": (setup, setup, setup),
        "outcome": ("CONVERGED", "CONVERGED", "FAILED"),
        "reason": ("", "", "out of memory"),
        "redshift": redshift,
        "arrays": {name: rows + k for k, name in enumerate(HISTORY_ARRAYS)},
        "observable_names": ("last_scattering_redshift", "sound_horizon_mpc"),
        "observable_units": ("1", "Mpc"),
        "observable": np.array([[1089.0, 144.0], [1090.0, np.nan], [np.nan, np.nan]]),
    }
    return Sweep(**(chosen | parts))
