"""Estimates of memory and time, and the refusal of what cannot fit."""

from __future__ import annotations

import builtins
import io
import math
from typing import Any

import pytest

from levelnet.background.cosmology import Cosmology
from levelnet.distilled.build import coldest_node_k, default_range_k
from levelnet.errors import InputError
from levelnet.history import cost
from levelnet.history.cost import (
    check_memory,
    coldest_reduction_k,
    estimate,
    lattice_below_k,
    table_tolerance,
)
from levelnet.history.setup import Setup
from levelnet.network.assembly import COLD_K
from tests.small_helium import helium_setup
from tests.small_runs import small_setup


def test_estimates_grow_with_the_atom() -> None:
    costs = [estimate(small_setup(n)) for n in (10, 100, 300, 1000)]
    memory = [c.memory_bytes for c in costs]
    seconds = [c.seconds for c in costs]
    assert memory == sorted(memory)
    assert seconds == sorted(seconds)
    # n^4 of the factorization: at least n^3.5 from 300 to 1000.
    assert seconds[3] / seconds[2] > (1000 / 300) ** 3.5
    # Strengths of every line alone: n^3/3 numbers.
    assert memory[3] > 8e9 / 3.0


def test_whole_shells_cost_less_than_what_they_stand_for() -> None:
    full = estimate(small_setup(300))
    some = [estimate(small_setup(300, hydrogen={"resolve_l_to": n})) for n in (10, 50, 150)]
    assert [c.seconds for c in some] == sorted(c.seconds for c in some)
    assert all(c.seconds < full.seconds and c.memory_bytes < full.memory_bytes for c in some)
    # The strengths of every line, n^3/3 numbers, are needed to average them.
    assert all(c.memory_bytes > 8 * 300**3 / 3.0 for c in some)
    assert estimate(small_setup(300, hydrogen={"resolve_l_to": 300})) == full


def test_populations_are_counted() -> None:
    few, many = (estimate(small_setup(100, count=n)).memory_bytes for n in (2, 10002))
    # Population, departure: at least two arrays of 5050 levels.
    assert many - few > 10_000 * 5050 * 2 * 8
    listed = small_setup(
        100, grid={"redshift_start": 1800.0, "redshift_end": 20.0, "redshifts": (1000.0, 900.0)}
    )
    assert estimate(listed).memory_bytes == few


def test_helium_is_counted() -> None:
    small = {"hydrogen": {"n_max": 10}, "grid": {"redshift_start": 8000.0, "n_redshifts": 10}}
    none, few, many = (
        estimate(helium_setup(n, **{k: dict(v) for k, v in small.items()})) for n in (0, 10, 100)
    )
    assert none.memory_bytes < few.memory_bytes < many.memory_bytes
    assert none.seconds < few.seconds < many.seconds
    # Cross sections alone: 10099 terms on 100 nodes.
    assert many.memory_bytes - none.memory_bytes > 10_099 * 100 * 8
    slow = estimate(helium_setup(10, lines={"helium": "continuum"}))
    plain = estimate(helium_setup(10))
    assert slow.seconds > plain.seconds
    saha = estimate(helium_setup(100, helium={"helium_ion": "saha"}))
    assert saha.seconds < estimate(helium_setup(100)).seconds


def test_helium_that_is_not_there_costs_nothing() -> None:
    bare = Cosmology(68.0, 0.0224, 0.142, helium_mass_fraction=0.0)
    with_levels, without = (Setup(bare, {"n_max": 8}, {"n_max": n}) for n in (50, 0))
    assert estimate(with_levels) == estimate(without)


def test_memory_refused_names_both_atoms(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cost, "available_memory_bytes", lambda: 2.5e8)
    with pytest.raises(InputError, match=r"hydrogen.n_max = 8, helium.n_max = 30: about \d+ MB"):
        check_memory(helium_setup(30, hydrogen={"n_max": 8}))


def test_direct_mode_costs_more_time() -> None:
    table, direct = (
        estimate(small_setup(50, accuracy={"interpolate": choice})) for choice in (True, False)
    )
    assert direct.seconds > 10.0 * table.seconds
    assert direct.memory_bytes == table.memory_bytes


def test_table_is_a_hundred_times_better_than_the_history() -> None:
    assert table_tolerance(small_setup(8, accuracy={"relative": 1e-5})) == pytest.approx(1e-7)
    assert table_tolerance(small_setup(8, accuracy={"relative": 1e-9})) == pytest.approx(1e-11)


def test_a_run_that_fits() -> None:
    setup = small_setup(8)
    assert check_memory(setup) == estimate(setup)


def test_no_memory_is_refused_with_the_figure(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cost, "available_memory_bytes", lambda: 2.5e8)
    with pytest.raises(InputError, match=r"n_max = 300: about \d+ MB .* needed, 250 MB available"):
        check_memory(small_setup(300))


def test_an_atom_beyond_the_tested_rates_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cost, "available_memory_bytes", lambda: 1e15)
    # Line strengths alone: n^3/3 numbers of 8 bytes.
    with pytest.raises(InputError, match=r"n_max = 1001: allowed are 2 to 1000.*over 2.67 GB of"):
        small_setup(1001)
    assert check_memory(small_setup(1000)).memory_bytes > 1e9


def test_ten_thousand_shells_are_refused_here_and_now() -> None:
    with pytest.raises(InputError, match=r"n_max = 10000: allowed are .*over 2.67 TB of memory"):
        small_setup(10_000)


def fake_files(monkeypatch: pytest.MonkeyPatch, contents: dict[str, str]) -> None:
    def fake_open(path: Any, *args: Any, **kwargs: Any) -> Any:
        if str(path) in contents:
            return io.StringIO(contents[str(path)])
        if str(path).startswith(("/proc/meminfo", "/sys/fs/cgroup")):
            raise FileNotFoundError(path)
        return builtins.open(path, *args, **kwargs)

    monkeypatch.setattr(cost, "open", fake_open, raising=False)


def test_memory_is_the_least_of_what_the_system_says(monkeypatch: pytest.MonkeyPatch) -> None:
    meminfo = "MemTotal: 9000000 kB\nMemAvailable: 4000000 kB\n"
    fake_files(monkeypatch, {"/proc/meminfo": meminfo, "/sys/fs/cgroup/memory.max": "max\n"})
    assert cost.available_memory_bytes() == 4000000 * 1024
    for folder, limit, used in (
        ("/sys/fs/cgroup", "memory.max", "memory.current"),
        ("/sys/fs/cgroup/memory", "memory.limit_in_bytes", "memory.usage_in_bytes"),
    ):
        container = {f"{folder}/{limit}": "1000000000\n", f"{folder}/{used}": "400000000\n"}
        fake_files(monkeypatch, {"/proc/meminfo": meminfo, **container})
        assert cost.available_memory_bytes() == 6e8


@pytest.mark.parametrize("meminfo", [{}, {"/proc/meminfo": "MemTotal: 9000000 kB\n"}])
def test_a_system_that_does_not_say_refuses_nothing(
    monkeypatch: pytest.MonkeyPatch, meminfo: dict[str, str]
) -> None:
    fake_files(monkeypatch, meminfo)
    assert cost.available_memory_bytes() == math.inf


@pytest.mark.parametrize(
    ("size", "text"),
    [(12.0, "12 bytes"), (1.5e3, "1.5 kB"), (2e6, "2 MB"), (3.25e9, "3.25 GB"), (4e15, "4e+03 TB")],
)
def test_sizes_in_words(size: float, text: str) -> None:
    assert cost._readable(size) == text


@pytest.mark.parametrize(("coldest_k", "seen_bytes"), [(30.0, 7.51e9), (20.0, 12.71e9)])
def test_memory_of_a_reduction_at_the_highest_n(coldest_k: float, seen_bytes: float) -> None:
    # Frozen: peaks of one process each, n_max = 1000, read off when the estimate was made; the
    # second without the symmetric form.
    foreseen = estimate(small_setup(1000), 0, coldest_k=coldest_k).memory_bytes
    assert foreseen == pytest.approx(seen_bytes, rel=0.1)


def test_a_history_knows_its_coldest_reduction() -> None:
    # T_0 = 2.7255 K; down to 2^4.75 = 26.909 K, a point of the lattice, the symmetric form serves.
    ends = {9.0: False, 8.87: True}
    for redshift, is_cold in ends.items():
        setup = small_setup(100, redshift)
        assert (coldest_reduction_k(setup) < COLD_K) is is_cold
    assert lattice_below_k(26.91) == pytest.approx(2.0**4.75, rel=1e-15)


@pytest.mark.parametrize("setup", [small_setup(), helium_setup()], ids=["hydrogen", "helium"])
def test_no_default_table_is_without_symmetry(setup: Setup) -> None:
    whole = default_range_k(setup)
    assert COLD_K <= coldest_node_k(whole) < whole[0]
    assert coldest_node_k(whole, certify=False) == whole[0]
