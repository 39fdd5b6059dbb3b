"""Validity figures of the lines of He I: estimates of errors of x_e against whole runs.

Expected values are differences of histories with and without the physics in question: computed in
the repository. Sizes of the README are held here too.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import numpy as np
import pytest

from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from levelnet.pieces import MemoryPieces
from tests.small_runs import COSMOLOGY

pytestmark = pytest.mark.slow

REDSHIFTS = np.arange(3400.0, 1590.0, -50.0).tolist()
BEST = {"diffusion": True}
_PIECES = MemoryPieces()


@lru_cache(maxsize=8)
def run(treatment: str, **continuum: Any) -> History:
    lines: dict[str, Any] = {"helium": treatment}
    if treatment == "continuum":
        lines["helium_continuum"] = continuum
    return solve(
        Setup(
            cosmology=COSMOLOGY,
            hydrogen={"n_max": 5},
            helium={"n_max": 5},
            lines=lines,
            grid={"redshift_start": 3400.0, "redshift_end": 1600.0, "redshifts": REDSHIFTS},
        ),
        pieces=_PIECES,
    )


def largest(values: np.ndarray) -> float:
    return float(np.nanmax(np.abs(values)))


def warnings_of(history: History) -> list[str]:
    return [one for one in history.notes if one.startswith("warning: 2 ") and "1 1S" in one]


CASES = [
    ("sobolev", {}, {"feedback": False, **BEST}, "escape_error", 0.6),
    ("continuum", {"redistribution": "doppler"}, BEST, "escape_error", 0.2),
    ("continuum", {"redistribution": "complete"}, BEST, "escape_error", 0.5),
    ("continuum", {"redistribution": "partial"}, BEST, "escape_error", 0.03),
    ("continuum", {"feedback": False, **BEST}, BEST, "feedback_error", 0.05),
]


@pytest.mark.parametrize(("treatment", "choice", "better", "error", "slack"), CASES)
def test_estimates_are_the_differences_of_histories(
    treatment: str, choice: dict[str, Any], better: dict[str, Any], error: str, slack: float
) -> None:
    mine = run(treatment, **choice)
    assert mine.helium is not None
    lines, truth = mine.helium.lines, run("continuum", **better)
    estimate = np.nansum(getattr(lines, error), axis=1)
    change = truth.free_electron_fraction / mine.free_electron_fraction - 1.0
    print(f"{treatment} {choice}: estimate {largest(estimate):.2e}, true {largest(change):.2e}")
    assert largest(estimate) == pytest.approx(largest(change), rel=slack)
    assert abs(REDSHIFTS[np.argmax(abs(estimate))] - REDSHIFTS[np.argmax(abs(change))]) <= 100.0
    # While it is small the estimate is the linear term itself: within 6 per cent.
    small = (np.abs(change) > 1e-4) & (np.abs(change) < 6e-4)
    small &= np.array(REDSHIFTS) > (2150.0 if error == "escape_error" else 2450.0)
    if treatment == "continuum" and "redistribution" in choice and small.any():
        rows = estimate[small] / change[small]
        print("  of small ones:", rows.round(3))
        if choice["redistribution"] != "complete":
            np.testing.assert_allclose(rows, 1.0, atol=0.1)
    said = warnings_of(mine)
    assert said
    name = "escape_change" if error == "escape_error" else "unseen_feedback"
    assert any(name in one for one in said)
    print("  ", said)


def test_where_a_treatment_holds_nothing_is_said() -> None:
    assert warnings_of(run("continuum", **BEST)) == []
    sobolev = run("sobolev_feedback")
    early = np.array(REDSHIFTS) > 2300.0
    assert sobolev.helium is not None
    assert largest(sobolev.helium.lines.escape_error[early]) < 1e-3
    assert all("z = 3" not in one for one in warnings_of(sobolev))


def test_shape_of_584_angstrom() -> None:
    # Closed forms: damping A/(4 pi Delta nu_D), widths in Hubble times; sizes as in Switzer &
    # Hirata 2008, Phys. Rev. D 77, 083006: the continuum matters from z = 2200 down (abstract).
    history = run("continuum", **BEST)
    assert history.helium is not None
    lines = history.helium.lines
    k = lines.names.index("2 1P-1 1S")
    rows = {z: REDSHIFTS.index(z) for z in (2600.0, 2200.0, 2000.0, 1800.0)}
    depth = {z: lines.continuum_in_line[row, k] for z, row in rows.items()}
    assert depth[2600.0] < 0.01
    assert 0.1 < depth[2200.0] < 1.0 < depth[2000.0] < 10.0 < depth[1800.0]
    row = rows[2000.0]
    radiation_k = history.radiation_temperature_k[row]
    # A of 584 A 1.7989e9 s^-1, 21.218 eV (NIST); sqrt(2 k T/M)/c with k in erg/K, M = 4.0026 u.
    doppler = (
        np.sqrt(2.0 * 1.380649e-16 * radiation_k / (4.002602 * 1.66053907e-24)) / 2.99792458e10
    )
    damping = 1.7989e9 / (4.0 * np.pi * doppler * 21.21802 / 4.135667696e-15)
    assert lines.damping_parameter[row, k] == pytest.approx(damping, rel=4e-3)
    assert lines.continuum_in_core[row, k] == pytest.approx(
        lines.continuum_depth[row, k] * doppler, rel=1e-6
    )
    # 1.877 Mb at 584 A (Stobbe 1930).
    hydrogen_cm3 = history.hydrogen_density_cm3[row] * history.neutral_hydrogen_fraction[row]
    column = hydrogen_cm3 * 2.99792458e10 / history.hubble_rate_per_s[row]
    assert lines.continuum_depth[row, k] == pytest.approx(1.877e-18 * column, rel=1e-3)
    # With the two photons of 2 1S shares sum to 1.
    helium = history.helium
    two = helium.net_rate_per_s[row, helium.channels.index("2 1S-1 1S")]
    total = lines.share[row].sum() + two / helium.net_rate_per_s[row].sum()
    assert total == pytest.approx(1.0, rel=1e-9)


def test_complete_redistribution_leaves_no_ionized_helium_below_1850() -> None:
    # Why partial against complete is 0.2 per cent at z = 1750 and not the published 1 (Kholupenko,
    # Ivanchik & Varshalovich 2008): it is f_He x_HeII/x_e of the partial history.
    partial, complete = run("continuum"), run("continuum", redistribution="complete")
    row = REDSHIFTS.index(1750.0)
    assert complete.singly_ionized_helium_fraction[row] < 1e-5
    change = partial.free_electron_fraction[row] / complete.free_electron_fraction[row] - 1.0
    ratio = partial.setup.cosmology.helium_ratio()
    left = ratio * partial.singly_ionized_helium_fraction[row]
    assert change == pytest.approx(left / complete.free_electron_fraction[row], rel=0.02)
    assert change == pytest.approx(1.8e-3, abs=3e-4)
    # 1 per cent would need an eighth of helium ionized; the slowest treatment leaves less.
    doppler = run("continuum", redistribution="doppler")
    slowest = doppler.singly_ionized_helium_fraction[row]
    assert 0.01 * complete.free_electron_fraction[row] / ratio > 0.115 > slowest
