"""What errors of the lines of He I do to x_e, in closed form; figures of a small history; files."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import levelnet
from levelnet.errors import InputError
from levelnet.escape.helium_continuum import HELIUM_TREATMENTS
from levelnet.history.helium import HeliumEquations
from levelnet.history.helium_limits import electron_errors, helium_limit_notes
from levelnet.history.helium_moment import HeliumMoment
from levelnet.history.result import History
from levelnet.history.setup import Setup, parse_setup
from levelnet.report.figures import HELIUM_FIGURE_NAMES, figure_paths
from levelnet.report.helium import (
    helium_departures_figure,
    helium_figure,
    helium_lines_figure,
)
from tests.invented_history import invented_history
from tests.same_records import assert_same
from tests.small_helium import helium_history, helium_setup

RATIO, ELECTRONS = 0.08, 1.04


def moments(log_ratio: np.ndarray, settling: np.ndarray) -> list[HeliumMoment]:
    """Helium with these ln(x_HeII/x_HeI), and nothing doubly ionized."""
    fractions = [HeliumEquations.fractions(np.array([a, -60.0])) for a in log_ratio]
    return [
        HeliumMoment(x, None, (), np.inf, ELECTRONS, float(k))
        for x, k in zip(fractions, settling, strict=True)
    ]


def test_errors_obey_their_equation() -> None:
    # d(da)/ds = e a' - k da, by scipy, with a, e and k linear in s; and x_HeII from the logit.
    redshift = np.geomspace(3000.0, 1600.0, 400)
    s = -np.log1p(redshift)
    a, k = 6.0 - 12.0 * (s - s[0]) / (s[-1] - s[0]), 20.0 * (s - s[0])
    flow = 1e-3 + 0.2 * (s - s[0])
    slope = np.gradient(a, s)
    found = electron_errors(redshift, moments(a, k), RATIO, flow[:, None])[:, 0]

    def rate(t: float, y: np.ndarray) -> np.ndarray:
        return np.interp(t, s, flow) * slope[0] - np.interp(t, s, k) * y

    moved = solve_ivp(rate, s[[0, -1]], [0.0], t_eval=s, rtol=1e-10, atol=1e-14).y[0]
    expected = RATIO / ELECTRONS * (1.0 / (1.0 + np.exp(-a - moved)) - 1.0 / (1.0 + np.exp(-a)))
    np.testing.assert_allclose(found, expected, rtol=2e-4, atol=1e-12)
    # More recombination, fewer electrons.
    assert np.all(found[1:] < 0.0)


def test_outputs_that_begin_too_late_estimate_nothing_and_say_so() -> None:
    # He I makes up 2 per cent at a = 3.9.
    redshift, settling = np.array([2500.0, 2000.0, 1600.0]), np.zeros(3)
    flow = np.full((3, 1), 1e-2)
    early, late = (np.array([first, 0.0, -4.0]) for first in (4.0, 3.8))
    assert np.isfinite(electron_errors(redshift, moments(early, settling), RATIO, flow)).all()
    assert np.isnan(electron_errors(redshift, moments(late, settling), RATIO, flow)).all()
    grid = {"redshift_start": 1800.0, "redshift_end": 1500.0, "n_redshifts": 4}
    history = levelnet.solve(helium_setup(n_max=3, grid=grid))
    assert any("the outputs begin after He I has begun to recombine" in n for n in history.notes)
    assert not any("escape_change" in note for note in history.notes)


def test_nan_where_helium_is_held() -> None:
    redshift, a = np.array([2000.0, 1000.0, 400.0]), np.array([5.0, -5.0, -9.0])
    flow = np.array([[0.1], [0.1], [np.nan]])
    found = electron_errors(redshift, moments(a, np.zeros(3)), RATIO, flow)
    assert np.isfinite(found[:2]).all()
    assert np.isnan(found[2])


def test_figures_of_a_history_and_its_file(tmp_path: Path) -> None:
    history = helium_history()
    assert history.helium is not None
    lines, n = history.helium.lines, len(history.redshift)
    warm = history.radiation_temperature_k >= 1400.0
    for name in lines.__slots__[1:]:
        values = getattr(lines, name)
        assert values.shape == (n, len(lines.names))
        assert np.isfinite(values[warm]).all(), name
        assert np.isnan(values[~warm]).all(), name
    seen = np.clip(lines.incoherent_fraction[warm], 0.0, 1.0)
    np.testing.assert_array_equal(seen, lines.incoherent_fraction[warm])
    assert np.all(lines.thick_width_absorption[warm] <= lines.thick_width_scattering[warm])
    levelnet.write(history, tmp_path / "h.h5")
    again = levelnet.read(tmp_path / "h.h5")
    assert isinstance(again, History)
    assert_same(again.helium, history.helium)


def test_warnings_say_what_is_left_out() -> None:
    history = helium_history()
    assert history.helium is not None
    lines = history.helium.lines
    for treatment in HELIUM_TREATMENTS:
        (one, *_) = helium_limit_notes(history.redshift, lines, treatment)
        assert "limit 0.1 %" in one
        assert treatment.leaves_out in " ".join(
            helium_limit_notes(history.redshift, lines, treatment)
        )
    assert any("2 1P-1 1S" in one and "escape_change" in one for one in history.notes)


def test_figures_are_drawn_and_refuse_inert_helium(tmp_path: Path) -> None:
    history = helium_history()
    left, right = helium_figure(history).axes
    assert [one.get_label() for one in left.get_lines()] == ["He I", "He II", "He III"]
    np.testing.assert_array_equal(right.get_lines()[0].get_ydata(), history.free_electron_fraction)
    panels = helium_departures_figure(history, (2000.0, 2500.0)).axes
    assert len(panels) == 2
    assert len(panels[0].get_lines()) == 7  # S, P, D of both spins, and 0
    levels, row = history.levels("He I"), history.redshift.tolist().index(2500.0)
    singlets = (levels.n > 1) & (levels.l == 0) & (levels.spin == 0)  # type: ignore[union-attr]
    shown = panels[0].get_lines()[0].get_ydata()
    np.testing.assert_array_equal(shown, history.log_departures("He I")[row][singlets])
    figure = helium_lines_figure(history)
    assert figure.legends[0].get_texts()[0].get_text() == "2 1P-1 1S"
    for draw in (helium_figure, helium_departures_figure, helium_lines_figure):
        with pytest.raises(InputError, match="helium is inert in this history"):
            draw(invented_history())  # type: ignore[operator]
    with pytest.raises(InputError, match="allowed are 1 to 4"):
        helium_departures_figure(history, (2000.0,) * 5)
    names = {path.stem for path in figure_paths(tmp_path, False, True)}
    assert set(HELIUM_FIGURE_NAMES) <= names


def test_diffusion_has_a_key() -> None:
    lines = {"helium": "continuum", "helium_continuum": {"diffusion": True}}
    setup = helium_setup(3, lines=lines)
    assert parse_setup(setup.to_toml()) == setup
    plain = helium_setup(3, lines={"helium": "continuum"}).lines.helium_continuum
    assert plain is not None
    assert not plain.diffusion
    lines["helium_continuum"] = {"diffusion": True, "redistribution": "complete"}
    with pytest.raises(InputError, match=r'diffusion = true: .*allowed with "partial"'):
        helium_setup(3, lines=lines)
    assert isinstance(setup, Setup)
