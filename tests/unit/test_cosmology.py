"""The expanding universe against astropy, mpmath and textbook facts."""

from __future__ import annotations

import math
import pickle
from typing import Any

import mpmath
import numpy as np
import pytest
from astropy import constants as astropy_constants
from astropy import cosmology as ac
from astropy import units as u
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad

from levelnet import constants as const
from levelnet.atomic.species import Hydrogen
from levelnet.background import Cosmology
from levelnet.background.friedmann import HUBBLE_100_PER_S
from levelnet.background.neutrinos import energy_ratio, energy_ratio_slope
from levelnet.errors import InputError, RangeError
from levelnet.history.setup import Setup, parse_setup
from tests.tolerances import ROUND_OFF

REDSHIFT = np.array([0.0, 0.3, 1.0, 5.0, 20.0, 200.0, 1090.0, 3400.0, 1e5])
PLAIN = (68.0, 0.0224, 0.142)
# astropy shortens 7/8 (4/11)^(4/3) and its cgs conversions to 11 digits.
ASTROPY_DIGITS = 1e-11
# astropy integrates to 1.5e-8 of a Hubble time (scipy's absolute tolerance), of which the age at
# z = 1090 is 3e-5.
ASTROPY_AGE = {0.0: 1e-9, 10.0: 1e-6, 1090.0: 2e-6}


def ours(theirs: Any, **more: Any) -> Cosmology:
    """Our parameters of an astropy cosmology."""
    scale = (theirs.H0.value / 100.0) ** 2
    values = {
        "cmb_temperature_k": theirs.Tcmb0.value,
        "effective_neutrinos": float(theirs.Neff),
        "curvature_density": float(theirs.Ok0),
    }
    return Cosmology(theirs.H0.value, theirs.Ob0 * scale, theirs.Om0 * scale, **(values | more))


MODELS = [
    (ac.FlatLambdaCDM(68.0, 0.307, Tcmb0=2.7255, Neff=3.046, Ob0=0.048), {}),
    (ac.LambdaCDM(68.0, 0.307, 0.8, Tcmb0=2.7255, Neff=3.046, Ob0=0.048), {}),
    (ac.LambdaCDM(68.0, 0.307, 0.4, Tcmb0=2.9, Neff=2.5, Ob0=0.048), {}),
    (
        ac.w0waCDM(68.0, 0.307, 0.7, w0=-0.8, wa=0.3, Tcmb0=2.7255, Ob0=0.048),
        {"dark_energy_w0": -0.8, "dark_energy_wa": 0.3},
    ),
]
MODEL_NAMES = ["flat", "closed", "open", "w0wa"]


@pytest.mark.parametrize(("theirs", "more"), MODELS, ids=MODEL_NAMES)
def test_hubble_rate_is_that_of_astropy(theirs: Any, more: dict[str, float]) -> None:
    expected = theirs.H(REDSHIFT).to_value("1/s")
    assert ours(theirs, **more).hubble_rate_per_s(REDSHIFT) == pytest.approx(
        expected, rel=ASTROPY_DIGITS
    )


@pytest.mark.parametrize(("theirs", "more"), MODELS, ids=MODEL_NAMES)
def test_age_is_that_of_astropy(theirs: Any, more: dict[str, float]) -> None:
    cosmology = ours(theirs, **more)
    for redshift, tolerance in ASTROPY_AGE.items():
        expected = theirs.age(redshift).to_value("s")
        assert cosmology.cosmic_time_s(redshift) == pytest.approx(expected, rel=tolerance)


def test_conformal_time_gives_the_comoving_distance_of_astropy() -> None:
    theirs, more = MODELS[3]
    cosmology = ours(theirs, **more)
    distance = cosmology.conformal_time_mpc(0.0) - cosmology.conformal_time_mpc(1090.0)
    # scipy's default tolerance on a distance of 3 Hubble lengths.
    assert distance == pytest.approx(theirs.comoving_distance(1090.0).value, rel=1e-8)


def test_density_parameters_are_those_of_astropy() -> None:
    theirs, more = MODELS[1]
    found = ours(theirs, **more).density_parameters()
    assert found.baryons == pytest.approx(theirs.Ob0, rel=ROUND_OFF)
    assert found.dark_matter == pytest.approx(theirs.Odm0, rel=ROUND_OFF)
    assert found.photons == pytest.approx(theirs.Ogamma0, rel=ASTROPY_DIGITS)
    assert found.massless_neutrinos == pytest.approx(theirs.Onu0, rel=ASTROPY_DIGITS)
    assert found.massive_neutrinos == 0.0
    assert found.curvature == pytest.approx(theirs.Ok0, rel=ROUND_OFF)
    assert found.dark_energy == pytest.approx(theirs.Ode0, rel=ASTROPY_DIGITS)
    assert sum(found) == pytest.approx(1.0, rel=ROUND_OFF)


@pytest.mark.parametrize("masses_ev", [(0.01, 0.02, 0.06), (0.0, 0.0, 0.06), (1.0, 1.0, 1.0)])
def test_massive_neutrinos_agree_with_the_fit_of_astropy(masses_ev: tuple[float, ...]) -> None:
    # At N_eff = 3 both conventions for the temperature coincide. Komatsu et al. 2011 (ApJS 192, 18)
    # state their fit of the neutrino energy good to 3e-3 (from memory); neutrinos of 1 eV are up to
    # a third of all energy, and H goes with the square root.
    theirs = ac.FlatLambdaCDM(
        68.0, 0.307, Tcmb0=2.7255, Neff=3.0, Ob0=0.048, m_nu=list(masses_ev) * u.eV
    )
    cosmology = ours(theirs, neutrino_masses_ev=masses_ev)
    expected = theirs.H(REDSHIFT).to_value("1/s")
    assert cosmology.hubble_rate_per_s(REDSHIFT) == pytest.approx(expected, rel=5e-4)
    massive, massless = (
        cosmology.density_parameters().massive_neutrinos,
        cosmology.density_parameters().massless_neutrinos,
    )
    assert massive + massless == pytest.approx(theirs.Onu0, rel=3e-3)


def test_neutrino_masses_weigh_93_ev() -> None:
    # Omega h^2 = sum(m)/93.04 eV for three species that share N_eff = 3.046 (Planck Collaboration
    # 2014, A&A 571, A16, from memory); digits as published.
    cosmology = Cosmology(*PLAIN, neutrino_masses_ev=(0.5, 0.5, 0.5))
    weight = cosmology.density_parameters().massive_neutrinos * 0.68**2
    assert 1.5 / weight == pytest.approx(93.04, abs=0.06)


def fermi_dirac_energy(ratio: float) -> float:
    """Energy over the massless one, by scipy's general quadrature."""
    value, _ = quad(
        lambda x: x * x * math.hypot(x, ratio) / (math.exp(x) + 1.0),
        0.0,
        60.0,
        epsabs=0.0,
        epsrel=1e-13,
        limit=200,
    )
    return 120.0 / (7.0 * math.pi**4) * value


@pytest.mark.parametrize(
    "ratio", [1e-4, 9.99e-4, 1.001e-3, 0.03, 0.7, 3.1, 44.0, 999.0, 1001.0, 2e4]
)
def test_fermi_dirac_energy_is_the_integral(ratio: float) -> None:
    expected = fermi_dirac_energy(ratio)
    assert energy_ratio(ratio) == pytest.approx(expected, rel=1e-11)
    assert energy_ratio(np.array([ratio]))[0] == pytest.approx(expected, rel=1e-11)


@pytest.mark.parametrize("ratio", [9e-4, 0.02, 0.9, 7.0, 300.0, 2000.0])
def test_fermi_dirac_slope_is_the_integral(ratio: float) -> None:
    with mpmath.workdps(25):
        weight = mpmath.quad(
            lambda x: x**2 * ratio**2 / mpmath.sqrt(x * x + ratio**2) / (mpmath.exp(x) + 1),
            [0, min(ratio, 1.0), 3, 8, 20, 60],
        )
        total = mpmath.quad(
            lambda x: x**2 * mpmath.sqrt(x * x + ratio**2) / (mpmath.exp(x) + 1),
            [0, min(ratio, 1.0), 3, 8, 20, 60],
        )
        expected = float(weight / total)
    assert energy_ratio_slope(ratio) == pytest.approx(expected, abs=1e-9)
    assert energy_ratio_slope(np.array([ratio]))[0] == pytest.approx(expected, abs=1e-9)


VARIANTS = [
    {},
    {"curvature_density": -0.2},
    {"dark_energy_w0": -0.7, "dark_energy_wa": 0.6},
    {"dark_energy_w0": -5.0, "dark_energy_wa": -5.0},
    {"cmb_temperature_k": 0.1},
    {"cmb_temperature_k": 30.0},
]


@pytest.mark.parametrize("changes", VARIANTS, ids=str)
@pytest.mark.parametrize("redshift", [0.0, 0.4, 1090.0, 4e5, 8e8])
def test_times_are_exact_to_ten_digits(changes: dict[str, float], redshift: float) -> None:
    cosmology = Cosmology(*PLAIN, **changes)
    time_s, conformal_s = time_by_scipy(cosmology, redshift)
    assert cosmology.cosmic_time_s(redshift) == pytest.approx(time_s, rel=1e-10)
    conformal_mpc = conformal_s * const.SPEED_OF_LIGHT_CM_S / const.CM_PER_MPC
    assert cosmology.conformal_time_mpc(redshift) == pytest.approx(conformal_mpc, rel=1e-10)


def time_by_scipy(cosmology: Cosmology, redshift: float) -> tuple[float, float]:
    """Both times in s, from the density parameters alone, by scipy's adaptive quadrature."""
    omega = cosmology.density_parameters()
    w0, wa = cosmology.dark_energy_w0, cosmology.dark_energy_wa
    hubble = cosmology.hubble_km_s_mpc / 100.0 * HUBBLE_100_PER_S

    def inverse_rate(s: float) -> float:
        x = math.exp(s)
        dark = x ** (3.0 * (1.0 + w0 + wa)) * math.exp(-3.0 * wa * (1.0 - 1.0 / x))
        square = (omega.photons + omega.massless_neutrinos) * x**4 + omega.curvature * x**2
        square += (omega.baryons + omega.dark_matter) * x**3 + omega.dark_energy * dark
        return 1.0 / (hubble * math.sqrt(square))

    def total(power: int) -> float:
        panels = start + np.arange(36.0)
        return math.fsum(
            quad(lambda s: math.exp(power * s) * inverse_rate(s), low, low + 1.0,
                 epsabs=0.0, epsrel=1e-13)[0]
            for low in panels
        )  # fmt: skip

    start = math.log1p(redshift)
    return total(0), total(1)


@pytest.mark.parametrize("changes", [*VARIANTS, {"neutrino_masses_ev": (0.1, 0.3)}], ids=str)
def test_log_slope_is_the_derivative(changes: dict[str, Any]) -> None:
    cosmology = Cosmology(*PLAIN, **changes)
    for redshift in (0.2, 3.0, 150.0, 1100.0, 4000.0):
        x = math.log1p(redshift)
        # Fourth-order difference: truncation h^4/30 times a fifth derivative of at most some
        # thousands in the steepest dark energy; rounding 1e-13.
        h = 2e-3
        y = [math.log(cosmology.hubble_rate_per_s(math.expm1(x + k * h))) for k in (-2, -1, 1, 2)]
        expected = (y[0] - 8.0 * y[1] + 8.0 * y[2] - y[3]) / (12.0 * h)
        assert cosmology.hubble_log_slope(redshift) == pytest.approx(expected, abs=2e-8)


def test_log_slope_has_the_limits_of_radiation_and_matter() -> None:
    cosmology = Cosmology(*PLAIN)
    # Radiation alone H ~ (1+z)^2, matter alone (1+z)^(3/2) (Peebles 1993, from memory); the other
    # component is 1e-5 at z = 1e9, and at z = 30 radiation and Lambda are 1 % and 1e-4.
    assert cosmology.hubble_log_slope(1e9) == pytest.approx(2.0, abs=1e-5)
    assert cosmology.hubble_log_slope(30.0) == pytest.approx(1.5, abs=0.01)


@pytest.mark.parametrize("name", ["hubble_rate_per_s", "hubble_log_slope", "cosmic_time_s",
                                  "conformal_time_mpc", "radiation_temperature_k",
                                  "hydrogen_density_cm3"])  # fmt: skip
@pytest.mark.parametrize("masses_ev", [(), (0.06, 0.2)])
def test_arrays_and_numbers_agree(name: str, masses_ev: tuple[float, ...]) -> None:
    cosmology = Cosmology(*PLAIN, dark_energy_wa=0.1, neutrino_masses_ev=masses_ev)
    method = getattr(cosmology, name)
    grid = REDSHIFT.reshape(3, 3)
    values = method(grid)
    assert values.shape == grid.shape
    singles = [method(z) for z in REDSHIFT.tolist()]
    assert all(isinstance(one, float) for one in singles)
    # numpy's and the C library's exp, log and powers differ by an ulp or two, and the interpolation
    # of the neutrino slope divides by a grid step of 0.03.
    assert values.ravel() == pytest.approx(singles, rel=1e-12)
    assert method(3) == method(3.0) == method(np.float64(3.0)) == method(np.array(3.0))
    assert method(np.array([])).shape == (0,)


@pytest.mark.parametrize("bad", [-0.1, math.nan, math.inf, 1.1e9])
def test_redshift_outside_the_range_is_refused(bad: float) -> None:
    cosmology = Cosmology(*PLAIN)
    for redshift in (bad, np.array([1.0, bad])):
        with pytest.raises(RangeError, match=r"redshift = .*: allowed are 0 to 1e\+09"):
            cosmology.hubble_rate_per_s(redshift)


def test_hydrogen_density_from_constants_of_astropy() -> None:
    cosmology = Cosmology(70.0, 0.0224, 0.142, helium_mass_fraction=0.25)
    c = astropy_constants
    hubble = 100.0 * u.km / u.s / u.Mpc
    baryons = 0.0224 * 3.0 * hubble**2 / (8.0 * math.pi * c.G)
    expected = (0.75 * baryons / (c.m_p + c.m_e)).to_value("cm^-3")
    # G, m_p and m_e of the same CODATA edition, ten digits at least.
    assert cosmology.hydrogen_density_cm3(0.0) == pytest.approx(expected, rel=1e-9)
    assert cosmology.hydrogen_density_cm3(9.0) == pytest.approx(1e3 * expected, rel=1e-9)


def test_both_helium_fractions_keep_the_baryon_mass() -> None:
    mass_ratio = const.HELIUM_MASS_U / const.HYDROGEN_MASS_U
    by_mass = Cosmology(*PLAIN, helium_mass_fraction=0.2454)
    by_nucleon = Cosmology(*PLAIN, helium_nucleon_fraction=0.2454)
    # Definitions: Y = m_He n_He/rho_b; y = 4 n_He/(n_H + 4 n_He).
    ratio = by_mass.helium_ratio()
    assert mass_ratio * ratio / (1.0 + mass_ratio * ratio) == pytest.approx(0.2454, rel=ROUND_OFF)
    ratio = by_nucleon.helium_ratio()
    assert 4.0 * ratio / (1.0 + 4.0 * ratio) == pytest.approx(0.2454, rel=ROUND_OFF)
    mass_fraction = mass_ratio * ratio / (1.0 + mass_ratio * ratio)
    assert mass_fraction == pytest.approx(0.2441, abs=5e-5)
    same = Cosmology(*PLAIN, helium_mass_fraction=mass_fraction)
    assert by_nucleon.hydrogen_density_cm3(0.0) == pytest.approx(
        same.hydrogen_density_cm3(0.0), rel=ROUND_OFF
    )
    default = Cosmology(*PLAIN)
    assert default.helium_ratio() == Cosmology(*PLAIN, helium_mass_fraction=0.245).helium_ratio()


def test_facts_of_the_trade() -> None:
    cosmology = Cosmology(*PLAIN)
    # Number density of blackbody photons, 16 pi zeta(3) (kT/hc)^3 (any textbook); common practice:
    # about 1e9 of them per nucleus.
    wave = const.BOLTZMANN_ERG_K * 2.7255 / (const.PLANCK_ERG_S * const.SPEED_OF_LIGHT_CM_S)
    photons = 16.0 * math.pi * 1.2020569 * wave**3
    nuclei = cosmology.hydrogen_density_cm3(0.0) * (1.0 + cosmology.helium_ratio())
    assert 1e9 < photons / nuclei < 3e9
    # Common practice: hydrogen is neutral near 3000 K, 380,000 years after the Big Bang.
    assert cosmology.radiation_temperature_k(1090.0) == pytest.approx(2973.5, abs=0.1)
    kiloyears = cosmology.cosmic_time_s(1090.0) / const.SECONDS_PER_YEAR / 1e3
    assert 370.0 < kiloyears < 380.0
    # Age today 13.8 Gyr, matter and radiation equal near z = 3400 (common practice).
    assert cosmology.cosmic_time_s(0.0) / const.SECONDS_PER_YEAR == pytest.approx(13.8e9, rel=0.01)
    omega = cosmology.density_parameters()
    equality = (omega.baryons + omega.dark_matter) / (omega.photons + omega.massless_neutrinos)
    assert equality == pytest.approx(3400.0, rel=0.01)


BAD = [
    ({"cmb_temperature_k": 0.0}, "cmb_temperature_k = 0.0"),
    ({"baryon_density_h2": -0.02}, "baryon_density_h2 = -0.02"),
    ({"matter_density_h2": -0.1}, "matter_density_h2 = -0.1"),
    ({"matter_density_h2": 0.01}, "must not be below baryon_density_h2 = 0.02"),
    ({"hubble_km_s_mpc": 0.0}, "hubble_km_s_mpc = 0.0"),
    ({"hubble_km_s_mpc": math.nan}, "hubble_km_s_mpc = nan"),
    ({"helium_mass_fraction": 1.0}, "helium_mass_fraction = 1.0"),
    ({"helium_nucleon_fraction": -0.1}, "helium_nucleon_fraction = -0.1"),
    ({"helium_mass_fraction": 0.24, "helium_nucleon_fraction": 0.24}, "give one of them, not both"),
    ({"effective_neutrinos": -1.0}, "effective_neutrinos = -1.0"),
    ({"neutrino_masses_ev": (0.1, -0.1)}, "neutrino_masses_ev.1 = -0.1"),
    ({"neutrino_masses_ev": (0.1,), "effective_neutrinos": 0.0}, "leaves no neutrinos"),
    ({"dark_energy_w0": -0.5, "dark_energy_wa": 0.6}, "dark_energy_wa = 0.1 must not be above 0"),
    ({"hubble_km_s_mpc": 1000.0, "curvature_density": -1.0}, "H^2 is not positive at redshift 0."),
    ({"curvature_density": 2.0}, "curvature_density = 2.0"),
    ({"unknown": 1.0}, "unknown: unknown key"),
]


@pytest.mark.parametrize(("changes", "text"), BAD, ids=[text for _, text in BAD])
def test_bad_parameters_are_named_in_one_line(changes: dict[str, Any], text: str) -> None:
    values = dict(zip(("hubble_km_s_mpc", "baryon_density_h2", "matter_density_h2"),
                      (67.0, 0.02, 0.14), strict=True))  # fmt: skip
    with pytest.raises(InputError) as caught:
        Cosmology(**(values | changes))
    assert text in str(caught.value)
    assert "\n" not in str(caught.value)


def test_negative_dark_energy_is_allowed_while_the_universe_expands() -> None:
    # Omega_m = 2 in a flat universe: Lambda < 0, yet H^2 > 0 for all z >= 0.
    cosmology = Cosmology(50.0, 0.02, 0.5)
    assert cosmology.density_parameters().dark_energy == pytest.approx(-1.0, abs=1e-3)
    theirs = ac.LambdaCDM(50.0, 2.0, cosmology.density_parameters().dark_energy, Tcmb0=2.7255,
                          Neff=3.046, Ob0=0.08)  # fmt: skip
    expected = theirs.H(REDSHIFT).to_value("1/s")
    assert cosmology.hubble_rate_per_s(REDSHIFT) == pytest.approx(expected, rel=1e-10)


def test_more_than_three_species_share_alike() -> None:
    four = Cosmology(*PLAIN, effective_neutrinos=4.0, neutrino_masses_ev=(0.0, 0.0, 0.0, 0.3))
    three = Cosmology(*PLAIN, effective_neutrinos=3.0)
    assert four.density_parameters().massless_neutrinos == pytest.approx(
        three.density_parameters().massless_neutrinos, rel=ROUND_OFF
    )
    # Relativistic again early on, whatever the mass: N_eff = 4.
    massless = Cosmology(*PLAIN, effective_neutrinos=4.0)
    assert four.hubble_rate_per_s(1e8) == pytest.approx(massless.hubble_rate_per_s(1e8), rel=1e-9)


def test_records_are_equal_by_value_and_survive_pickling() -> None:
    cosmology = Cosmology(*PLAIN, neutrino_masses_ev=(0.06,))
    cosmology.cosmic_time_s(1090.0)  # fills what is kept inside
    again = pickle.loads(pickle.dumps(cosmology))
    assert again == cosmology
    assert hash(again) == hash(cosmology)
    assert again.cosmic_time_s(1090.0) == cosmology.cosmic_time_s(1090.0)
    assert cosmology != Cosmology(*PLAIN)


standard = st.builds(
    Cosmology,
    st.floats(50.0, 100.0),
    st.floats(0.005, 0.05),
    st.floats(0.05, 0.2),
    st.floats(2.0, 4.0),
    st.none() | st.floats(0.0, 0.9),
    st.floats(0.5, 6.0),
    neutrino_masses_ev=st.lists(st.floats(0.0, 1.0), max_size=3).map(tuple),
)


@given(standard)
def test_standard_models_expand_faster_in_the_past(cosmology: Cosmology) -> None:
    redshift = np.expm1(np.linspace(0.0, math.log(1e6), 200))
    rate = cosmology.hubble_rate_per_s(redshift)
    assert np.all(rate > 0.0)
    assert np.all(np.diff(rate) > 0.0)
    assert rate[0] == pytest.approx(
        cosmology.hubble_km_s_mpc / 100.0 * HUBBLE_100_PER_S, rel=ROUND_OFF
    )
    for time in (cosmology.cosmic_time_s(redshift), cosmology.conformal_time_mpc(redshift)):
        assert np.all(time > 0.0)
        assert np.all(np.diff(time) < 0.0)
    assert sum(cosmology.density_parameters()) == pytest.approx(1.0, rel=ROUND_OFF)


@given(standard)
def test_setups_read_back_equal(cosmology: Cosmology) -> None:
    setup = Setup(cosmology=cosmology, hydrogen=Hydrogen(n_max=5))
    assert parse_setup(setup.to_toml()).cosmology == cosmology


def test_setup_file_takes_every_key() -> None:
    text = """
        [cosmology]
        hubble_km_s_mpc = 68
        baryon_density_h2 = 0.0224
        matter_density_h2 = 0.142
        helium_nucleon_fraction = 0.2454
        curvature_density = 0.01
        dark_energy_w0 = -0.9
        dark_energy_wa = 0.1
        neutrino_masses_ev = [0.06, 0.0, 0.01]
        [hydrogen]
        n_max = 10
    """
    cosmology = parse_setup(text).cosmology
    assert cosmology == Cosmology(
        *PLAIN,
        helium_nucleon_fraction=0.2454,
        curvature_density=0.01,
        dark_energy_w0=-0.9,
        dark_energy_wa=0.1,
        neutrino_masses_ev=(0.06, 0.0, 0.01),
    )
    with pytest.raises(InputError, match=r"cosmology\.neutrino_masses_ev.*-1"):
        parse_setup(text.replace("0.01]", "-1.0]"))
