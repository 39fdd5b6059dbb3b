"""Validity figures of the lines, and the warnings where they cross a limit."""

from __future__ import annotations

import dataclasses
import math
from functools import lru_cache
from typing import Any

import numpy as np
import pytest
from scipy import constants as si
from scipy.integrate import quad

from levelnet.atomic.bound_bound import einstein_a
from levelnet.background.conditions import Conditions
from levelnet.cli.line_output import line_rows, line_values
from levelnet.errors import InputError
from levelnet.escape.blue_side import log_red_side
from levelnet.escape.treatment import ResonanceLines, Sobolev, SobolevFeedback
from levelnet.history.limits import ESCAPE_FACTOR, LARGEST_X_E_ERROR, limit_notes
from levelnet.history.line_figures import LineFigures
from levelnet.history.result import History
from levelnet.history.run import solve
from levelnet.history.validity import (
    doppler_width,
    line_widths,
    log_red_side_by_number,
    unseen_feedback,
)
from tests.small_runs import RECOMBINING, small_history, small_setup
from tests.tolerances import ROUND_OFF
from tests.unit.test_treatments import LINES


@lru_cache(maxsize=4)
def history_with(**lines: Any) -> History:
    """A small atom with these lines."""
    return solve(small_setup(5, 400.0, 141, lines=lines))


def open_history() -> History:
    """Every Lyman line open and isolated."""
    return history_with(lyman_lines="all")


def near(history: History, redshift: float) -> int:
    """Output nearest to a redshift."""
    return int(np.argmin(np.abs(history.redshift - redshift)))


def warnings_of(history: History, figure: str, line: str = "") -> list[str]:
    """Warnings that name a figure, and a line."""
    said = [text for text in history.notes if text.startswith(f"warning: {line}")]
    return [text for text in said if figure in text]


def test_line_figures_from_the_formulas() -> None:
    # Doppler width sqrt(2 k T/m_H)/c; Voigt parameter: decay rate over 4 pi times it.
    history = open_history()
    k = int(np.argmin(np.abs(history.redshift - 1100.0)))
    atom = si.m_p + si.m_e
    doppler = math.sqrt(2.0 * si.k * history.matter_temperature_k[k] / atom) / si.c
    frequency = history.levels("H I").energy_ev[2] * si.e / si.h
    decay = 6.2649e8  # s^-1, Wiese & Fuhr 2009, J. Phys. Chem. Ref. Data 38, 565 (from memory)
    lines = history.lines
    assert lines.names[0] == "2p-1s"
    assert lines.damping_parameter[k, 0] == pytest.approx(
        decay / (4.0 * math.pi * doppler * frequency), rel=1e-4
    )
    depth = lines.optical_depth[k, 0]
    # Common practice: optical depth of Lyman-alpha some 1e8 to 1e9.
    assert 1e8 < depth < 1e9
    assert lines.escape_probability[k, 0] == pytest.approx(1.0 / depth, rel=1e-9)
    # A Lorentz wing a/(sqrt(pi) x^2)/sqrt(pi) seen from afar has depth 1 where the photon needs to
    # cross another x = a tau/pi.
    thick = lines.damping_parameter[k, 0] * depth / math.pi
    assert lines.thick_width_scattering[k, 0] == pytest.approx(2.0 * doppler * thick, rel=1e-9)
    # Chance that 2p is excited or ionized before it falls to 1s, near 1.2e-4 at z = 1100: the
    # stimulated 2p -> 3s, 3d, 4s, 4d alone, from A and the Planck function.
    away = 0.0
    for n in (3, 4):
        photon = si.h * si.c * si.Rydberg * (0.25 - 1.0 / n**2)
        occupation = 1.0 / math.expm1(photon / (si.k * history.radiation_temperature_k[k]))
        for l in (0, 2):
            away += float(einstein_a(n, l, 2, 1)) * (2 * l + 1) / 3.0 * occupation
    ratio = lines.thick_width_absorption[k, 0] / lines.thick_width_scattering[k, 0]
    assert ratio == pytest.approx(away / decay, rel=0.05)
    assert 1e-4 < lines.thick_width_absorption[k, 0] < 2e-3


def test_doppler_width() -> None:
    speed = math.sqrt(2.0 * si.k * 2999.0 / (si.m_p + si.m_e))
    assert doppler_width(RECOMBINING) == pytest.approx(speed / si.c, rel=1e-9)


def test_lyman_alpha_at_1100_in_closed_form() -> None:
    # At T = 2.7255 x 1101 K and tau = 5.65e8: Doppler width 2.348e-5, Voigt parameter 8.6e-4 with
    # A = 6.2649e8/s; loss by stimulated 2p -> 3s, 3d, 4s, 4d alone gives p = 1.21e-4 and an edge of
    # p tau A/(4 pi^2 nu) = 4.4e-4 (computed from scipy's constants and Planck's law, here again).
    kelvin, rate = 2.7255 * 1101.0, 6.2649e8
    here = RECOMBINING._replace(radiation_temperature_k=kelvin, matter_temperature_k=kelvin)
    away = 0.0
    for n in (3, 4):
        photon = si.h * si.c * si.Rydberg * (0.25 - 1.0 / n**2)
        for l in (0, 2):
            strength = float(einstein_a(n, l, 2, 1)) * (2 * l + 1) / 3.0
            away += strength / math.expm1(photon / (si.k * kelvin))
    energy = si.h * si.c / (1215.67e-10 * si.e)
    alpha = ResonanceLines(
        ("2p-1s",), np.array([1]), *(np.array([v]) for v in (rate, energy, 3.0, rate))
    )
    found = line_widths(alpha, here, np.array([5.65e8]), np.array([away]))
    assert doppler_width(here) == pytest.approx(2.348e-5, rel=1e-3)
    assert found.damping_parameter[0] == pytest.approx(8.6e-4, rel=1e-2)
    assert found.absorption_chance[0] == pytest.approx(1.21e-4, rel=2e-2)
    assert found.absorption_edge[0] == pytest.approx(4.4e-4, rel=2e-2)
    # 2 edges: the core is narrower.
    assert found.thick_width_absorption[0] == pytest.approx(2.0 * found.absorption_edge[0])


@pytest.mark.parametrize("depth", [1e7, 6e8])
def test_recoil_in_wings_that_only_scatter(depth: float) -> None:
    # Escape over Sobolev's = 1/int exp(-x s - t) dt, s = (3 d t)^(1/3), d = (kT/mc^2) tau A/(4 pi^2
    # nu): stationary diffusion with recoil (Grachev & Dubrovich 2008, Astron. Lett. 34, 439; from
    # memory), integrated by scipy. The figure is its first order.
    one = LINES.einstein_a_per_s * 0.0
    found = line_widths(LINES, RECOMBINING, np.full(3, depth), one)
    for k, energy in enumerate(LINES.energy_ev.tolist()):
        kt = si.k * RECOMBINING.matter_temperature_k
        nu = energy * si.e / si.h
        wing = LINES.decay_rate_per_s[k] * depth / (4.0 * math.pi**2 * nu)
        d = kt / ((si.m_p + si.m_e) * si.c**2) * wing
        x = energy * si.e / kt
        inverse = quad(
            lambda y, d=d, x=x: 3 * y**2 * math.exp(-x * (3 * d) ** (1 / 3) * y - y**3), 0, 6
        )[0]
        exact = 1.0 / inverse - 1.0
        assert found.recoil_gain[k] == pytest.approx(exact, abs=exact**2)


def test_true_absorption_silences_recoil() -> None:
    depth = np.full(3, 6e8)
    rates = [LINES.einstein_a_per_s * p for p in (0.0, 1e-4, 1e-2, 0.3)]
    gains = np.array([line_widths(LINES, RECOMBINING, depth, r).recoil_gain for r in rates])
    assert np.all(np.diff(gains, axis=0) <= 0.0)
    assert np.all(gains[-1] < 1e-4 * gains[0])


def test_red_side_by_number_is_the_sobolev_solution() -> None:
    # Sobolev: the flow A P [(1 + f) x_u - g f x_l] leaves u_L (1 - e^-tau) + u_blue e^-tau behind,
    # in exact arithmetic but for stimulated emission, 1e-7 here.
    depth = np.array([1e-3, 0.7, 1e6])
    for log_b in (0.4, 3.0, -0.5):
        x = LINES.energy_ev / (si.k / si.e * RECOMBINING.radiation_temperature_k)
        ground, blue = RECOMBINING.ground_fraction, np.array([0.0, 0.3, -0.2])
        modes = 8.0 * math.pi * RECOMBINING.hubble_rate_per_s / LINES.wavelength_cm**3
        rate = depth * modes / (LINES.weight_ratio * RECOMBINING.hydrogen_density_cm3 * ground)
        chance = -np.expm1(-depth) / depth
        upper = ground * LINES.weight_ratio * np.exp(log_b - x)
        f = np.exp(blue) / np.expm1(x)
        flow = rate * chance * ((1.0 + f) * upper - LINES.weight_ratio * f * ground)
        found = log_red_side_by_number(flow, LINES, RECOMBINING, blue)
        expected = log_red_side(np.full(3, log_b), x, depth, blue)
        np.testing.assert_allclose(found, expected, rtol=1e-6, atol=1e-6)


def test_red_side_in_a_field_too_cold_for_doubles() -> None:
    cold = RECOMBINING._replace(radiation_temperature_k=30.0)
    flow = np.full(3, 1e-18)
    found = log_red_side_by_number(flow, LINES, cold, np.zeros(3))
    assert np.all(np.isfinite(found)) and np.all(found > 1000.0)
    np.testing.assert_array_equal(log_red_side_by_number(0 * flow, LINES, cold, np.ones(3)), 1.0)
    assert np.isnan(log_red_side_by_number(-flow, LINES, cold, np.zeros(3))).all()


def test_unseen_feedback_is_the_ratio_of_two_drives() -> None:
    sent, blue, source = (
        np.array([0.3, 2.0, 0.0]),
        np.array([0.0, 0.0, 0.0]),
        np.array([1.5, 9.0, 4.0]),
    )
    found = unseen_feedback(sent, blue, source)
    expected = np.expm1(sent) / np.expm1(source)
    np.testing.assert_allclose(found, expected, rtol=1e-12)
    # Near equilibrium to full precision; far from it without overflow; nothing where it sees all.
    tiny = unseen_feedback(np.array([1e-9]), np.zeros(1), np.array([4e-9]))
    assert tiny[0] == pytest.approx(0.25, rel=1e-8)
    assert unseen_feedback(np.array([1998.0]), np.zeros(1), np.array([2000.0]))[0] == pytest.approx(
        math.exp(-2.0), rel=1e-12
    )
    assert unseen_feedback(np.full(1, 3.0), np.full(1, 3.0), np.full(1, 7.0))[0] == 0.0
    assert unseen_feedback(np.zeros(1), np.zeros(1), np.zeros(1))[0] == 0.0


def test_shares_of_lines_and_two_photons_add_up() -> None:
    history = open_history()
    two_photon = history.channels.share[:, 0]
    assert history.channels.names[0] == "2s-1s"
    np.testing.assert_allclose(history.lines.share.sum(axis=1) + two_photon, 1.0, rtol=ROUND_OFF)


def test_flow_response_is_what_an_overridden_escape_does() -> None:
    # Common factor on the escape at one state, by differences of the equations themselves.
    from levelnet.history.equations import SlowEquations
    from levelnet.network.gradient import net_flow_gradient
    from tests.small_runs import small_equations

    equations = small_equations(Sobolev(), lyman=2)
    s, state = -math.log(1150.0), np.array([-1.1, -1e-6])
    here = equations.local(s, state)
    gradient = net_flow_gradient(here.rates, here.coupling, here.solution)
    for line, upper in enumerate(equations.lines.upper.tolist()):

        def flow(factor: float, line: int = line) -> float:
            by_line = np.ones(2)
            by_line[line] = factor
            other: SlowEquations = dataclasses.replace(equations, escape_factor=by_line)
            return math.log(other.local(s, state).solution.net_flow)

        step = 1e-3
        difference = (flow(math.exp(step)) - flow(math.exp(-step))) / (2.0 * step)
        found = gradient.channel[upper] / here.solution.net_flow
        assert found == pytest.approx(difference, rel=1e-5)


def test_flow_response_is_the_share_while_atoms_are_ionized_again() -> None:
    # An atom kept back at z = 1400 is ionized again nearly surely, at z = 400 never.
    lines = open_history().lines
    early, late = near(open_history(), 1400.0), -1
    np.testing.assert_allclose(lines.flow_response[early], lines.share[early], rtol=2e-2)
    assert lines.flow_response[late, 0] < 1e-6 < lines.share[late, 0]


def test_source_slope_is_that_of_the_populations() -> None:
    # ln u = ln[x_2p g_1s/(x_1s g_2p)] + h nu/kT_r from the stored populations (Wien: 1e-17),
    # differenced over the outputs.
    history = open_history()
    levels, x = history.levels("H I"), history.populations("H I")
    upper = int(np.flatnonzero((levels.n == 2) & (levels.l == 1))[0])
    kt = si.k / si.e * history.radiation_temperature_k
    log_u = np.log(x[:, upper] / (3.0 * x[:, 0])) + levels.energy_ev[upper] / kt
    slope = np.gradient(log_u, -np.log1p(history.redshift))
    middle = (history.redshift < 1450.0) & (history.redshift > 450.0)
    np.testing.assert_allclose(history.lines.source_slope[middle, 0], slope[middle], rtol=1e-2)
    figures = history.lines
    np.testing.assert_allclose(
        figures.source_change,
        figures.thick_width_absorption * np.abs(figures.source_slope),
        rtol=ROUND_OFF,
    )
    # A thick line's red side is its source.
    np.testing.assert_allclose(figures.log_red_side[middle, 0], log_u[middle], rtol=1e-6)


def test_above_the_hand_over_nothing_changes_fast() -> None:
    setup = small_setup(
        4, grid={"redshift_start": 4000.0, "redshifts": [3000.0, 2200.0, 1600.0, 1450.0]}
    )
    history = solve(setup)
    slopes = history.lines.source_slope[:, 0]
    assert np.all(np.abs(slopes[:2]) < 1e-3)
    assert slopes[3] > 1.0
    assert np.all(np.abs(history.lines.log_red_side[:2]) < 1e-4)
    assert not warnings_of(history, "z = 3") and not warnings_of(history, "z = 2")


def test_isolated_lines_see_the_blackbody_and_feedback_sees_the_line_above() -> None:
    alone, fed = open_history(), history_with(hydrogen="sobolev_feedback", lyman_lines=3)
    assert not alone.lines.log_blue_side.any()
    # The blue side of Lyman-alpha is the red side of Lyman-beta at (1 + z) 32/27.
    grid = -np.log1p(fed.redshift)
    past = np.interp(grid - math.log(32.0 / 27.0), grid, fed.lines.log_red_side[:, 1])
    here = fed.redshift < 1300.0
    np.testing.assert_allclose(fed.lines.log_blue_side[here, 0], past[here], rtol=5e-3, atol=5e-3)
    assert not fed.lines.log_blue_side[:, -1].any()
    # What it sees is not missing: to the interpolation of the memory.
    np.testing.assert_allclose(fed.lines.unseen_feedback, 0.0, atol=1e-4)
    # No photon leaves a closed line.
    assert not history_with(hydrogen="closed").lines.log_red_side.any()


def test_sobolev_is_warned_of_what_it_leaves_out() -> None:
    # Published: two-photon wings and their change in time 1.3 to 1.6 per cent of x_e at z = 1190
    # to 1300 (Hirata 2008; Chluba & Sunyaev 2010), recoil 1.2 per cent near 900 (Chluba & Sunyaev
    # 2009), feedback 0.22 per cent near 1050 (2007). The estimates are of that size.
    history, figures = open_history(), open_history().lines
    bound = np.minimum(1.0, history.neutral_hydrogen_fraction / history.free_electron_fraction)
    weight = figures.flow_response[:, 0] * bound
    for figure, redshift, published in (
        ("source_change", 1250.0, 1.4e-2),
        ("recoil_gain", 900.0, 1.2e-2),
        ("unseen_feedback", 1050.0, 2.2e-3),
    ):
        (text,) = warnings_of(history, figure, "2p-1s")
        assert f"(limit {100.0 * LARGEST_X_E_ERROR:g} %)" in text
        k = near(history, redshift)
        estimate = abs(getattr(figures, figure)[k, 0]) * weight[k]
        assert published / 2.0 < estimate < 2.0 * published
        span = text.split("z = ")[1].split(":")[0].split(" to ")
        assert float(span[0]) > redshift > float(span[1]) > 500.0
    # The lines above carry too little to matter, though their own figures are far worse.
    assert figures.source_change[:, 1].max() > 0.5
    assert not warnings_of(history, "", "3p-1s")


def test_what_a_treatment_resolves_raises_no_warning() -> None:
    fed = history_with(hydrogen="sobolev_feedback", lyman_lines=3)
    assert not warnings_of(fed, "unseen_feedback")
    assert warnings_of(fed, "source_change") and warnings_of(fed, "recoil_gain")
    # One open line has none above it that could feed it.
    assert not warnings_of(small_history(), "unseen_feedback")

    class Resolving(Sobolev):
        resolves = ("wings", "scattering", "feedback")

    history = open_history()
    ratio = history.neutral_hydrogen_fraction / history.free_electron_fraction
    assert not limit_notes(history.redshift, ratio, history.lines, Resolving())
    # And where nothing has recombined yet or all has long since.
    early, late = history.redshift > 1550.0, history.redshift < 600.0
    for some in (early, late):
        cut = {
            one.name: getattr(history.lines, one.name)[some]
            for one in dataclasses.fields(LineFigures)
            if one.name != "names"
        }
        part = LineFigures(history.lines.names, **cut)
        assert not limit_notes(history.redshift[some], ratio[some], part, Sobolev())


@pytest.mark.parametrize("name", ["open", "closed"])
def test_escape_far_from_expansion_is_named_and_nothing_else(name: str) -> None:
    history = history_with(hydrogen=name)
    (text,) = warnings_of(history, "")
    assert "escape_probability" in text and f"a factor {ESCAPE_FACTOR:g}" in text
    assert text.startswith("warning: 2p-1s, z = 1")


def test_a_treatment_of_ones_own_fills_the_figures() -> None:
    class Bare(Sobolev):
        """Gives no figures."""

        name = "bare"

        def couple(self, *given: Any, **named: Any) -> Any:
            return dataclasses.replace(Sobolev.couple(self, *given, **named), validity={})

    class Telling(Sobolev):
        """Has a field of its own."""

        name = "telling"
        resolves = ("wings", "scattering")

        def couple(self, lines: Any, kept: Any, conditions: Conditions) -> Any:
            made = Sobolev.couple(self, lines, kept, conditions)
            sides = {"log_blue_side": np.full(1, 0.25), "log_red_side": np.full(1, 0.5)}
            return dataclasses.replace(made, validity=made.validity | sides)

    setup = small_setup(4, 800.0, 12)
    bare, plain = solve(setup, line_treatment=Bare()), solve(setup)
    assert np.isnan(bare.lines.optical_depth).all() and np.isnan(bare.lines.source_change).all()
    np.testing.assert_array_equal(bare.lines.share, plain.lines.share)
    np.testing.assert_array_equal(bare.lines.log_red_side, plain.lines.log_red_side)
    (text,) = warnings_of(bare, "")
    assert "no optical depth" in text
    told = solve(setup, line_treatment=Telling())
    assert np.all(told.lines.log_blue_side == 0.25) and np.all(told.lines.log_red_side == 0.5)
    assert not warnings_of(told, "")


def test_a_figure_of_the_wrong_length_is_one_line() -> None:
    class Wrong(Sobolev):
        """Gives one value too many."""

        name = "wrong"

        def couple(self, *given: Any, **named: Any) -> Any:
            made = Sobolev.couple(self, *given, **named)
            return dataclasses.replace(made, validity={"optical_depth": np.ones(2)})

    said = r'"wrong": validity\["optical_depth"\] has shape \(2,\); allowed is \(1,\)'
    with pytest.raises(InputError, match=said):
        solve(small_setup(3, 1500.0, 4), line_treatment=Wrong())


def test_who_sees_the_blue_side_must_give_depths() -> None:
    class Silent(SobolevFeedback):
        """Keeps its depths to itself."""

        name = "silent"

        def couple(self, *given: Any, **named: Any) -> Any:
            made = SobolevFeedback.couple(self, *given, **named)
            return dataclasses.replace(made, validity={})

    with pytest.raises(InputError, match='"silent": it sees_blue_side, so validity must hold'):
        solve(small_setup(4, 1500.0, 4, lines={"lyman_lines": 2}), line_treatment=Silent())


def test_summary_shows_the_line_that_carries_most() -> None:
    history = open_history()
    rows = [0, near(history, 1100.0)]
    head, _, second = line_rows(history, rows)
    assert head[0] == "2p-1s" and len(head) == len(second)
    shown = dict(zip(head[1:], second[1:], strict=True))
    assert float(shown["share"]) == pytest.approx(history.lines.share[rows[1], 0], rel=1e-2)
    values = line_values(history, rows)
    assert list(values) == list(history.lines.names)
    np.testing.assert_array_equal(values["3p-1s"]["share"], history.lines.share[rows, 1])
