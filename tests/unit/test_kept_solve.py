"""The kept levels in the quasi-steady state against dense and sparse solvers, and their slopes."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy import constants as codata
from scipy.sparse.linalg import spsolve

from levelnet.background.conditions import Conditions
from levelnet.errors import Outcome, SolveError
from levelnet.escape.family import TREATMENTS
from levelnet.escape.two_photon import with_two_photon
from levelnet.history.atom import lyman_lines
from levelnet.network.assembly import rate_matrix, recombination_coefficients
from levelnet.network.coupling import GroundCoupling, blackbody_coupling
from levelnet.network.gradient import flow_slopes, net_flow_gradient
from levelnet.network.ladder import Ladder, hydrogen_ladder
from levelnet.network.reduced import KeptLevels, ReducedRates
from levelnet.network.solve import log_boltzmann_populations, solve_kept
from levelnet.network.tabulation import live_reduction
from tests.tolerances import ELIMINATION

KELVIN_PER_EV = codata.e / codata.k
TWO = ((2, 0), (2, 1))
LYMAN = ((2, 0), (2, 1), (3, 1), (4, 1))
# Recombining hydrogen at z ~ 1100, at z ~ 600, and a nearly neutral cold gas.
STATES = {
    "early": Conditions(3000.0, 2990.0, 250.0, 1e-13, 0.3, 0.25, 0.75),
    "late": Conditions(1640.0, 1600.0, 40.0, 5e-14, 3e-4, 3e-4, 0.9997),
    "cold": Conditions(300.0, 150.0, 0.25, 3e-15, 2e-4, 2e-4, 0.9998),
}


def coupling(
    ladder: Ladder, at: Conditions, treatment: Any = TREATMENTS[-1], mode: str = "stimulated"
) -> GroundCoupling:
    lines = treatment.couple(lyman_lines(ladder), ladder.kept, at)
    return with_two_photon(lines, ladder.kept, at, 8.2246, mode)


@pytest.mark.parametrize("at", STATES.values(), ids=STATES)
@pytest.mark.parametrize("kept", [TWO, LYMAN], ids=str)
def test_against_the_whole_network(kept: Any, at: Conditions) -> None:
    # Reducing, then solving, equals solving all levels at once by scipy's sparse LU.
    ladder = hydrogen_ladder(12, "measured", kept)
    rates = live_reduction(ladder).rates(at.radiation_temperature_k, at.matter_temperature_k)
    found = coupling(ladder, at)
    solution = solve_kept(ladder.kept, rates, found, at)
    matrix = rate_matrix(ladder, at.radiation_temperature_k).tolil()
    position = ladder.kept_position - 1
    for row, i in enumerate(position.tolist()):
        for column, j in enumerate(position.tolist()):
            matrix[i, j] += found.loss[row, column]
    alpha = recombination_coefficients(ladder, at.radiation_temperature_k, at.matter_temperature_k)
    source = alpha[1:] * at.hydrogen_density_cm3 * at.electron_fraction * at.ionized_fraction
    source[position] += found.source
    expected = spsolve(matrix.tocsc(), source)[position]
    # The condition of the unscaled matrix is 1e8 near 2500 K; populations are sums of one sign.
    np.testing.assert_allclose(np.exp(solution.log_population), expected, rtol=ELIMINATION)
    flow = found.loss @ expected - found.source
    gross = np.abs(found.loss @ expected) + found.source
    np.testing.assert_allclose(solution.flow, flow, rtol=0, atol=ELIMINATION * gross.max())


@pytest.mark.parametrize("at", STATES.values(), ids=STATES)
def test_balance_of_every_kept_level(at: Conditions) -> None:
    # What recombines into a level and does not leave upwards goes to the ground state.
    ladder = hydrogen_ladder(10, "measured", LYMAN)
    rates = live_reduction(ladder).rates(at.radiation_temperature_k, at.matter_temperature_k)
    solution = solve_kept(ladder.kept, rates, coupling(ladder, at), at)
    photo, d = np.exp(rates.log_photoionization), solution.departure
    net = solution.capture - solution.lift - photo * d
    exchange = rates.exchange.T @ d - rates.exchange.sum(axis=1) * d
    scale = np.abs(net) + rates.exchange.sum(axis=1) * np.abs(d) + np.abs(solution.flow)
    np.testing.assert_allclose(net + exchange, solution.flow, rtol=0, atol=1e-12 * scale.max())
    assert solution.net_flow == pytest.approx(solution.flow.sum(), rel=1e-14)
    assert solution.net_flow == pytest.approx(net.sum(), rel=1e-9)


def shifted(at: Conditions, name: str, log_step: float) -> Conditions:
    return at._replace(**{name: getattr(at, name) * float(np.exp(log_step))})


SLOPES = {
    "ln_radiation_temperature": "radiation_temperature_k",
    "ln_matter_temperature": "matter_temperature_k",
    "ln_hydrogen_density": "hydrogen_density_cm3",
    "ln_hubble_rate": "hubble_rate_per_s",
    "ln_electron_fraction": "electron_fraction",
    "ln_ionized_fraction": "ionized_fraction",
    "ln_ground_fraction": "ground_fraction",
}


@pytest.mark.parametrize("treatment", TREATMENTS, ids=lambda t: t.name)
@pytest.mark.parametrize("at", STATES.values(), ids=STATES)
@pytest.mark.parametrize("kept", [TWO, LYMAN], ids=str)
def test_slopes_equal_central_differences(kept: Any, at: Conditions, treatment: Any) -> None:
    ladder = hydrogen_ladder(8, "measured", kept)
    reduced = live_reduction(ladder)

    def solved(where: Conditions) -> Any:
        rates = reduced.rates(where.radiation_temperature_k, where.matter_temperature_k)
        found = coupling(ladder, where, treatment)
        return rates, found, solve_kept(ladder.kept, rates, found, where)

    rates, found, solution = solved(at)
    gradient = net_flow_gradient(rates, found, solution)
    slopes = flow_slopes(ladder.kept, rates, found, at, gradient)
    # Slopes are compared with the largest flow in the balance, as the step does.
    scale = max(abs(solution.net_flow), float(solution.capture.sum()))
    step = 1e-3
    for name, field in SLOPES.items():
        flows = [solved(shifted(at, field, k * step))[2].net_flow for k in (-2.0, -1.0, 1.0, 2.0)]
        expected = (flows[0] - 8 * flows[1] + 8 * flows[2] - flows[3]) / (12 * step)
        computed = getattr(slopes, name)
        assert computed == pytest.approx(expected, rel=1e-6, abs=1e-6 * scale), name


def test_boltzmann_populations() -> None:
    kept = hydrogen_ladder(5, "measured", LYMAN).kept
    expected = np.log(0.7 * kept.statistical_weight / 2) - kept.energy_ev * KELVIN_PER_EV / 2500.0
    np.testing.assert_allclose(log_boltzmann_populations(kept, 2500.0, 0.7), expected, rtol=1e-11)


def test_a_field_that_is_no_blackbody() -> None:
    # excess_source is what the field lifts beyond the blackbody: it adds to the source, level by
    # level.
    ladder, at = hydrogen_ladder(6, "measured", TWO), STATES["early"]
    rates = live_reduction(ladder).rates(at.radiation_temperature_k, at.matter_temperature_k)
    plain = coupling(ladder, at)
    excess = np.array([0.0, 1e-12])
    lifted = GroundCoupling(
        plain.loss, plain.source + excess, plain.slope_column, plain.slope_temperature, excess
    )
    before, after = (solve_kept(ladder.kept, rates, one, at) for one in (plain, lifted))
    change = np.linalg.solve(before.matrix, excess)
    np.testing.assert_allclose(after.departure - before.departure, change, rtol=1e-9)
    x = np.exp(after.log_population)
    np.testing.assert_allclose(
        after.flow, lifted.loss @ x - lifted.source, rtol=0, atol=1e-12 * lifted.source.max()
    )


def test_slowest_relaxation() -> None:
    ladder, at = hydrogen_ladder(6, "measured", LYMAN), STATES["late"]
    rates = live_reduction(ladder).rates(at.radiation_temperature_k, at.matter_temperature_k)
    solution = solve_kept(ladder.kept, rates, coupling(ladder, at), at)
    # By power iteration on the inverse: independent of any eigenvalue routine.
    vector = np.ones(4)
    for _ in range(200):
        vector = np.linalg.solve(solution.matrix, vector)
        vector /= np.linalg.norm(vector)
    growth = np.linalg.norm(np.linalg.solve(solution.matrix, vector))
    assert solution.slowest_relaxation() == pytest.approx(1.0 / growth, rel=1e-9)


def isolated() -> tuple[KeptLevels, ReducedRates]:
    """Two levels that talk to nothing but each recombines."""
    kept = hydrogen_ladder(2, "measured", TWO).kept
    nothing, square = np.zeros(2), np.zeros((2, 2))
    rates = ReducedRates(
        np.full(2, 1e-13), nothing, nothing, np.full(2, -np.inf), nothing, square, square
    )
    return kept, rates


def test_a_level_without_exit_is_singular() -> None:
    kept, rates = isolated()
    at = STATES["cold"]
    for loss in ([0.0, 0.0], [8.0, 0.0], [0.0, 1e8]):
        closed = blackbody_coupling(np.array(loss), np.zeros(2), np.zeros(2), np.zeros(2))
        with pytest.raises(SolveError, match="rate matrix is singular"):
            solve_kept(kept, rates, closed, at)
    open_coupling = blackbody_coupling(np.array([8.0, 1e8]), np.zeros(2), np.zeros(2), np.zeros(2))
    solution = solve_kept(kept, rates, open_coupling, at)
    np.testing.assert_allclose(solution.flow, solution.capture, rtol=1e-14)


def test_a_population_that_is_not_positive_is_an_error() -> None:
    ladder, at = hydrogen_ladder(6, "measured", TWO), STATES["early"]
    rates = live_reduction(ladder).rates(at.radiation_temperature_k, at.matter_temperature_k)
    plain = coupling(ladder, at)
    # A field that takes more out of 2p than there is.
    excess = np.array([0.0, -1.0])
    broken = GroundCoupling(
        plain.loss, plain.source + excess, plain.slope_column, plain.slope_temperature, excess
    )
    solution = solve_kept(ladder.kept, rates, broken, at)
    with pytest.raises(SolveError, match=Outcome.NONPOSITIVE_POPULATION.value):
        solution.log_population  # noqa: B018
