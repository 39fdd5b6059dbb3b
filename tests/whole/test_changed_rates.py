"""Overridden rates from end to end: the command line, the file, other ways to the same history."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

import levelnet
from levelnet.atomic.levels import hydrogenic_levels
from levelnet.cli.main import main
from levelnet.errors import Outcome
from levelnet.escape.treatment import Sobolev
from levelnet.history.run import solve
from levelnet.history.setup import Setup
from levelnet.studies.budget import error_budget, load_uncertainties
from levelnet.studies.weighing import Weighing
from levelnet.tables import read_table
from tests.small_runs import small_setup

SETUP = """\
title = "Tarnholt Array (INVENTED)"
[cosmology]
hubble_km_s_mpc = 68.0
baryon_density_h2 = 0.0224
matter_density_h2 = 0.142
[hydrogen]
n_max = 5
[grid]
redshift_start = 1700.0
redshift_end = 200.0
n_redshifts = 30
[rates]
overrides = "my.csv"
"""
ROWS = """\
# INVENTED
process,upper,lower,factor,value_per_s,source
bound_bound,3d,2p,,6.5e7,"INVENTED: laboratory of the Tarnholt Array"
two_photon,2s,,1.01,,"INVENTED: M\u00fcller"
"""


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "run.toml").write_text(SETUP, encoding="utf-8")
    (tmp_path / "my.csv").write_text(ROWS, encoding="utf-8")
    return tmp_path


def test_old_and_new_side_by_side(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["solve", "run.toml", "--compare-rates", "--no-cache", "--quiet"]) == 0
    said = capsys.readouterr().out
    assert "two_photon 2s x 1.01: INVENTED: M\u00fcller" in said
    assert "old" in said
    assert "relative change" in said
    assert "z_* (tau = 1)" in said
    new = levelnet.read("run.h5")
    plain = levelnet.load_setup("run.toml")
    old = solve(Setup(cosmology=plain.cosmology, hydrogen=plain.hydrogen, grid=plain.grid))
    k = int(np.argmin(np.abs(new.redshift - 1100.0)))
    pair = [one.free_electron_fraction[k] for one in (old, new)]
    assert f"{pair[0]:.8e}  {pair[1]:.8e}  {pair[1] / pair[0] - 1.0:+.2e}" in said


def test_the_same_as_json(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["solve", "run.toml", "--compare-rates", "--no-cache", "--quiet", "--json"]) == 0
    values = json.loads(capsys.readouterr().out)["compare_rates"]
    electrons = values["free_electron_fraction"]
    old, new, change = (np.array(electrons[name]) for name in ("old", "new", "relative_change"))
    np.testing.assert_allclose(new / old - 1.0, change, rtol=1e-12, atol=1e-15)
    assert len(electrons["redshift"]) == len(old)
    mark = values["milestones"]["last_scattering_redshift"]
    assert mark["relative_change"] == pytest.approx(mark["new"] / mark["old"] - 1.0, rel=1e-12)
    # Both rows together move each observable by some 1e-5 to 1e-3.
    further = values["observables"]
    assert set(further) == {
        "sound_horizon_mpc",
        "damping_per_mpc",
        "drag_redshift",
        "drag_horizon_mpc",
    }
    for one in further.values():
        assert one["relative_change"] == pytest.approx(one["new"] / one["old"] - 1.0, rel=1e-12)
        assert 1e-6 < abs(one["relative_change"]) < 1e-2
    assert [one["rates"] for one in values["overrides"]] == [
        "bound_bound 3d 2p = 65000000 per s",
        "two_photon 2s x 1.01",
    ]


def test_a_result_carries_its_overrides(folder: Path) -> None:
    assert main(["solve", "run.toml", "--no-cache", "--quiet"]) == 0
    (folder / "my.csv").unlink()
    again = levelnet.read("run.h5")
    assert again.setup.rates.table[1].source == "INVENTED: M\u00fcller"
    assert any("INVENTED: laboratory of the Tarnholt Array" in note for note in again.notes)
    assert "= 65000000 per s" in "".join(again.notes)


def test_nothing_to_compare_is_an_error(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "plain.toml").write_text(SETUP.split("[rates]", maxsplit=1)[0])
    assert main(["solve", "plain.toml", "--compare-rates"]) == 2
    assert "--compare-rates: the setup overrides no rates" in capsys.readouterr().err
    assert not (folder / "plain.h5").exists()


def test_a_bad_row_is_one_line(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "my.csv").write_text(ROWS.replace("1.01", "-1.01"), encoding="utf-8")
    assert main(["solve", "run.toml"]) == 2
    error = capsys.readouterr().err
    assert error.count("\n") == 1
    assert "my.csv, row 2: factor = -1.01: allowed are factors from" in error


def test_a_table_serves_only_its_own_overrides(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (folder / "other.toml").write_text(SETUP.split("[rates]", maxsplit=1)[0])
    common = ["--no-cache", "--quiet", "--no-certificate", "--workers", "1"]
    tolerance = ["--tolerance", "1e-5"]
    assert main(["distill", "run.toml", "-o", "t.h5", "--export", "csv", *common, *tolerance]) == 0
    assert "overridden:" in (folder / "t.csv").read_text()
    assert main(["history", "t.h5", "--setup", "run.toml", "-o", "h.h5", "--quiet"]) == 0
    assert main(["history", "t.h5", "--setup", "other.toml", "--quiet"]) == 2
    assert "was distilled with other overrides" in capsys.readouterr().err
    # The two-photon rate is no part of the table, so that it may be another one.
    text = SETUP.replace('"my.csv"', '"less.csv"')
    (folder / "less.toml").write_text(text)
    (folder / "less.csv").write_text("\n".join(ROWS.splitlines()[:3]) + "\n", encoding="utf-8")
    assert main(["history", "t.h5", "--setup", "less.toml", "-o", "l.h5", "--quiet"]) == 0
    new, less = (levelnet.read(name).free_electron_fraction for name in ("h.h5", "l.h5"))
    assert np.abs(new / less - 1.0).max() > 1e-3
    (folder / "less.csv").write_text(ROWS + "escape,2p,,1.1,,x\n", encoding="utf-8")
    assert main(["history", "t.h5", "--setup", "less.toml", "--quiet"]) == 2
    assert "holds no escape rates" in capsys.readouterr().err


class WiderEscape(Sobolev):
    """Sobolev escape a fifth more likely, written as a treatment of a user's own."""

    def escape(self, optical_depth: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        chance, slope = super().escape(optical_depth)
        return 1.2 * chance, slope


def test_escape_factor_is_a_treatment_with_more_escape() -> None:
    """An independent way to the same history: the factor inside the line treatment."""
    lines = {"lyman_lines": 2}
    expected = solve(small_setup(5, lines=lines), line_treatment=WiderEscape())
    found = solve(small_setup(5, lines=lines, rates={"rows": ("escape,*,,1.2,,x",)}))
    for name in ("free_electron_fraction", "matter_temperature_k"):
        np.testing.assert_allclose(getattr(found, name), getattr(expected, name), rtol=1e-10)


def test_responses_stated_with_the_default_uncertainties() -> None:
    """-d ln x_e/d ln escape as sources.toml gives it, three digits: the text against the code."""
    stated = {900.0: 0.248, 1050.0: 0.249, 1190.0: 0.195, 1300.0: 0.120}
    grid = {"redshifts": tuple(stated), "redshift_end": 900.0}
    obtained = read_table("hydrogen/rate_uncertainties").source.obtained
    assert all(f"{value:.3f} at" in obtained for value in stated.values())

    def electrons(**rates: object) -> np.ndarray:
        setup = small_setup(30, grid=grid, accuracy={"relative": 1e-8}, **rates)
        return solve(setup).free_electron_fraction[::-1]

    ratio = electrons(rates={"rows": ("escape,2p,,1.01,,x",)}) / electrons()
    np.testing.assert_allclose((1.0 - ratio) / 0.01, list(stated.values()), atol=6e-4)


def test_a_correlated_group_is_a_run_with_all_its_rates_changed(tmp_path: Path) -> None:
    """Derivatives by differences of runs, through the budget, against one run at +1 sigma."""
    redshifts = (400.0, 900.0, 1200.0)
    grid = {"redshifts": redshifts, "redshift_end": 400.0}
    names = ("two_photon,2s,", "escape,2p,", "bound_free,2-3,", "bound_bound,4d,2p")
    sigma = (2e-3, -3e-3, 1e-3, 5e-2)  # the second falls while the others rise

    def electrons(*rows: str) -> np.ndarray:
        parts = {"rates": {"rows": rows}} if rows else {}
        setup = small_setup(5, grid=grid, **parts)
        return np.log(solve(setup).free_electron_fraction)

    step = 1e-2
    by = [
        (electrons(f"{one},{1 + step},,x") - electrons(f"{one},{1 / (1 + step)},,x"))
        / (2.0 * np.log1p(step))
        for one in names
    ]
    levels = hydrogenic_levels(5)
    level = np.zeros((3, len(levels)))
    level[:, levels.index(2, 1)] = by[2]  # the sum over 2-3 is all that counts
    weighed = Weighing(
        small_setup(5),
        Outcome.CONVERGED,
        tuple(f"x_e({z:g})" for z in redshifts[::-1]),
        ("1",) * 3,
        np.exp(electrons()),
        levels,
        np.array([levels.index(4, 2)]),
        np.array([levels.index(2, 1)]),
        ("2p-1s",),
        np.array([levels.index(2, 1)]),
        (),
        by[3][:, None],
        level,
        -by[1][:, None],  # sigmas are not negative: the sign goes here
        by[0],
        np.zeros(3),
        np.zeros((3, 0)),
    )
    file = tmp_path / "group.csv"
    rows = [f"{one},{abs(s)},all,x" for one, s in zip(names, sigma, strict=True)]
    file.write_text("\n".join(["process,upper,lower,sigma,group,source", *rows]))
    budget = error_budget(weighed, load_uncertainties(file))
    changed = [f"{one},{float(np.exp(s))!r},,x" for one, s in zip(names, sigma, strict=True)]
    difference = electrons(*changed) - electrons()
    # Second order: sigma^2 of some 1e-5 times curvatures of order 1.
    np.testing.assert_allclose(budget.contribution[:, 0], difference, atol=1e-5, rtol=1e-2)
    np.testing.assert_allclose(budget.sigma, np.abs(budget.contribution[:, 0]), rtol=1e-14)
