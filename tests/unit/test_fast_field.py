"""Histories with their radiation field from a table of effective rates."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from levelnet import EffectiveTable, InputError, distill, history_from_table, read, solve
from levelnet.distilled.export import exported_texts
from levelnet.escape.lines import Lines
from levelnet.history.setup import Setup
from levelnet.store import write_distilled
from tests.small_runs import COSMOLOGY

REDSHIFT = (1500.0, 1300.0, 1100.0, 900.0, 400.0, 200.0)
SETUP = Setup(
    cosmology=COSMOLOGY,
    hydrogen={"n_max": 5},
    lines={"hydrogen": "transfer", "lyman_lines": 2, "transfer": {"frequency_step": 1e-3}},
    grid={"redshift_start": 1600.0, "redshift_end": 200.0, "redshifts": REDSHIFT},
)


@pytest.fixture(scope="module")
def table() -> EffectiveTable:
    return distill(SETUP, tolerance=1e-8, certify=False)


def test_keeps_what_the_field_talks_to(table: EffectiveTable) -> None:
    assert set(table.kept) == {(2, 0), (2, 1), (3, 0), (3, 1), (3, 2), (4, 0), (4, 2)}


def test_equals_the_full_network(table: EffectiveTable) -> None:
    # Computed by the full network in the same run.
    fast = history_from_table(table, COSMOLOGY, redshifts=REDSHIFT, observables=True)
    full = solve(SETUP)
    np.testing.assert_allclose(fast.free_electron_fraction, full.free_electron_fraction, rtol=1e-8)
    np.testing.assert_allclose(fast.matter_temperature_k, full.matter_temperature_k, rtol=1e-8)
    assert fast.observables is not None and fast.field is not None
    assert full.diagnostics.frequency_error == pytest.approx(fast.frequency_error, rel=1e-3)
    assert fast.observables.last_scattering_redshift == pytest.approx(
        full.milestones.last_scattering_redshift, rel=1e-6
    )


def test_comes_back_from_a_file(table: EffectiveTable, tmp_path: Path) -> None:
    fast = history_from_table(table, COSMOLOGY, redshifts=REDSHIFT)
    write_distilled(fast, SETUP, tmp_path / "history.h5")
    back = read(tmp_path / "history.h5")
    assert fast.field is not None and back.field is not None
    assert back.frequency_error == fast.frequency_error > 0.0
    np.testing.assert_array_equal(back.field.log_distortion, fast.field.log_distortion)


def test_one_redshift_is_enough(table: EffectiveTable) -> None:
    one = history_from_table(table, COSMOLOGY, redshifts=900.0)
    many = history_from_table(table, COSMOLOGY, redshifts=REDSHIFT)
    # The frequency grid is the same; only the end of the march differs.
    assert one.free_electron_fraction[0] == pytest.approx(many.free_electron_fraction[3], rel=1e-7)


def test_other_cosmology_and_constants(table: EffectiveTable) -> None:
    other = dataclasses.replace(COSMOLOGY, baryon_density_h2=0.024)
    changed = dataclasses.replace(
        SETUP,
        cosmology=other,
        physics=dataclasses.replace(SETUP.physics, fine_structure_change=2e-3),
    )
    fast = history_from_table(table, other, redshifts=REDSHIFT, fine_structure_change=2e-3)
    np.testing.assert_allclose(
        fast.free_electron_fraction, solve(changed).free_electron_fraction, rtol=1e-7
    )


@pytest.mark.parametrize(
    ("arguments", "complaint"),
    [
        ({"sensitivities": True}, "neither sensitivities nor rate_scales"),
        ({"rate_scales": {"two_photon": 1.1}}, "neither sensitivities nor rate_scales"),
        ({"redshifts": (900.0, 3.0)}, "redshift_end = 3"),
        (
            {"lines": Lines(hydrogen="transfer", lyman_lines=4, transfer={"frequency_step": 1e-3})},
            r"\(n, l\) = \(4, 1\) talks to the ground state",
        ),
        ({"lines": Lines(hydrogen="sobolev_feedback")}, "remember nothing"),
    ],
)
def test_refuses(table: EffectiveTable, arguments: dict[str, object], complaint: str) -> None:
    with pytest.raises(InputError, match=complaint):
        history_from_table(table, COSMOLOGY, **arguments)  # type: ignore[arg-type]


def test_exports_hold_no_field(table: EffectiveTable) -> None:
    with pytest.raises(InputError, match="the field has a history of its own"):
        exported_texts(table, "c99", "rates")
