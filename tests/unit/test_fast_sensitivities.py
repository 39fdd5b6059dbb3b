"""Derivatives of the fast history against central differences of tightly computed histories."""

from __future__ import annotations

import dataclasses
import math
from functools import lru_cache
from itertools import pairwise

import numpy as np
import pytest

from levelnet.background.cosmology import Cosmology
from levelnet.background.parameters import COSMOLOGICAL, hubble_derivatives
from levelnet.distilled.history import FastHistory, history_from_table
from levelnet.distilled.universe import CONSTANTS
from tests.fast_tables import small_table
from tests.small_runs import COSMOLOGY

REDSHIFTS = np.expm1(np.linspace(math.log(1651.0), math.log(21.0), 200))
PARTS = ("free_electron_fraction", "matter_temperature_k")
NUMBERS = ("last_scattering_redshift", "sound_horizon_mpc", "damping_per_mpc")
# Of the largest derivative of the quantity.
SAME_DERIVATIVE = 1e-6
# H_0 moves dark energy alone, 1e-4 of the density at z = 20 and 1e-9 at z_*: the histories at
# either side agree in so many digits that rounding and steps show in their difference.
ONLY_DARK = 5e-3
PARAMETERS = (
    *COSMOLOGICAL,
    *CONSTANTS,
    "ln recombination_2s",
    "ln recombination_2p",
    "ln exchange_2s_2p",
    "ln two_photon",
)
# A neutrino with a mass, so that each kind of density is there.
UNIVERSES = {"massless": COSMOLOGY, "massive": Cosmology(70.0, 0.025, 0.16, 2.75, 0.24, 2.9)}
UNIVERSES["massive"] = dataclasses.replace(UNIVERSES["massive"], neutrino_masses_ev=(0.3,))


def values(history: FastHistory) -> dict[str, np.ndarray]:
    assert history.observables is not None
    found = {name: getattr(history, name) for name in PARTS}
    return found | {name: np.array(getattr(history.observables, name)) for name in NUMBERS}


def shifted(cosmology: Cosmology, name: str, by: float) -> dict[str, np.ndarray]:
    options: dict = {"redshifts": REDSHIFTS, "relative": 1e-11, "observables": True}
    if name in COSMOLOGICAL:
        cosmology = dataclasses.replace(cosmology, **{name: getattr(cosmology, name) * (1.0 + by)})
    elif name in CONSTANTS:
        options[name] = by
    else:
        options["rate_scales"] = {name.removeprefix("ln "): math.exp(by)}
    return values(history_from_table(small_table(), cosmology, **options))


@lru_cache(maxsize=4)
def derived(universe: str, relative: float) -> FastHistory:
    cosmology = UNIVERSES[universe]
    return history_from_table(
        small_table(), cosmology, redshifts=REDSHIFTS, relative=relative, sensitivities=True
    )


@pytest.mark.parametrize("universe", sorted(UNIVERSES))
@pytest.mark.parametrize("name", PARAMETERS)
def test_derivatives_are_those_of_the_history(universe: str, name: str) -> None:
    cosmology = UNIVERSES[universe]
    only_dark = name == "hubble_km_s_mpc"
    step = 0.1 if only_dark else 5e-4 if name in CONSTANTS else 2e-3
    near, far = (
        {k: a - b for (k, a), b in zip(up.items(), down.values(), strict=True)}
        for up, down in (
            (shifted(cosmology, name, k * step), shifted(cosmology, name, -k * step))
            for k in (1, 2)
        )
    )
    unit = getattr(cosmology, name) if name in COSMOLOGICAL else 1.0
    at = PARAMETERS.index(name)
    found = derived(universe, 1e-8).sensitivities
    assert found is not None
    assert found.parameters == PARAMETERS
    for part in (*PARTS, *NUMBERS):
        expected = (8.0 * near[part] - far[part]) / (12.0 * step * unit)
        error = np.max(np.abs(getattr(found, part)[..., at] - expected))
        allowed = ONLY_DARK if only_dark else SAME_DERIVATIVE
        assert error <= allowed * np.max(np.abs(expected)), part


@pytest.mark.parametrize("universe", sorted(UNIVERSES))
def test_derivatives_at_the_default_accuracy(universe: str) -> None:
    fine, default = derived(universe, 1e-9).sensitivities, derived(universe, 1e-6).sensitivities
    assert fine is not None
    assert default is not None
    for part, allowed in (
        ("free_electron_fraction", 1e-5),
        ("matter_temperature_k", 1e-5),
        *((name, 1e-5) for name in NUMBERS),
    ):
        exact, found = getattr(fine, part), getattr(default, part)
        for k in range(len(PARAMETERS)):
            error = np.max(np.abs(found[..., k] - exact[..., k]))
            assert error <= allowed * np.max(np.abs(exact[..., k])), (part, PARAMETERS[k])


@pytest.mark.parametrize("universe", sorted(UNIVERSES))
def test_derivatives_of_the_expansion(universe: str) -> None:
    cosmology = UNIVERSES[universe]
    z = np.array([0.0, 0.5, 3.0, 30.0, 300.0, 3000.0])
    found = hubble_derivatives(cosmology, 1.0 + z)
    for k, name in enumerate(COSMOLOGICAL):
        value = getattr(cosmology, name)
        sides = []
        for sign in (1.0, -1.0):
            moved = dataclasses.replace(cosmology, **{name: value * (1.0 + sign * 1e-4)})
            sides.append(np.log(moved.hubble_rate_per_s(z)))
        expected = (sides[0] - sides[1]) / (2e-4 * value)
        np.testing.assert_allclose(found[:, k], expected, rtol=1e-6, atol=1e-10)


def test_history_itself_is_that_of_a_plain_run() -> None:
    history = derived("massless", 1e-8)
    plain = history_from_table(small_table(), COSMOLOGY, redshifts=REDSHIFTS, relative=1e-8)
    np.testing.assert_allclose(
        history.free_electron_fraction, plain.free_electron_fraction, rtol=1e-8
    )
    assert plain.sensitivities is None
    assert plain.observables is None


def test_observables_against_scipy() -> None:
    # The same integrals by a general quadrature over a spline of the outputs.
    from scipy import constants as si
    from scipy.integrate import quad
    from scipy.interpolate import CubicSpline
    from scipy.optimize import brentq

    z = np.expm1(np.linspace(math.log(3200.0), math.log(21.0), 8000))
    history = history_from_table(
        small_table(), COSMOLOGY, redshifts=z, relative=1e-9, observables=True
    )
    seen = history.observables
    assert seen is not None
    ionized = CubicSpline(z[::-1], history.free_electron_fraction[::-1])
    thomson = 1e4 * si.value("Thomson cross section")
    c = 100.0 * si.c
    mpc = 1e8 * si.parsec
    photons = 4.0 * si.Stefan_Boltzmann / si.c**3 * 2.7255**4
    baryons = 0.0224 * 3.0 * (1e5 / (1e6 * si.parsec)) ** 2 / (8.0 * math.pi * si.G)

    def per_z(x: float) -> float:
        electrons = float(COSMOLOGY.hydrogen_density_cm3(x)) * float(ionized(x))
        return c * thomson * electrons / (COSMOLOGY.hubble_rate_per_s(x) * (1.0 + x))

    depth = CubicSpline(z[::-1], [per_z(x) for x in z[::-1]]).antiderivative()
    last = brentq(lambda x: float(depth(x)) - 1.0, 900.0, 1300.0)
    assert seen.last_scattering_redshift == pytest.approx(last, rel=1e-7)

    def load(x: float) -> float:
        return 0.75 * baryons / photons / (1.0 + x)

    def horizon(t: float) -> float:
        x = math.expm1(t)
        speed = c / math.sqrt(3.0 * (1.0 + load(x)))
        return speed / COSMOLOGY.hubble_rate_per_s(x) * (1.0 + x) / mpc

    def damping(t: float) -> float:
        x = math.expm1(t)
        r, neutral_free = load(x), 1.0 if x > 3190.0 else float(ionized(x))
        electrons = float(COSMOLOGY.hydrogen_density_cm3(x)) * neutral_free
        per_mpc = electrons * thomson / (1.0 + x) * mpc
        shape = (r * r / (1.0 + r) + 16.0 / 15.0) / (6.0 * (1.0 + r) * per_mpc)
        return shape * c / COSMOLOGY.hubble_rate_per_s(x) * (1.0 + x) / mpc

    ends = math.log1p(last), math.log1p(3190.0), math.log1p(9e8)
    for function, found, power in (
        (horizon, seen.sound_horizon_mpc, 1.0),
        (damping, seen.damping_per_mpc, -2.0),
    ):
        parts = (quad(function, *pair, epsrel=1e-10, limit=500) for pair in pairwise(ends))
        total = sum(part[0] for part in parts)
        if power == 1.0:  # what lies above the last edge falls as 1/(1 + z)
            total += function(ends[-1])
        # G of the library and ours are the same edition; the rest is quadrature.
        assert found**power == pytest.approx(total, rel=1e-7)
