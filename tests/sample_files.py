"""One small file of every kind that the package writes or reads, all numbers invented."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from pathlib import Path

import numpy as np

import levelnet
from levelnet.background.expansion import tabulate_expansion, write_expansion_table
from levelnet.distilled.table import EffectiveTable
from levelnet.pieces import FolderPieces
from levelnet.store import (
    DISTILLED_LAYOUT,
    ESCAPE_LAYOUT,
    LAYOUT_NAME,
    LEVEL_LAYOUT,
    SWEEP_LAYOUT,
    TABLE_LAYOUT,
    WEIGHING_LAYOUT,
    write_distilled,
)
from tests.helium_tables import helium_table
from tests.invented_escape import both, cheap_study
from tests.invented_history import history_with_field
from tests.invented_sweep import invented
from tests.invented_weighing import invented_budget, invented_weighing, with_helium
from tests.small_helium import helium_history
from tests.small_levels import small_study
from tests.small_runs import COSMOLOGY, small_setup
from tests.small_tables import small_table


def _distilled(path: Path, table: EffectiveTable) -> None:
    first = 1600.0 if table.helium is None else 7000.0
    redshifts = np.geomspace(first, 20.0, 40)
    history = levelnet.history_from_table(table, COSMOLOGY, redshifts=redshifts, observables=True)
    write_distilled(history, table.setup, path)


def _weighing(path: Path, helium: bool = False) -> None:
    weighing = dataclasses.replace(invented_weighing(), budget=invented_budget())
    levelnet.write(with_helium(weighing) if helium else weighing, path)


RESULTS: dict[str, Callable[[Path], None]] = {
    LAYOUT_NAME: lambda path: levelnet.write(history_with_field(), path),
    f"{LAYOUT_NAME} with helium": lambda path: levelnet.write(helium_history(1e-4), path),
    TABLE_LAYOUT.name: lambda path: levelnet.write(small_table(), path),
    f"{TABLE_LAYOUT.name} with helium": lambda path: levelnet.write(helium_table(), path),
    DISTILLED_LAYOUT.name: lambda path: _distilled(path, small_table()),
    f"{DISTILLED_LAYOUT.name} with helium": lambda path: _distilled(path, helium_table()),
    WEIGHING_LAYOUT.name: _weighing,
    f"{WEIGHING_LAYOUT.name} with helium": lambda path: _weighing(path, True),
    LEVEL_LAYOUT.name: lambda path: levelnet.write(small_study(), path),
    ESCAPE_LAYOUT.name: lambda path: levelnet.write(cheap_study(), path),
    f"{ESCAPE_LAYOUT.name} with helium": lambda path: levelnet.write(both(), path),
    SWEEP_LAYOUT.name: lambda path: levelnet.write(invented(), path),
    f"{SWEEP_LAYOUT.name}, each its own outputs": lambda path: levelnet.write(invented(True), path),
}
"""Writers of result files, by what is in them; all layouts together."""


def _setup(path: Path) -> None:
    lines = {"hydrogen": "transfer", "lyman_lines": 2}
    parts = {"title": "invented: Lantern \u03b1", "lines": lines, "accuracy": {"relative": 1e-5}}
    path.write_text(small_setup(6, 400.0, **parts).to_toml(), encoding="utf-8")


def _requirement(path: Path) -> None:
    path.write_text(
        'title = "invented instrument"\n[observables]\n"z_*" = 1e-4\n"x_e(900)" = 1e-3\n'
        '[[ranges]]\nquantity = "x_e"\nredshift = [200.0, 1600.0]\nrelative = 1e-3\n'
        '[response]\nlimit_sigma = 0.1\n[response.rows]\nnames = ["a", "b"]\n'
        "redshift = [500.0, 800.0, 1100.0, 1400.0]\n"
        "kernels = [[0.0, 0.0], [1.0, 2.0], [3.0, 1.0], [0.0, 0.0]]\n"
        "covariance = [[2.0, 0.5], [0.5, 1.0]]\n",
        encoding="utf-8",
    )


def _response(path: Path) -> None:
    path.write_text(
        "# levelnet response\n# invented\nredshift,a,b\n500,0,0\n800,1,2\n1100,3,1\n1400,0,0\n"
        "covariance,a,b\na,2,0.5\nb,0.5,1\n",
        encoding="utf-8",
    )


def _overrides(path: Path) -> None:
    path.write_text(
        "process,upper,lower,factor,value_per_s,source\n# invented\nbound_bound,3p,2s,1.01,,none\n"
        'bound_free,4,,0.98,,"invented, too"\ntwo_photon,,,,8.2,none\n',
        encoding="utf-8",
    )


def _uncertainties(path: Path) -> None:
    path.write_text(
        "process,upper,lower,sigma,group,source\ntwo_photon,,,0.001,,invented\n"
        "escape,2p,,0.08,far wing,invented\nbound_bound,3d,2p,1e-4,f,invented\n",
        encoding="utf-8",
    )


def _expansion(path: Path) -> None:
    table = tabulate_expansion(lambda z: 2.2e-18 * (1.0 + z) ** 1.5, n_redshifts=512)
    write_expansion_table(table, path)


def _sweep(path: Path) -> None:
    setup = small_setup(4, 400.0).to_toml().replace("\n[", "\n[setup.")
    first, table, rest = setup.partition("\n[")
    path.write_text(
        f"title = 'invented'\n[setup]\n{first}{table}{rest}\n[combine]\nhydrogen.n_max = [4, 5]\n"
        "cosmology.helium_mass_fraction = { from = 0.2, to = 0.25, count = 3 }\n",
        encoding="utf-8",
    )


def _rows(path: Path) -> None:
    path.write_text(
        "# invented\nhydrogen.n_max,cosmology.hubble_km_s_mpc,cosmology.baryon_density_h2,"
        "cosmology.matter_density_h2,grid.redshifts,title\n4,68,0.022,0.14,,a\n"
        '5,70.5,0.023,0.15,"[100, 200.0]","b, c"\n6,66,0.02,0.13,,\n',
        encoding="utf-8",
    )


TEXTS: dict[str, Callable[[Path], None]] = {
    "setup": _setup,
    "requirement": _requirement,
    "response": _response,
    "overrides": _overrides,
    "uncertainties": _uncertainties,
    "expansion": _expansion,
    "sweep": _sweep,
    "rows": _rows,
}
"""Writers of texts that users hand in, by the names of :mod:`tests.damage_judge`."""

PIECE_KEY = "invented"


def piece(folder: Path) -> Path:
    """Put a piece into a cache in `folder`; return its file."""
    arrays = {"rates": np.linspace(0.0, 1.0, 50), "of": np.eye(3), "none": np.zeros((0, 4))}
    FolderPieces(folder).put(PIECE_KEY, arrays)
    return next(folder.glob("*.piece"))
