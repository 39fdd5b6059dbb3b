"""Levels: names, masses of one-electron ions, and the scaling of their rates with charge."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.constants as si

from levelnet.atomic.bound_bound import einstein_a
from levelnet.atomic.bound_free import (
    photoionization_cross_section,
    photoionization_rate,
    recombination_coefficient,
)
from levelnet.atomic.levels import hydrogenic_levels, level_name, reduced_mass_ratio
from levelnet.errors import InputError
from tests.tolerances import ROUND_OFF


def test_names() -> None:
    # Letters after f run without j (Russell, Shenstone & Turner 1929, Phys. Rev. 33, 900; from
    # memory).
    assert [level_name(8, l) for l in range(8)] == [f"8{x}" for x in "spdfghik"]
    assert level_name(60, 55) == "60[l=55]"


def test_masses_against_codata() -> None:
    deuteron_free = si.m_e / si.m_p
    assert reduced_mass_ratio(1) == pytest.approx(1.0 / (1.0 + deuteron_free), rel=ROUND_OFF)
    alpha = si.physical_constants["alpha particle mass"][0]
    assert reduced_mass_ratio(2) == pytest.approx(1.0 / (1.0 + si.m_e / alpha), rel=1e-12)
    # C5+: nucleus of carbon 12, 12 u less six electrons.
    carbon = 12.0 * si.u - 6.0 * si.m_e
    assert reduced_mass_ratio(6) == pytest.approx(1.0 / (1.0 + si.m_e / carbon), rel=1e-7)
    # Fe25+: 55.934936 u (Audi & Wapstra; from memory).
    iron = 55.934936 * si.u - 26.0 * si.m_e
    assert reduced_mass_ratio(26) == pytest.approx(1.0 / (1.0 + si.m_e / iron), rel=1e-7)


@pytest.mark.parametrize("charge", [2, 3, 6, 26, 30])
def test_scaling_with_charge(charge: int) -> None:
    # Hydrogenic scaling (Bethe & Salpeter 1957): A ~ Z^4 mu, sigma ~ Z^-2 mu^-2, alpha ~ Z
    # alpha(T/Z^2) with lengths in 1/mu: alpha(T) = Z (mu_1/mu)^2 alpha_1(T mu_1/(mu Z^2)).
    mass = reduced_mass_ratio(charge) / reduced_mass_ratio(1)
    ratio = einstein_a(4, 2, 3, 1, charge) / einstein_a(4, 2, 3, 1)
    assert ratio == pytest.approx(charge**4 * mass, rel=10 * ROUND_OFF)
    ratio = photoionization_cross_section(3, 1, 0.2, charge) / photoionization_cross_section(
        3, 1, 0.2
    )
    assert ratio == pytest.approx(charge**-2 * mass**-2, rel=10 * ROUND_OFF)
    hot = 5000.0 * charge**2 * mass
    ratio = recombination_coefficient(3, 1, hot, hot, charge) / recombination_coefficient(
        3, 1, 5000.0, 5000.0
    )
    assert ratio == pytest.approx(charge * mass**-2, rel=1e-12)


@pytest.mark.parametrize("charge", [0, -1, 31, 1.5, "2"])
def test_other_charges_are_refused(charge: object) -> None:
    with pytest.raises(InputError, match="allowed are whole numbers from 1 to 30"):
        einstein_a(2, 1, 1, 0, charge)  # type: ignore[arg-type]


def test_whole_numbers_may_come_as_floats() -> None:
    assert einstein_a(2.0, 1.0, 1.0, 0.0) == einstein_a(2, 1, 1, 0)
    with pytest.raises(InputError, match="whole numbers"):
        einstein_a(2.5, 1, 1, 0)


@pytest.mark.parametrize(
    "occupation", [lambda e: -1.0 + 0.0 * e, lambda e: np.nan * e, lambda e: np.ones(3), 5]
)
def test_an_impossible_field_is_refused(occupation: object) -> None:
    with pytest.raises(InputError, match="occupation"):
        photoionization_rate(2, 0, occupation=occupation)  # type: ignore[arg-type]


def test_level_index() -> None:
    levels = hydrogenic_levels(5)
    assert (levels.n[levels.index(4, 2)], levels.l[levels.index(4, 2)]) == (4, 2)
    with pytest.raises(InputError, match="not among the 15 levels"):
        levels.index(6, 0)
