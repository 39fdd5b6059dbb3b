"""Two-photon decay and Raman scattering of ns and nd against explicit sums over states and limits.

The independent road is the sum over the bound p states and the integral over the continuum, the
initial radial functions from sympy and the dipole integrals as hypergeometric functions in mpmath.
"""

import functools
from fractions import Fraction

import mpmath as mp
import numpy as np
import pytest
import sympy
from sympy.physics.hydrogen import R_nl

import levelnet
from levelnet import constants as const
from levelnet.atomic import second_order
from levelnet.atomic.bound_bound import einstein_a, strength_scale
from levelnet.atomic.levels import hydrogenic_levels, ionization_scale_ev, reduced_mass_ratio
from levelnet.atomic.second_order import (
    level_energy_ev,
    lyman_resonances,
    raman_spectrum_per_s_hz,
    second_order_matrix_element,
    two_photon_spectrum_per_s_hz,
)
from levelnet.atomic.sturmian import (
    SturmianBasis,
    dipole_integrals,
    p_states,
    scaled_amplitude,
    virtual_states,
)
from levelnet.atomic.two_photon import two_photon_profile
from levelnet.errors import InputError, RangeError

LEVELS = [(2, 0), (3, 0), (3, 2), (4, 0), (4, 2), (7, 0), (7, 2), (10, 0), (10, 2)]
# Intermediate bound states below this n' are summed one by one.
ONE_BY_ONE = 30
DIGITS = 30


def hertz(energy_ev):
    return energy_ev / const.PLANCK_EV_S


@functools.cache
def radial_polynomial(n, l):
    """Powers and coefficients of r R_nl(r) exp(r/n), from sympy."""
    r = sympy.Symbol("r", positive=True)
    function = sympy.expand(sympy.simplify(R_nl(n, l, r, 1) * r * sympy.exp(r / n)))
    terms = sympy.Poly(function, r).terms()
    return [(power, mp.mpf(str(sympy.N(value, DIGITS)))) for (power,), value in terms]


def dipole(n, l, nu):
    """Integral <nl|r|p> over r^2 exp(-r/nu) 1F1(2 - nu; 4; 2r/nu); nu = i/k in the continuum.

    Term by term int r^m e^(-sr) 1F1(a; 4; br) dr = m! s^-(m+1) 2F1(a, m+1; 4; b/s); Landau &
    Lifshitz 1977, Quantum Mechanics, appendix f (from memory).
    """
    decay = mp.mpf(1) / n + 1 / nu
    return mp.fsum(
        value
        * mp.gamma(power + 4)
        / decay ** (power + 4)
        * mp.hyp2f1(2 - nu, power + 4, 4, 2 / (nu * decay), zeroprec=200)
        for power, value in radial_polynomial(n, l)
    )


@functools.cache
def bound_product(n, l, middle):
    """R(1s,n'p) R(n'p,nl), with the norm of 1F1 (Bethe & Salpeter 1957, sec. 3; from memory)."""
    nu = mp.mpf(middle)
    return mp.mpf(4) / 9 * (nu**2 - 1) / nu**5 * dipole(1, 0, nu) * dipole(n, l, nu)


@functools.cache
def continuum_product(n, l, k):
    """The same per hartree at electron momentum k (Bethe & Salpeter 1957, sec. 4; from memory)."""
    norm = mp.mpf(4) / 9 * (k**2 + 1) / (1 - mp.exp(-2 * mp.pi / k))
    return norm * mp.re(dipole(1, 0, mp.mpc(0, 1 / k)) * dipole(n, l, mp.mpc(0, 1 / k)))


def tail(term):
    """Sum of a function of n' from ONE_BY_ONE to infinity that is n'^-3 times a series in n'^-2.

    Ten terms of the series, from ten values; then each term is a Hurwitz zeta function.
    """
    places = range(ONE_BY_ONE, 2 * ONE_BY_ONE, 3)
    powers = range(3, 3 + 2 * len(places), 2)
    matrix = mp.matrix([[mp.mpf(place) ** -power for power in powers] for place in places])
    series = mp.lu_solve(matrix, mp.matrix([term(place) for place in places]))
    return mp.fsum(c * mp.zeta(p, ONE_BY_ONE) for c, p in zip(series, powers, strict=True))


def explicit_matrix_element(n, l, photon):
    """M in a.u.; the harder photon in units of the ionization energy of 1s."""
    energy, gap = mp.mpf(photon) / 2, (1 - mp.mpf(1) / n**2) / 2

    def propagator(state):
        return 1 / (state + 0.5 - energy) + 1 / (state + 0.5 - gap + energy)

    def bound(middle):
        return bound_product(n, l, middle) * propagator(-mp.mpf(1) / (2 * middle**2))

    def ionized(k):
        return k * continuum_product(n, l, k) * propagator(k**2 / 2)

    first = mp.fsum(bound(middle) for middle in range(2, ONE_BY_ONE))
    with mp.workdps(15):
        ionized_part = mp.quad(ionized, [0, 0.25, 0.5, 1, 2, 6, mp.inf])
    return first + tail(bound) + ionized_part


@pytest.mark.parametrize(
    ("n", "l", "photons"),
    [
        (2, 0, (0.4, 0.6, 0.74, 0.7501, 0.85, 0.97)),
        (3, 0, (0.5, 0.74, 0.76, 0.85, 0.92, 0.97)),
        (3, 2, (0.5, 0.74, 0.76, 0.85, 0.92, 0.97)),
        (4, 0, (0.6, 0.8, 0.9, 0.97)),
        (4, 2, (0.6, 0.8, 0.9, 0.97)),
    ],
)
def test_matrix_element_equals_the_explicit_sum_over_states(n, l, photons):
    with mp.workdps(DIGITS):
        expected = [float(explicit_matrix_element(n, l, photon)) for photon in photons]
    energy_ev = np.array(photons) * ionization_scale_ev()
    # Signs included. Rounding: 1e-12 seen, and 1e-11 stated for high bound states.
    got = second_order_matrix_element(n, l, energy_ev)
    np.testing.assert_allclose(got, expected, rtol=1e-11)
    # The formula of the rate, in cgs and on frequency (closed form).
    w = 0.5 * np.array(photons)
    other = 0.5 - 0.5 / n**2 - w
    rate = 16 / 27 * const.FINE_STRUCTURE**6 * (0.4 if l else 1.0) * np.abs(w * other) ** 3
    rate *= np.array(expected) ** 2
    decay = other > 0
    spectrum = two_photon_spectrum_per_s_hz(n, l, energy_ev[decay])
    np.testing.assert_allclose(spectrum, rate[decay], rtol=1e-10)
    spectrum = raman_spectrum_per_s_hz(n, l, energy_ev[~decay])
    np.testing.assert_allclose(spectrum, rate[~decay], rtol=1e-10)


def total_per_s(n, l, lowest_intermediate):
    """Integral over the upper half, for an infinitely heavy nucleus."""
    nodes, weights = np.polynomial.legendre.leggauss(40)
    energy_ev = level_energy_ev(n) * (0.5 + 0.25 * (nodes + 1.0))
    spectrum = two_photon_spectrum_per_s_hz(n, l, energy_ev, lowest_intermediate)
    return 0.25 * weights @ spectrum * hertz(level_energy_ev(n)) / reduced_mass_ratio()


def test_published_totals():
    # Klarsfeld 1969, Phys. Lett. A 30, 382: 8.2293 (from memory).
    assert total_per_s(2, 0, 2) == pytest.approx(8.2293, abs=6e-5)
    # Chluba & Sunyaev 2008, A&A 480, 629: 10.556 without the cascades (from memory).
    assert total_per_s(3, 0, 3) == pytest.approx(10.556, abs=6e-4)


def test_2s_is_the_profile_of_two_photon():
    # Another basis: 18 functions with another exponent.
    y = np.linspace(0.0, 1.0, 101)
    spectrum = two_photon_spectrum_per_s_hz(2, 0, y * level_energy_ev(2))
    profile = two_photon_profile(y) / hertz(level_energy_ev(2))
    np.testing.assert_allclose(spectrum, profile, rtol=1e-12)


RESONANCES = [(n, l, k) for n, l in LEVELS for k in (2, 3, 4, 5, 8, 9, 12, 25, 49) if k != n]


@pytest.mark.parametrize(("n", "l", "middle"), RESONANCES)
def test_poles_are_products_of_one_photon_rates(n, l, middle):
    # Closed form: the cascade of two lines. The mean of both sides has no interference term; what
    # is left goes with the square of the distance over that to the next pole, 2 chi/n'^3.
    at_ev, strength = lyman_resonances(n, l, middle)
    step = 2e-4 * ionization_scale_ev() / middle**3
    spectrum = two_photon_spectrum_per_s_hz if middle < n else raman_spectrum_per_s_hz
    sides = spectrum(n, l, at_ev + step * np.array([-1.0, 1.0]))
    assert hertz(step) ** 2 * sides.mean() == pytest.approx(strength, rel=1e-5)


def test_poles_in_einstein_coefficients():
    # A(3s-2p) A(2p-1s)/(2 pi)^2, and 3 A(3p-2s) A(3p-1s)/(2 pi)^2 for absorption 2s-3p.
    cascade = einstein_a(3, 0, 2, 1) * einstein_a(2, 1, 1, 0) / (4 * np.pi**2)
    assert lyman_resonances(3, 0, 2).strength_per_s2 == pytest.approx(cascade, rel=1e-14)
    raman = 3 * einstein_a(3, 1, 2, 0) * einstein_a(3, 1, 1, 0) / (4 * np.pi**2)
    assert lyman_resonances(2, 0, 3).strength_per_s2 == pytest.approx(raman, rel=1e-14)
    several = lyman_resonances(5, 2, np.array([[2, 3], [4, 6]]))
    assert several.strength_per_s2.shape == several.photon_energy_ev.shape == (2, 2)
    lyman_ev = hydrogenic_levels(6).energy_ev[hydrogenic_levels(6).l == 1]
    np.testing.assert_array_equal(several.photon_energy_ev.ravel(), lyman_ev[[0, 1, 2, 4]])


def test_interference_is_opposite_for_3s_and_3d():
    # Chluba & Sunyaev 2008, A&A 480, 629 (from memory): the red wing of Lyman-alpha is lowered for
    # one and raised for the other, relative to the blue wing.
    at_ev = level_energy_ev(2)
    wings = at_ev + np.array([-0.05, 0.05])
    red, blue = two_photon_spectrum_per_s_hz(3, 0, wings)
    red_3d, blue_3d = two_photon_spectrum_per_s_hz(3, 2, wings)
    assert red < blue
    assert red_3d > blue_3d
    # M changes its sign at the pole.
    for l in (0, 2):
        assert np.prod(np.sign(second_order_matrix_element(3, l, wings))) == -1


@pytest.mark.parametrize(("n", "l"), LEVELS)
def test_both_photons_are_alike(n, l):
    gap = level_energy_ev(n)
    energy_ev = np.random.default_rng(3).uniform(0.0, gap, 300)
    got, mirror = (two_photon_spectrum_per_s_hz(n, l, one) for one in (energy_ev, gap - energy_ev))
    # Rounding of the energy counts next to poles.
    poles = np.append(level_energy_ev(np.arange(2, n)), np.inf)
    nearest = np.abs(np.stack([energy_ev, gap - energy_ev])[..., None] - poles).min(axis=(0, 2))
    rounding = 1e-14 * (1.0 + gap / nearest)
    scale = np.maximum(got, 1e-4 * np.median(got))
    assert np.all(np.abs(got - mirror) < rounding * 10.0 * scale)


def radial_integral_of_1s(n):
    """R(1s,np), from the Einstein coefficient."""
    omega = 0.5 - 0.5 / n**2
    return np.sqrt(3.0 * einstein_a(n, 1, 1, 0) / strength_scale() / omega**3)


@pytest.mark.parametrize(("n", "l"), LEVELS)
def test_soft_photons(n, l):
    # Closed form: only np counts, and R(np,nl) = -(3/2) n sqrt(n^2 - l_>^2) (Bethe & Salpeter 1957,
    # sec. 63; from memory), so that dW/dnu goes with the energy of the softer photon.
    gap = 0.5 - 0.5 / n**2
    inside = 1.5 * n * np.sqrt(n**2 - max(l, 1) ** 2)
    slope = 16 / 27 * const.FINE_STRUCTURE**6 * gap**4 * (0.4 if l else 1.0)
    slope *= (radial_integral_of_1s(n) * inside) ** 2
    soft = 1e-10
    at_ev = level_energy_ev(n)
    for spectrum, y in (
        (two_photon_spectrum_per_s_hz, soft),
        (two_photon_spectrum_per_s_hz, 1.0 - soft),
        (raman_spectrum_per_s_hz, 1.0 + soft),
    ):
        # 1 - 1e-10 is known to 1e-6 in double precision; n' = 9 and 11 are near where n = 10.
        assert spectrum(n, l, y * at_ev) / soft == pytest.approx(slope, rel=2e-6)
    assert two_photon_spectrum_per_s_hz(n, l, 0.0) == 0.0
    assert two_photon_spectrum_per_s_hz(n, l, at_ev) == 0.0
    assert raman_spectrum_per_s_hz(n, l, at_ev) == 0.0


@pytest.mark.parametrize(("n", "l"), LEVELS)
def test_raman_continues_two_photon_decay(n, l):
    # One analytic function of the softer photon, w -> -w: a polynomial through points on both sides
    # gives the values between, signs included.
    width = 0.3 * (1.0 / n**2 - 1.0 / (n + 1) ** 2) * ionization_scale_ev()
    nodes = np.polynomial.chebyshev.chebpts1(30)
    # M times both energies, which is finite at Delta.
    at_ev = level_energy_ev(n)

    def product(x):
        return second_order_matrix_element(n, l, at_ev + width * x) * x * (at_ev + width * x)

    series = np.polynomial.chebyshev.chebfit(nodes, product(nodes), 29)
    between = np.array([-0.93, -0.4, -0.02, 0.03, 0.5, 0.96])
    expected = np.polynomial.chebyshev.chebval(between, series)
    np.testing.assert_allclose(product(between), expected, rtol=1e-8)


@pytest.mark.parametrize("n", [1, 2, 3, 5, 10])
def test_sum_rules_in_the_basis(n):
    energy, vectors = p_states(second_order._BASIS)
    squared = (dipole_integrals(n, 0, second_order._BASIS) @ vectors) ** 2
    excess = energy + 0.5 / n**2
    # Thomas, Reiche & Kuhn 1925: the oscillator strengths of ns sum to 1.
    assert 2.0 / 3.0 * excess @ squared == pytest.approx(1.0, rel=1e-10)
    # Completeness: <ns|r^2|ns> = n^2 (5 n^2 + 1)/2 (Bethe & Salpeter 1957, sec. 3; from memory).
    assert squared.sum() == pytest.approx(n**2 * (5 * n**2 + 1) / 2, rel=1e-10)
    if n > 2:
        # Wigner 1931, Kirkwood 1932: those of nl -> l - 1 sum to -l (2l - 1)/(3 (2l + 1)).
        squared = (dipole_integrals(n, 2, second_order._BASIS) @ vectors) ** 2
        assert 4.0 / 15.0 * excess @ squared == pytest.approx(-float(Fraction(2, 5)), rel=1e-10)


def test_bound_states_of_the_basis():
    # Closed form to 60p, ten above the highest resonance that is allowed.
    energy, _ = p_states(second_order._BASIS)
    np.testing.assert_array_equal(energy[:59], -0.5 / np.arange(2.0, 61.0) ** 2)
    assert np.all(np.diff(energy) > 0.0)


def away_from_poles(n, lowest, highest):
    """Fractions of Delta between the resonances, not next to one."""
    edges = level_energy_ev(np.arange(lowest, highest + 1)) / level_energy_ev(n)
    return np.concatenate([edges[:-1] + part * np.diff(edges) for part in (0.2, 0.5, 0.8)])


@pytest.mark.parametrize(("n", "l"), LEVELS)
def test_another_basis_gives_the_same(n, l):
    # Scale and size of the basis are arbitrary. The limit is twice what the docstring says, for two
    # bases err here; it is of the sum of magnitudes, for the terms cancel.
    y = np.concatenate([np.linspace(0.5, 0.7, 9), away_from_poles(n, 2, 50)])
    states = virtual_states(n, l, second_order._BASIS)
    reference = scaled_amplitude(states, y)
    terms = states.weight / ((states.pole - y[:, None]) * (states.pole - 1.0 + y[:, None]))
    size = abs(states.degenerate) + np.abs(y * (1.0 - y)) * np.abs(terms).sum(axis=1)
    for basis in (SturmianBasis(0.11, 320), SturmianBasis(0.14, 300)):
        error = np.abs(scaled_amplitude(virtual_states(n, l, basis), y) - reference)
        assert np.all(error < 1e-10 * size)


@pytest.mark.parametrize(("n", "l"), [(2, 0), (3, 0), (3, 2), (10, 2)])
def test_convergence_with_the_size_of_the_basis(n, l):
    y = np.linspace(0.5, 0.7, 9)
    reference = scaled_amplitude(virtual_states(n, l, second_order._BASIS), y)
    errors = [
        np.max(
            np.abs(
                scaled_amplitude(virtual_states(n, l, SturmianBasis(0.4, size)), y) / reference
                - 1.0
            )
        )
        for size in (20, 30, 40, 80)
    ]
    # Geometric: 1s needs (1 - 0.2)/(1 + 0.2) = 2/3 per function, its square in M.
    assert errors[1] < 0.1 * errors[0] and errors[2] < 0.1 * errors[1]
    assert errors[3] < 1e-10


def test_left_out_states_are_the_cascades():
    # What is left out is the sum over those states alone, here with the explicit products.
    n, l, photon = 4, 2, 0.6
    energy, gap = 0.5 * photon, 0.5 - 0.5 / n**2
    left_out = sum(
        float(bound_product(n, l, k))
        * (1 / (0.5 - 0.5 / k**2 - energy) + 1 / (0.5 - 0.5 / k**2 - gap + energy))
        for k in (2, 3)
    )
    at_ev = photon * ionization_scale_ev()
    rest = second_order_matrix_element(n, l, at_ev) - left_out
    whole, part = (two_photon_spectrum_per_s_hz(n, l, at_ev, lowest) for lowest in (2, 4))
    expected = (rest / second_order_matrix_element(n, l, at_ev)) ** 2
    assert part / whole == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(("n", "l"), LEVELS)
def test_spectra_are_positive_and_finite_off_the_poles(n, l):
    decay = np.random.default_rng(5).uniform(0.0, level_energy_ev(n), (40, 25))
    raman = np.random.default_rng(6).uniform(level_energy_ev(n), level_energy_ev(50), (40, 25))
    for spectrum, energy_ev in (
        (two_photon_spectrum_per_s_hz, decay),
        (raman_spectrum_per_s_hz, raman),
    ):
        values = spectrum(n, l, energy_ev)
        assert values.shape == (40, 25)
        assert np.all((values > 0.0) & np.isfinite(values))


def test_at_a_pole_no_warning_and_no_nan():
    # Warnings are errors in the tests.
    at_ev = level_energy_ev(np.arange(2, 51))
    assert np.all(two_photon_spectrum_per_s_hz(10, 2, at_ev[:8]) > 1e3)
    assert np.all(raman_spectrum_per_s_hz(2, 0, at_ev[1:]) > 1.0)
    assert np.all(np.abs(second_order_matrix_element(3, 0, at_ev)) > 1e8)
    assert np.isinf(second_order_matrix_element(3, 0, 0.0))


def test_energies_of_the_level_set_are_inside():
    # The ends of the range are those of the levels, to the last bit.
    levels = hydrogenic_levels(10)
    for n, l in LEVELS:
        end_ev = levels.energy_ev[levels.index(n, l)]
        assert two_photon_spectrum_per_s_hz(n, l, end_ev) == 0.0
        assert raman_spectrum_per_s_hz(n, l, end_ev) == 0.0


def test_scalars_in_scalars_out():
    assert np.shape(two_photon_spectrum_per_s_hz(3, 2, 8.0)) == ()
    assert np.shape(lyman_resonances(3, 2, 2).strength_per_s2) == ()
    assert levelnet.raman_spectrum_per_s_hz is raman_spectrum_per_s_hz


@pytest.mark.parametrize(("n", "l"), [(1, 0), (2, 1), (3, 1), (4, 3), (11, 0), (2, 2), (3, -1)])
def test_refuses_other_levels(n, l):
    for function, last in (
        (two_photon_spectrum_per_s_hz, 8.0),
        (raman_spectrum_per_s_hz, 13.0),
        (second_order_matrix_element, 8.0),
        (lyman_resonances, 5),
    ):
        with pytest.raises(InputError, match=f"n = {n}, l = {l}.*allowed"):
            function(n, l, last)


def test_levels_are_single_whole_numbers():
    assert two_photon_spectrum_per_s_hz(3.0, 2.0, 8.0) == two_photon_spectrum_per_s_hz(3, 2, 8.0)
    with pytest.raises(InputError, match="single numbers"):
        raman_spectrum_per_s_hz([3, 4], 0, 13.0)
    with pytest.raises(InputError, match="whole numbers"):
        raman_spectrum_per_s_hz(3.5, 0, 13.0)


@pytest.mark.parametrize("energy_ev", [-1.0, 12.0, np.nan, np.inf])
def test_two_photon_refuses_energies_outside(energy_ev):
    with pytest.raises(RangeError, match=r"photon_energy_ev = .*allowed are 0 to 10.198715 eV"):
        two_photon_spectrum_per_s_hz(2, 0, [5.0, energy_ev])


@pytest.mark.parametrize("energy_ev", [-1.0, 10.0, 13.597, 20.0, np.nan])
def test_raman_refuses_energies_outside(energy_ev):
    with pytest.raises(RangeError, match=r"allowed are 10.198715 to 13.592848 eV"):
        raman_spectrum_per_s_hz(2, 0, [11.0, energy_ev])


def test_refuses_intermediate_levels():
    with pytest.raises(InputError, match="n_intermediate = 3: no pole"):
        lyman_resonances(3, 0, [2, 3])
    with pytest.raises(InputError, match="intermediate level: n = 1, l = 1"):
        lyman_resonances(3, 0, 1)
    for lowest in (1, 4, 2.5):
        with pytest.raises(InputError, match=f"lowest_intermediate = {lowest}: allowed are 2 to n"):
            two_photon_spectrum_per_s_hz(3, 0, 8.0, lowest)
