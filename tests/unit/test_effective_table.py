from __future__ import annotations

import dataclasses
import math
from functools import lru_cache

import numpy as np
import pytest

from levelnet import EffectiveTable, distill, effective_rates
from levelnet.errors import InputError, RangeError
from tests.small_runs import small_setup
from tests.tolerances import ROUND_OFF

SETUP = small_setup(8)
WIDER = ((2, 0), (2, 1), (3, 0), (3, 1), (3, 2))


@lru_cache
def table(kept: tuple[tuple[int, int], ...] | None = None) -> EffectiveTable:
    return distill(SETUP, kept=kept, certify=False)


def points(count: int = 40) -> tuple[np.ndarray, np.ndarray]:
    random = np.random.default_rng(7)
    radiation = np.exp(random.uniform(math.log(27.5), math.log(9000.0), count))
    matter = np.exp(random.uniform(np.log(0.01 * radiation), np.log(4.0 * radiation)))
    return radiation, np.minimum(matter, np.maximum(8000.0, radiation))


@pytest.mark.parametrize("kept", [None, WIDER])
def test_off_the_nodes_within_the_tolerance(kept: tuple[tuple[int, int], ...] | None) -> None:
    own = table(kept)
    radiation, matter = points()
    found = own.effective_rates(radiation, matter)
    exact = effective_rates(SETUP, radiation, matter, kept)
    assert own.tolerance == 1e-8
    for name in ("log_recombination", "log_photoionization"):
        error = getattr(found, name) - getattr(exact, name)
        assert np.abs(error).max() < own.tolerance, name
    here = np.isfinite(exact.log_exchange)
    assert np.array_equal(here, np.isfinite(found.log_exchange))
    error = found.log_exchange[here] - exact.log_exchange[here]
    # Logarithms down to -1200 carry a rounding error of 1e-13 of their own.
    assert np.abs(error).max() < own.tolerance


def test_rates_equal_their_logarithms() -> None:
    own = table()
    rates, logs = own.rates(3000.0, 2500.0), own.effective_rates(3000.0, 2500.0)
    assert rates.recombination == pytest.approx(logs.recombination, rel=1e-13)
    assert rates.log_photoionization == pytest.approx(logs.log_photoionization, rel=1e-13)
    assert rates.exchange == pytest.approx(logs.exchange, rel=1e-13)


@pytest.mark.parametrize("radiation", [28.0, 300.0, 3000.0])
@pytest.mark.parametrize("ratio", [0.02, 0.9, 1.0, 2.0])
@pytest.mark.parametrize("changed", [False, True])
def test_slopes_are_derivatives(radiation: float, ratio: float, changed: bool) -> None:
    own = table().with_constants(0.05, -0.1) if changed else table()
    radiation *= own.scales.energy
    matter, step = ratio * radiation, 1e-4

    def difference(name: str, by_radiation: float, by_matter: float) -> np.ndarray:
        high, low = (
            getattr(
                own.effective_rates(
                    radiation * math.exp(sign * by_radiation * step),
                    matter * math.exp(sign * by_matter * step),
                ),
                name,
            )
            for sign in (1.0, -1.0)
        )
        return np.asarray((high - low) / (2.0 * step))

    rates = own.rates(radiation, matter)
    # Central differences over 1e-4: step^2 times a third derivative, the cube of 1e3 at the coldest
    # for the exchange, of order one for captures.
    capture = {"rel": 1e-6, "abs": 1e-6}
    assert rates.recombination_slope_radiation == pytest.approx(
        difference("log_recombination", 1.0, 0.0), **capture
    )
    assert rates.recombination_slope_matter == pytest.approx(
        difference("log_recombination", 0.0, 1.0), **capture
    )
    for name, slope in (
        ("log_photoionization", rates.photoionization_slope),
        ("log_exchange", rates.exchange_slope),
    ):
        with np.errstate(invalid="ignore"):  # the diagonal of the exchange
            by_difference = np.nan_to_num(difference(name, 1.0, 1.0))
        assert slope == pytest.approx(by_difference, rel=1e-6, abs=1e-6)


def test_arrays_are_power_series_as_documented() -> None:
    # The layout in the docstring, evaluated with numpy's own polynomials.
    own = table()
    radiation, matter = 777.0, 123.0
    x, y = math.log(radiation), math.log(matter / radiation)
    n_x, n_y = own.departure.shape[:2]
    dx = (own.log_high - own.log_low) / n_x
    dy = (own.ratio_high - own.ratio_low) / n_y
    i, j = int((x - own.log_low) / dx), int((y - own.ratio_low) / dy)
    t, u = 2 * ((x - own.log_low) / dx - i) - 1, 2 * ((y - own.ratio_low) / dy - j) - 1
    found = own.effective_rates(radiation, matter)
    for k in range(2):
        log_a = np.polynomial.polynomial.polyval(t, own.equilibrium[i, k])
        log_a += y * np.polynomial.polynomial.polyval2d(t, u, own.departure[i, j, k])
        assert found.log_recombination[k] == pytest.approx(log_a, rel=ROUND_OFF)
    down = np.polynomial.polynomial.polyval(t, own.exchange[i, 0]) - own.barrier_k[0] / radiation
    assert found.log_exchange[own.upper[0], own.lower[0]] == pytest.approx(down, rel=ROUND_OFF)


def test_continuous_across_cells() -> None:
    own = table()
    n_x = own.departure.shape[0]
    edge = math.exp(own.log_low + 5 * (own.log_high - own.log_low) / n_x)
    below, above = (own.effective_rates(edge * (1 + d), 0.7 * edge) for d in (-1e-13, 1e-13))
    assert np.abs(below.log_recombination - above.log_recombination).max() < 2.0 * own.tolerance


def test_changed_constants_equal_a_table_of_the_changed_setup() -> None:
    physics = {"fine_structure_change": 0.03, "electron_mass_change": -0.02}
    setup = dataclasses.replace(SETUP, physics=physics)
    own, view = distill(setup, certify=False), table().with_constants(**physics)
    assert view.setup == setup
    assert view.equilibrium is not None
    assert np.array_equal(view.departure, own.departure)
    assert view.kept.energy_ev == pytest.approx(own.kept.energy_ev, rel=ROUND_OFF)
    radiation, matter = 1000.0, 400.0
    exact = effective_rates(setup, radiation, matter)
    for one in (own, view):
        found = one.effective_rates(radiation, matter)
        assert np.abs(found.log_recombination - exact.log_recombination).max() < own.tolerance
        assert np.abs(found.log_photoionization - exact.log_photoionization).max() < own.tolerance
        off = ~np.eye(2, dtype=bool)
        error = found.log_exchange[off] - exact.log_exchange[off]
        assert np.abs(error).max() < own.tolerance
    back = view.with_constants()
    assert back.kept.energy_ev == pytest.approx(table().kept.energy_ev, rel=ROUND_OFF)
    assert np.array_equal(
        back.effective_rates(radiation, matter).log_exchange,
        table().effective_rates(radiation, matter).log_exchange,
    )


@pytest.mark.parametrize(
    ("radiation", "matter", "message"),
    [
        (24.0, 24.0, r"T_r = 24 K: outside the table; allowed: 27.5 to 9000 K"),
        (9100.0, 9100.0, "T_r = 9100 K: outside the table"),
        (3000.0, 29.0, r"T_m/T_r = 0.00966667: outside the table; allowed: 0.01 to 4"),
        (1000.0, 4100.0, r"T_m/T_r = 4.1: outside the table"),
        (3000.0, 8100.0, r"T_m = 8100 K: outside the table; .*8000 K.*collisional ionization"),
        (float("nan"), 1.0, "outside the table"),
        (3000.0, float("nan"), "outside the table"),
        (-1.0, 100.0, "outside the table"),
        (0.0, 0.0, "outside the table"),
    ],
)
def test_outside_is_refused(radiation: float, matter: float, message: str) -> None:
    for call in (table().rates, table().effective_rates):
        with pytest.raises(RangeError, match=message) as caught:
            call(radiation, matter)
        assert "\n" not in str(caught.value)


def test_ends_are_inside() -> None:
    own = table()
    for radiation, matter in ((27.5, 0.275), (9000.0, 90.0), (27.5, 109.0), (8500.0, 8500.0)):
        assert np.isfinite(own.effective_rates(radiation, matter).log_recombination).all()
    assert own.radiation_range_k == pytest.approx((27.5, 9000.0), rel=ROUND_OFF)


def test_range_moves_with_the_constants() -> None:
    moved = table().with_constants(fine_structure_change=0.1)
    assert moved.radiation_range_k == pytest.approx((27.5 * 1.21, 9000.0 * 1.21), rel=1e-13)
    with pytest.raises(RangeError, match=r"allowed: 33.275 to 10890 K"):
        moved.rates(30.0, 30.0)
    with pytest.raises(InputError, match="fine_structure_change"):
        table().with_constants(fine_structure_change=0.3)


def test_arrays_are_read_only_and_checked() -> None:
    own = table()
    with pytest.raises(ValueError, match="read-only"):
        own.exchange[0] = 0.0
    with pytest.raises(ValueError, match=r"EffectiveTable.exchange: shape"):
        dataclasses.replace(own, exchange=own.exchange[:-1])


def test_pair_that_never_talks_stays_silent() -> None:
    own = distill(small_setup(2), certify=False)
    assert np.isneginf(own.effective_rates(3000.0, 3000.0).log_exchange).all()
    assert not own.rates(3000.0, 3000.0).exchange.any()
