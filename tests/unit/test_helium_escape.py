"""Laws of the escape treatments of He I: limits, equilibrium, order, slopes, feedback."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import constants as si
from scipy.integrate import quad

from levelnet.atomic.helium_widths import other_decays
from levelnet.errors import InputError
from levelnet.escape.blue_side import log_red_side
from levelnet.escape.helium_continuum import (
    HELIUM_TREATMENTS,
    HeliumContinuum,
    continuum_depth,
    doppler_width,
)
from levelnet.escape.helium_lines import HeliumGroundLines, helium_ground_lines, kept_terms
from levelnet.escape.helium_past import HeliumBlueSide, HeliumPast
from levelnet.escape.helium_treatment import HeliumSobolev, HeliumTreatment, Seen
from levelnet.network.coupling import GroundCoupling
from levelnet.network.solve import log_boltzmann_populations
from levelnet.tables import read_table
from tests.small_helium_lines import (
    HALF_WAY,
    NEUTRAL_HYDROGEN_CM3,
    changed,
    ratio_by,
    small_ladders,
    small_lines,
)

LINES = small_lines()
KEPT = small_ladders().kept
NAMES = ("2 3S-1 1S", "2 3P2-1 1S", "2 3P1-1 1S", "2 1P-1 1S")
ALONE = Seen(NEUTRAL_HYDROGEN_CM3, None)
BLUE = HeliumBlueSide(
    np.array([0.3, 2.0, 2.0, 0.0]), np.array([1.0, -4.0, -4.0, 0.0]), np.zeros(4), -1.9
)
each_treatment = pytest.mark.parametrize("member", HELIUM_TREATMENTS, ids=str)
each_seen = pytest.mark.parametrize("seen", [ALONE, Seen(NEUTRAL_HYDROGEN_CM3, BLUE)])


def couple(
    member: HeliumTreatment,
    seen: Seen = ALONE,
    lines: HeliumGroundLines = LINES,
    **changes: float,
) -> GroundCoupling:
    return member.couple(lines, KEPT, HALF_WAY._replace(**changes), seen)


def test_the_lines_by_energy_and_what_lights_them() -> None:
    assert LINES.names == NAMES
    assert not LINES.fed
    low = small_lines(feedback=True)
    # 584 A lights both lines at 591 A, and the intercombination line lights 626 A.
    assert low.lit_by.tolist() == [2, 3, 3, -1]
    everything = small_lines(feedback=True, higher="feedback")
    assert everything.names == (*NAMES, "3 1P-1 1S", "4 1P-1 1S")
    assert everything.lit_by.tolist() == [2, 3, 3, 4, 5, -1]
    assert small_lines(feedback=False, higher="feedback").lit_by.tolist() == [-1, -1, -1, 4, 5, -1]
    assert small_lines(feedback=True, higher="free").lit_by.tolist() == [2, 3, 3, -1, -1, -1]


def test_which_terms_are_kept() -> None:
    low = ((2, 0, 0), (2, 1, 0), (2, 0, 1), (2, 1, 1))
    assert kept_terms(30, "closed") == low
    assert kept_terms(4, "free") == (*low, (3, 1, 0), (4, 1, 0))
    assert kept_terms(30, "feedback")[-1] == (7, 1, 0)
    with pytest.raises(InputError, match="known are"):
        kept_terms(4, "open")  # type: ignore[arg-type]


def test_cross_section_is_that_of_stobbe() -> None:
    # 1s in closed form (Stobbe 1930; Bethe & Salpeter 1957), per proton-electron reduced mass.
    chi = si.h * si.c * si.Rydberg / si.e / (1.0 + si.m_e / si.m_p)
    k = np.sqrt(LINES.energy_ev / chi - 1.0)
    threshold = 2.0**9 * si.pi**2 / 3.0 * si.alpha * (100.0 * si.value("Bohr radius")) ** 2
    threshold *= (1.0 + si.m_e / si.m_p) ** 2
    shape = np.exp(-4.0 / k * np.arctan(k)) / -np.expm1(-2.0 * si.pi / k) / (1.0 + k**2) ** 4
    np.testing.assert_allclose(LINES.hydrogen_cross_section_cm2, threshold * shape, rtol=2e-9)


def test_depth_of_the_intercombination_line_is_that_of_one_level_of_three() -> None:
    # tau = 3 A lambda^3 n/(8 pi H): the level J = 1 has weight 3, the ground state 1.
    depth = couple(HeliumSobolev()).validity["optical_depth"][2]
    wavelength_cm = 100.0 / 16908684.3  # published energy, 169086.843 cm^-1
    column = HALF_WAY.hydrogen_density_cm3 * HALF_WAY.ground_fraction
    column /= 8.0 * math.pi * HALF_WAY.hubble_rate_per_s
    assert depth == pytest.approx(3.0 * 177.6 * wavelength_cm**3 * column, rel=1e-8)
    assert 1.0 < depth < 3.0


def test_other_decays_in_the_cold_are_the_published_rates() -> None:
    lines = small_ladders().lines
    upper = np.array([lines.levels.index(2, 1, 0), lines.levels.index(2, 1, 1)])
    rate, slope = other_decays(lines, upper).total(3.0)
    table = read_table("helium/transition_rates")
    known = {
        (one, two): a
        for one, two, a in zip(
            table.texts["upper"],
            table.texts["lower"],
            table.numbers["einstein_a_per_s"].tolist(),
            strict=True,
        )
    }
    assert rate[0] == pytest.approx(known["2 1P", "2 1S"], rel=1e-12)
    assert rate[1] == pytest.approx(known["2 3P", "2 3S"], rel=1e-12)
    assert np.all(slope < 1e-12)


def test_other_decays_grow_with_the_field_and_their_slope_is_exact() -> None:
    step = 1e-4
    cold, (warm, slope), hot = (
        LINES.others.total(5000.0 * math.exp(d)) for d in (-step, 0.0, step)
    )
    np.testing.assert_allclose(slope, ratio_by(hot[0], cold[0], step), rtol=1e-7)
    # Most of 2 1P goes to 1 1S, nearly all of 2 3P to 2 3S.
    fraction = warm / (warm + LINES.ground_rate_per_s)
    assert 1e-3 < fraction[3] < 1e-2
    assert fraction[2] > 0.9999


@each_treatment
@pytest.mark.parametrize("kelvin", [300.0, 1500.0, 5455.0, 9000.0])
def test_nothing_flows_in_equilibrium(member: HeliumTreatment, kelvin: float) -> None:
    found = couple(member, radiation_temperature_k=kelvin)
    log_boltzmann = log_boltzmann_populations(KEPT, kelvin, HALF_WAY.ground_fraction)
    np.testing.assert_allclose(found.loss @ np.exp(log_boltzmann), found.source, rtol=1e-12)
    assert np.all(found.excess_source == 0.0)
    blackbody = HeliumBlueSide(*np.zeros((3, 4)), -1.9)
    lit = couple(member, Seen(NEUTRAL_HYDROGEN_CM3, blackbody), radiation_temperature_k=kelvin)
    np.testing.assert_array_equal(lit.loss, found.loss)
    assert np.all(lit.excess_source == 0.0)


@each_treatment
def test_net_flow_is_that_of_the_field_written_out(member: HeliumTreatment) -> None:
    # A sum of [x_u (1 + J) - g x_l J], J = f_L - P (f_L - f) + S f (u - 1) up to the tiny f_L.
    found = couple(member, Seen(NEUTRAL_HYDROGEN_CM3, BLUE))
    kt = si.k / si.e * HALF_WAY.radiation_temperature_k
    x = 3.0 * np.exp(log_boltzmann_populations(KEPT, 5455.0, HALF_WAY.ground_fraction))
    chance, depth = found.validity["escape_probability"], found.validity["optical_depth"]
    expected = np.zeros(len(KEPT))
    for k, u in enumerate(LINES.upper.tolist()):
        lower = LINES.weight_ratio[k] * HALF_WAY.ground_fraction
        f = 1.0 / math.expm1(KEPT.energy_ev[u] / kt)
        source = x[u] / (lower - x[u])
        sent = -math.expm1(-depth[k]) / depth[k] * f * math.expm1(BLUE.log_distortion[k])
        expected[u] += (
            LINES.einstein_a_per_s[k] * (lower - x[u]) * (chance[k] * (source - f) - sent)
        )
    # Energies of 2 3P1 and 2 3P2 against that of the term; constants.
    np.testing.assert_allclose(found.loss @ x - found.source, expected, rtol=3e-5)


def test_lines_with_the_same_upper_level_add_up() -> None:
    both = couple(HeliumSobolev())
    without = couple(HeliumSobolev(), lines=small_lines(rate_per_s=0.0))
    position = LINES.upper[2]
    assert LINES.upper[1] == position
    each = LINES.einstein_a_per_s * both.validity["escape_probability"]
    assert both.loss[position, position] == pytest.approx(each[1] + each[2], rel=1e-9)
    assert without.loss[position, position] == pytest.approx(each[1], rel=1e-9)


def test_without_hydrogen_it_is_sobolev() -> None:
    plain = couple(HeliumSobolev())
    for redistribution in ("doppler", "complete", "partial"):
        found = couple(HeliumContinuum(redistribution), Seen(0.0, None))  # type: ignore[arg-type]
        np.testing.assert_allclose(found.loss, plain.loss, rtol=1e-10)
        np.testing.assert_allclose(found.slope_column, plain.slope_column, rtol=1e-10)
        # By the damping, on which nothing depends here, up to round-off.
        np.testing.assert_allclose(
            found.slope_temperature,
            plain.slope_temperature,
            rtol=1e-9,
            atol=1e-12 * plain.loss.max(),
        )


def test_wings_let_more_photons_be_absorbed_by_hydrogen() -> None:
    chance = [
        couple(HeliumContinuum(one)).validity["escape_probability"]  # type: ignore[arg-type]
        for one in ("doppler", "partial", "complete")
    ]
    plain = couple(HeliumSobolev()).validity["escape_probability"]
    assert plain[3] < chance[0][3] < 0.5 * chance[1][3] < 0.05 * chance[2][3]
    # 2 3P1 has hardly any coherent scattering, and a depth of 2 lives in the core.
    assert chance[1][2] == pytest.approx(chance[2][2], rel=1e-6)
    assert chance[0][2] == pytest.approx(chance[2][2], rel=1e-3)


def test_validity_figures() -> None:
    found = couple(HeliumContinuum("partial"), Seen(NEUTRAL_HYDROGEN_CM3, BLUE)).validity
    complete = couple(HeliumContinuum("complete")).validity
    np.testing.assert_allclose(
        found["damping"], complete["damping"] * found["incoherent_fraction"], rtol=1e-12
    )
    # Doppler width of helium at 5455 K from scipy's constants.
    speed = math.sqrt(2.0 * si.k * 5455.0 / (4.002603 * si.atomic_mass))
    assert doppler_width(5455.0) == pytest.approx(speed / si.c, rel=1e-8)
    depth = continuum_depth(LINES, NEUTRAL_HYDROGEN_CM3, HALF_WAY.hubble_rate_per_s)
    np.testing.assert_allclose(found["continuum_depth"], depth * speed / si.c, rtol=1e-8)
    np.testing.assert_array_equal(found["log_blue_side"], BLUE.log_distortion)
    gamma = 1.0 / (4.0 * math.pi * LINES.energy_ev[3] * si.e / si.h * speed / si.c)
    total = LINES.others.total(5455.0)[0][3] + LINES.ground_rate_per_s[3]
    assert complete["damping"][3] == pytest.approx(total * gamma, rel=1e-8)


@each_treatment
@each_seen
def test_slopes_are_those_of_the_coupling(member: HeliumTreatment, seen: Seen) -> None:
    step = 1e-4
    here = member.couple(LINES, KEPT, HALF_WAY, seen)

    def difference(name: str) -> np.ndarray:
        high, low = (
            member.couple(LINES, KEPT, changed(HALF_WAY, name, d), seen) for d in (step, -step)
        )
        return ratio_by(high.loss, low.loss, step)

    np.testing.assert_allclose(
        here.slope_column, difference("ground_fraction"), rtol=1e-6, atol=1e-9 * here.loss.max()
    )
    np.testing.assert_allclose(
        here.slope_temperature,
        difference("radiation_temperature_k"),
        rtol=1e-6,
        atol=1e-9 * here.loss.max(),
    )
    more, less = (
        member.couple(LINES, KEPT, HALF_WAY, Seen(NEUTRAL_HYDROGEN_CM3 * math.exp(d), seen.blue))
        for d in (step, -step)
    )
    assert here.slope_continuum is not None
    np.testing.assert_allclose(
        here.slope_continuum,
        ratio_by(more.loss, less.loss, step),
        rtol=1e-6,
        atol=1e-9 * here.loss.max(),
    )


@pytest.mark.parametrize("rise", [0.0, 20.0, 34.0, -34.0])
def test_what_is_sent_down_is_absorbed_on_the_way(rise: float) -> None:
    # A continuum that grows as exp(rise ln a) meets its own closed law.
    lines = small_lines(feedback=True)
    past, start = HeliumPast.of(lines), -7.6
    scale = np.array([30.0, 31.0, 32.0, 33.0])
    for time in np.linspace(start, start + 0.2, 81).tolist():
        red = np.full(4, 2.0 + 3.0 * (time - start))
        past.remember(time, red, scale[3] * np.full(4, math.exp(rise * (time - start))))
    now = start + 0.15
    delay = math.log(lines.energy_ev[3] / lines.energy_ev[2])
    found = past.blue_side(now, rise - 3.0, np.full(4, scale[3] * math.exp(rise * 0.15)))
    depth, _ = quad(lambda s: scale[3] * math.exp(rise * (s - start)), now - delay, now)
    sent = math.exp(2.0 + 3.0 * (0.15 - delay))
    expected = math.log(1.0 + (sent - 1.0) * math.exp(-depth))
    assert found.log_distortion[2] == pytest.approx(expected, rel=1e-9)
    assert past.blue_side(now, -1.9, None).log_distortion[2] == pytest.approx(math.log(sent))
    assert past.longest_step == pytest.approx(
        math.log(lines.energy_ev[3] / lines.energy_ev[1]), rel=1e-4
    )
    assert np.all(past.blue_side(start, -1.9, None).log_distortion == 0.0)


def test_slopes_of_what_is_sent_down() -> None:
    lines, past, hubble = small_lines(feedback=True), None, -1.9
    past = HeliumPast.of(lines)
    for time in np.linspace(-7.8, -7.5, 61).tolist():
        grown = 40.0 * math.exp(30.0 * (time + 7.7))
        past.remember(time, np.full(4, 1.0 + math.sin(3.0 * time)), np.full(4, grown))
    now, step = -7.6513, 1e-5

    def at(time: float, more: float = 0.0) -> HeliumBlueSide:
        # n_HI of the moment with its nuclei fraction held: n/H goes as a^(-3 - dlnH/dlna).
        depth = 44.0 * math.exp((-3.0 - hubble) * (time - now) + more)
        return past.blue_side(time, hubble, np.full(4, depth))

    here = at(now)
    by_time = ratio_by(at(now + step).log_distortion, at(now - step).log_distortion, step)
    np.testing.assert_allclose(here.slope, by_time, rtol=1e-7, atol=1e-8)
    by_hydrogen = ratio_by(at(now, step).log_distortion, at(now, -step).log_distortion, step)
    np.testing.assert_allclose(here.by_continuum, by_hydrogen, rtol=1e-7, atol=1e-9)
    assert here.by_continuum[2] < -1e-3


def test_the_red_side_of_a_thick_line_is_its_own_source() -> None:
    # The same law as for hydrogen, with the departure of 2 1P.
    exponent = LINES.energy_ev[3:] / (si.k / si.e * 5455.0)
    red = log_red_side(np.array([1.2]), exponent, np.array([2e7]), np.zeros(1))
    assert red[0] == pytest.approx(1.2, rel=1e-12)


@each_treatment
def test_each_says_what_it_is(member: HeliumTreatment) -> None:
    assert member.name in {"sobolev", "sobolev_feedback", "continuum"}
    for sentences in (member.assumes, member.holds_for):
        assert sentences
        assert all(sentence.strip().endswith(".") for sentence in sentences)


def test_wrong_choices() -> None:
    with pytest.raises(InputError, match="redistribution"):
        HeliumContinuum("lorentz")  # type: ignore[arg-type]
    with pytest.raises(InputError, match="diffusion"):
        HeliumContinuum("complete", diffusion=True)
    with pytest.raises(InputError, match="intercombination"):
        helium_ground_lines(small_ladders(), False, "closed", -1.0)
