from __future__ import annotations

import numpy as np
import pytest

from levelnet import effective_rates
from levelnet.atomic.physics import UNCHANGED, Physics, scales
from levelnet.errors import InputError, RangeError
from tests.small_runs import small_setup
from tests.tolerances import ROUND_OFF

SETUP = small_setup(6)


def names(kept: object) -> list[tuple[int, int]]:
    return list(zip(kept.n.tolist(), kept.l.tolist(), strict=True))  # type: ignore[attr-defined]


def test_default_keeps_what_talks_to_the_ground_state() -> None:
    rates = effective_rates(SETUP, 3000.0, 2900.0)
    assert names(rates.kept_levels) == [(2, 0), (2, 1)]
    two_lines = small_setup(6, lines={"lyman_lines": 2})
    assert names(effective_rates(two_lines, 3e3, 3e3).kept_levels) == [(2, 0), (2, 1), (3, 1)]


def test_shapes_follow_the_temperatures() -> None:
    assert effective_rates(SETUP, 3000.0, 2900.0).exchange.shape == (2, 2)
    radiation, matter = np.array([[300.0], [3000.0]]), np.array([100.0, 900.0, 2900.0])
    many = effective_rates(SETUP, radiation, matter)
    assert many.recombination.shape == (2, 3, 2)
    assert many.exchange.shape == (2, 3, 2, 2)
    for i, j in ((0, 0), (1, 2)):
        one = effective_rates(SETUP, radiation[i, 0], matter[j])
        # The same sums, of one and of three columns: rounding of the product may differ.
        assert many.log_recombination[i, j] == pytest.approx(one.log_recombination, rel=ROUND_OFF)
        assert np.array_equal(many.log_photoionization[i, j], one.log_photoionization)
        assert np.array_equal(many.log_exchange[i, j], one.log_exchange)


def test_logarithms_outlive_the_rates() -> None:
    cold = effective_rates(SETUP, 25.0, 25.0)
    assert not cold.exchange.any()
    off = ~np.eye(2, dtype=bool)
    assert np.isfinite(cold.log_exchange[off]).all()
    assert np.isneginf(np.diagonal(cold.log_exchange)).all()
    assert np.isfinite(cold.log_photoionization).all()


def test_barrier_is_the_climb_from_2_to_4() -> None:
    # Two photons of odd parity each lead from 2s to 2p, and n = 3 offers one only (3p falls to 2s,
    # 3s and 3d to 2p): the least climb is that of H-beta, 20564.8 cm^-1 (from memory) = 29588 K.
    cold = effective_rates(SETUP, [25.0, 26.0], 25.0).log_exchange[:, 1, 0]
    climb = (cold[1] - cold[0]) / (1 / 25.0 - 1 / 26.0)
    # What is left is a power of T: a few T of 29588.
    assert climb == pytest.approx(29588.0, rel=2e-4)


def test_no_interior_no_exchange() -> None:
    rates = effective_rates(small_setup(2), 3000.0, 3000.0)
    assert np.isneginf(rates.log_exchange).all()
    assert not rates.exchange.any()


def test_arrays_are_read_only() -> None:
    rates = effective_rates(SETUP, 3000.0, 3000.0)
    with pytest.raises(ValueError, match="read-only"):
        rates.log_recombination[0] = 0.0


@pytest.mark.parametrize(
    ("kept", "message"),
    [
        ([(2, 0)], r"\(n, l\) = \(2, 1\) is missing"),
        ([(2, 0), (2, 1), (7, 0)], r"kept = \(7, 0\): allowed are .* 2 <= n <= 6"),
        ([(2, 0), (2, 1), (3, 3)], r"kept = \(3, 3\)"),
        ([(2, 0), (2, 1), (1, 0)], r"kept = \(1, 0\)"),
        (["2s"], "kept: give pairs"),
        ([2, 3], "kept: give pairs"),
    ],
)
def test_bad_choice_of_levels_is_one_line(kept: list[tuple[int, int]], message: str) -> None:
    with pytest.raises(InputError, match=message) as caught:
        effective_rates(SETUP, 3000.0, 3000.0, kept)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("bad", [0.0, -1.0, 1e6, np.nan, np.inf])
def test_temperatures_out_of_range(bad: float) -> None:
    with pytest.raises(RangeError, match=r"radiation_temperature_k = .*allowed are 0.02 to 100000"):
        effective_rates(SETUP, bad, 3000.0)
    with pytest.raises(RangeError, match="matter_temperature_k"):
        effective_rates(SETUP, 3000.0, bad)


def test_an_atom_too_large_is_refused_before_any_work(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("levelnet.history.cost.available_memory_bytes", lambda: 2e9)
    with pytest.raises(InputError, match=r"hydrogen.n_max = 1000: about .* needed"):
        effective_rates(small_setup(1000), 3000.0, 3000.0)


def test_scales_are_one_without_change_and_powers_with() -> None:
    assert scales(Physics()) == UNCHANGED
    a, ratio = 1.1, 1.0 / 1836.152673426  # proton over electron mass, CODATA 2022 (scipy)
    by_alpha = scales(Physics(fine_structure_change=0.1))
    assert by_alpha.energy == pytest.approx(a**2, rel=ROUND_OFF)
    assert by_alpha.line_rate == pytest.approx(a**5, rel=ROUND_OFF)
    assert by_alpha.two_photon_rate == pytest.approx(a**8, rel=ROUND_OFF)
    by_mass = scales(Physics(electron_mass_change=0.1))
    reduced = 1.1 * (1.0 + ratio) / (1.0 + 1.1 * ratio)
    assert by_mass.reduced_mass == pytest.approx(reduced, rel=1e-13)
    assert by_mass.recombination == pytest.approx(reduced**-2, rel=1e-13)
    assert by_mass.compton_rate == pytest.approx(1.1**-3, rel=ROUND_OFF)
    assert by_mass.thomson == pytest.approx(1.1**-2, rel=ROUND_OFF)


@pytest.mark.parametrize("key", ["fine_structure_change", "electron_mass_change"])
@pytest.mark.parametrize("value", [0.21, -0.21, float("nan")])
def test_changes_out_of_range(key: str, value: float) -> None:
    with pytest.raises(InputError, match=f"{key} = "):
        small_setup(5, physics={key: value})
