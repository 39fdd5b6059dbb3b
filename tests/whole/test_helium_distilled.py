"""Histories of hydrogen and helium from a table, against the full network of the same atoms."""

from __future__ import annotations

import dataclasses
import json
import math
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from levelnet import distill, solve
from levelnet.cli.main import main
from levelnet.distilled.history import history_from_table
from levelnet.distilled.plasma import plasma_of
from levelnet.distilled.prepared import make_atom
from levelnet.history.result import History
from levelnet.kernels.effective_plasma import evaluate, make_desk, make_memory
from levelnet.kernels.plasma_steps import lagging_state
from tests.helium_tables import PIECES, helium_setup, helium_table
from tests.small_runs import COSMOLOGY

# x_e, both sides at the default accuracy of 1e-6.
SAME_HISTORY = 1e-6
FRACTIONS = (
    "neutral_helium_fraction",
    "singly_ionized_helium_fraction",
    "doubly_ionized_helium_fraction",
)


def compare(full: History, fast: object, electrons: float) -> None:
    """x_e to `electrons`; T_m; each fraction of helium that is above 1e-12 to a thousandth."""
    error = fast.free_electron_fraction / full.free_electron_fraction - 1.0
    assert np.abs(error).max() <= electrons
    np.testing.assert_allclose(fast.matter_temperature_k, full.matter_temperature_k, rtol=3e-6)
    for name in FRACTIONS:
        exact, found = getattr(full, name), getattr(fast.helium, name)
        seen = exact > 1e-12
        np.testing.assert_allclose(found[seen], exact[seen], rtol=1e-3, err_msg=name)
        most = exact > 0.01
        np.testing.assert_allclose(found[most], exact[most], rtol=2e-5, err_msg=name)


@pytest.mark.parametrize(
    ("lines", "ion", "universe"),
    [
        ("sobolev_feedback", "network", {}),
        ("sobolev", "saha", {"baryon_density_h2": 0.05, "helium_mass_fraction": 0.6}),
    ],
)
def test_small_atoms(lines: str, ion: str, universe: dict[str, float]) -> None:
    cosmology = dataclasses.replace(COSMOLOGY, **universe)
    full = solve(helium_setup(lines, ion, cosmology=cosmology), pieces=PIECES)
    fast = history_from_table(helium_table(lines, ion), cosmology, redshifts=full.redshift)
    compare(full, fast, SAME_HISTORY)


@pytest.mark.slow
def test_continuum() -> None:
    setup = helium_setup("continuum")
    table = distill(setup, tolerance=1e-8, pieces=PIECES, certify=False)
    full = solve(setup, pieces=PIECES)
    fast = history_from_table(table, COSMOLOGY, redshifts=full.redshift)
    compare(full, fast, SAME_HISTORY)
    assert table.helium_lines is not None
    assert 0.0 < table.helium_lines.escape_error.max() <= 3e-4


@pytest.mark.slow
def test_certificate() -> None:
    proof = distill(helium_setup("sobolev", "saha"), tolerance=1e-8, pieces=PIECES).certificate
    assert proof is not None
    assert len(proof.cosmologies) == 3
    # NaN above the start of the full history, which leaves Saha equilibrium near z = 3600.
    assert np.isfinite(proof.history_error[0]).sum() > 100
    assert proof.largest_history_error.max() <= SAME_HISTORY
    named = dict(zip(proof.rate_names, proof.largest_error, strict=True))
    assert 0.0 < named["He I recombination 2 1P"] <= 1e-8
    assert 0.0 < named["recombination 2p"] <= 1e-8


@pytest.mark.slow
def test_scipy_integrates_the_same_equations_to_the_same_history() -> None:
    # scipy.integrate.solve_ivp (BDF, with our Jacobian) on the compiled right-hand side.
    table = helium_table("sobolev", "saha")
    fast = history_from_table(table, COSMOLOGY, redshifts=[2500.0, 1800.0, 900.0], relative=1e-8)
    plasma = plasma_of(table, make_atom(table), COSMOLOGY, -9.3, -3.0)
    desk, memory, state = make_desk(plasma), make_memory(4, 4), np.zeros(4)
    start = -math.log1p(fast.start_redshift)
    lagging_state(plasma, start, memory, desk, state)

    def rate(s: float, y: np.ndarray) -> np.ndarray:
        evaluate(plasma, s, y, memory, desk, False)
        return desk.rate.copy()

    def jacobian(s: float, y: np.ndarray) -> np.ndarray:
        evaluate(plasma, s, y, memory, desk, True)
        return desk.matrix.copy()

    outputs = -np.log1p(fast.redshift)
    found = solve_ivp(
        rate, (start, outputs[-1]), state, "BDF", outputs, jac=jacobian, rtol=1e-12, atol=1e-9
    )
    neutral = 1.0 / (1.0 + np.exp(found.y[2]))
    np.testing.assert_allclose(fast.helium.neutral_helium_fraction, neutral, rtol=1e-6)


SETUP = """
title = "invented: helium of the Tarnholt Array"
[cosmology]
hubble_km_s_mpc = 68.0
baryon_density_h2 = 0.0224
matter_density_h2 = 0.142
helium_mass_fraction = 0.245
[hydrogen]
n_max = 5
[helium]
n_max = 3
[lines]
helium = "sobolev_feedback"
"""


def test_commands(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    setup, table = tmp_path / "s.toml", tmp_path / "t.h5"
    setup.write_text(SETUP)
    options = ["--workers", "1", "--no-certificate", "--tolerance", "1e-6"]
    assert main(["distill", str(setup), "-o", str(table), *options, "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    assert said["helium"]["n_max"] == 3
    assert said["helium"]["helium_ion"] == "network"
    assert main(["show", str(table)]) == 0
    assert "sobolev_feedback" in capsys.readouterr().out
    assert main(["history", str(table), "--redshifts", "7000", "2000", "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    assert 0.9 < said["history"]["doubly_ionized_helium_fraction"][0] < 1.0
    assert main(["history", str(table), "--redshifts", "2000", "1500"]) == 0
    assert "x_HeII" in capsys.readouterr().out
    other = tmp_path / "o.toml"
    other.write_text(SETUP.replace("n_max = 3", "n_max = 4"))
    assert main(["history", str(table), "--setup", str(other)]) == 2
    assert "helium.n_max = 4, but the table" in capsys.readouterr().err
    assert main(["history", str(table), "--helium-mass-fraction", "0.7"]) == 2
    assert "checked from 0.02 to 0.6" in capsys.readouterr().err
    exports = [word for name in ("c99", "fortran", "csv") for word in ("--export", name)]
    assert main(["show", str(table), *exports]) == 0
    written = ("t.c", "t.h", "t.f90", "t.csv", "t-he1.csv", "t-he2.csv")
    assert all((tmp_path / name).is_file() for name in written)
    (tmp_path / "t.csv").unlink()
    assert main(["show", str(table), "--export", "csv"]) == 2
    assert "t-he1.csv" in capsys.readouterr().err
    assert not (tmp_path / "t.csv").exists()
