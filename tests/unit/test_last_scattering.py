"""Observables against scipy's quadrature on an analytic history, and their derivatives."""

from __future__ import annotations

import dataclasses
import math
from functools import lru_cache
from itertools import pairwise

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import constants as si
from scipy.integrate import quad
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq

from levelnet.background.adapters import from_astropy
from levelnet.background.cosmology import Cosmology
from levelnet.background.last_scattering import (
    Observed,
    observe,
)
from levelnet.background.parameters import COSMOLOGICAL
from levelnet.background.quadrature import Quadrature, quadrature
from levelnet.errors import InputError
from levelnet.history.run import solve
from levelnet.quantities import OBSERVABLES, at_redshift
from tests.small_runs import COSMOLOGY, small_setup

# A universe with a heavy neutrino and curvature, so that each kind of density is there.
UNIVERSES = {
    "massless": COSMOLOGY,
    "massive": Cosmology(70.0, 0.025, 0.16, 2.75, 0.24, 2.9, neutrino_masses_ev=(0.3,)),
    "curved": Cosmology(60.0, 0.02, 0.13, 2.7, 0.26, 0.0, curvature_density=0.02),
}
MPC_M = 1e6 * si.parsec
END = 30.0
DEPTHS = (700.0, 1100.0, 1301.5)
# What the panels are built for; scipy is asked for more.
SAME = 1e-8
# Fourth-order central differences with steps of 1e-3, of the sum of the absolute contributions.
SAME_DERIVATIVE = 1e-7


def fraction(s: NDArray[np.float64] | float) -> NDArray[np.float64]:
    """A smooth step in ln a from 1 to a slope, half way at z = 1270: invented, analytic."""
    step = 0.5 * (1.0 - np.tanh((s + math.log(1271.0)) / 0.08))
    return np.asarray(step + 2e-4 * np.exp(0.3 * (s + 3.0)) * (1.0 - step))


def panels(cosmology: Cosmology = COSMOLOGY, end: float = END) -> Quadrature:
    return quadrature(cosmology, math.log(cosmology.cmb_temperature_k / 9000.0), -math.log1p(end))


@lru_cache(maxsize=8)
def seen(universe: str = "massless") -> Observed:
    grid = panels(UNIVERSES[universe])
    return observe(UNIVERSES[universe], grid, fraction(grid.points), 1.0, DEPTHS)


class Independent:
    """The definitions of the references, over z or a, by general routines of scipy (SI units)."""

    def opacity(self, z: float) -> float:
        """d tau/d eta per comoving Mpc (Hu & Sugiyama 1996, ApJ 471, 542)."""
        electrons = COSMOLOGY.hydrogen_density_cm3(z) * 1e6 * float(fraction(-math.log1p(z)))
        return electrons * si.value("Thomson cross section") / (1.0 + z) * MPC_M

    def eta(self, z: float) -> float:
        """d eta/dz in comoving Mpc."""
        return si.c / (COSMOLOGY.hubble_rate_per_s(z) * MPC_M)

    def loading(self, z: float) -> float:
        """R = 3 rho_b/(4 rho_gamma) (Hu & Sugiyama 1996)."""
        photons = 4.0 * si.Stefan_Boltzmann / si.c**3 * COSMOLOGY.cmb_temperature_k**4
        hundred = 1e5 / MPC_M
        baryons = COSMOLOGY.baryon_density_h2 * 3.0 * hundred**2 / (8.0 * math.pi * si.G)
        return 0.75 * baryons / photons / (1.0 + z)

    @lru_cache(maxsize=4096)  # noqa: B019 (one object for the whole file)
    def depth(self, z: float, drag: bool = False) -> float:
        def integrand(y: float) -> float:
            x = math.expm1(y)
            value = self.opacity(x) * self.eta(x) * (1.0 + x)
            return value / self.loading(x) if drag else value

        stops = [math.log1p(x) for x in (100.0, 600.0, 900.0, 1100.0, 1300.0, 1500.0) if x < z]
        low, high = math.log1p(END), math.log1p(z)
        return quad(integrand, low, high, points=stops or None, epsrel=1e-12, limit=400)[0]

    def glow(self, z: float) -> float:
        return math.log(self.opacity(z)) - self.depth(z)

    def sum_to(self, z: float, function: str) -> float:
        """Integral over a from 0; what lies below a = 1e-9 is a constant times a there."""

        def integrand(a: float) -> float:
            x = 1.0 / a - 1.0
            load = self.loading(x)
            if function == "time":
                return 1.0 / (a * COSMOLOGY.hubble_rate_per_s(x))
            step = self.eta(x) / a**2
            if function == "sound":
                return step / math.sqrt(3.0 * (1.0 + load))
            shape = load**2 / (1.0 + load) + 16.0 / 15.0  # Kaiser 1983, MNRAS 202, 1169
            return step * shape / (6.0 * (1.0 + load) * self.opacity(x))

        stops = (1e-5, 1e-4, 3e-4, 6e-4, 7e-4, 8e-4)
        end = 1.0 / (1.0 + z)
        a = [1.01e-9, *(one for one in stops if one < end), end]
        parts = (quad(integrand, *pair, epsrel=1e-12, limit=400)[0] for pair in pairwise(a))
        return sum(parts) + (integrand(a[0]) * a[0] if function == "sound" else 0.0)

    def values(self) -> dict[str, float]:
        last = brentq(lambda z: self.depth(z) - 1.0, 900.0, 1300.0, xtol=1e-10)
        drag = brentq(lambda z: self.depth(z, True) - 1.0, 900.0, 1300.0, xtol=1e-10)

        # d ln g/dz: the one derivative that scipy has no routine for, eighth order at h = 0.5.
        def slope(z: float) -> float:
            weights = (4.0 / 5.0, -1.0 / 5.0, 4.0 / 105.0, -1.0 / 280.0)
            pairs = enumerate(weights, 1)
            return sum(
                w * (self.glow(z + 0.5 * k) - self.glow(z - 0.5 * k)) / 0.5 for k, w in pairs
            )

        peak = brentq(slope, 1100.0, 1300.0, xtol=1e-9)
        level = self.glow(peak) - math.log(2.0)
        low = brentq(lambda z: self.glow(z) - level, 900.0, peak, xtol=1e-10)
        high = brentq(lambda z: self.glow(z) - level, peak, 1600.0, xtol=1e-10)
        found = [last, peak, high - low, self.sum_to(last, "time"), self.sum_to(last, "sound")]
        found += [self.sum_to(last, "damping") ** -0.5, drag, self.sum_to(drag, "sound")]
        depths = {at_redshift("optical_depth", z): self.depth(z) for z in DEPTHS}
        return dict(zip(OBSERVABLES, found, strict=True)) | depths


@lru_cache(maxsize=1)
def expected() -> dict[str, float]:
    return Independent().values()


@pytest.mark.parametrize("name", [*OBSERVABLES, *(at_redshift("optical_depth", z) for z in DEPTHS)])
def test_values_against_scipy(name: str) -> None:
    found = seen()
    assert found.value[found.names.index(name)] == pytest.approx(expected()[name], rel=SAME)


def test_names_and_units() -> None:
    found = seen()
    assert found.names[: len(OBSERVABLES)] == tuple(OBSERVABLES)
    assert found.names[len(OBSERVABLES) :] == (
        "optical_depth(700)",
        "optical_depth(1100)",
        "optical_depth(1301.5)",
    )
    assert found.units == (*(one.unit for one in OBSERVABLES.values()), "1", "1", "1")
    assert not found.gradient.flags.writeable


def test_a_subset_gives_the_same_numbers() -> None:
    grid, names = panels(), ("drag_redshift", "damping_per_mpc")
    some = observe(COSMOLOGY, grid, fraction(grid.points), names=names)
    at = [seen().names.index(name) for name in names]
    np.testing.assert_array_equal(some.value, seen().value[at])
    np.testing.assert_array_equal(some.gradient, seen().gradient[at])


def differences(values: dict[int, NDArray[np.float64]], step: float) -> NDArray[np.float64]:
    """Fourth-order central difference from the values at -2, -1, 1 and 2 steps."""
    near, far = values[1] - values[-1], values[2] - values[-2]
    return (8.0 * near - far) / (12.0 * step)


@pytest.mark.parametrize("universe", sorted(UNIVERSES))
def test_gradient_against_differences(universe: str) -> None:
    cosmology, grid, found = UNIVERSES[universe], panels(UNIVERSES[universe]), seen(universe)
    random = np.random.default_rng(4)
    for _ in range(5):
        # A random smooth curve: waves in ln a no shorter than about 0.5.
        phase, weight = random.uniform(0.0, 6.3, 12), random.normal(size=12)
        change = np.cos(np.outer(grid.points, np.arange(1, 13)) + phase) @ weight
        values = {
            k: observe(
                cosmology, grid, fraction(grid.points) * np.exp(1e-3 * k * change), 1.0, DEPTHS
            ).value
            for k in (-2, -1, 1, 2)
        }
        scale = np.abs(found.gradient) @ np.abs(change)
        error = found.gradient @ change - differences(values, 1e-3)
        assert np.all(np.abs(error) <= SAME_DERIVATIVE * scale)
        assert np.all(np.abs(found.gradient @ change) > 1e-4 * scale)  # or nothing were tested


@pytest.mark.parametrize("universe", sorted(UNIVERSES))
@pytest.mark.parametrize("name", COSMOLOGICAL)
def test_explicit_derivatives_by_parameters(universe: str, name: str) -> None:
    # On the panels of the universe itself, so that x_e(s) stays as it is.
    cosmology, grid = UNIVERSES[universe], panels(UNIVERSES[universe])
    given = getattr(cosmology, name)
    unit, step = given or 1.0, 0.03 if name == "hubble_km_s_mpc" else 1e-3
    signs = (-2, -1, 1, 2) if given else (0, 1, 2, 3, 4)
    values = {}
    for k in signs:
        moved = dataclasses.replace(cosmology, **{name: given + unit * step * k})
        values[k] = observe(moved, grid, fraction(grid.points), 1.0, DEPTHS).value
    if given:
        expected = differences(values, step)
    else:  # no neutrinos at all: one-sided, fourth order
        weights = (-25.0 / 12.0, 4.0, -3.0, 4.0 / 3.0, -0.25)
        expected = sum(w * values[k] for k, w in enumerate(weights)) / step
    found = seen(universe).by_parameter[:, COSMOLOGICAL.index(name)] * unit
    value = seen(universe).value
    if name == "hubble_km_s_mpc":
        # Dark energy alone: 1e-9 of the density then; rounding in the values shows.
        assert np.all(np.abs(found - expected) <= 2e-2 * np.abs(expected) + 1e-13 / step * value)
    else:
        assert np.all(np.abs(found - expected) <= 1e-7 * value)
        assert np.any(np.abs(found) > 1e-3 * value)


def test_derivative_by_the_thomson_cross_section() -> None:
    grid, found = panels(), seen()
    values = {
        k: observe(COSMOLOGY, grid, fraction(grid.points), math.exp(1e-3 * k), DEPTHS).value
        for k in (-2, -1, 1, 2)
    }
    np.testing.assert_allclose(found.by_thomson, differences(values, 1e-3), rtol=1e-7)
    # tau is proportional to it: closed form.
    np.testing.assert_allclose(found.by_thomson[-3:], found.value[-3:], rtol=1e-13)


def test_the_peak_shifts_by_the_slope_of_the_change() -> None:
    # A change that is the same everywhere moves the peak only through tau, as sigma_T does.
    found = seen()
    at = found.names.index("visibility_peak_redshift")
    assert found.gradient[at].sum() == pytest.approx(found.by_thomson[at], rel=1e-9)


def test_age_against_astropy() -> None:
    cosmology = pytest.importorskip("astropy.cosmology")
    theirs = cosmology.FlatLambdaCDM(68.0, 0.307, Tcmb0=2.7255, Neff=3.046, Ob0=0.0485, m_nu=0.0)
    ours = from_astropy(theirs, 0.245)
    grid = panels(ours)
    found = observe(ours, grid, fraction(grid.points))
    last, age = found.value[
        [list(OBSERVABLES).index(f"last_scattering_{k}") for k in ("redshift", "time_s")]
    ]
    # Constants of astropy are of another edition of CODATA; G alone differs by no more than 1e-5.
    assert age == pytest.approx(theirs.age(last).to_value("s"), rel=1e-5)
    assert age == pytest.approx(ours.cosmic_time_s(last), rel=1e-9)


def test_our_universe() -> None:
    """The values of Planck Collaboration 2020, A&A 641, A6, table 2 (from memory).

    Neutrinos are massless here, helium is neutral, line transfer is Sobolev's and n_max = 50. Four
    of five agree to 1e-3. Helium's electrons before z = 1800 would raise k_D by half a per cent.
    """
    planck = Cosmology(67.36, 0.02237, 0.14237, 2.7255, 0.2454, 3.046)
    setup = small_setup(
        50,
        cosmology=planck,
        grid={"redshift_start": 3000.0, "redshift_end": 20.0, "n_redshifts": 400},
    )
    history = solve(setup)
    log_x = CubicSpline(-np.log1p(history.redshift), np.log(history.free_electron_fraction))
    grid = quadrature(planck, -math.log(3001.0), -math.log(21.0))
    found = observe(planck, grid, np.exp(log_x(grid.points)))
    values = dict(zip(found.names, found.value.tolist(), strict=True))
    for name, published, within in (
        ("last_scattering_redshift", 1089.92, 1e-3),
        ("sound_horizon_mpc", 144.43, 1e-3),
        ("damping_per_mpc", 0.14090, 1e-2),
        ("drag_redshift", 1059.94, 1e-3),
        ("drag_horizon_mpc", 147.09, 1e-3),
    ):
        assert values[name] == pytest.approx(published, rel=within), name


def test_events_that_a_history_does_not_reach_are_no_numbers() -> None:
    def names_left(low: float, high: float) -> set[str]:
        grid = quadrature(COSMOLOGY, -math.log1p(high), -math.log1p(low))
        found = observe(COSMOLOGY, grid, fraction(grid.points), 1.0, (20.0, 500.0))
        for k in np.flatnonzero(np.isnan(found.value)):
            assert np.all(np.isnan(found.gradient[k]))
            assert np.all(np.isnan(found.by_parameter[k]))
        return {n for n, v in zip(found.names, found.value, strict=True) if np.isfinite(v)}

    visible = {"visibility_peak_redshift", "visibility_width"}
    assert names_left(30.0, 3000.0) == {*OBSERVABLES, "optical_depth(500)"}
    assert names_left(30.0, 400.0) == set()
    assert names_left(1500.0, 3000.0) == set()
    # x_e is still above 0.01 at z = 1090: the depth below is not known, but g is up to a factor.
    assert names_left(1090.0, 3000.0) == visible
    # The half that is missing below, then above.
    assert names_left(1170.0, 3000.0) == {"visibility_peak_redshift"}
    early = quadrature(COSMOLOGY, -math.log(1231.0), -math.log(31.0))
    found = observe(COSMOLOGY, early, fraction(early.points), names=tuple(visible)).value
    assert np.isfinite(found).tolist() == [name.endswith("redshift") for name in visible]


def test_depth_at_the_ends() -> None:
    grid = panels()
    found = observe(
        COSMOLOGY, grid, fraction(grid.points), 1.0, (END, 5000.0, END - 1.0, -2.0), names=()
    )
    assert found.value[0] == pytest.approx(0.0, abs=1e-15)
    assert np.isnan(found.value[1:]).all()
    assert found.names[0] == "optical_depth(30)"


def test_a_tabulated_expansion_does_not_move() -> None:
    z = np.concatenate([[0.0], np.geomspace(0.01, 4000.0, 400)])
    table = dataclasses.replace(
        COSMOLOGY,
        expansion_redshift=tuple(z.tolist()),
        expansion_hubble_rate_per_s=tuple(COSMOLOGY.hubble_rate_per_s(z).tolist()),
    )
    grid = panels()
    found = observe(table, grid, fraction(grid.points), 1.0, DEPTHS)
    np.testing.assert_allclose(found.value, seen().value, rtol=1e-6)  # the table's spline
    assert np.all(found.by_parameter[:, [0, 2, 5]] == 0.0)


@pytest.mark.parametrize("last", [3100.0, 5000.0])
def test_a_jump_of_the_expansion_where_its_table_ends(last: float) -> None:
    # One in a thousand faster inside the table than above, where the law of the parameters holds.
    z = np.concatenate([[0.0], np.geomspace(0.01, last, 2000)])
    table = dataclasses.replace(
        COSMOLOGY,
        expansion_redshift=tuple(z.tolist()),
        expansion_hubble_rate_per_s=tuple((1.001 * COSMOLOGY.hubble_rate_per_s(z)).tolist()),
    )
    grid = panels(table)
    found = observe(table, grid, fraction(grid.points), names=("drag_redshift", "drag_horizon_mpc"))
    drag, horizon = found.value
    above, whole = (Independent().sum_to(end, "sound") for end in (last, drag))
    assert horizon == pytest.approx(above + (whole - above) / 1.001, rel=SAME)


@pytest.mark.parametrize("wrong", [0.0, -1e-3, math.nan, math.inf])
def test_wrong_electron_fractions(wrong: float) -> None:
    grid = panels()
    ionized = fraction(grid.points)
    ionized[7] = wrong
    with pytest.raises(InputError, match=f"{len(grid.points)} positive numbers are needed"):
        observe(COSMOLOGY, grid, ionized)
    with pytest.raises(InputError, match="positive numbers are needed"):
        observe(COSMOLOGY, grid, ionized[:5])


def test_unknown_observable() -> None:
    grid = panels()
    with pytest.raises(InputError, match='observable "z_star" is not known; known are last_scatt'):
        observe(COSMOLOGY, grid, fraction(grid.points), names=("z_star",))


@pytest.mark.parametrize("ends", [(-3.0, -5.0), (-3.0, -3.0), (math.nan, -3.0), (-math.inf, -3.0)])
def test_wrong_ends(ends: tuple[float, float]) -> None:
    with pytest.raises(InputError, match="must be below end_s"):
        quadrature(COSMOLOGY, *ends)
