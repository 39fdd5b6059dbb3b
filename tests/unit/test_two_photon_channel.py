"""The 2s-1s channel: its place, its balance, its stimulation against scipy's quadrature."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import constants as si
from scipy.integrate import quad

from levelnet.atomic.two_photon import two_photon_profile, two_photon_rate
from levelnet.background.conditions import Conditions
from levelnet.escape.treatment import Sobolev
from levelnet.escape.two_photon import with_two_photon
from levelnet.history.atom import lyman_lines
from levelnet.network.coupling import GroundCoupling, blackbody_coupling
from levelnet.network.ladder import hydrogen_ladder
from tests.small_runs import RECOMBINING
from tests.tolerances import QUADRATURE, ROUND_OFF

LADDER = hydrogen_ladder(3, "measured", ((2, 0), (2, 1), (3, 1)))
KEPT = LADDER.kept
RATE = 8.2246
MODES = ("spontaneous", "stimulated")


def alone(conditions: Conditions, rate_per_s: float, mode: str) -> GroundCoupling:
    """The channel added to no lines at all."""
    nothing = np.zeros(len(KEPT))
    empty = blackbody_coupling(nothing, nothing, nothing, nothing)
    return with_two_photon(empty, KEPT, conditions, rate_per_s, mode)


@pytest.mark.parametrize("mode", MODES)
def test_only_2s_decays_and_rests_in_equilibrium(mode: str) -> None:
    coupling = alone(RECOMBINING, RATE, mode)
    assert (KEPT.n[0], KEPT.l[0]) == (2, 0)
    only = np.zeros((3, 3), bool)
    only[0, 0] = True
    assert np.array_equal(coupling.loss > 0.0, only)
    x = 0.85 * math.exp(-KEPT.energy_ev[0] / (si.k / si.e * 3000.0))
    assert coupling.loss[0, 0] * x == pytest.approx(coupling.source[0], rel=1e-12)
    assert not coupling.excess_source.any()
    assert not coupling.slope_column.any()


def test_spontaneous_rate_is_what_was_asked() -> None:
    coupling = alone(RECOMBINING, RATE, "spontaneous")
    assert coupling.loss[0, 0] == RATE
    assert not coupling.slope_temperature.any()


@pytest.mark.parametrize("temperature", [300.0, 3000.0, 4500.0, 2e4])
def test_stimulation_against_quadrature(temperature: float) -> None:
    # (1/2) int phi(y) (1 + f(y)) (1 + f(1 - y)) dy, phi the computed profile over its own total.
    ratio = KEPT.energy_ev[0] / (si.k / si.e * temperature)

    def integrand(y: float) -> float:
        both = math.expm1(-ratio * y) * math.expm1(-ratio * (1.0 - y))
        return float(two_photon_profile(y)) / both

    half, _ = quad(integrand, 1e-13, 0.5, epsrel=1e-11, limit=200)
    conditions = RECOMBINING._replace(radiation_temperature_k=temperature)
    coupling = alone(conditions, RATE, "stimulated")
    assert coupling.loss[0, 0] / RATE == pytest.approx(half / two_photon_rate(), rel=QUADRATURE)
    assert coupling.loss[0, 0] > RATE


def test_stimulation_slope_is_that_of_the_rate() -> None:
    step = 1e-3

    def loss(factor: float) -> float:
        warm = RECOMBINING._replace(radiation_temperature_k=3000.0 * math.exp(factor * step))
        return float(alone(warm, RATE, "stimulated").loss[0, 0])

    slope = (8.0 * (loss(1) - loss(-1)) - (loss(2) - loss(-2))) / (12.0 * step)
    coupling = alone(RECOMBINING, RATE, "stimulated")
    assert coupling.slope_temperature[0, 0] == pytest.approx(slope, rel=1e-9)


def test_a_closed_channel_is_no_channel() -> None:
    coupling = alone(RECOMBINING, 0.0, "stimulated")
    assert not coupling.loss.any()
    assert not coupling.source.any()


def test_the_channel_is_added_to_the_lines() -> None:
    lines = Sobolev().couple(lyman_lines(LADDER), KEPT, RECOMBINING)
    before = lines.loss.copy(), lines.source.copy(), lines.slope_temperature.copy()
    decay = alone(RECOMBINING, RATE, "stimulated")
    both = with_two_photon(lines, KEPT, RECOMBINING, RATE, "stimulated")
    for name in ("loss", "source", "slope_column", "slope_temperature", "excess_source"):
        total = getattr(lines, name) + getattr(decay, name)
        np.testing.assert_allclose(getattr(both, name), total, rtol=ROUND_OFF)
    assert set(both.validity) == {"optical_depth", "escape_probability"}
    # The lines' own record is left as it was.
    after = lines.loss, lines.source, lines.slope_temperature
    assert all(np.array_equal(x, y) for x, y in zip(before, after, strict=True))
