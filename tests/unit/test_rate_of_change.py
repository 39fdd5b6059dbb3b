"""The bare right-hand side: against the history's, its own differences, and Peebles' atom."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
import pytest
from scipy import constants as si

from levelnet.distilled.local import ARGUMENTS, LocalRates, rate_of_change
from levelnet.errors import InputError, RangeError
from levelnet.escape.family import treatment
from levelnet.escape.lines import Lines
from levelnet.history.atom import resonance_lines
from levelnet.history.equations import SlowEquations
from tests.fast_tables import small_table
from tests.small_runs import COSMOLOGY
from tests.tolerances import ROUND_OFF

PLACES = {
    "recombining": (264.0, 0.15, 2990.0, 3000.0, 4.9e-14, 0.08),
    "early": (900.0, 0.98, 4500.0, 4500.0, 9e-14, 0.08),
    "heated": (1.5, 2e-3, 1500.0, 500.0, 3e-15, 0.08),
    "cooled": (0.01, 2e-4, 9.0, 100.0, 3e-16, 0.0),
}
each_place = pytest.mark.parametrize("place", sorted(PLACES))


def here(place: str, **changes: object) -> LocalRates:
    given: dict = dict(zip(ARGUMENTS, PLACES[place], strict=False)) | changes
    return rate_of_change(small_table(), **given)


def difference(function, step: float) -> np.ndarray:  # type: ignore[no-untyped-def]
    near, far = (function(k * step) - function(-k * step) for k in (1, 2))
    return np.asarray((8.0 * near - far) / (12.0 * step))


@each_place
def test_every_partial_derivative(place: str) -> None:
    found = here(place)
    given = dict(zip(ARGUMENTS, PLACES[place], strict=False))

    def both(**changes: object) -> np.ndarray:
        rates = here(place, **changes)
        return np.array([rates.electron_fraction_per_s, rates.matter_temperature_k_per_s])

    for name in found.electron_fraction_by:
        unit = 1.0
        if name in given:
            unit = given[name]
            if name == "electron_fraction":
                unit = min(unit, 1.0 - unit)

            def moved(h: float, name: str = name, unit: float = unit) -> np.ndarray:
                return both(**{name: given[name] + h * unit})

            if given[name] == 0.0:  # helium cannot be negative: one-sided, on another path
                continue
        elif name in ARGUMENTS:

            def moved(h: float, name: str = name) -> np.ndarray:  # type: ignore[misc]
                return both(**{name: h})
        else:

            def moved(h: float, name: str = name) -> np.ndarray:  # type: ignore[misc]
                return both(rate_scales={name[3:]: math.exp(h)})

        expected = difference(moved, 2e-4) / unit
        exact = np.array([found.electron_fraction_by[name], found.matter_temperature_by[name]])
        # Rounding of rates that are themselves small differences, over the step.
        capture = found.electron_fraction_by["electron_fraction"] * given["electron_fraction"]
        scale = np.abs(both()) + np.array([abs(capture), 0.0])
        allowed = 1e-7 * np.abs(expected) + 3e-11 * scale / unit
        assert np.all(np.abs(exact - expected) <= allowed), name


def test_same_rates_as_the_history() -> None:
    table = small_table()
    equations = SlowEquations(
        COSMOLOGY,
        table,
        resonance_lines(table.kept, 1),
        treatment("sobolev"),
        8.2246,
        "spontaneous",
    )
    s, state = -math.log1p(1100.0), np.array([-1.7, -1e-4])
    c = equations.local(s, state).conditions
    du, dv = equations.rate(s, state)
    rates = rate_of_change(
        table,
        hydrogen_density_cm3=c.hydrogen_density_cm3,
        electron_fraction=c.electron_fraction,
        matter_temperature_k=c.matter_temperature_k,
        radiation_temperature_k=c.radiation_temperature_k,
        hubble_rate_per_s=c.hubble_rate_per_s,
        helium_ratio=COSMOLOGY.helium_ratio(),
    )
    x = c.electron_fraction
    assert rates.electron_fraction_per_s == pytest.approx(
        c.hubble_rate_per_s * x * (1.0 - x) * du, rel=1e-11
    )
    # v = ln(T_m/T_r), T_r ~ 1/a.
    expected = c.hubble_rate_per_s * c.matter_temperature_k * (dv - 1.0)
    assert rates.matter_temperature_k_per_s == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("place", ["recombining", "heated"])
def test_infinitely_fast_exchange_is_the_three_level_atom(place: str) -> None:
    # Peebles 1968, ApJ 153, 1: one second level in Boltzmann equilibrium within itself,
    # dx/dt = -C [alpha n x^2 - beta (1 - x) exp(-E_21/kT)], C = loss/(loss + beta), built here from
    # the table's A_i and B_i.
    table = small_table()
    n, x, matter_k, radiation_k, hubble, _ = PLACES[place]
    rates = table.rates(radiation_k, matter_k)
    kept = table.kept
    kt = si.value("Boltzmann constant in eV/K") * radiation_k
    share = kept.statistical_weight * np.exp(-(kept.energy_ev - kept.energy_ev[0]) / kt)
    share /= share.sum()
    wavelength_cm = 1e2 * si.h * si.c / (kept.energy_ev[1] * si.e)
    # A of Lyman-alpha: 6.2649e8 s^-1 with the reduced mass (handbook; the table's own lines give
    # the digits).
    a = float(resonance_lines(kept, 1).einstein_a_per_s[0])
    assert a == pytest.approx(6.2649e8, rel=1e-4)
    depth = 3.0 * a * wavelength_cm**3 * n * (1.0 - x) / (8.0 * math.pi * hubble)
    loss = share[0] * 8.2246 + share[1] * a * -math.expm1(-depth) / depth
    beta = share @ np.exp(rates.log_photoionization)
    second = (1.0 - x) * kept.statistical_weight / 2.0 * np.exp(-kept.energy_ev / kt)
    lifted = np.exp(rates.log_photoionization) @ second
    expected = -loss / (loss + beta) * (rates.recombination.sum() * n * x * x - lifted)
    errors = []
    for factor in (1.0, 1e2, 1e4, 1e6):
        found = here(place, rate_scales={"exchange_2s_2p": factor}).electron_fraction_per_s
        errors.append(abs(found / expected - 1.0))
    assert errors[-1] < 1e-5
    # And it is a limit: the error falls as one over the rate, until rounding.
    assert errors[2] > 30.0 * errors[3] or errors[2] < 1e-12


def test_constants_rescale_the_whole_network() -> None:
    # With a = 1 + e and m_e ~ 1/a^2 energies stay; what is left is a change of rates (the reduced
    # mass follows m_e to 5e-4 of the change).
    table = small_table()
    found = here("recombining", fine_structure_change=0.01, electron_mass_change=-0.02)
    same = table.with_constants(0.01, -0.02)
    given = dict(zip(ARGUMENTS, PLACES["recombining"], strict=False))
    again = rate_of_change(same, **given, fine_structure_change=None, electron_mass_change=None)
    assert found.electron_fraction_per_s == pytest.approx(
        again.electron_fraction_per_s, rel=1e3 * ROUND_OFF
    )
    assert found.electron_fraction_per_s != here("recombining").electron_fraction_per_s


@pytest.mark.parametrize(
    ("changes", "error", "text"),
    [
        ({"electron_fraction": 1.0}, InputError, "below 1"),
        ({"electron_fraction": 0.0}, InputError, "electron_fraction = 0"),
        ({"hydrogen_density_cm3": -1.0}, InputError, "hydrogen_density_cm3"),
        ({"hubble_rate_per_s": float("nan")}, InputError, "hubble_rate_per_s"),
        ({"helium_ratio": -0.1}, InputError, "helium_ratio"),
        ({"radiation_temperature_k": 20.0}, RangeError, "radiation_temperature_k = 20"),
        ({"matter_temperature_k": 8500.0}, RangeError, "matter_temperature_k = 8500"),
        ({"matter_temperature_k": 2.0}, RangeError, "matter_temperature_k = 2"),
        ({"lines": Lines(lyman_lines=3)}, InputError, "needs 3p"),
    ],
)
def test_bad_input(changes: Mapping[str, object], error: type[InputError], text: str) -> None:
    with pytest.raises(error, match=text):
        here("recombining", **changes)
