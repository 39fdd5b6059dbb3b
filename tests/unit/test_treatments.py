"""Laws of every line treatment in the tuple, and Lyman-alpha against an independent formula."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from scipy import constants as si

from levelnet.background.conditions import Conditions
from levelnet.errors import InputError
from levelnet.escape.family import TREATMENTS, treatment
from levelnet.escape.treatment import LineTreatment, Open, ResonanceLines, Sobolev
from levelnet.history.atom import lyman_lines
from levelnet.network.coupling import GroundCoupling
from levelnet.network.ladder import hydrogen_ladder
from tests.small_runs import RECOMBINING
from tests.tolerances import ROUND_OFF, published

LADDER = hydrogen_ladder(4, "measured", ((2, 0), (2, 1), (3, 1), (4, 1)))
KEPT, LINES = LADDER.kept, lyman_lines(LADDER)
EV_K = si.k / si.e
WARM_AND_COLD = (
    RECOMBINING,
    RECOMBINING._replace(radiation_temperature_k=6000.0, hydrogen_density_cm3=2000.0),
    RECOMBINING._replace(radiation_temperature_k=300.0, matter_temperature_k=200.0),
    # Lines of depth about 1 and far below.
    RECOMBINING._replace(hydrogen_density_cm3=6e-7),
    RECOMBINING._replace(hydrogen_density_cm3=1e-12),
)
each_treatment = pytest.mark.parametrize("member", TREATMENTS, ids=lambda t: t.name)
each_condition = pytest.mark.parametrize("conditions", WARM_AND_COLD)


def couple(member: LineTreatment, c: Conditions, lines: ResonanceLines = LINES) -> GroundCoupling:
    return member.couple(lines, KEPT, c)


def boltzmann(c: Conditions) -> np.ndarray:
    """Populations in Boltzmann equilibrium with 1s, from scipy's constants."""
    exponent = KEPT.energy_ev / (EV_K * c.radiation_temperature_k)
    return c.ground_fraction * (2 * KEPT.l + 1) * np.exp(-exponent)


@each_treatment
def test_each_says_what_it_is(member: LineTreatment) -> None:
    assert treatment(member.name) is member
    assert [t.name for t in TREATMENTS].count(member.name) == 1
    for sentences in (member.assumes, member.holds_for):
        assert sentences
        assert all(sentence.strip().endswith(".") for sentence in sentences)


@each_treatment
def test_escape_is_a_probability_that_falls_with_depth(member: LineTreatment) -> None:
    depths = np.concatenate([[0.0], np.logspace(-12, 12, 97)])
    chance, slope = member.escape(depths)  # type: ignore[attr-defined]
    assert np.all((chance >= 0.0) & (chance <= 1.0))
    assert np.all(np.diff(chance) <= 0.0)
    assert np.all((slope >= -1.0) & (slope <= 0.0))


@each_treatment
@each_condition
def test_nothing_flows_in_boltzmann_equilibrium(
    member: LineTreatment, conditions: Conditions
) -> None:
    coupling = couple(member, conditions)
    one_way = coupling.loss @ boltzmann(conditions)
    # Rounding of the exponent E/kT (up to 500) in each of the two.
    np.testing.assert_allclose(one_way, coupling.source, rtol=1e-12)
    assert np.all(coupling.excess_source == 0.0)
    assert np.any(coupling.loss > 0.0) == (member.name != "closed")


@each_treatment
@each_condition
def test_net_flow_is_that_of_the_rates_written_out(
    member: LineTreatment, conditions: Conditions
) -> None:
    # A P [(1 + f) x_u - (g_u/g_l) f x_l] line by line; 2s takes no part.
    coupling = couple(member, conditions)
    x = boltzmann(conditions) * np.array([3.0, 1.7, 2.5, 4.0])
    chance = coupling.validity["escape_probability"]
    expected = np.zeros(len(KEPT))
    for k, u in enumerate(LINES.upper.tolist()):
        f = 1.0 / math.expm1(KEPT.energy_ev[u] / (EV_K * conditions.radiation_temperature_k))
        rate = LINES.einstein_a_per_s[k] * chance[k]
        expected[u] = rate * ((1.0 + f) * x[u] - 3.0 * f * conditions.ground_fraction)
    np.testing.assert_allclose(coupling.loss @ x - coupling.source, expected, rtol=1e-11)


@each_treatment
@each_condition
def test_slopes_are_those_of_the_loss(member: LineTreatment, conditions: Conditions) -> None:
    coupling, step = couple(member, conditions), 1e-4
    scale = coupling.loss.max()

    def difference(field: str, sign: float) -> np.ndarray:
        near, far = (
            couple(
                member,
                conditions._replace(**{field: getattr(conditions, field) * math.exp(s * step)}),
            ).loss
            - couple(
                member,
                conditions._replace(**{field: getattr(conditions, field) * math.exp(-s * step)}),
            ).loss
            for s in (1.0, 2.0)
        )
        return sign * (8.0 * near - far) / (12.0 * step)

    # The column n_1s/H through each of its three factors.
    for field, sign in (
        ("ground_fraction", 1.0),
        ("hydrogen_density_cm3", 1.0),
        ("hubble_rate_per_s", -1.0),
    ):
        found = difference(field, sign)
        np.testing.assert_allclose(coupling.slope_column, found, atol=1e-10 * scale, rtol=0.0)
    found = difference("radiation_temperature_k", 1.0)
    np.testing.assert_allclose(coupling.slope_temperature, found, atol=1e-10 * scale, rtol=0.0)


def test_slope_in_temperature_where_stimulation_counts() -> None:
    # At 1e5 K the occupation of Lyman-alpha is 0.44, so the slope cannot hide in the rounding.
    hot = RECOMBINING._replace(radiation_temperature_k=1e5)
    coupling = couple(Open(), hot)
    x = LINES.energy_ev[0] / (EV_K * 1e5)
    expected = LINES.einstein_a_per_s[0] * x * math.exp(x) / math.expm1(x) ** 2
    assert coupling.slope_temperature[1, 1] == pytest.approx(expected, rel=1e-12)


def test_thick_sobolev_line_forgets_its_strength() -> None:
    stronger = dataclasses.replace(LINES, einstein_a_per_s=10.0 * LINES.einstein_a_per_s)
    one, other = couple(Sobolev(), RECOMBINING), couple(Sobolev(), RECOMBINING, stronger)
    np.testing.assert_allclose(other.loss, one.loss, rtol=ROUND_OFF)
    assert np.all(one.validity["optical_depth"] > 1e6)
    # Thin lines do not forget.
    thin = RECOMBINING._replace(hydrogen_density_cm3=1e-12)
    ratio = couple(Sobolev(), thin, stronger).loss[1, 1] / couple(Sobolev(), thin).loss[1, 1]
    assert ratio == pytest.approx(10.0, rel=0.01)


def test_sobolev_is_open_where_lines_are_thin() -> None:
    thin = RECOMBINING._replace(hydrogen_density_cm3=1e-15)
    np.testing.assert_allclose(couple(Sobolev(), thin).loss, couple(Open(), thin).loss, rtol=1e-5)


def test_lyman_alpha_while_the_universe_recombines() -> None:
    # Escape rate 8 pi H/(3 lambda^3 n_1s) of a thick line (Peebles 1968, Astrophys. J. 153, 1; from
    # memory), wavelength 1215.67 A (NIST; from memory).
    coupling = couple(Sobolev(), RECOMBINING)
    density = RECOMBINING.hydrogen_density_cm3 * RECOMBINING.ground_fraction
    expected = 8.0 * math.pi * RECOMBINING.hubble_rate_per_s / (3.0 * 1215.67e-8**3 * density)
    assert coupling.loss[1, 1] == pytest.approx(expected, rel=3 * published(6))
    assert coupling.validity["optical_depth"][0] == pytest.approx(
        6.2649e8 / expected, rel=published(5)
    )


def test_an_unknown_name_is_one_clear_line() -> None:
    with pytest.raises(InputError, match=r'known are "closed", "open", "sobolev"'):
        treatment("sideways")


def test_base_of_the_family_has_no_escape_of_its_own() -> None:
    base = Sobolev.__mro__[1]()
    with pytest.raises(NotImplementedError):
        base.escape(np.zeros(1))


def test_lines_are_checked_and_read_only() -> None:
    with pytest.raises(ValueError, match="einstein_a_per_s"):
        dataclasses.replace(LINES, einstein_a_per_s=np.zeros(2))
    assert not LINES.energy_ev.flags.writeable
    # Lyman-alpha, beta and gamma: 1215.67, 1025.72, 972.54 A (NIST; from memory).
    np.testing.assert_allclose(
        LINES.wavelength_cm, [1215.67e-8, 1025.72e-8, 972.54e-8], rtol=published(5)
    )
